"""What the air does to a wave along one range step: index on the grid, and the phase it adds.

Heights are conformal, ``Z = a ln(1 + z/a)``, and the index is ``m = n (1 + z/a)``: in them waves
over a sphere are waves over a plane, exactly so but for the spreading around the sphere (as for
rays, `forecast.physics.rays`).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.compiled import njit
from forecast.physics.rays import Medium

__all__ = ["apply_screen", "average_index"]

_FINER = 16  # cells to a height step
_COLUMNS = 16  # at once


def average_index(medium: Medium, step: float, points: int) -> np.ndarray:
    """Modified index minus 1 on a grid of conformal heights, without what is finer than two steps.

    Means over cells of a finer grid, mirrored at the surface and cut off at the Nyquist
    wavenumber: on waves up to half of that the grid's product of index and field is then the true
    one, even with layers much thinner than a step.

    Parameters
    ----------
    medium : Medium
        Air, (column,).
    step : float
        Height step, m.
    points : int
        Heights from the surface on, ``n step``.

    Returns
    -------
    ndarray
        Shape (column, points).
    """
    from scipy.fft import dct

    radius = medium.radius[:, None]
    height = radius * np.expm1(medium.z / radius)
    excess = medium.mu / (1.0 + np.sqrt(1.0 + medium.mu))
    refractivity = (excess - height / radius) / (1.0 + height / radius)
    # N is linear in height between levels however far apart they are; μ(Z) only where near.
    last = (points - 1) * _FINER
    fine = step / _FINER * np.arange(last + 1)
    out = np.empty((medium.z.shape[0], points))
    for start in range(0, len(out), _COLUMNS):
        some = slice(start, start + _COLUMNS)
        edges = radius[some] * np.expm1((fine + 0.5 * step / _FINER) / radius[some])
        cells = np.empty(edges.shape)
        _average(height[some], refractivity[some], medium.count[some], edges, cells)
        cells += (1.0 + cells) * np.expm1(fine / radius[some])
        wave = dct(cells, type=1, norm="forward", overwrite_x=True)[:, :points]
        wave *= np.exp(-36.0 * np.linspace(0.0, 1.0, points) ** 16)
        out[some] = dct(wave, type=1)
    return out


@njit(cache=True, nogil=True)
def _average(z, value, count, edges, out):  # pragma: no cover - compiled
    for c in range(out.shape[0]):
        node = 0
        low = 0.0
        for n in range(out.shape[1]):
            high = edges[c, n]
            total = 0.0
            here = low
            while here < high:
                while node < count[c] - 2 and z[c, node + 1] <= here:
                    node += 1
                slope = (value[c, node + 1] - value[c, node]) / (z[c, node + 1] - z[c, node])
                end = high
                if node < count[c] - 2:
                    end = min(high, z[c, node + 1])
                middle = 0.5 * (here + end)
                total += (end - here) * (value[c, node] + slope * (middle - z[c, node]))
                here = end
            out[c, n] = total / (high - low)
            low = high


@njit(cache=True, nogil=True)
def apply_screen(
    field: Any, index: Any, profile: int, share: float, first: float, phase: float, tilt: float,
    start: float, loss: Any,
) -> None:  # fmt: skip # pragma: no cover - compiled
    """Multiply a field by the phase and the loss of one range step, in place.

    Parameters
    ----------
    field : ndarray of complex
        Shape (case, height).
    index : ndarray
        Modified index against the reference, shape (case, profile, height).
    profile : int
        The profile just behind.
    share : float
        Share of the way to the next, 0…1.
    first : float
        Height of the field's first value in steps of the index's grid.
    phase : float
        Phase per unit of index, rad.
    tilt, start : float
        Phase per step of height, and at the first, rad, where the ground changes its slope.
    loss : ndarray
        Factor at each height.
    """
    base = int(first)
    part = first - base
    after = min(profile + 1, index.shape[1] - 1)
    for c in range(field.shape[0]):
        for n in range(field.shape[1]):
            i = base + n
            j = min(i + 1, index.shape[2] - 1)
            here = (1.0 - part) * index[c, profile, i] + part * index[c, profile, j]
            ahead = (1.0 - part) * index[c, after, i] + part * index[c, after, j]
            angle = phase * ((1.0 - share) * here + share * ahead) + start + tilt * n
            field[c, n] *= loss[n] * complex(np.cos(angle), np.sin(angle))
