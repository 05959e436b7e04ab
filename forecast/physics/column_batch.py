"""From pressure, temperature and humidity to N, M, gradients, k and ducts, for columns in bulk.

The fused kernel works through blocks of columns that stay in the processor's cache, in whatever
memory order the data has: profiles stored (column, level), or a model grid stored (level, column)
passed as its transposed view. Storage type is kept (float32 in, float32 out); arithmetic is
float64 throughout. `np.float64(x)` is deliberate: inside Numba `float(x)` keeps float32 and moves
duct edges by tens of metres.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.ducts import DuctTable, count_trapping_layers, duct_table
from forecast.physics.refractive_index import refractivity_from_state

__all__ = ["ColumnBatch", "analyse_columns", "analyse_refractivity"]

_BLOCK = 64
_state = njit(cache=True, nogil=True, inline="always")(refractivity_from_state)


class ColumnBatch(NamedTuple):
    """Result of `analyse_columns`: arrays shaped and stored like the input, and the ducts."""

    refractivity: np.ndarray
    modified_refractivity: np.ndarray
    refractivity_gradient: np.ndarray
    effective_earth_radius_factor: np.ndarray
    ducts: DuctTable


def analyse_columns(
    pressure: Any, temperature: Any, specific_humidity: Any, height: Any, earth_radius: Any
) -> ColumnBatch:
    """Radio refraction of many columns in one pass.

    Parameters
    ----------
    pressure, temperature, specific_humidity, height : ndarray
        Pa, K, kg/kg, m above ground; shape (column, level), all of one float type, levels rising.
        Pass ``grid.T`` for data stored (level, column). Levels with a NaN, or that do not rise,
        are skipped: N and M are NaN there and segments join the levels around them.
    earth_radius : array_like
        Local Earth radius, m; scalar or (column,).

    Returns
    -------
    ColumnBatch
        N, M; gradient (N/km) and k of the segment from each level to the next usable one, NaN at
        the last; ducts as in `forecast.physics.ducts.find_ducts`.

    Raises
    ------
    ValueError
        If shapes or types differ.
    """
    arrays = [np.asarray(a) for a in (pressure, temperature, specific_humidity, height)]
    p, t, q, z = arrays
    if p.ndim != 2 or any(a.shape != p.shape or a.dtype != p.dtype for a in arrays):
        found = ", ".join(f"{a.shape} {a.dtype}" for a in arrays)
        raise ValueError(f"analyse_columns: four (column, level) arrays of one type; got {found}")
    return _run(p, t, q, z, earth_radius, False)


def analyse_refractivity(refractivity: Any, height: Any, earth_radius: Any) -> ColumnBatch:
    """M, gradients, k and ducts of columns whose refractivity is known (light, or given N).

    Parameters
    ----------
    refractivity, height : ndarray
        N-units and m above ground, shape (column, level), of one float type.
    earth_radius : array_like
        Local Earth radius, m; scalar or (column,).

    Returns
    -------
    ColumnBatch
        As `analyse_columns`.

    Raises
    ------
    ValueError
        If shapes or types differ.
    """
    n, z = np.asarray(refractivity), np.asarray(height)
    if n.ndim != 2 or n.shape != z.shape or n.dtype != z.dtype:
        raise ValueError(
            f"analyse_refractivity: N {n.shape} {n.dtype} and height {z.shape} {z.dtype} must be "
            "(column, level) of one type"
        )
    return _run(n, n, n, z, earth_radius, True)


def _run(p: Any, t: Any, q: Any, z: Any, earth_radius: Any, given: bool) -> ColumnBatch:
    radius = np.array(np.broadcast_to(np.asarray(earth_radius, dtype=float), p.shape[:1]))
    n, m, gradient, k = (np.empty_like(p) for _ in range(4))
    count = np.empty(p.shape[0], dtype=np.int32)
    _analyse(p, t, q, z, radius, given, n, m, gradient, k, count)
    return ColumnBatch(n, m, gradient, k, duct_table(z, m, count))


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _analyse(p, t, q, z, radius, given, out_n, out_m, out_g, out_k, count):  # pragma: no cover
    columns, levels = p.shape
    blocks = (columns + _BLOCK - 1) // _BLOCK
    for b in prange(blocks):
        first = b * _BLOCK
        width = min(_BLOCK, columns - first)
        tile_z = np.empty((_BLOCK, levels))
        tile_m = np.empty((_BLOCK, levels))
        used = np.zeros(_BLOCK, dtype=np.int64)
        last_level = np.zeros(_BLOCK, dtype=np.int64)
        last_z = np.full(_BLOCK, -np.inf)
        last_n = np.zeros(_BLOCK)
        for i in range(levels):
            for j in range(width):
                c = first + j
                zi = np.float64(z[c, i])
                n = np.float64(p[c, i])
                if not given:  # else N came in the place of the pressure
                    n = _state(n, np.float64(t[c, i]), np.float64(q[c, i]))
                out_g[c, i] = np.nan
                out_k[c, i] = np.nan
                if not (np.isfinite(n) and zi > last_z[j] and zi < np.inf):
                    out_n[c, i] = np.nan
                    out_m[c, i] = np.nan
                    continue
                out_n[c, i] = n
                out_m[c, i] = n + 1e6 * zi / radius[c]
                k = used[j]
                if k > 0:
                    slope = (n - last_n[j]) / (zi - last_z[j])
                    out_g[c, last_level[j]] = 1e3 * slope
                    out_k[c, last_level[j]] = 1.0 / (1.0 + 1e-6 * radius[c] * slope)
                # Ducts must agree with the M that is stored, so its rounding is taken along.
                tile_m[j, k] = np.float64(out_m[c, i])
                tile_z[j, k] = zi
                used[j] = k + 1
                last_level[j] = i
                last_z[j] = zi
                last_n[j] = n
        for j in range(width):
            count[first + j] = count_trapping_layers(tile_m[j], used[j])
