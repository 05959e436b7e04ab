"""The duct rule once more, in plain Python and straight from its words, to hold the kernel to."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import NamedTuple

__all__ = ["Duct", "ducts_by_the_rule", "usable_levels"]


class Duct(NamedTuple):
    """One duct; heights in m, strength in M-units."""

    kind: str
    base: float
    top: float
    strength: float
    trapping_base: float
    height_of_maximum: float
    enclosed: bool


def usable_levels(height, modified) -> list[tuple[float, float]]:
    """Levels with both numbers present, each higher than the usable one below it."""
    levels: list[tuple[float, float]] = []
    for z, m in zip(map(float, height), map(float, modified), strict=True):
        if math.isfinite(z) and math.isfinite(m) and (not levels or z > levels[-1][0]):
            levels.append((z, m))
    return levels


def _trapping_layers(levels) -> list[tuple[int, int]]:
    """Level numbers of bottom and top: runs of falling segments, flat ones allowed inside only."""
    falling = [i for i in range(len(levels) - 1) if levels[i + 1][1] < levels[i][1]]
    layers: list[tuple[int, int]] = []
    for i in falling:
        if layers:
            bottom, top = layers[-1]
            if all(levels[j + 1][1] == levels[j][1] for j in range(top, i)):
                layers[-1] = (bottom, i + 1)
                continue
        layers.append((i, i + 1))
    return layers


def _base(levels, top: int) -> float:
    """Lowest height from which M stays at or above M(top), seeking the highest point below it."""
    wanted = levels[top][1]
    base = levels[0][0]
    for (z0, m0), (z1, m1) in pairwise(levels[: top + 1]):
        if m0 < wanted <= m1:
            base = z0 + (wanted - m0) / (m1 - m0) * (z1 - z0)
    return base


def ducts_by_the_rule(height, modified) -> list[Duct]:
    """Every duct of one column, lowest first."""
    levels = usable_levels(height, modified)
    found = []
    for bottom, top in _trapping_layers(levels):
        z_top, m_top = levels[top]
        base = _base(levels, top)
        inside = [(m, -z) for z, m in levels if base <= z <= z_top]
        m_max, minus_z = max(inside)
        ground = levels[0][0]
        if base > ground:
            kind = "elevated_duct"
        elif levels[bottom][0] == ground:
            kind = "surface_duct"
        else:
            kind = "elevated_surface_duct"
        found.append(
            Duct(kind, base, z_top, m_max - m_top, levels[bottom][0], -minus_z, enclosed=False)
        )
    return [
        duct._replace(
            enclosed=any(
                other is not duct and other.base <= duct.base and duct.top <= other.top
                for other in found
            )
        )
        for duct in found
    ]
