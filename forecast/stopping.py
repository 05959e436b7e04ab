"""How a run is told to stop: SIGTERM and SIGHUP end it as cleanly as Ctrl-C does."""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

__all__ = ["Stopped", "stopping_cleanly"]


class Stopped(SystemExit):
    """A signal asked the run to end; its exit code is 128 + the signal's number, as in a shell."""

    def __init__(self, number: int):
        super().__init__(128 + number)


def _stop(number: int, _: FrameType | None) -> None:
    raise Stopped(number)


@contextmanager
def stopping_cleanly() -> Iterator[None]:
    """Let a stop signal unwind the block, so that nothing unfinished is left behind.

    Signals that the caller ignores (``nohup``) or handles himself stay so.
    """
    names = ("SIGTERM", "SIGHUP")  # not every system has the second
    numbers = [getattr(signal, name) for name in names if hasattr(signal, name)]
    main = threading.current_thread() is threading.main_thread()
    mine = [n for n in numbers if main and signal.getsignal(n) is signal.SIG_DFL]
    for number in mine:
        signal.signal(number, _stop)
    try:
        yield
    finally:
        for number in mine:
            signal.signal(number, signal.SIG_DFL)
