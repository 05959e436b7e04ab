"""Fields over a surface by other means than stepping: residue series, images, edges.

Time factor e^{−iωt}, relative permittivity ``ε' + i 60 λ σ``; factors are 20 log10 of field over
free-space field at the same distance, dB. Sources: Fock, Electromagnetic Diffraction and
Propagation Problems (1965) chapters 10–12, for the residue series; Kerr, Propagation of Short
Radio Waves (1951) chapter 5, for the divergence factor; Born & Wolf section 8.7 for the half-plane.
From memory, each checked in `tests.physics.test_field_references` by records or another method.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.optimize import brentq
from scipy.special import ai_zeros, airy, fresnel

__all__ = [
    "LIGHT_SPEED",
    "STANDARD_RADIUS",
    "earth_modes",
    "knife_edge",
    "knife_edge_on_ground",
    "reflection_coefficient",
    "residue_series",
    "surface_impedance",
    "two_ray_flat",
    "two_ray_slope",
    "two_ray_sphere",
    "upward_airy",
]

LIGHT_SPEED = 299792458.0  # m/s, exact
STANDARD_RADIUS = 4.0 / 3.0 * 6371e3  # m
_TURN = np.exp(2j * np.pi / 3.0)


def surface_impedance(permittivity: complex, polarisation: str) -> complex:
    """Normalised grazing impedance δ in ``u_z = −i k δ u``, for e^{−iωt}.

    Grazing form of Fresnel's coefficients: √(ε−1)/ε vertical, √(ε−1) horizontal.
    """
    root = np.sqrt(complex(permittivity) - 1.0)
    return complex(root / permittivity if polarisation == "vertical" else root)


def reflection_coefficient(permittivity: complex | None, grazing: Any, polarisation: str) -> Any:
    """Fresnel's coefficient at a grazing angle, rad; None is a perfect conductor."""
    if permittivity is None:
        return np.full(np.shape(grazing), 1.0 if polarisation == "vertical" else -1.0)[()]
    sine = np.sin(grazing)
    root = np.sqrt(permittivity - np.cos(grazing) ** 2 + 0j)
    side = permittivity * sine if polarisation == "vertical" else sine
    return (side - root) / (side + root)


def upward_airy(t: Any) -> tuple[Any, Any]:
    """Airy function of an upward wave and its derivative: w1 / (2√π e^{iπ/6}) = Ai(t e^{2πi/3})."""
    a, da, _, _ = airy(_TURN * t)
    return a, _TURN * da


def earth_modes(count: int, q: complex | None = None) -> np.ndarray:
    """Roots τ of ``w1'(τ) = q w1(τ)``, by Newton along the way from q = ∞ or q = 0.

    ``q = i (k a / 2)^{1/3} δ``; None is the perfectly conducting, horizontally polarised sphere,
    whose roots are the zeros of Ai turned by 60°.
    """
    zeros, slopes = ai_zeros(count)[:2]
    if q is None:
        return -zeros * np.exp(1j * np.pi / 3.0)
    far = abs(q) > 1.0  # nearer to q = ∞
    tau = -(zeros if far else slopes) * np.exp(1j * np.pi / 3.0)
    goal = 1.0 / q if far else q
    for share in np.linspace(0.0, 1.0, 200)[1:]:
        for _ in range(3):
            f, df = upward_airy(tau)
            p, r = (share * goal, 1.0) if far else (1.0, share * goal)  # p w' − r w = 0
            tau = tau - (p * df - r * f) / (p * tau * f - r * df)
    return tau


