"""What sea and ground do to a radio wave that meets them: constants, impedance, reflection, waves.

Time factor e^{−iωt}: relative permittivity ``ε' + i ε''`` with losses positive. Rec. ITU-R P.527
(electrical characteristics of the surface of the Earth); the sea-water model is that of Meissner &
Wentz, IEEE Trans. Geosci. Remote Sens. 42 (2004) 1836–1849, which P.527 takes over; Miller, Brown
& Vegh, IEE Proc. H 131 (1984) 114–116, for rough sea. All coefficients from memory.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.field_steps import LIGHT_SPEED, STANDARD_INDEX_GRADIENT, field_scales

__all__ = [
    "GROUNDS",
    "Surface",
    "effective_impedance",
    "grazing_angles",
    "ground_permittivity",
    "reflection_coefficient",
    "rough_sea_height",
    "roughness_reduction",
    "sea_permittivity",
    "surface_impedance",
]

_GROUND_FREQUENCIES = (30e6, 0.3e9, 1e9, 3e9, 10e9, 40e9)

#: Kinds of ground: real part of ε and conductivity (S/m) at `_GROUND_FREQUENCIES`. Read off the
#: curves of Rec. ITU-R P.527-3 figure 1 (from memory, good to a fifth).
GROUNDS = {
    "wet": ((30, 30, 30, 29, 20, 7), (0.01, 0.04, 0.14, 0.9, 6, 15)),
    "medium dry": ((15, 15, 15, 15, 11, 5), (0.001, 0.012, 0.035, 0.2, 1.5, 6)),
    "very dry": ((3, 3, 3, 3, 3, 3), (1e-4, 1e-4, 1.5e-4, 2e-3, 0.02, 0.2)),
}

_VACUUM_PERMITTIVITY = 8.8541878128e-12  # F/m


class Surface(NamedTuple):
    """Relative permittivity, and standard deviation of the surface's height (m)."""

    permittivity: complex
    roughness: float = 0.0


def sea_permittivity(frequency: Any, temperature: Any = 288.15, salinity: Any = 35.0) -> Any:
    """Relative permittivity of sea water.

    Parameters
    ----------
    frequency : array_like
        Hz, up to 1e12.
    temperature : array_like
        K, 271…303.
    salinity : array_like
        g/kg, 0…40.

    Returns
    -------
    ndarray or complex
        ``ε' + i ε''``.
    """
    f = np.asarray(frequency, dtype=float) / 1e9
    t = np.asarray(temperature, dtype=float) - 273.15
    s = np.asarray(salinity, dtype=float)
    theta = 300.0 / (t + 273.15) - 1.0
    static = 77.66 + 103.3 * theta
    first = 0.0671 * static
    f1 = 20.20 - 146.4 * theta + 316.0 * theta**2
    f2 = 39.8 * f1
    fast = 3.52 - 7.52 * theta
    static = static * np.exp(-3.33330e-3 * s + 4.74868e-6 * s**2)
    first = first * np.exp(-6.28908e-3 * s + 1.76032e-4 * s**2 - 9.22144e-5 * t * s)
    shift = np.polyval([8.9795e-9, 3.5594e-7, 3.6764e-6, -7.9208e-5, 2.3232e-3], t)
    f1 = f1 * (1.0 + s * shift)
    f2 = f2 * (1.0 + s * (-1.99723e-2 + 1.81176e-4 * t))
    fast = fast * (1.0 + s * (-2.04265e-3 + 1.57883e-4 * t))
    conductivity = np.polyval([4.3047e-9, -2.991e-6, 4.738817e-4, 8.607e-2, 2.903602], t)
    ratio = s * (37.5109 + 5.45216 * s + 1.4409e-2 * s**2) / (1004.75 + 182.283 * s + s**2)
    a0 = (6.9431 + 3.2841 * s - 9.9486e-2 * s**2) / (84.850 + 69.024 * s + s**2)
    a1 = 49.843 - 0.2276 * s + 0.198e-2 * s**2
    conductivity = conductivity * ratio * (1.0 + a0 * (t - 15.0) / (a1 + t))
    loss = conductivity / (2e9 * np.pi * _VACUUM_PERMITTIVITY * f)
    debye = (static - first) / (1.0 - 1j * f / f1) + (first - fast) / (1.0 - 1j * f / f2)
    return (debye + fast + 1j * loss)[()]


