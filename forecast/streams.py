"""What the command says, and where: results on standard output, faults on standard error."""

from __future__ import annotations

import os
import sys

__all__ = ["complain", "drop_stdout", "mend_streams", "report"]


def mend_streams() -> None:
    """Make sure that there is something to write to, and that any text can be written to it."""
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:  # closed by the caller
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))  # noqa: SIM115
    if hasattr(sys.stdout, "reconfigure"):
        # File names may hold bytes, and titles letters, that the terminal's encoding lacks.
        sys.stdout.reconfigure(errors="backslashreplace")


def drop_stdout() -> None:
    """Say no more: the reader of a pipe has gone; at exit neither."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def report(text: str) -> None:
    """A result on standard output; a reader that has gone does not change what was done."""
    try:
        print(text, flush=True)
    except BrokenPipeError:
        drop_stdout()


def complain(text: str) -> None:
    """A fault on standard error, if anyone still listens there."""
    try:
        print(text, file=sys.stderr, flush=True)
    except OSError:
        return
