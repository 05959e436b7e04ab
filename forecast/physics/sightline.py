"""What an observer can see of a far target through given air.

The height H at which a ray passes the target's distance is a smooth function of the launch energy
``e = (1 + μ_o) sin²θ`` except at *critical energies*, at which the ray just grazes a profile node
or the surface (``e = μ_o − μ_node`` for a node lower in μ than all between it and the observer).
Rays that skim a local minimum of μ jump there; at the others H is continuous with a kink. So the
launch energies are cut into *branches* between jumps. On each branch H is continuous, hence the
heights it lights up are exactly the interval from its least to its largest value, and no fan of
rays can find more. Branches are sampled on both sides of every critical energy, and extremes in
between are solved for where the derivative of H changes sign. A ray that met the surface before
the target counts as negative height, continuous with the lit ones, so that a branch reaching the
ground shows as such.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numba import njit, prange

from forecast.physics.curvature import STANDARD_GRADIENT
from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.rays import Medium, advance, build_medium, locate
from forecast.schema import SIGHTLINE_STATES

__all__ = ["GRAZING_MARGIN", "SightlineTable", "standard_medium", "trace_sightlines"]

#: A target of which less than this (m) shows is grazing, not open; ours, no source.
GRAZING_MARGIN = 1.0

_SHUT = SIGHTLINE_STATES["shut"]
_GRAZING = SIGHTLINE_STATES["grazing"]
_OPEN = SIGHTLINE_STATES["open"]

_MAX_CRITICAL = 64  # critical energies per observer; beyond, kinks are thinned, jumps kept first
_MAX_SAMPLES = 4096
_MAX_LIT = 256
_OFFSET = 1e-10  # distance of the end samples from a critical energy, relative to its interval
_SHAPE_ABSOLUTE, _SHAPE_RELATIVE = 2.0, 0.02  # m and share: misfit that calls for finer sampling
_FINE_STEPS = 10
_HEIGHT_TOLERANCE = 1e-4  # m, for extremes and for the target's elevation


class SightlineTable(NamedTuple):
    """Result of `trace_sightlines`: arrays (column, sightline).

    ``state``: codes of `forecast.schema.SIGHTLINE_STATES`, −1 without air. ``hidden_height``:
    lowest visible height at the target's distance, m. ``visible_extent``: height of the part of
    the target that shows, m. ``apparent_elevation``: elevation angle of the highest part that
    shows, rad, NaN if none does.
    """

    state: np.ndarray
    hidden_height: np.ndarray
    visible_extent: np.ndarray
    apparent_elevation: np.ndarray


def trace_sightlines(
    medium: Medium,
    observer_height: Any,
    target_height: Any,
    distance: Any,
    target_base_height: Any = 0.0,
    grazing_margin: float = GRAZING_MARGIN,
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
        np.ascontiguousarray(np.broadcast_to(np.asarray(a, dtype=float), shape))
        for a in (observer_height, target_height, distance, target_base_height)
    )
    if not (np.all(observer >= 0.0) and np.all(base >= 0.0)):
        raise ValueError("trace_sightlines: heights must be at or above the surface")
    if not np.all(base <= top):
        raise ValueError("trace_sightlines: target_base_height must not exceed target_height")
    if not np.all((far > 0.0) & (far < 2e6)):
        raise ValueError("trace_sightlines: distance must be above 0 and below 2,000 km")
    columns = medium.z.shape[0]
    state = np.full((columns, *shape), -1, dtype=np.int8)
    floats = np.full((3, columns, *shape), np.nan)
    _trace_all(*medium, observer, base, top, far, grazing_margin, state, floats)
    return SightlineTable(state, floats[0], floats[1], floats[2])


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
    z = np.concatenate([np.arange(0.0, 500.0, 10.0), np.geomspace(500.0, 20e3, 150)])[None, :]
    if wave == "straight":
        return build_medium(z, np.zeros_like(z), earth_radius, "radio")
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
        raise ValueError(f"standard_medium: wave {wave!r}; choose radio, optical or straight")
    return build_medium(z, n, earth_radius, wave)


@njit(cache=True, nogil=True)
def _critical_energies(mu, count, layer, start_on_node, mu_start, out, jump):  # pragma: no cover
    """List the critical energies below and above the observer, ascending per side.

    Returns how many lie below and above; `out[0]`, `jump[0]` are for below, `[1]` for above. The
    last of each side is its largest: rays with more energy reach the surface or leave for good.
    """
    below = 0
    record = mu_start
    first = layer - 1 if start_on_node else layer
    for j in range(first, -1, -1):
        if mu[j] < record:
            record = mu[j]
            out[0, below] = mu_start - record
            jump[0, below] = j == 0 or mu[j - 1] >= mu[j]
            below += 1
    above = 0
    record = mu_start
    for j in range(layer + 1, count):
        if mu[j] < record:
            record = mu[j]
            out[1, above] = mu_start - record
            jump[1, above] = j == count - 1 or mu[j + 1] >= mu[j]
            above += 1
    return below, above


@njit(cache=True, nogil=True)
def _cuts(critical, jump, below, above, limit, edges, edge_jump):  # pragma: no cover
    """Merge both sides' critical energies under `limit` into ascending cuts; thin the kinks."""
    total = 0
    for side in range(2):
        for k in range(below if side == 0 else above):
            if critical[side, k] < limit:
                total += 1
    stride = 1 + total // _MAX_CRITICAL
    n = 1
    edges[0] = 0.0
    edge_jump[0] = True
    a, b = 0, 0
    seen = 0
    while a < below or b < above:
        if b >= above or (a < below and critical[0, a] <= critical[1, b]):
            value, jumps = critical[0, a], jump[0, a]
            a += 1
        else:
            value, jumps = critical[1, b], jump[1, b]
            b += 1
        if value >= limit:
            break
        seen += 1
        if not jumps and seen % stride != 0:
            continue
        if value == edges[n - 1]:
            edge_jump[n - 1] = edge_jump[n - 1] or jumps
        elif n < edges.size - 1:
            edges[n] = value
            edge_jump[n] = jumps
            n += 1
    edges[n] = limit
    edge_jump[n] = True
    return n