def ground_permittivity(frequency: float, kind: str) -> complex:
    """Relative permittivity of ground.

    Parameters
    ----------
    frequency : float
        Hz, 30e6…40e9.
    kind : str
        One of `GROUNDS`.

    Returns
    -------
    complex

    Raises
    ------
    ValueError
        If the kind is unknown.
    """
    if kind not in GROUNDS:
        raise ValueError(f"ground_permittivity: {kind!r}; choose from {', '.join(GROUNDS)}")
    at = np.log(_GROUND_FREQUENCIES)
    real, conductivity = (np.log(row) for row in GROUNDS[kind])
    e = np.exp(np.interp(np.log(frequency), at, real))
    sigma = np.exp(np.interp(np.log(frequency), at, conductivity))
    return complex(e, sigma / (2.0 * np.pi * _VACUUM_PERMITTIVITY * frequency))


def surface_impedance(permittivity: complex, polarisation: str) -> complex:
    """Normalised impedance δ at grazing angles, in ``∂u/∂z = −i k δ u``.

    Parameters
    ----------
    permittivity : complex
        Relative.
    polarisation : {"horizontal", "vertical"}

    Returns
    -------
    complex
        ``√(ε − 1)``, over ε for vertical polarisation: Fresnel's coefficients where the square of
        the grazing angle is small against ``|ε − 1|``.
    """
    root = np.sqrt(complex(permittivity) - 1.0)
    return complex(root / permittivity if polarisation == "vertical" else root)


def reflection_coefficient(permittivity: complex, grazing: Any, polarisation: str) -> Any:
    """Fresnel's coefficient at a smooth surface.

    Parameters
    ----------
    permittivity : complex
        Relative.
    grazing : array_like
        Angle to the surface, rad.
    polarisation : {"horizontal", "vertical"}

    Returns
    -------
    ndarray or complex
    """
    sine = np.sin(grazing)
    root = np.sqrt(permittivity - np.cos(grazing) ** 2 + 0j)
    side = permittivity * sine if polarisation == "vertical" else sine
    return ((side - root) / (side + root))[()]


def roughness_reduction(frequency: Any, roughness: Any, grazing: Any) -> Any:
    """Factor by which waves on the sea weaken its mirror: ``e^{−s} I₀(s)``, ``s = 2 (k h sin ψ)²``.

    Parameters
    ----------
    frequency, roughness, grazing : array_like
        Hz; standard deviation of the height, m; grazing angle, rad.

    Returns
    -------
    ndarray or float
        0…1.

    References
    ----------
    Miller, Brown & Vegh (1984).
    """
    from scipy.special import i0e

    k = 2.0 * np.pi * np.asarray(frequency, dtype=float) / LIGHT_SPEED
    return i0e(2.0 * (k * np.asarray(roughness) * np.sin(grazing)) ** 2)[()]


def rough_sea_height(wind_speed: Any) -> Any:
    """Standard deviation of the height of a fully risen sea, ``0.0051 U²``.

    Parameters
    ----------
    wind_speed : array_like
        At 10 m, m/s.

    Returns
    -------
    ndarray or float
        m.

    References
    ----------
    Phillips's spectrum, as Miller et al. (1984) use it (from memory).
    """
    return 0.0051 * np.asarray(wind_speed, dtype=float) ** 2


def effective_impedance(surface: Surface, frequency: float, polarisation: str, grazing: Any) -> Any:
    """Impedance of the smooth surface that mirrors as the rough one does at a grazing angle.

    Parameters
    ----------
    surface : Surface
    frequency : float
        Hz.
    polarisation : {"horizontal", "vertical"}
    grazing : array_like
        rad, above 0.

    Returns
    -------
    ndarray or complex
        ``sin ψ (1 − R) / (1 + R)`` with R the reduced coefficient of `surface_impedance`.
    """
    smooth = surface_impedance(surface.permittivity, polarisation)
    sine = np.sin(grazing)
    weaker = roughness_reduction(frequency, surface.roughness, grazing)
    turn = weaker * (sine - smooth) / (sine + smooth)
    return sine * (1.0 - turn) / (1.0 + turn)


def grazing_angles(
    frequency: float, antenna_height: float, ranges: np.ndarray, duct_angle: float
) -> np.ndarray:
    """Angle at which waves meet the surface along a path, for its roughness.

    The ray from the antenna in standard air as far as the horizon; at least the critical angle of
    the strongest duct, at which trapped waves arrive, and that of the lowest wave over a sphere.
    Rounded to fiftieths so that few different surfaces result.

    Parameters
    ----------
    frequency, antenna_height : float
        Hz, m.
    ranges : ndarray
        m.
    duct_angle : float
        rad.

    Returns
    -------
    ndarray
        rad, not above 0.5.
    """
    x = np.maximum(ranges, antenna_height)
    direct = antenna_height / x - 0.5 * STANDARD_INDEX_GRADIENT * x
    # √2.338 of the scale angle is that of the lowest wave, from the first zero of Airy's function.
    floor = max(duct_angle, 1.529 * field_scales(frequency)[2])
    angle = np.clip(direct, floor, 0.5)
    return np.exp(np.round(50.0 * np.log(angle)) / 50.0)
