"""One row of the table of variables, and the dimensions that rows have."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

__all__ = [
    "BAND",
    "CEILING",
    "DUCT",
    "JOINED",
    "LEVEL",
    "PLACE",
    "PROFILE",
    "SIGHT",
    "STAND",
    "Variable",
    "coded",
]

PROFILE = ("profile",)
LEVEL = ("profile", "level")
DUCT = ("profile", "duct")
SIGHT = ("profile", "sightline")
CEILING = ("profile", "ceiling")
BAND = ("profile", "height_bin")
JOINED = ("profile", "joined_level")
STAND = ("profile", "sightline", "stand")
PLACE = ("profile", "sightline", "place", "stand")


@dataclass(frozen=True)
class Variable:
    """One row of the table."""

    name: str
    long_name: str
    units: str | None = "1"
    dims: tuple[str, ...] = ()
    standard_name: str | None = None
    extra: dict[str, Any] = field(default_factory=dict)


def coded(table: dict[str, int]) -> dict[str, Any]:
    """CF attributes of a variable whose values are codes of a table."""
    return {"flag_values": tuple(table.values()), "flag_meanings": " ".join(table)}
