#!/usr/bin/env python3
"""Whether a wheel holds everything the installed program reads: every file of the package.

python scripts/check_wheel.py dist/bendcast-0.1.0-py3-none-any.whl
"""

from __future__ import annotations

import sys
import zipfile
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
#: Compiled leftovers of the source tree, which do not belong in a wheel.
LEFTOVERS = {".pyc", ".pyo", ".nbi", ".nbc"}


def missing_files(wheel: Path, root: Path = ROOT) -> list[str]:
    """Files of ``forecast/`` in the source tree that the wheel does not hold, sorted."""
    with zipfile.ZipFile(wheel) as bundle:
        packed = set(bundle.namelist())
    needed = {
        path.relative_to(root).as_posix()
        for path in (root / "forecast").rglob("*")
        if path.is_file() and path.suffix not in LEFTOVERS
    }
    return sorted(needed - packed)


def main(arguments: list[str]) -> int:
    """Check one wheel; 0 when it is whole."""
    if len(arguments) != 1:
        print(__doc__, file=sys.stderr)
        return 2
    missing = missing_files(Path(arguments[0]))
    for name in missing:
        print(f"not in the wheel: {name}", file=sys.stderr)
    if not missing:
        print(f"{Path(arguments[0]).name} holds every file of the package")
    return 1 if missing else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
