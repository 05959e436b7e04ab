"""The duct that evaporation makes over water: its height and strength from the surface layer.

Paulus (1985), Radio Science 20, 887–896, for the meaning of the height; here it is the lowest
minimum of M on the Monin–Obukhov profile, with pressure falling hydrostatically from the surface.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.refractive_index import refractivity_from_state
from forecast.physics.stability import psi_heat
from forecast.physics.surface_layer import ADIABATIC, GRAVITY, KARMAN, SurfaceLayer

__all__ = ["EvaporationDuct", "evaporation_duct"]

_SEARCH = (0.05, 200.0)  # m; heights between which the duct is looked for
_STEP = 1.15  # ratio of neighbouring heights searched
_GOLDEN = 0.6180339887498949
_GAS_CONSTANT_DRY = 287.05287  # J kg⁻¹ K⁻¹, ICAO Doc 7488/3

_state = njit(cache=True, nogil=True, inline="always")(refractivity_from_state)


class EvaporationDuct(NamedTuple):
    """Evaporation duct of each column.

    ``height``: where M is least, m, NaN where M falls all the way to 200 m (no top: similarity
    theory does not reach that far) and 0 where M does not fall at all; ``strength``: M at the
    scalar roughness less M at that height, M-units, NaN where there is no top.
    """

    height: np.ndarray
    strength: np.ndarray


def evaporation_duct(
    layer: SurfaceLayer, pressure: Any, earth_radius: float = MEAN_EARTH_RADIUS
) -> EvaporationDuct:
    """Height and strength of the evaporation duct of a surface layer.

    The height is that of the lowest minimum of M on the similarity profile, with pressure falling
    hydrostatically from the surface.

    Parameters
    ----------
    layer : SurfaceLayer
        Scales, (column,).
    pressure : array_like
        Surface pressure, Pa; scalar or (column,).
    earth_radius : float
        Radius for M, m.

    Returns
    -------
    EvaporationDuct
        Arrays (column,).
    """
    columns = layer.friction_velocity.shape[0]
    p = np.array(np.broadcast_to(np.asarray(pressure, dtype=float), (columns,)))
    height, strength = np.full(columns, np.nan), np.full(columns, np.nan)
    _find_duct(*layer[1:8], layer.stable_function, p, earth_radius, height, strength)
    return EvaporationDuct(height, strength)


@njit(cache=True, nogil=True, error_model="numpy")
def _modified(z, ts, qs, length, z0t, surface_t, surface_q, code, p0, radius):  # pragma: no cover
    """M at one height of the similarity profile."""
    shape = (np.log(z / z0t) - psi_heat(z / length, code)) / KARMAN
    t = surface_t + ts * shape - ADIABATIC * z
    q = surface_q + qs * shape
    mean = 0.5 * (t + surface_t) * (1.0 + 0.3 * (q + surface_q))
    p = p0 * np.exp(-GRAVITY * z / (_GAS_CONSTANT_DRY * mean))
    return _state(p, t, q) + 1e6 * z / radius


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _find_duct(
    ts, qs, length, z0, z0t, surface_t, surface_q, code, p0, radius, height, strength
):  # pragma: no cover - compiled
    for c in prange(ts.size):
        if not np.isfinite(ts[c] + qs[c]):
            continue
        low, top = _SEARCH
        before = low / _STEP
        here = low
        m_here = _modified(
            here, ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c], p0[c],
            radius,
        )  # fmt: skip
        found = False
        while here < top:
            after = here * _STEP
            m_after = _modified(
                after, ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c],
                p0[c], radius,
            )  # fmt: skip
            if m_after > m_here:
                found = True
                break
            before, here, m_here = here, after, m_after
        if not found:
            continue
        if here == low:
            height[c] = 0.0
            strength[c] = 0.0
            continue
        # The least M lies between the neighbours of the least sample: golden section, one new
        # sample a step, to 1e-4 of the height.
        a, b = before, here * _STEP
        x1, x2 = b - _GOLDEN * (b - a), a + _GOLDEN * (b - a)
        m1 = _modified(
            x1, ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c], p0[c], radius
        )
        m2 = _modified(
            x2, ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c], p0[c], radius
        )
        for _ in range(17):
            if m1 < m2:
                b, x2, m2 = x2, x1, m1
                x1 = new = b - _GOLDEN * (b - a)
            else:
                a, x1, m1 = x1, x2, m2
                x2 = new = a + _GOLDEN * (b - a)
            m = _modified(
                new, ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c], p0[c],
                radius,
            )  # fmt: skip
            if new == x1:
                m1 = m
            else:
                m2 = m
        best = 0.5 * (a + b)
        height[c] = best
        least = _modified(
            best, ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c], p0[c],
            radius,
        )  # fmt: skip
        at_surface = _modified(
            z0t[c], ts[c], qs[c], length[c], z0t[c], surface_t[c], surface_q[c], code[c], p0[c],
            radius,
        )  # fmt: skip
        strength[c] = at_surface - least
