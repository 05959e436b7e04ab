"""What sampled rays say of a target: merged intervals, numbers of images, the horizon."""

from __future__ import annotations

import numpy as np

from forecast.physics.compiled import njit

__all__ = ["count_images", "horizon_energy", "is_step", "merge_intervals"]

_SEAM = 1e-5  # m; visible intervals that come this near each other are one


@njit(cache=True, nogil=True)
def merge_intervals(lit, lits):  # pragma: no cover - compiled
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
        if n > 0 and lit[0, i] <= lit[1, n - 1] + _SEAM:
            lit[1, n - 1] = max(lit[1, n - 1], lit[1, i])
        else:
            lit[0, n], lit[1, n] = lit[0, i], lit[1, i]
            n += 1
    return n


@njit(cache=True, nogil=True, error_model="numpy")
def is_step(ea, fa, eb, fb, mu_start, steepest):  # pragma: no cover - compiled
    """Whether heights fa and fb of rays with signed energies ea and eb count as a jump.

    They do if they lie further apart than `steepest` (m per rad) allows for the angle between.
    """
    if not steepest < np.inf:
        return False
    one = np.sqrt(abs(ea) / (1.0 + mu_start))
    other = np.sqrt(abs(eb) / (1.0 + mu_start))
    if (ea > 0.0) != (eb > 0.0):
        angle = one + other
    else:
        # The difference of the roots, without their cancellation.
        angle = abs(abs(eb) - abs(ea)) / (1.0 + mu_start) / max(one + other, 1e-30)
    return abs(fb - fa) > steepest * angle


@njit(cache=True, nogil=True)
def count_images(
    height, sample, branch_of, samples, mu_start, steepest
):  # pragma: no cover - compiled
    """Count the directions in which `height` appears: upright ones and inverted ones.

    An image is upright where a higher line of sight meets a greater height. Extremes of each
    branch are among the samples, so that between neighbours the height runs one way.
    """
    upright = 0
    inverted = 0
    for i in range(samples):
        ea, fa = sample[0, i], sample[1, i]
        if i + 1 == samples:
            # The rays that leave for good rise with their elevation without end.
            if fa < height:
                upright += 1
        elif branch_of[i + 1] == branch_of[i]:
            eb, fb = sample[0, i + 1], sample[1, i + 1]
            if is_step(ea, fa, eb, fb, mu_start, steepest):
                continue
            if (fa - height) * (fb - height) < 0.0 or (fa == height and fb != height):
                if (fb > fa) == (eb > ea):
                    upright += 1
                else:
                    inverted += 1
    return upright, inverted


@njit(cache=True, nogil=True)
def horizon_energy(mu, layer, start_on_node, mu_start, count):  # pragma: no cover - compiled
    """Signed energy of the highest ray that ever meets the surface (negative: below level).

    Rays launched downwards meet it if they have more energy than every node below takes away;
    those launched upwards if a node above turns them back with more energy than that.
    """
    lowest = mu_start
    for j in range((layer - 1 if start_on_node else layer), -1, -1):
        lowest = min(lowest, mu[j])
    least = mu_start
    for j in range(layer + 1, count):
        least = min(least, mu[j])
    below, above = mu_start - lowest, mu_start - least
    return above if above > below else -below
