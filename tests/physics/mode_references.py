"""Fields in a piecewise-linear atmosphere, not stepped: modes, and the whole spectrum at once.

In the flattened Earth the field of a source obeys ``u_zz + 2ik u_x + 2e-6 k² M u = 0``, time
factor e^{−iωt}, whose separated solutions are Airy functions wherever M is linear. Factors are
20 log10 of field over free-space field at the same distance, dB. Source: Kerr, Propagation of
Short Radio Waves (1951) chapter 2, from memory; the two methods here, and the residue series of
`tests.physics.field_references`, agree to 1e-6 dB.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from scipy.linalg import eig
from scipy.special import ai_zeros, airy, erfc

from tests.physics.field_references import LIGHT_SPEED, STANDARD_RADIUS, upward_airy

__all__ = [
    "Air",
    "Modes",
    "collocated_eigenvalues",
    "find_modes",
    "linear_air",
    "mode_attenuation",
    "mode_sum",
    "spectral_field",
]

_TURN = np.exp(2j * np.pi / 3.0)


class Air(NamedTuple):
    """M linear between nodes; heights start at the surface, m; M-units; M-units per m above."""

    heights: np.ndarray
    modified: np.ndarray
    above: float


class Modes(NamedTuple):
    """``eigenvalue`` λ = k²E of each mode (1/m²), E = (β/k)² − 1, and ``norm`` ∫ψ² dz."""

    eigenvalue: np.ndarray
    norm: np.ndarray


def linear_air(effective_radius: float = STANDARD_RADIUS) -> Air:
    """Air whose rays are straight over a sphere of that radius: M = 1e6 z / radius."""
    return Air(np.zeros(1), np.zeros(1), 1e6 / effective_radius)


class _Layer:
    """Two independent solutions in one layer, for an array of eigenvalues."""

    def __init__(self, k: float, base: float, modified: float, gradient: float, middle: float):
        slope = 2e-6 * k**2 * gradient
        self.sigma = np.sign(slope) * abs(slope) ** (1.0 / 3.0)
        self.k, self.base, self.modified, self.gradient = k, base, modified, gradient
        self.middle = middle

    def argument(self, z: Any, eigenvalue: Any) -> Any:
        m = self.modified + self.gradient * (z - self.base)
        return (eigenvalue - 2e-6 * self.k**2 * m) / self.sigma**2

    def pair(self, z: Any, eigenvalue: Any) -> tuple[Any, Any, Any, Any]:
        """Values and d/dz of two solutions: chosen so that one is small wherever one can be."""
        t = self.argument(z, eigenvalue)
        turned = np.abs(np.angle(self.argument(self.middle, eigenvalue))) > np.pi / 3.0
        turned = np.broadcast_to(turned, t.shape)
        f, df, g, dg = np.empty((4, *t.shape), dtype=complex)
        for which, (first, second) in ((turned, (_TURN, 1.0 / _TURN)), (~turned, (1.0, None))):
            here = t[which]
            a, da, b, db = airy(first * here)
            f[which], df[which] = a, first * da
            if second is not None:
                b, db, _, _ = airy(second * here)
                db = second * db
            g[which], dg[which] = b, db
        return f, -self.sigma * df, g, -self.sigma * dg

    def fit(self, z: float, eigenvalue: Any, value: Any, slope: Any) -> tuple[Any, Any]:
        f, df, g, dg = self.pair(z, eigenvalue)
        det = f * dg - df * g
        return (value * dg - slope * g) / det, (slope * f - value * df) / det

    def square(self, z: float, eigenvalue: Any, value: Any, slope: Any) -> Any:
        """Antiderivative of ψ² in z: (t ψ² − ψ_t²) / (dt/dz)."""
        t = self.argument(z, eigenvalue)
        return -(t * value**2 - (slope / self.sigma) ** 2) / self.sigma


def _layers(k: float, air: Air) -> list[_Layer]:
    z, m = np.asarray(air.heights, dtype=float), np.asarray(air.modified, dtype=float)
    gradients = [*(np.diff(m) / np.diff(z)), air.above]
    middles = [*(0.5 * (z[1:] + z[:-1])), z[-1]]
    return [_Layer(k, *row) for row in zip(z, m, gradients, middles, strict=True)]


def _upward(k: float, air: Air, eigenvalue: Any, at: Any = ()) -> tuple[Any, Any, Any, Any]:
    """The solution that is an upward wave at the top: value and slope at 0, values at, ∫ψ² dz."""
    layers = _layers(k, air)
    at = np.asarray(at, dtype=float)
    lam = np.asarray(eigenvalue, dtype=complex)
    top = layers[-1]

    def above(z: Any) -> tuple[Any, Any]:
        f, df = upward_airy(top.argument(z, lam[..., None]))
        return f, -top.sigma * df

    base = air.heights[-1]
    value, slope = (part[..., 0] for part in above(np.array([base])))
    out = np.array(above(at)[0])
    norm = -top.square(base, lam, value, slope)
    for j in range(len(layers) - 2, -1, -1):
        layer, low, high = layers[j], air.heights[j], air.heights[j + 1]
        c, d = layer.fit(high, lam, value, slope)
        inside = at < high
        f, _, g, _ = layer.pair(at[inside], lam[..., None])
        out[..., inside] = c[..., None] * f + d[..., None] * g
        norm = norm + layer.square(high, lam, value, slope)
        f, df, g, dg = layer.pair(low, lam)
        value, slope = c * f + d * g, c * df + d * dg
        norm = norm - layer.square(low, lam, value, slope)
    return value, slope, out, norm


def _downward(k: float, air: Air, eigenvalue: Any, z: float, impedance: complex | None) -> Any:
    """The solution that meets the surface's condition, at a height."""
    lam = np.asarray(eigenvalue, dtype=complex)
    value = np.full(lam.shape, 0.0 if impedance is None else 1.0, dtype=complex)
    slope = np.full(lam.shape, 1.0 if impedance is None else -1j * k * impedance, dtype=complex)
    layers = _layers(k, air)
    for j, layer in enumerate(layers):
        end = min(z, air.heights[j + 1]) if j + 1 < len(layers) else z
        c, d = layer.fit(air.heights[j], lam, value, slope)
        f, df, g, dg = layer.pair(end, lam)
        value, slope = c * f + d * g, c * df + d * dg
        if end == z:
            break
    return value


