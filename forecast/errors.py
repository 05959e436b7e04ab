"""Exceptions that bendcast raises on purpose, each subclassing what a caller would catch."""

from __future__ import annotations

__all__ = ["BendcastError", "InputError", "SettingsError"]


class BendcastError(Exception):
    """Base of every error that bendcast raises on purpose."""


class InputError(BendcastError, ValueError):
    """An input file or dataset cannot be used.

    Parameters
    ----------
    reason : str
        What was found and what was expected.
    source : str, optional
        File name (not the whole path) or dataset label.
    variable : str, optional
        Variable concerned.
    remedy : str, optional
        What the user can do about it.
    """

    def __init__(self, reason: str, *, source: str = "", variable: str = "", remedy: str = ""):
        self.reason = reason
        self.source = source
        self.variable = variable
        self.remedy = remedy
        place = ": ".join(printable(part) for part in (source, variable) if part)
        text = f"{place}: {printable(reason)}" if place else printable(reason)
        if remedy:
            text = f"{text}; {printable(remedy)}"
        super().__init__(text)


class SettingsError(BendcastError, ValueError):
    """The settings file has faults; all of them are listed.

    Parameters
    ----------
    source : str
        Settings file name.
    faults : list of str
        One line per fault: key, what was found, what is allowed.
    """

    def __init__(self, source: str, faults: list[str]):
        self.source = source
        self.faults = [printable(fault) for fault in faults]
        count = len(self.faults)
        head = f"{printable(source)}: {count} fault{'s' if count != 1 else ''} in the settings"
        super().__init__("\n  - ".join([head, *self.faults]))


def printable(text: object, limit: int = 300) -> str:
    """Text from outside made safe for one line of log: control characters escaped, bounded.

    Parameters
    ----------
    text : object
        Anything; converted with `str`.
    limit : int
        Longest result in characters.

    Returns
    -------
    str
        One printable line.
    """
    line = "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in str(text))
    return line if len(line) <= limit else line[: limit - 1] + "…"
