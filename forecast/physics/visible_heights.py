"""Which heights at the target's distance are lit by rays from the observer: exactly, not by a fan.

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

import numpy as np

from forecast.physics.compiled import njit
from forecast.physics.lit_intervals import is_step
from forecast.physics.rays import advance

__all__ = [
    "MAX_LIT",
    "MAX_SAMPLES",
    "elevation_of",
    "survey_heights",
]

_MAX_CRITICAL = 64  # critical energies per observer; beyond, kinks are thinned, jumps kept first
MAX_SAMPLES = 4096  # rays kept per sightline for the elevation; three are for those past all cuts
MAX_LIT = 256  # visible intervals before merging
_OFFSET = 1e-10  # distance of the end samples from a critical energy, relative to its interval
_SHAPE_ABSOLUTE, _SHAPE_RELATIVE = 2.0, 0.02  # m and share: misfit that calls for finer sampling
_FINE_STEPS = 10
_LEVEL = 1e-24  # energy of a level launch, 1e-12 rad
_HEIGHT_TOLERANCE = 1e-4  # m, for extremes and for the target's elevation


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
def _reach(
    lit, lits, low, high, fa, fb, energy_a, energy_b, mu_start, steepest
):  # pragma: no cover
    """Extend the lit heights low…high from a sample to the next, or begin anew past a step."""
    if not is_step(energy_a, fa, energy_b, fb, mu_start, steepest):
        return min(low, fb), max(high, fb), lits
    if high > max(low, 0.0) and lits < MAX_LIT:
        lit[0, lits], lit[1, lits] = max(low, 0.0), high
        lits += 1
    return fb, fb, lits


@njit(cache=True, nogil=True, error_model="numpy")
def survey_heights(
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
    steepest,
):  # pragma: no cover
    """Sample every branch; fill `lit` with the visible intervals and `sample` with the rays.

    `sample` rows: signed energy (negative: launched downwards), height; `branch_of`: branch
    number. Between samples further apart than `steepest` (m per rad) nothing counts as lit.
    Returns the number of intervals and of samples.
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
                if k == 0:
                    # Nothing happens at level: both sides start with the same ray.
                    fa, _, _ = _pass_height(
                        z, mu, count, layer, start, mu_start, _LEVEL, upward, distance
                    )
                    low_lit, high_lit = fa, fa
                    if samples < MAX_SAMPLES - 3:
                        sample[0, samples], sample[1, samples] = sign * _LEVEL, fa
                        branch_of[samples] = branch
                        samples += 1
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
                # The kink between two cuts is no step: on its two sides the ray is the same.
                low_lit = min(low_lit, fa)
                high_lit = max(high_lit, fa)
                energy_a = energy
                if samples < MAX_SAMPLES - 3:
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
                            low_lit, high_lit, lits = _reach(
                                lit, lits, low_lit, high_lit, fa, extreme, energy_a, at, mu_start,
                                steepest,
                            )  # fmt: skip
                            energy_a, fa = at, extreme
                            if samples < MAX_SAMPLES - 3:
                                sample[0, samples], sample[1, samples] = sign * at, extreme
                                branch_of[samples] = branch
                                samples += 1
                    low_lit, high_lit, lits = _reach(
                        lit, lits, low_lit, high_lit, fa, fb, energy_a, energy, mu_start, steepest
                    )
                    energy_a = energy
                    if samples < MAX_SAMPLES - 3:
                        sample[0, samples], sample[1, samples] = sign * energy, fb
                        branch_of[samples] = branch
                        samples += 1
                    ta, fa, ga = tb, fb, gb
                some = high_lit > max(low_lit, 0.0) or not steepest < np.inf
                if edge_jump[k + 1] and high_lit > 0.0 and some and lits < MAX_LIT:
                    lit[0, lits], lit[1, lits] = max(low_lit, 0.0), high_lit
                    lits += 1
                    lowest = min(lowest, max(low_lit, 0.0))
        # Just past the last critical energy: down to the ground, or up and away.
        energy = limit * (1.0 + _OFFSET) if limit > 0.0 else _LEVEL
        height, _, _ = _pass_height(z, mu, count, layer, start, mu_start, energy, upward, distance)
        branch += 1
        wide = True
        if not upward and height > 0.0 and steepest < np.inf:
            # Down to the water within so small an angle is a step too.
            angle = np.sqrt(energy / (1.0 + mu_start)) + height / steepest
            end, _, _ = _pass_height(
                z, mu, count, layer, start, mu_start, (1.0 + mu_start) * angle * angle, False,
                distance,
            )  # fmt: skip
            wide = end > 0.0
        if height > 0.0 and wide and lits < MAX_LIT:
            lit[0, lits] = height if upward else 0.0
            lit[1, lits] = np.inf if upward else height
            lits += 1
            lowest = min(lowest, lit[0, lits - 1])
        if samples < MAX_SAMPLES:
            sample[0, samples], sample[1, samples] = sign * energy, height
            branch_of[samples] = branch
            samples += 1
        if not upward:
            # A near target is also seen straight down its front, as far as the water's edge.
            while height > 0.0 and energy < 0.5:
                energy = 4.0 * energy + 1e-8
                height, _, _ = _pass_height(
                    z, mu, count, layer, start, mu_start, energy, upward, distance
                )
            if samples < MAX_SAMPLES - 1:
                sample[0, samples], sample[1, samples] = sign * energy, height
                branch_of[samples] = branch
                samples += 1
    return lits, samples


@njit(cache=True, nogil=True, error_model="numpy")
def elevation_of(
    z, mu, count, layer, start, mu_start, distance, height, sample, branch_of, samples, steepest
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
        if is_step(ea, fa, eb, fb, mu_start, steepest):
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
