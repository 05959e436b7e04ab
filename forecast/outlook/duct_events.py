"""Which ducts count: those strong enough, under a ceiling, or around a height."""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.ducts import DuctTable

__all__ = ["duct_cover", "duct_under"]


def duct_under(ducts: DuctTable, ceilings: Any, minimum_strength: float) -> np.ndarray:
    """Whether a column has a duct that lies wholly under a ceiling and is strong enough.

    Parameters
    ----------
    ducts : DuctTable
        Arrays (column, duct).
    ceilings : array_like
        Heights above ground, m, (ceiling,).
    minimum_strength : float
        Least strength that counts, M-units.

    Returns
    -------
    ndarray of bool
        (column, ceiling).
    """
    strong = ducts.strength >= minimum_strength
    lowest_top = np.where(strong, ducts.top, np.inf).min(axis=1)
    return lowest_top[:, None] <= np.asarray(ceilings, dtype=float)


def duct_cover(ducts: DuctTable, heights: Any, minimum_strength: float) -> np.ndarray:
    """Whether each height lies inside a duct that is strong enough.

    Parameters
    ----------
    ducts : DuctTable
        Arrays (column, duct).
    heights : array_like
        Heights above ground, m, (height,), rising.
    minimum_strength : float
        Least strength that counts, M-units.

    Returns
    -------
    ndarray of bool
        (column, height); both ends of a duct belong to it.
    """
    z = np.asarray(heights, dtype=float)
    inside = np.zeros((ducts.base.shape[0], z.size), dtype=np.bool_)
    _cover(ducts.base, ducts.top, ducts.strength, minimum_strength, z, inside)
    return inside


@njit(cache=True, nogil=True, parallel=True)
def _cover(base, top, strength, least, z, inside):  # pragma: no cover - compiled
    for c in prange(base.shape[0]):
        for d in range(base.shape[1]):
            if strength[c, d] >= least:
                first = np.searchsorted(z, base[c, d])
                last = np.searchsorted(z, top[c, d], side="right")
                inside[c, first:last] = True