def _mismatch(k: float, air: Air, eigenvalue: Any, impedance: complex | None) -> Any:
    value, slope, _, _ = _upward(k, air, eigenvalue)
    return value if impedance is None else slope + 1j * k * impedance * value


def find_modes(frequency: float, air: Air, count: int, impedance: complex | None = None) -> Modes:
    """The least attenuated modes, in that order: eigenvalues by collocation, then Newton on Airy.

    Raises
    ------
    ValueError
        If fewer than ``count`` modes come out of both alike.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    rough = collocated_eigenvalues(frequency, air, count, impedance)
    step = 1e-6 * abs(2e-6 * k**2 * air.above) ** (2.0 / 3.0)
    lam = rough
    with np.errstate(invalid="ignore", over="ignore"):
        for _ in range(8):
            low, here, high = (_mismatch(k, air, lam + d, impedance) for d in (-step, 0.0, step))
            lam = lam - here * 2.0 * step / (high - low)
    near = np.abs(lam - rough) < 1e3 * step
    lam = lam[near]
    lam = lam[np.argsort(lam.imag)][:count]
    if lam.size < count:
        raise ValueError(f"find_modes: {lam.size} modes of {count} confirmed")
    return Modes(lam, _upward(k, air, lam)[3])


def collocated_eigenvalues(
    frequency: float, air: Air, count: int, impedance: complex | None = None
) -> np.ndarray:
    """Eigenvalues λ without Airy functions, more than ``count``: Chebyshev collocation.

    Above the last node height is turned by 60° into the complex plane, where upward waves die
    out; the equation stays true there, as M is linear.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    unit = (2e-6 * k**2 * air.above) ** (-1.0 / 3.0)
    depth = unit * (12.0 + 1.5 * abs(ai_zeros(count + 5)[0][-1]))
    edges = [*np.asarray(air.heights, dtype=float), air.heights[-1] + depth]
    turns = [*([1.0 + 0j] * (len(edges) - 2)), np.exp(1j * np.pi / 3.0)]
    gradients = [*(np.diff(air.modified) / np.diff(air.heights)), air.above]
    n = 48 + 3 * count
    x = np.cos(np.pi * np.arange(n) / (n - 1))[::-1]
    one = _differentiation(x)
    size = n * len(turns)
    left, right = np.zeros((2, size, size), dtype=complex)
    for j, (turn, gradient) in enumerate(zip(turns, gradients, strict=True)):
        at, half = slice(j * n, (j + 1) * n), 0.5 * (edges[j + 1] - edges[j])
        d = one / (half * turn)
        m = air.modified[j] + gradient * turn * half * (x + 1.0)
        left[at, at] = d @ d + np.diag(2e-6 * k**2 * m)
        right[at, at] = np.eye(n)
        first, last = j * n, (j + 1) * n - 1
        right[first] = right[last] = 0.0
        if j == 0:
            left[first] = 0.0
            if impedance is None:
                left[first, first] = 1.0
            else:
                left[first, at] = d[0]
                left[first, first] += 1j * k * impedance
        else:
            left[first, at] = d[0]  # the slope goes on; the rest was set by the layer below
        if j + 1 < len(turns):
            left[last] = 0.0
            left[last, last], left[last, last + 1] = 1.0, -1.0
            left[last + 1, at] = -d[-1]
        else:
            left[last] = 0.0
            left[last, last] = 1.0
    found = eig(left, right, right=False)
    # Far down the real axis lie modes of the lower layers alone, from waves too short to be
    # resolved above them.
    span = 2e-6 * k**2 * np.ptp(air.modified)
    near = np.isfinite(found) & (np.abs(found) < 2.0 * depth * unit**-3 + span)
    return found[near & (found.imag > -1e-6 * unit**-2)]