@njit(cache=True, nogil=True, error_model="numpy")
def _pass_height(
    z, mu, count, layer, start, mu_start, energy, upward, distance
):  # pragma: no cover
    """Height H at the distance (negative: blocked), its derivative by energy, turning points."""
    end, w, x, turns, _, slope = advance(
        z, mu, count, layer, start, mu_start, energy, upward, distance, False, True
    )
    if x < distance:
        return -(distance - x) * abs(w), slope, turns
    return end, slope, turns


@njit(cache=True, nogil=True, error_model="numpy")
def _extremum(
    z, mu, count, layer, start, mu_start, upward, distance, low, span, ta, ga, tb, gb
):  # pragma: no cover
    """Solve dH/dt = 0 between ta and tb, where energy = low + span sin²(πt/2)."""
    best = 0.0
    energy = low
    for _ in range(40):
        t = tb - gb * (tb - ta) / (gb - ga)
        if not (ta < t < tb) or (t - ta) < 0.02 * (tb - ta) or (tb - t) < 0.02 * (tb - ta):
            t = 0.5 * (ta + tb)
        s = np.sin(0.5 * np.pi * t)
        energy = low + span * s * s
        best, slope, _ = _pass_height(
            z, mu, count, layer, start, mu_start, energy, upward, distance
        )
        g = slope * span * 0.5 * np.pi * np.sin(np.pi * t)
        if abs(g) * (tb - ta) < _HEIGHT_TOLERANCE:
            break
        if (g > 0.0) == (ga > 0.0):
            ta, ga = t, g
        else:
            tb, gb = t, g
    return best, energy


