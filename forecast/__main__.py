"""``python -m forecast`` is the ``bendcast`` command."""

from forecast.cli import main

raise SystemExit(main())
