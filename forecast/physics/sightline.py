"""What an observer can see of a far target through given air: state, hidden height, elevation.

The visible heights themselves come from `forecast.physics.visible_heights`, which states the
method.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.curvature import STANDARD_GRADIENT
from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.lit_intervals import count_images, horizon_energy, merge_intervals
from forecast.physics.rays import Medium, build_medium, locate
from forecast.physics.visible_heights import (
    MAX_LIT,
    MAX_SAMPLES,
    elevation_of,
    survey_heights,
)
from forecast.schema import SIGHTLINE_STATES

__all__ = [
    "GRAZING_MARGIN",
    "LARGEST_SQUEEZE",
    "SightlineTable",
    "standard_levels",
    "standard_medium",
    "trace_sightlines",
]

#: A target of which less than this (m) shows is grazing, not open; ours, no source.
GRAZING_MARGIN = 1.0

#: Heights that are squeezed together more than this against straight rays cannot be told apart and
#: count as a jump: 1 m at 40 km under a fifth of a second of arc. Ours, no source.
LARGEST_SQUEEZE = 30.0

_INTERVALS = 12  # visible intervals kept per sightline, the lowest ones

_SHUT = SIGHTLINE_STATES["shut"]
_GRAZING = SIGHTLINE_STATES["grazing"]
_OPEN = SIGHTLINE_STATES["open"]


class SightlineTable(NamedTuple):
    """Result of `trace_sightlines`: arrays (column, sightline).

    ``state``: codes of `forecast.schema.SIGHTLINE_STATES`, −1 without air. ``hidden_height``:
    lowest visible height at the target's distance, m. ``visible_extent``: height of the part of
    the target that shows, m. ``apparent_elevation``: elevation angle of the highest part that
    shows, rad, NaN if none does. ``upright_images``, ``inverted_images``: in how many directions
    that part appears. ``horizon_elevation``: elevation of the highest ray that meets the surface,
    rad; less than 0 by the dip of the horizon, and 0 or more where a duct holds rays down.
    ``visible_bottom``, ``visible_top``: the visible heights at the target's distance as a union of
    intervals, lowest first, m, (column, sightline, interval); the highest may be infinite.
    """

    state: np.ndarray
    hidden_height: np.ndarray
    visible_extent: np.ndarray
    apparent_elevation: np.ndarray
    upright_images: np.ndarray
    inverted_images: np.ndarray
    horizon_elevation: np.ndarray
    visible_bottom: np.ndarray
    visible_top: np.ndarray


def trace_sightlines(
    medium: Medium,
    observer_height: Any,
    target_height: Any,
    distance: Any,
    target_base_height: Any = 0.0,
    grazing_margin: float = GRAZING_MARGIN,
    largest_squeeze: float = np.inf,
) -> SightlineTable:
    """State, hidden height and apparent elevation of sightlines through a batch of columns.

    Parameters
    ----------
    medium : Medium
        The air, from `forecast.physics.rays.build_medium`, (column,).
    observer_height, target_height, distance, target_base_height : array_like
        Observer and target heights above the surface (m) and distance along it (m); scalars or
        (sightline,). The target spans base to top; equal heights make it a point, such as a lamp
        or an antenna.
    grazing_margin : float
        Visible height (m) from which a target counts as open; for a point, its height above the
        lower end of the visible interval it lies in.
    largest_squeeze : float
        Heights that pass more than this many times as fast with elevation as in straight rays do
        not count as visible (`LARGEST_SQUEEZE` for eyes and cameras); by default every height
        does that any ray reaches, however thin the pencil.

    Returns
    -------
    SightlineTable
        Arrays (column, sightline).

    Raises
    ------
    ValueError
        If a height is negative, a base lies above its top, or a distance is not positive.
    """
    shape = np.broadcast_shapes(
        np.shape(observer_height),
        np.shape(target_height),
        np.shape(distance),
        np.shape(target_base_height),
        (1,),
    )
    observer, top, far, base = (
        np.array(np.broadcast_to(np.asarray(a, dtype=float), shape))
        for a in (observer_height, target_height, distance, target_base_height)
    )
    if not (np.all(observer >= 0.0) and np.all(base >= 0.0)):
        raise ValueError("trace_sightlines: heights must be at or above the surface")
    if not np.all(base <= top):
        raise ValueError("trace_sightlines: target_base_height must not exceed target_height")
    if not np.all((far > 0.0) & (far < 2e6)):
        raise ValueError("trace_sightlines: distance must be above 0 and below 2,000 km")
    if not largest_squeeze >= 1.0:
        raise ValueError("trace_sightlines: largest_squeeze must be 1 or more")
    columns = medium.z.shape[0]
    state = np.full((columns, *shape), -1, dtype=np.int8)
    floats = np.full((4, columns, *shape), np.nan)
    images = np.zeros((2, columns, *shape), dtype=np.int16)
    visible = np.full((2, columns, *shape, _INTERVALS), np.nan)
    _trace_all(
        *medium, observer, base, top, far, grazing_margin, largest_squeeze, state, floats, images,
        visible,
    )  # fmt: skip
    width = max(1, int(np.isfinite(visible[0]).sum(axis=-1).max(initial=1)))
    return SightlineTable(
        state,
        floats[0],
        floats[1],
        floats[2],
        images[0],
        images[1],
        floats[3],
        visible[0, ..., :width],
        visible[1, ..., :width],
    )


def standard_medium(wave: str = "radio", earth_radius: float = MEAN_EARTH_RADIUS) -> Medium:
    """Standard air to judge a sightline against, as one column.

    Radio: N falls linearly by 39.24 N/km, k = 4/3 for a = 6371 km. Optical: dry air of the ICAO
    standard atmosphere (Doc 7488/3: 288.15 K, 1013.25 hPa, 6.5 K/km), n − 1 ~ p/T,
    (n − 1) 1e6 = 277.84 at the ground (Ciddor 1996, 550 nm). ``wave="straight"`` is no air at
    all.

    Parameters
    ----------
    wave : {"radio", "optical", "straight"}
        Which standard.
    earth_radius : float
        Local Earth radius, m.

    Returns
    -------
    Medium
        One column, finely layered to 20 km.

    Raises
    ------
    ValueError
        If `wave` is unknown.
    """
    z, n = standard_levels(wave)
    return build_medium(z, n, earth_radius, "optical" if wave == "optical" else "radio")


def standard_levels(wave: str) -> tuple[np.ndarray, np.ndarray]:
    """Heights (m) and N of `standard_medium`, each (1, level).

    Parameters
    ----------
    wave : {"radio", "optical", "straight"}
        Which standard.

    Returns
    -------
    tuple of ndarray

    Raises
    ------
    ValueError
        If `wave` is unknown.
    """
    z = np.concatenate([np.arange(0.0, 500.0, 10.0), np.geomspace(500.0, 20e3, 150)])[None, :]
    if wave == "straight":
        return z, np.zeros_like(z)
    if wave == "radio":
        # Linear as far as N stays positive, then the extension's exponential decay.
        keep = z < 6000.0
        z = z[keep][None, :]
        n = 315.0 + 1e-3 * STANDARD_GRADIENT * z
    elif wave == "optical":
        lapse, t0 = 0.0065, 288.15
        z = z[z < 11e3][None, :]
        # p/T in a constant lapse: exponent g M / (R L) - 1 with g M / R = 0.0341632 K/m.
        n = 277.84 * (1.0 - lapse * z / t0) ** (0.0341632 / lapse - 1.0)
    else:
        raise ValueError(f"standard_levels: wave {wave!r}; choose radio, optical or straight")
    return z, n


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _trace_all(
    z,
    mu,
    count,
    radius,
    observer,
    base,
    top,
    distance,
    margin,
    squeeze,
    state,
    floats,
    images,
    visible,
):  # pragma: no cover
    columns = z.shape[0]
    lines = observer.size
    nodes = z.shape[1]
    for c in prange(columns):
        if count[c] < 2:
            continue
        critical = np.empty((2, nodes))
        jump = np.empty((2, nodes), dtype=np.bool_)
        edges = np.empty(2 * nodes + 2)
        edge_jump = np.empty(2 * nodes + 2, dtype=np.bool_)
        sample = np.empty((2, MAX_SAMPLES))
        branch_of = np.empty(MAX_SAMPLES, dtype=np.int64)
        lit = np.empty((2, MAX_LIT))
        a = radius[c]
        for s in range(lines):
            layer, start, mu_start = locate(z[c], mu[c], count[c], a * np.log1p(observer[s] / a))
            z_base = a * np.log1p(base[s] / a)
            z_top = a * np.log1p(top[s] / a)
            lits, samples = survey_heights(
                z[c], mu[c], count[c], layer, start, mu_start, start == z[c, layer],
                z_base, z_top, distance[s], critical, jump, edges, edge_jump, sample, branch_of,
                lit, squeeze * distance[s],
            )  # fmt: skip
            lits = merge_intervals(lit, lits)
            extent = 0.0
            highest = np.nan
            above_edge = 0.0
            for i in range(lits):
                lower = max(lit[0, i], z_base)
                upper = min(lit[1, i], z_top)
                if upper >= lower:
                    extent += a * (np.expm1(upper / a) - np.expm1(lower / a))
                    highest = upper
                    above_edge = upper - lit[0, i]
            if lits > 0:
                floats[0, c, s] = a * np.expm1(lit[0, 0] / a)
            for i in range(min(lits, _INTERVALS)):
                visible[0, c, s, i] = a * np.expm1(lit[0, i] / a)
                visible[1, c, s, i] = a * np.expm1(lit[1, i] / a)
            floats[1, c, s] = extent
            horizon = horizon_energy(mu[c], layer, start == z[c, layer], mu_start, count[c])
            angle = np.arcsin(np.sqrt(abs(horizon) / (1.0 + mu_start)))
            floats[3, c, s] = angle if horizon > 0.0 else -angle
            if np.isnan(highest):
                state[c, s] = _SHUT
                continue
            floats[2, c, s] = elevation_of(
                z[c], mu[c], count[c], layer, start, mu_start, distance[s], highest, sample,
                branch_of, samples, squeeze * distance[s],
            )  # fmt: skip
            images[0, c, s], images[1, c, s] = count_images(
                highest, sample, branch_of, samples, mu_start, squeeze * distance[s]
            )
            if z_top == z_base:
                clear = above_edge >= margin
            else:
                clear = extent >= min(margin, 0.999 * (z_top - z_base))
            state[c, s] = _OPEN if clear else _GRAZING