@njit(cache=True, nogil=True, error_model="numpy")
def _survey(
    z,
    mu,
    count,
    layer,
    start,
    mu_start,
    on_node,
    base,
    top,
    distance,
    critical,
    jump,
    edges,
    edge_jump,
    sample,
    branch_of,
    lit,
):  # pragma: no cover
    """Sample every branch; fill `lit` with the visible intervals and `sample` with the rays.

    `sample` rows: signed energy (negative: launched downwards), height; `branch_of`: branch
    number. Returns the number of intervals and of samples.
    """
    below, above = _critical_energies(mu, count, layer, on_node, mu_start, critical, jump)
    largest_below = critical[0, below - 1] if below > 0 else 0.0
    largest_above = critical[1, above - 1] if above > 0 else 0.0
    lits = 0
    samples = 0
    branch = 0
    lowest = np.inf
    for side in range(2):
        upward = side == 1
        sign = 1.0 if upward else -1.0
        limit = largest_above if upward else largest_below
        if limit > 0.0:
            n = _cuts(critical, jump, below, above, limit, edges, edge_jump)
            low_lit, high_lit = np.inf, -np.inf
            for k in range(n):
                if edge_jump[k]:
                    branch += 1
                    low_lit, high_lit = np.inf, -np.inf
                low = edges[k]
                span = edges[k + 1] - low
                t_end = 2.0 / np.pi * np.sqrt(_OFFSET)
                steps = 2
                ta, fa, ga, turns_a = t_end, 0.0, 0.0, 0
                # Ends first: how differently they turn tells how finely to sample in between.
                s = np.sin(0.5 * np.pi * t_end)
                energy = low + span * s * s
                fa, slope, turns_a = _pass_height(
                    z, mu, count, layer, start, mu_start, energy, upward, distance
                )
                ga = slope * span * 0.5 * np.pi * np.sin(np.pi * t_end)
                energy_last = low + span * (1.0 - s * s)
                fl, slope, turns_l = _pass_height(
                    z, mu, count, layer, start, mu_start, energy_last, upward, distance
                )
                gl = slope * span * 0.5 * np.pi * np.sin(np.pi * t_end)
                middle, _, _ = _pass_height(
                    z, mu, count, layer, start, mu_start, low + 0.5 * span, upward, distance
                )
                # A cubic through both ends that misses the middle has not seen the whole shape.
                cubic = 0.5 * (fa + fl) + 0.125 * (1.0 - 2.0 * t_end) * (ga - gl)
                if abs(middle - cubic) > _SHAPE_ABSOLUTE + _SHAPE_RELATIVE * abs(fa - fl):
                    steps = _FINE_STEPS
                steps += min(2 * abs(turns_l - turns_a), 30)
                low_lit = min(low_lit, fa, fl)
                high_lit = max(high_lit, fa, fl)
                if samples < _MAX_SAMPLES:
                    sample[0, samples], sample[1, samples] = sign * energy, fa
                    branch_of[samples] = branch
                    samples += 1
                for step in range(1, steps + 1):
                    if step == steps:
                        tb, fb, gb, energy = 1.0 - t_end, fl, gl, energy_last
                    else:
                        tb = step / steps
                        s = np.sin(0.5 * np.pi * tb)
                        energy = low + span * s * s
                        fb, slope, _ = _pass_height(
                            z, mu, count, layer, start, mu_start, energy, upward, distance
                        )
                        gb = slope * span * 0.5 * np.pi * np.sin(np.pi * tb)
                    if (ga < 0.0) != (gb < 0.0):
                        # Where the end tangents meet bounds the extreme, if H bends one way.
                        dt = tb - ta
                        meet = fa + ga * (fb - fa - gb * dt) / (ga - gb)
                        if ga < 0.0:
                            wanted = meet < max(lowest, top) and min(fa, fb) > 0.0
                        else:
                            wanted = meet > 0.0 and max(fa, fb) < top
                        if wanted:
                            extreme, at = _extremum(
                                z, mu, count, layer, start, mu_start, upward, distance,
                                low, span, ta, ga, tb, gb,
                            )  # fmt: skip
                            low_lit = min(low_lit, extreme)
                            high_lit = max(high_lit, extreme)
                            if samples < _MAX_SAMPLES:
                                sample[0, samples], sample[1, samples] = sign * at, extreme
                                branch_of[samples] = branch
                                samples += 1
                    low_lit = min(low_lit, fb)
                    high_lit = max(high_lit, fb)
                    if samples < _MAX_SAMPLES:
                        sample[0, samples], sample[1, samples] = sign * energy, fb
                        branch_of[samples] = branch
                        samples += 1
                    ta, fa, ga = tb, fb, gb
                if edge_jump[k + 1] and high_lit > 0.0 and lits < _MAX_LIT:
                    lit[0, lits], lit[1, lits] = max(low_lit, 0.0), high_lit
                    lits += 1
                    lowest = min(lowest, max(low_lit, 0.0))
        # Just past the last critical energy: down to the ground, or up and away.
        energy = limit * (1.0 + _OFFSET) if limit > 0.0 else 1e-24
        height, _, _ = _pass_height(z, mu, count, layer, start, mu_start, energy, upward, distance)
        branch += 1
        if height > 0.0 and lits < _MAX_LIT:
            lit[0, lits] = height if upward else 0.0
            lit[1, lits] = np.inf if upward else height
            lits += 1
            lowest = min(lowest, lit[0, lits - 1])
        if samples < _MAX_SAMPLES:
            sample[0, samples], sample[1, samples] = sign * energy, height
            branch_of[samples] = branch
            samples += 1
    return lits, samples