def _differentiation(x: np.ndarray) -> np.ndarray:
    """Differentiation on rising Chebyshev–Lobatto points (Trefethen 2000, chapter 6)."""
    c = np.where(np.isin(np.arange(x.size), (0, x.size - 1)), 2.0, 1.0)
    c = c * (-1.0) ** np.arange(x.size)
    gap = np.subtract.outer(x, x) + np.eye(x.size)
    d = np.outer(c, 1.0 / c) / gap
    return d - np.diag(d.sum(axis=1))


def mode_attenuation(frequency: float, modes: Modes) -> np.ndarray:
    """Attenuation of each mode along the surface, dB/km, spreading left out."""
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    beta = k * np.sqrt(1.0 + modes.eigenvalue / k**2)
    return 2e4 / np.log(10.0) * beta.imag


def mode_sum(
    frequency: float, air: Air, modes: Modes, source: float, receiver: Any, distance: float
) -> np.ndarray:
    """Factor at receiver heights (n,), dB: ``√(2πx/k) |Σ ψ(z1) ψ(z2) e^{iλx/2k} / ∫ψ²|``."""
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    at = np.concatenate([[source], np.atleast_1d(receiver)])
    values = _upward(k, air, modes.eigenvalue, at)[2]
    phase = np.exp(0.5j * modes.eigenvalue * distance / k) / modes.norm
    total = np.sum(phase[:, None] * values[:, :1] * values[:, 1:], axis=0)
    return 20.0 * np.log10(np.sqrt(2.0 * np.pi * distance / k) * np.abs(total))


def spectral_field(
    frequency: float,
    air: Air,
    source: float,
    receiver: Any,
    distance: float,
    impedance: complex | None = None,
) -> np.ndarray:
    """Factor at receiver heights (n,) at one distance, dB, within sight or beyond.

    The Green's function integrated over the eigenvalue λ, just below the real axis and then up
    into the evanescent quarter, past no pole: no mode needs to be found. Waves four times as steep
    as any that matters are faded out smoothly.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    at = np.atleast_1d(np.asarray(receiver, dtype=float))
    unit = 2.0 * k / distance
    span = max(np.max(air.modified) - np.min(air.modified), 0.0) + air.above * 0.2 * distance / 1e3
    low = -max(
        16.0 * (k * (source + at.max()) / distance) ** 2, 4.0 * 2e-6 * k**2 * span, 400.0 * unit
    )
    bend = 2e-6 * k**2 * max(np.max(air.modified), 0.0) + 8.0 * unit
    s = np.arange(low, bend + 45.0 * unit, 0.12 * unit)
    soft = 2.0 * unit
    lam = s + 1j * (soft * np.logaddexp(0.0, (s - bend) / soft) - 0.5 * unit)
    along = 1.0 + 1j / (1.0 + np.exp(np.clip(-(s - bend) / soft, -600.0, 600.0)))
    fade = 0.5 * erfc(12.0 * (0.6 * low - s) / -low)
    weight = fade * along * np.exp(0.5j * lam * distance / k) * (s[1] - s[0])
    value, slope, up, _ = _upward(k, air, lam, np.maximum(at, source))
    wronskian = -value if impedance is None else slope + 1j * k * impedance * value
    total = np.empty(at.size, dtype=complex)
    for i, z in enumerate(at):
        below = _downward(k, air, lam, min(source, z), impedance)
        total[i] = np.sum(weight * below * up[:, i] / wronskian)
    if not np.all(np.isfinite(total)):
        raise ValueError("spectral_field: path too short for so deep a duct, Airy overflows")
    return 20.0 * np.log10(np.abs(total) * np.sqrt(distance / (2.0 * np.pi * k)))
