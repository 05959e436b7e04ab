"""How a long run shows that it moves: a bar on a terminal, plain lines otherwise, or nothing."""

from __future__ import annotations

import os
import sys
import time
from types import TracebackType
from typing import Any

__all__ = ["Reporter"]

_LINE_EVERY = 5.0  # s between plain progress lines of one step


class Reporter:
    """Progress and messages on standard error.

    Parameters
    ----------
    quiet : bool
        Show errors only.
    """

    def __init__(self, quiet: bool = False):
        self.quiet = quiet
        self._bar: Any = None
        self._task: Any = None
        self._label = ""
        self._last = 0.0
        # A bar in a cron log is noise; a dumb terminal cannot draw one.
        self._fancy = not quiet and sys.stderr.isatty() and os.environ.get("TERM") != "dumb"

    def __enter__(self) -> Reporter:
        if self._fancy:
            from rich.console import Console
            from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn

            self._bar = Progress(
                TextColumn("{task.description:>14}"),
                BarColumn(),
                MofNCompleteColumn(),
                console=Console(stderr=True, no_color="NO_COLOR" in os.environ),
                transient=True,
            )
            self._bar.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._bar is not None:
            self._bar.stop()
            self._bar = None

    def __call__(self, done: int, total: int, label: str) -> None:
        """Tell that `done` of `total` are through in the step `label`."""
        if self.quiet:
            return
        if self._bar is not None:
            if label != self._label:
                self._task = self._bar.add_task(label, total=total)
            self._bar.update(self._task, completed=done, total=total)
        else:
            now = time.monotonic()
            if label != self._label or done >= total or now - self._last > _LINE_EVERY:
                self.line(f"{label}: {done} of {total}")
                self._last = now
        self._label = label

    def line(self, text: str) -> None:
        """Write one plain line, unless quiet."""
        if self.quiet:
            return
        if self._bar is not None:
            self._bar.console.print(text, markup=False, highlight=False, soft_wrap=True)
            return
        try:
            print(text, file=sys.stderr, flush=True)
        except OSError:
            # Who reads the log has gone; the run goes on without telling.
            self.quiet = True
