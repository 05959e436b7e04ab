"""Where the air traps waves: every duct of a column, by one written rule.

The duct rule
-------------
M(z) is piecewise linear between native levels; the ground is the lowest valid level. A *trapping
layer* is a maximal run of segments with dM/dz < 0 (a flat segment inside a falling run belongs to
it, one at either end does not). There is one duct per trapping layer, lowest first: its top is the
layer's top z_t; its base is the lowest height from which M stays ≥ M(z_t) all the way up to z_t,
found by linear interpolation, or the ground. Base and layer bottom at the ground: *surface duct*;
base at the ground, layer bottom above it: *elevated surface duct*; else *elevated duct* (meanings
of Rec. ITU-R P.453-14 section 4). Strength = largest M in the duct − M(z_t); thickness = top −
base. A duct wholly inside another's extent is kept and marked ``enclosed``. There is no minimum
strength here: the outlook applies one, stated, from measurement noise.

The longest trapped wavelength comes from the phase integral of the first mode over the actual
profile: ``λ = c ∫ √(2e-6 (M − M_t)) dz`` with c = 8/3 where the ground closes the duct (phase
(m − 1/4)π) and c = 4 for an elevated duct (phase (m − 1/2)π); for a linear surface duct this is
``(16√2/9)e-3 d √ΔM``. The cut-off is soft: at this wavelength the mode still leaks 0.05–0.17
dB/km. Critical grazing angle: ``√(2e-6 ΔM)``.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange

__all__ = ["DuctTable", "count_trapping_layers", "duct_table", "find_ducts"]

#: Columns worked on together: their levels stay in the processor's cache.
BLOCK = 64

_SURFACE, _ELEVATED_SURFACE, _ELEVATED = 1, 2, 3
_FIELDS = 8  # base, top, strength, trapping base, height of maximum, angle, wavelength, enclosed


class DuctTable(NamedTuple):
    """Ducts of a batch of columns; arrays (column, duct), NaN (kind −1, enclosed 0) where none."""

    count: np.ndarray  # type: ignore[assignment]  # not tuple.count
    kind: np.ndarray
    base: np.ndarray
    top: np.ndarray
    thickness: np.ndarray
    strength: np.ndarray
    trapping_base: np.ndarray
    height_of_maximum: np.ndarray
    grazing_angle: np.ndarray
    longest_trapped_wavelength: np.ndarray
    enclosed: np.ndarray


def find_ducts(height: Any, modified: Any) -> DuctTable:
    """Find every duct of every column.

    Parameters
    ----------
    height : array_like
        Heights above ground, m, shape (column, level), rising. Levels where height or M is NaN,
        or where height does not rise, are skipped.
    modified : array_like
        Modified refractivity, M-units, same shape.

    Returns
    -------
    DuctTable
        Arrays (column, duct), as many ducts wide as the richest column (at least one).

    Raises
    ------
    ValueError
        If the shapes differ or are not two-dimensional.

    Notes
    -----
    float32 input is read as it is and worked on in float64.
    """
    z = np.asarray(height)
    m = np.asarray(modified)
    if z.ndim != 2 or z.shape != m.shape:
        raise ValueError(f"find_ducts: height {z.shape} and M {m.shape} must be (column, level)")
    return duct_table(z, m, _count_all(z, m))


def duct_table(z: np.ndarray, m: np.ndarray, count: np.ndarray) -> DuctTable:
    """Fill the duct table of columns whose trapping layers are counted already.

    Parameters
    ----------
    z, m : ndarray
        Height (m) and M (M-units), shape (column, level).
    count : ndarray of int
        Trapping layers of each column, as `count_trapping_layers` gives them.

    Returns
    -------
    DuctTable
        As `find_ducts`.
    """
    width = max(1, int(count.max(initial=0)))
    kind = np.full((z.shape[0], width), -1, dtype=np.int8)
    table = np.full((_FIELDS, z.shape[0], width), np.nan)
    _fill_all(z, m, count, kind, table)
    base, top, strength, trapping_base, at_max, angle, wavelength, enclosed = table
    return DuctTable(
        count,
        kind,
        base,
        top,
        top - base,
        strength,
        trapping_base,
        at_max,
        angle,
        wavelength,
        np.nan_to_num(enclosed).astype(np.int8),
    )


@njit(cache=True, nogil=True)
def _compress_block(z, m, first, width, tile_z, tile_m, used):  # pragma: no cover - compiled
    """Gather the usable levels (finite, rising) of a block of columns into rows of the tiles.

    Level by level, so that a grid stored (level, column) is read along its lines.
    """
    used[:] = 0
    for i in range(z.shape[1]):
        for j in range(width):
            zi = np.float64(z[first + j, i])
            mi = np.float64(m[first + j, i])
            n = used[j]
            if np.isfinite(zi) and np.isfinite(mi) and (n == 0 or zi > tile_z[j, n - 1]):
                tile_z[j, n] = zi
                tile_m[j, n] = mi
                used[j] = n + 1


@njit(cache=True, nogil=True)
def count_trapping_layers(m, n):  # pragma: no cover - compiled
    """Count the trapping layers in the first n values of one compressed column."""
    count = 0
    falling = False
    for i in range(n - 1):
        if m[i + 1] < m[i]:
            if not falling:
                count += 1
            falling = True
        elif m[i + 1] > m[i]:
            falling = False
    return count


@njit(cache=True, nogil=True)
def _fill_column(z, m, n, kind, table, column):  # pragma: no cover - compiled
    """Write the ducts of one compressed column into row `column` of the tables."""
    d = 0
    i = 0
    while i < n - 1:
        if m[i + 1] >= m[i]:
            i += 1
            continue
        bottom = i
        top = i + 1
        while i < n - 1 and m[i + 1] <= m[i]:
            if m[i + 1] < m[i]:
                top = i + 1
            i += 1
        m_top = m[top]

        # Down from the layer's bottom until M falls below its value at the top.
        j = bottom
        while j > 0 and m[j - 1] >= m_top:
            j -= 1
        base = z[j]
        grounded = j == 0
        integral = 0.0
        if not grounded:
            fraction = (m_top - m[j - 1]) / (m[j] - m[j - 1])
            base = z[j - 1] + fraction * (z[j] - z[j - 1])
            # From M = M_top at the base: the integral of √(rising line).
            integral = (2.0 / 3.0) * (z[j] - base) * np.sqrt(2e-6 * (m[j] - m_top))
        m_max = m[j]
        z_max = z[j]
        f0 = np.sqrt(2e-6 * (m[j] - m_top))
        for s in range(j + 1, top + 1):
            f1 = np.sqrt(2e-6 * (m[s] - m_top))
            if f0 + f1 > 0.0:
                mean = (2.0 / 3.0) * (f0 * f0 + f0 * f1 + f1 * f1) / (f0 + f1)
                integral += mean * (z[s] - z[s - 1])
            f0 = f1
            if m[s] > m_max:
                m_max = m[s]
                z_max = z[s]

        if not grounded:
            kind[column, d] = _ELEVATED
        elif bottom == 0:
            kind[column, d] = _SURFACE
        else:
            kind[column, d] = _ELEVATED_SURFACE
        table[0, column, d] = base
        table[1, column, d] = z[top]
        table[2, column, d] = m_max - m_top
        table[3, column, d] = z[bottom]
        table[4, column, d] = z_max
        table[5, column, d] = np.sqrt(2e-6 * (m_max - m_top))
        table[6, column, d] = (8.0 / 3.0 if grounded else 4.0) * integral
        d += 1

    # Tops rise with d, so a duct lies inside another exactly if a later one starts no higher.
    lowest = np.inf
    for k in range(d - 1, -1, -1):
        base = table[0, column, k]
        table[7, column, k] = 1.0 if lowest <= base else 0.0
        lowest = min(lowest, base)


@njit(cache=True, nogil=True, parallel=True)
def _count_all(z, m):  # pragma: no cover - compiled
    columns, levels = z.shape
    count = np.zeros(columns, dtype=np.int32)
    for b in prange((columns + BLOCK - 1) // BLOCK):
        first = b * BLOCK
        width = min(BLOCK, columns - first)
        tile_z = np.empty((BLOCK, levels))
        tile_m = np.empty((BLOCK, levels))
        used = np.empty(BLOCK, dtype=np.int64)
        _compress_block(z, m, first, width, tile_z, tile_m, used)
        for j in range(width):
            count[first + j] = count_trapping_layers(tile_m[j], used[j])
    return count


@njit(cache=True, nogil=True, parallel=True)
def _fill_all(z, m, count, kind, table):  # pragma: no cover - compiled
    columns, levels = z.shape
    for b in prange((columns + BLOCK - 1) // BLOCK):
        first = b * BLOCK
        width = min(BLOCK, columns - first)
        if not np.any(count[first : first + width] > 0):
            continue
        tile_z = np.empty((BLOCK, levels))
        tile_m = np.empty((BLOCK, levels))
        used = np.empty(BLOCK, dtype=np.int64)
        _compress_block(z, m, first, width, tile_z, tile_m, used)
        for j in range(width):
            if count[first + j] > 0:
                _fill_column(tile_z[j], tile_m[j], used[j], kind, table, first + j)