def residue_series(
    frequency: float,
    source: float,
    receiver: Any,
    distance: Any,
    effective_radius: float = STANDARD_RADIUS,
    impedance: complex | None = None,
    count: int = 60,
) -> Any:
    """Factor over a smooth sphere beyond the horizon, dB: Fock's residue series.

    ``F = 2√(πX) |Σ e^{iXτ} / (τ − q²) · w(τ − Y1)/w(τ) · w(τ − Y2)/w(τ)|``. ``impedance`` is
    `surface_impedance`; None is the perfectly conducting sphere, horizontal polarisation. Heights
    and distance along the surface broadcast, m.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    m = (k * effective_radius / 2.0) ** (1.0 / 3.0)
    q = None if impedance is None else 1j * m * impedance
    tau = earth_modes(count, q)
    x = m * np.asarray(distance, dtype=float)[..., None] / effective_radius
    y1 = k * source / m
    y2 = k * np.asarray(receiver, dtype=float)[..., None] / m
    value, slope = upward_airy(tau)
    weight = slope**2 if q is None else (q**2 - tau) * value**2
    terms = np.exp(1j * x * tau) * upward_airy(tau - y1)[0] * upward_airy(tau - y2)[0] / weight
    return 20.0 * np.log10(2.0 * np.sqrt(np.pi * x[..., 0]) * np.abs(terms.sum(axis=-1)))


def two_ray_flat(
    frequency: float,
    source: Any,
    receiver: Any,
    distance: Any,
    permittivity: complex | None = None,
    polarisation: str = "horizontal",
) -> Any:
    """Factor over flat ground in straight rays, dB: direct ray and mirror image, exact lengths."""
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    above = np.asarray(source, dtype=float) + receiver
    direct = np.hypot(distance, np.asarray(source, dtype=float) - receiver)
    mirrored = np.hypot(distance, above)
    turn = reflection_coefficient(permittivity, np.arctan2(above, distance), polarisation)
    image = turn * direct / mirrored * np.exp(1j * k * (mirrored - direct))
    return 20.0 * np.log10(np.abs(1.0 + image))


def two_ray_slope(
    frequency: float,
    source: float,
    receiver: Any,
    distance: float,
    slope: float,
    permittivity: complex | None = None,
    polarisation: str = "horizontal",
) -> Any:
    """As `two_ray_flat` over ground that rises by ``slope`` (m per m) from the source on.

    Heights are above the ground below each antenna, vertically; distance is horizontal. The
    picture is turned so that the slope lies level.
    """
    angle = np.arctan(slope)
    rise = slope * distance + np.asarray(receiver, dtype=float) - source
    along = distance * np.cos(angle) + rise * np.sin(angle)
    flat = np.cos(angle)
    return two_ray_flat(
        frequency, source * flat, receiver * flat, along, permittivity, polarisation
    )


def two_ray_sphere(
    frequency: float,
    source: float,
    receiver: float,
    distance: float,
    effective_radius: float = STANDARD_RADIUS,
    permittivity: complex | None = None,
    polarisation: str = "horizontal",
) -> tuple[float, float]:
    """Factor well within sight over a smooth sphere, dB, and the grazing angle, rad.

    Rays of geometrical optics: point of reflection by equal angles, divergence factor
    ``(1 + 2 s1 s2 / (a (s1 + s2) sin ψ))^{−1/2}``. Good while ψ ≫ (λ / 2πa)^{1/3}.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    a = effective_radius
    whole = distance / a

    def leg(height: float, angle: float) -> tuple[float, float]:
        # Haversines: the law of cosines loses millimetres here.
        chord = 4.0 * a * (a + height) * np.sin(0.5 * angle) ** 2
        length = float(np.sqrt(height**2 + chord))
        return length, height / length * (1.0 + 0.5 * height / a) - 0.5 * length / a

    def uneven(angle: float) -> float:
        return leg(source, angle)[1] - leg(receiver, whole - angle)[1]

    angle = brentq(uneven, 0.0, whole, xtol=1e-16, rtol=1e-14)
    (s1, sine), (s2, _) = leg(source, angle), leg(receiver, whole - angle)
    chord = 4.0 * (a + source) * (a + receiver) * np.sin(0.5 * whole) ** 2
    direct = np.sqrt((source - receiver) ** 2 + chord)
    spread = 1.0 / np.sqrt(1.0 + 2.0 * s1 * s2 / (a * (s1 + s2) * sine))
    turn = reflection_coefficient(permittivity, np.arcsin(sine), polarisation)
    image = turn * spread * direct / (s1 + s2) * np.exp(1j * k * (s1 + s2 - direct))
    return float(20.0 * np.log10(abs(1.0 + image))), float(np.arcsin(sine))


def _beyond(nu: Any) -> Any:
    """Field behind a half-plane over that without it: ``√(−i/2) ∫_ν^∞ e^{iπt²/2} dt``."""
    sine, cosine = fresnel(nu)
    return np.sqrt(-0.5j) * ((0.5 - cosine) + 1j * (0.5 - sine))


def knife_edge(nu: Any) -> Any:
    """Loss behind a knife edge in empty space, dB, ν positive where the edge stands in the way."""
    return -20.0 * np.log10(np.abs(_beyond(nu)))


def knife_edge_on_ground(
    frequency: float, source: float, receiver: Any, edge: float, to_edge: float, distance: float
) -> Any:
    """Factor behind an absorbing knife edge that stands on flat, perfectly conducting ground, dB.

    Horizontal polarisation, narrow-angle waves: the half-plane's integral for source, receiver
    and their images, four in all, each with its own ν. Heights and distances m.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    z2 = np.asarray(receiver, dtype=float)
    scale = np.sqrt(k / np.pi * distance / (to_edge * (distance - to_edge)))
    total = np.zeros(np.shape(z2), dtype=complex)
    for up in (1.0, -1.0):
        for down in (1.0, -1.0):
            line = (up * source * (distance - to_edge) + down * z2 * to_edge) / distance
            path = np.exp(0.5j * k * (up * source - down * z2) ** 2 / distance)
            total += up * down * path * _beyond(scale * (edge - line))
    return 20.0 * np.log10(np.abs(total))
