"""From pressure, temperature and humidity to N, M, gradients, k and ducts, for columns in bulk.

The fused kernel works through blocks of columns, level by level, in whatever memory order the data
has: profiles stored (column, level), or a model grid stored (level, column) passed as its
transposed view. A block is as wide as suits that order: long lines of neighbours, or few columns.
Storage type is kept (float32 in, float32 out); arithmetic is float64 throughout. `np.float64(x)` is
deliberate: inside Numba `float(x)` keeps float32 and moves duct edges by tens of metres.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.ducts import DuctTable, duct_table
from forecast.physics.refractive_index import refractivity_from_state

__all__ = ["ColumnBatch", "analyse_columns", "analyse_refractivity"]

_BLOCK_OF_LINES, _BLOCK_OF_COLUMNS = 512, 4
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
    count = np.zeros(p.shape[0], dtype=np.int32)
    lines = z.strides[0] < z.strides[1]
    block = _BLOCK_OF_LINES if lines else _BLOCK_OF_COLUMNS
    _analyse(p.T, t.T, q.T, z.T, radius, given, block, n.T, m.T, gradient.T, k.T, count)
    return ColumnBatch(n, m, gradient, k, duct_table(z, m, count))


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _analyse(
    p, t, q, z, radius, given, block, out_n, out_m, out_g, out_k, count
):  # pragma: no cover - compiled
    """Fill the outputs and count trapping layers; arrays (level, column)."""
    levels, columns = p.shape
    for b in prange((columns + block - 1) // block):
        first = b * block
        end = min(first + block, columns)
        width = end - first
        a = radius[first:end]
        layers = count[first:end]
        # What the last usable level of each column had.
        last_level = np.zeros(width, dtype=np.int64)
        last_z = np.full(width, -np.inf)
        last_n = np.zeros(width)
        last_m = np.zeros(width)
        falling = np.zeros(width, dtype=np.bool_)
        n_here, slope, factor = np.empty(width), np.empty(width), np.empty(width)
        for i in range(levels):
            line = slice(first, end)
            p_line, t_line, q_line, z_line = p[i, line], t[i, line], q[i, line], z[i, line]
            n_line, m_line, g_line, k_line = (
                out_n[i, line], out_m[i, line], out_g[i, line], out_k[i, line],
            )  # fmt: skip
            # The arithmetic in a loop of its own, without branches, is vectorised.
            for j in range(width):
                n = np.float64(p_line[j])
                if not given:  # else N came in the place of the pressure
                    n = _state(n, np.float64(t_line[j]), np.float64(q_line[j]))
                n_here[j] = n
                slope[j] = (n - last_n[j]) / (np.float64(z_line[j]) - last_z[j])
                factor[j] = 1.0 / (1.0 + 1e-6 * a[j] * slope[j])
                m_line[j] = n + 1e6 * np.float64(z_line[j]) / a[j]
            for j in range(width):
                zi = np.float64(z_line[j])
                n = n_here[j]
                g_line[j] = np.nan
                k_line[j] = np.nan
                if not (np.isfinite(n) and zi > last_z[j] and zi < np.inf):
                    n_line[j] = np.nan
                    m_line[j] = np.nan
                    continue
                n_line[j] = n
                # Ducts must agree with the M that is stored, so its rounding is taken along.
                m = np.float64(m_line[j])
                if last_z[j] > -np.inf:
                    out_g[last_level[j], first + j] = 1e3 * slope[j]
                    out_k[last_level[j], first + j] = factor[j]
                    if m < last_m[j]:
                        if not falling[j]:
                            layers[j] += 1
                        falling[j] = True
                    elif m > last_m[j]:
                        falling[j] = False
                last_level[j] = i
                last_z[j] = zi
                last_n[j] = n
                last_m[j] = m
