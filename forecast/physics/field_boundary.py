"""How the surface enters the stepping of a field: as a mirror, or by its impedance.

A mirror (horizontal polarisation) needs the sine transform. An impedance, ``∂u/∂z + α u = 0`` with
``α = i k δ``, needs the discrete mixed transform of Dockery & Kuttler, IEEE Trans. Antennas
Propag. 44 (1996) 1592–1599 (from memory): ``w = ∂u/∂z + α u`` is zero at the surface and obeys the
same equation, so it takes the sine transform; u comes back from w by two first-order recursions,
each run in the direction in which it is stable, and one amplitude that w does not know, of the
wave that clings to the surface.

The derivative here is the compact one of fourth order, ``(w₋ + 4 w + w₊)/6 = (u₊ − u₋)/2Δ + α
(u₋ + 4 u + u₊)/6``: with the plain central difference the surface would mirror a wave at half the
Nyquist angle as one at a third of it.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit

__all__ = ["Mixed", "join", "mixed_coefficients", "split"]


class Mixed(NamedTuple):
    """Coefficients of ``a u₊ + b u + c u₋``; its roots, the one inside the unit circle first.

    ``end`` is the weight of the surface value in the sum ``end u₀ + Σ rⁿ uₙ``, in which only the
    surface wave ``rⁿ`` counts; ``square`` is that sum for the wave itself; ``advance`` is
    the wave's ``√(1 + κ²/k²) − 1``. ``clings`` is false where r alternates (Re α < 0): no such
    wave travels.
    """

    a: complex
    b: complex
    c: complex
    small: complex
    large: complex
    end: complex
    square: complex
    advance: complex
    clings: bool


def mixed_coefficients(impedance: complex, k: float, step: float, points: int) -> Mixed:
    """Coefficients of the mixed transform of a surface.

    Parameters
    ----------
    impedance : complex
        Normalised, δ.
    k : float
        Wavenumber, 1/m.
    step : float
        Height step, m.
    points : int
        Heights above the surface.

    Returns
    -------
    Mixed
    """
    alpha = 1j * k * impedance
    a = 0.5 / step + alpha / 6.0
    b = 4.0 * alpha / 6.0
    c = -0.5 / step + alpha / 6.0
    root = np.sqrt(b * b - 4.0 * a * c)
    roots = sorted(((-b + root) / (2.0 * a), (-b - root) / (2.0 * a)), key=abs)
    small, large = (complex(r) for r in roots)
    end = 0.5 - alpha * step / 6.0
    kappa = -np.log(small) / step
    clings = small.real > 0.0
    advance = complex(np.sqrt(1.0 + (kappa / k) ** 2) - 1.0) if clings else 0j
    square = end + small**2 * (1.0 - small ** (2 * points)) / (1.0 - small**2)
    return Mixed(a, b, c, small, large, end, square, advance, clings)


@njit(cache=True, nogil=True)
def split(
    field: Any, a: complex, b: complex, c: complex, small: complex, end: complex, wave: Any,
    clinging: Any,
) -> None:  # fmt: skip # pragma: no cover - compiled
    """From a field to w and the sum that holds the surface wave.

    Parameters
    ----------
    field : ndarray of complex
        Shape (case, height), from the surface on.
    a, b, c, small, end : complex
        Of `Mixed`.
    wave : ndarray of complex
        Filled: w above the surface, (case, height − 1).
    clinging : ndarray of complex
        Filled: the sum, (case,).
    """
    last = field.shape[1] - 1
    for i in range(field.shape[0]):
        for n in range(1, last):
            wave[i, n - 1] = a * field[i, n + 1] + b * field[i, n] + c * field[i, n - 1]
        wave[i, last - 1] = b * field[i, last] + c * field[i, last - 1]
        total = end * field[i, 0]
        power = small
        n = 1
        while n <= last and abs(power) > 1e-18:
            total += power * field[i, n]
            power *= small
            n += 1
        clinging[i] = total


@njit(cache=True, nogil=True)
def join(
    wave: Any, clinging: Any, a: complex, small: complex, large: complex, end: complex,
    square: complex, field: Any,
) -> None:  # fmt: skip # pragma: no cover - compiled
    """From w and the sum back to the field; the inverse of `split`.

    Parameters
    ----------
    wave, clinging : ndarray of complex
        As `split` fills them.
    a, small, large, end, square : complex
        Of `Mixed`.
    field : ndarray of complex
        Filled.
    """
    last = field.shape[1] - 1
    over_a = 1.0 / a
    over_large = 1.0 / large
    for i in range(field.shape[0]):
        v = 0j
        for n in range(last, 0, -1):
            v = (v - wave[i, n - 1] * over_a) * over_large
            field[i, n] = v
        field[i, 0] = 0.0
        here = 0j
        total = 0j
        power = small
        for n in range(1, last + 1):
            here = small * here + field[i, n]
            field[i, n] = here
            if abs(power.real) + abs(power.imag) > 1e-18:
                total += power * here
                power *= small
        share = (clinging[i] - total) / square
        power = 1.0 + 0j
        n = 0
        while n <= last and abs(power) > 1e-18:
            field[i, n] += share * power
            power *= small
            n += 1
