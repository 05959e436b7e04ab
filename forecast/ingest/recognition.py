"""What was recognised in a file: roles filled, candidates refused, problems; the user's mapping."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest.roles import ROLES

__all__ = ["Recognition", "Rejected", "Taken", "leading_number", "parse_names"]

_NAME_ENTRY = re.compile(r"\s*(?P<variable>[^\[\]]+?)\s*(?:\[(?P<units>[^\[\]]*)\])?\s*")


@dataclass(frozen=True)
class Taken:
    """One role filled: which variable, how it was chosen, which unit it is converted from.

    ``units`` is what the conversion starts from, ``declared`` what the file says; they differ
    where the user or a layout sets the unit. ``attribute`` names a global attribute that holds
    the value instead of a variable.
    """

    role: str
    variable: str
    how: str
    units: str
    declared: str | None
    dims: tuple[str, ...]
    attribute: bool = False

    @property
    def target(self) -> str:
        """SI unit the role is converted to."""
        return ROLES[self.role].units


@dataclass(frozen=True)
class Rejected:
    """A variable that was looked at for a role and not taken."""

    role: str
    variable: str
    reason: str


@dataclass
class Recognition:
    """What a file holds, by role.

    Attributes
    ----------
    source : str
        File name.
    taken : dict of str to Taken
        Filled roles.
    rejected : list of Rejected
        Candidates not taken, with the reason.
    problems : dict of str to InputError
        Roles whose candidates cannot be used as they are; raised by `require`.
    vertical_dim : str or None
        Dimension along the vertical; None where the file has none.
    attributes : dict of str to Taken
        Roles whose value also stands in a global attribute, by a layout.
    groups : dict of str to dict
        Sets of levels in separate arrays: group → role → Taken.
    group_dims : dict of str to str
        Group → dimension along its levels.
    group_counts : dict of str to str
        Group → variable with the number of its levels per launch.
    layouts : tuple of str
        Layouts that apply.
    humidity : str
        Measure of humidity that was used, once profiles are read.
    notes : list of str
        Optional values that were left out, and why; filled while reading.
    station_attributes : tuple of str
        Global attributes that name the station.
    """

    source: str
    taken: dict[str, Taken] = field(default_factory=dict)
    rejected: list[Rejected] = field(default_factory=list)
    problems: dict[str, InputError] = field(default_factory=dict)
    vertical_dim: str | None = None
    attributes: dict[str, Taken] = field(default_factory=dict)
    groups: dict[str, dict[str, Taken]] = field(default_factory=dict)
    group_dims: dict[str, str] = field(default_factory=dict)
    group_counts: dict[str, str] = field(default_factory=dict)
    layouts: tuple[str, ...] = ()
    humidity: str = ""
    notes: list[str] = field(default_factory=list)
    station_attributes: tuple[str, ...] = ()

    def __contains__(self, role: str) -> bool:
        return role in self.taken

    def get(self, role: str) -> Taken | None:
        """The variable taken for a role, None when there is none that can be used."""
        return self.taken.get(role)

    def require(self, role: str) -> Taken:
        """The variable taken for a role.

        Raises
        ------
        InputError
            If there is none, with what was sought, or the problem of its candidates.
        """
        if role in self.taken:
            return self.taken[role]
        if role in self.problems:
            raise self.problems[role]
        refused = [r for r in self.rejected if r.role == role]
        found = "".join(f"; {r.variable} {r.reason}" for r in refused[:3])
        raise InputError(
            f"no {role.replace('_', ' ')} recognised: sought {_sought(role)} and known "
            f"layouts{found}",
            source=self.source,
            remedy=f'set names.{role} = "<variable>"',
        )


def parse_names(names: Mapping[str, str] | None) -> dict[str, tuple[str, str | None]]:
    """The user's mapping taken apart: role → (variable, unit or None).

    Raises
    ------
    InputError
        If a role is unknown or an entry is not ``variable`` or ``variable [unit]``.
    """
    result: dict[str, tuple[str, str | None]] = {}
    for role, entry in (names or {}).items():
        if role not in ROLES:
            near = get_close_matches(str(role), ROLES, n=3, cutoff=0.4) or ["air_temperature"]
            raise InputError(
                f"{role!r} is no role (did you mean {' or '.join(near)}?)",
                source="names",
                remedy=f"allowed are {', '.join(ROLES)}",
            )
        match = _NAME_ENTRY.fullmatch(entry) if isinstance(entry, str) else None
        if not match or (match["units"] is not None and not match["units"].strip()):
            raise InputError(
                f"names.{role} is {printable(entry, 60)!r}; expected 'variable' or "
                "'variable [unit]'",
                source="names",
            )
        units = match["units"]
        result[role] = (match["variable"], units.strip() if units else None)
    return result


def _sought(role: str) -> str:
    standard = ROLES[role].standard_names
    return f"standard_name {' or '.join(standard)}" if standard else "variables of that meaning"


def leading_number(value: Any) -> float:
    """Number at the start of an attribute value such as ``20 m``, NaN when there is none."""
    if isinstance(value, str):
        match = re.match(r"\s*[-+]?\d{1,12}(?:\.\d{1,9})?", value)
        return float(match.group()) if match else float("nan")
    number = np.asarray(value).ravel()
    return float(number[0]) if number.size == 1 and number.dtype.kind in "iuf" else float("nan")