@njit(cache=True, nogil=True)
def _merge(lit, lits):  # pragma: no cover - compiled
    """Sort and merge intervals in place; returns how many remain."""
    for i in range(1, lits):
        a, b = lit[0, i], lit[1, i]
        j = i - 1
        while j >= 0 and lit[0, j] > a:
            lit[0, j + 1], lit[1, j + 1] = lit[0, j], lit[1, j]
            j -= 1
        lit[0, j + 1], lit[1, j + 1] = a, b
    n = 0
    for i in range(lits):
        if n > 0 and lit[0, i] <= lit[1, n - 1]:
            lit[1, n - 1] = max(lit[1, n - 1], lit[1, i])
        else:
            lit[0, n], lit[1, n] = lit[0, i], lit[1, i]
            n += 1
    return n


@njit(cache=True, nogil=True, error_model="numpy")
def _elevation_of(
    z, mu, count, layer, start, mu_start, distance, height, sample, branch_of, samples
):  # pragma: no cover
    """Find the highest elevation (rad) at which `height` appears, NaN if no ray passes there."""
    best = -np.inf
    for i in range(samples):
        ea, fa = sample[0, i], sample[1, i]
        if abs(fa - height) <= 2.0 * _HEIGHT_TOLERANCE:
            best = max(best, ea)
        if i + 1 < samples and branch_of[i + 1] == branch_of[i]:
            eb, fb = sample[0, i + 1], sample[1, i + 1]
        elif i + 1 == samples:
            # The last sample starts the rays that leave for good: H rises without end.
            eb, fb = ea, fa
            while fb < height and eb < 0.5:
                eb = 4.0 * eb + 1e-8
                fb, _, _ = _pass_height(z, mu, count, layer, start, mu_start, eb, True, distance)
        else:
            continue
        if max(ea, eb) <= best or (fa - height) * (fb - height) > 0.0:
            continue
        for _ in range(60):
            middle = 0.5 * (ea + eb)
            f, _, _ = _pass_height(
                z, mu, count, layer, start, mu_start, abs(middle), middle > 0.0, distance
            )
            if (f - height) * (fa - height) > 0.0:
                ea, fa = middle, f
            else:
                eb, fb = middle, f
            if abs(f - height) < _HEIGHT_TOLERANCE:
                break
        best = max(best, 0.5 * (ea + eb))
    if best == -np.inf:
        return np.nan
    angle = np.arcsin(np.sqrt(abs(best) / (1.0 + mu_start)))
    return angle if best > 0.0 else -angle


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _trace_all(
    z, mu, count, radius, observer, base, top, distance, margin, state, floats
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
        sample = np.empty((2, _MAX_SAMPLES))
        branch_of = np.empty(_MAX_SAMPLES, dtype=np.int64)
        lit = np.empty((2, _MAX_LIT))
        a = radius[c]
        for s in range(lines):
            layer, start, mu_start = locate(z[c], mu[c], count[c], a * np.log1p(observer[s] / a))
            z_base = a * np.log1p(base[s] / a)
            z_top = a * np.log1p(top[s] / a)
            lits, samples = _survey(
                z[c], mu[c], count[c], layer, start, mu_start, start == z[c, layer],
                z_base, z_top, distance[s], critical, jump, edges, edge_jump, sample, branch_of,
                lit,
            )  # fmt: skip
            lits = _merge(lit, lits)
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
            floats[1, c, s] = extent
            if np.isnan(highest):
                state[c, s] = _SHUT
                continue
            floats[2, c, s] = _elevation_of(
                z[c], mu[c], count[c], layer, start, mu_start, distance[s], highest, sample,
                branch_of, samples,
            )  # fmt: skip
            if z_top == z_base:
                clear = above_edge >= margin
            else:
                clear = extent >= min(margin, 0.999 * (z_top - z_base))
            state[c, s] = _OPEN if clear else _GRAZING
