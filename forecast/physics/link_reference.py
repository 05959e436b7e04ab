"""What a radio path loses in standard air: free space, the bulge of the Earth, a knife edge.

Rec. ITU-R P.525-4 (free space), P.526-15 sections 3.1 and 4.1 (smooth Earth, knife edge), P.453-14
section 2.1 (mean reference atmosphere). Coefficients from memory; those of the smooth Earth are the
leading term of Fock's residue series and were derived anew (π/λ and Airy's first zero), and the
whole is tested against that series. For horizontal polarisation the
Recommendation's fit tells 0.1–0.8 dB more loss than the series; for vertical polarisation over the
sea below some 300 MHz it tells up to 4 dB too little where an antenna stands as high as the ground
wave's root is deep (k |δ| h ≈ 1), as its height gain has no phase.

Gases are left out: they absorb in standard air and in the air as it is nearly alike, so they drop
out of the excess over the reference. At 1013 hPa, 15 °C and 7.5 g/m³ they cost, by Rec. ITU-R
P.676-12 (computed with a library in the tests), to be added to a loss given in full:

========= ====== ====== ====== ====== ======
GHz       1      3      10     22.2   40
dB/km     0.005  0.008  0.014  0.19   0.13
========= ====== ====== ====== ====== ======
"""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.curvature import modified_refractivity, reference_refractivity
from forecast.physics.earth import MEAN_EARTH_RADIUS

__all__ = [
    "LIGHT_SPEED",
    "POLARISATIONS",
    "STANDARD_K",
    "effective_earth_radius",
    "free_space_loss",
    "knife_edge_loss",
    "knife_edge_parameter",
    "reference_modified_refractivity",
    "reference_path_loss",
    "smooth_earth_loss",
]

#: Speed of light in vacuum, m/s.
LIGHT_SPEED = 299792458.0

#: Polarisations a link may have.
POLARISATIONS = ("horizontal", "vertical")

#: Effective Earth radius factor of the standard radio atmosphere (Rec. ITU-R P.310-10).
STANDARD_K = 4.0 / 3.0

_LOWEST_FREQUENCY, _HIGHEST_FREQUENCY = 1e7, 1e12
_FLATTEST = 1e-13  # 1/m; the curvature a flat or hollow Earth is given, less than 1 m in 1,000 km


def free_space_loss(frequency: Any, distance: Any) -> Any:
    """Basic loss in free space, ``20 log10(4π d / λ)`` (Rec. ITU-R P.525-4 eq. 4).

    Parameters
    ----------
    frequency : array_like
        Hz, 10 MHz to 1 THz.
    distance : array_like
        m, above 0.

    Returns
    -------
    ndarray or float
        dB.

    Raises
    ------
    ValueError
        If a frequency or distance lies outside its range.
    """
    wavelength = _wavelength("free_space_loss", frequency)
    d = _positive("free_space_loss", "distance", distance)
    return 20.0 * np.log10(4.0 * np.pi * d / wavelength)


def reference_modified_refractivity(height: Any, earth_radius: Any = MEAN_EARTH_RADIUS) -> Any:
    """M of the ITU mean reference atmosphere, ``315 exp(−h / 7.35 km) + 1e6 h / a``.

    Parameters
    ----------
    height : array_like
        Above mean sea level, m, 0 or more.
    earth_radius : array_like
        Radius of the Earth along the path, m.

    Returns
    -------
    ndarray or float
        M-units (Rec. ITU-R P.453-14 section 2.1 and section 4; constants from memory).
    """
    return modified_refractivity(reference_refractivity(height), height, earth_radius)


def effective_earth_radius(k: Any, earth_radius: Any = MEAN_EARTH_RADIUS) -> Any:
    """Radius of the sphere over which rays are straight, ``k a``; infinite where k is negative.

    Parameters
    ----------
    k : array_like
        Effective Earth radius factor; not 0, NaN stays NaN.
    earth_radius : array_like
        m, above 0.

    Returns
    -------
    ndarray or float
        m. Rays that bend more than the Earth (k < 0) clear a flat surface all the more, so flat
        is the careful choice.

    Raises
    ------
    ValueError
        If a k is 0 or a radius not above 0.
    """
    factor = np.asarray(k, dtype=float)
    if np.any(factor == 0.0):
        raise ValueError("effective_earth_radius: k of 0; give a factor such as 4/3")
    radius = _positive("effective_earth_radius", "earth_radius", earth_radius)
    return np.where(factor < 0.0, np.inf, factor * radius)[()]


def smooth_earth_loss(
    frequency: Any,
    first_height: Any,
    second_height: Any,
    distance: Any,
    effective_radius: Any = STANDARD_K * MEAN_EARTH_RADIUS,
    polarisation: str = "horizontal",
    relative_permittivity: Any = 70.0,
    conductivity: Any = 5.0,
) -> Any:
    """Loss by diffraction over a smooth Earth, beyond what free space takes, at any distance.

    Parameters
    ----------
    frequency : array_like
        Hz, 10 MHz to 1 THz.
    first_height, second_height : array_like
        Heights of the antennas above the surface, m, above 0.
    distance : array_like
        Along the surface, m, above 0.
    effective_radius : array_like
        From `effective_earth_radius`, m; infinite is a flat Earth.
    polarisation : {"horizontal", "vertical"}
        The surface's constants matter little but for vertical polarisation below some 300 MHz
        over sea and 20 MHz over land.
    relative_permittivity, conductivity : array_like
        Of the surface, 1 and S/m; the defaults are those of the sea up to some 1 GHz.

    Returns
    -------
    ndarray or float
        dB, 0 where 0.6 of the first Fresnel zone is clear; NaN where an input is NaN. Where the
        surface is in sight the value is the Recommendation's interpolation: no lobes.

    Raises
    ------
    ValueError
        If an input lies outside its range or the polarisation is unknown.

    References
    ----------
    Rec. ITU-R P.526-15 sections 3.1.1 (beyond the horizon) and 3.1.2 (any distance above 10 MHz).
    """
    name = "smooth_earth_loss"
    if polarisation not in POLARISATIONS:
        raise ValueError(
            f"{name}: polarisation {polarisation!r}; choose from {', '.join(POLARISATIONS)}"
        )
    wavelength = _wavelength(name, frequency)
    h1 = _positive(name, "first_height", first_height)
    h2 = _positive(name, "second_height", second_height)
    d = _positive(name, "distance", distance)
    radius = _positive(name, "effective_radius", effective_radius, finite=False)
    epsilon = _positive(name, "relative_permittivity", relative_permittivity)
    sigma = np.asarray(conductivity, dtype=float)
    if np.any(sigma < 0.0):
        raise ValueError(f"{name}: conductivity {np.min(sigma):g} S/m; it must be 0 or more")
    ground = (epsilon, sigma, polarisation)

    bend = np.maximum(1.0 / radius, _FLATTEST)
    reach = np.sqrt(h1) + np.sqrt(h2)
    hidden = d * np.sqrt(0.5 * bend) >= reach
    # The sphere on which this path would just graze the horizon (section 3.1.2 step 3).
    grazing_bend = 2.0 * (reach / d) ** 2
    used = np.where(hidden, bend, grazing_bend)
    loss = np.maximum(-_beyond_horizon(wavelength, h1, h2, d, used, ground), 0.0)
    clearance, needed = _clearance(wavelength, h1, h2, d, bend)
    share = np.clip(1.0 - clearance / needed, 0.0, 1.0)
    return np.where(hidden, loss, share * loss)[()]


def reference_path_loss(
    frequency: Any,
    first_height: Any,
    second_height: Any,
    distance: Any,
    k: Any = STANDARD_K,
    earth_radius: Any = MEAN_EARTH_RADIUS,
    polarisation: str = "horizontal",
) -> Any:
    """Basic loss over a smooth sea in standard air: `free_space_loss` and `smooth_earth_loss`.

    Parameters
    ----------
    frequency, first_height, second_height, distance, polarisation
        As in `smooth_earth_loss`.
    k : array_like
        Effective Earth radius factor.
    earth_radius : array_like
        m.

    Returns
    -------
    ndarray or float
        dB, without gases.

    Raises
    ------
    ValueError
        As in `smooth_earth_loss` and `effective_earth_radius`.
    """
    radius = effective_earth_radius(k, earth_radius)
    bulge = smooth_earth_loss(
        frequency, first_height, second_height, distance, radius, polarisation
    )
    return free_space_loss(frequency, distance) + bulge


def knife_edge_parameter(
    height: Any, first_distance: Any, second_distance: Any, frequency: Any
) -> Any:
    """Dimensionless height of an edge, ``ν = h √(2 (1/d1 + 1/d2) / λ)``.

    Parameters
    ----------
    height : array_like
        Of the edge above the line between the antennas, m; negative where it stands below.
    first_distance, second_distance : array_like
        From the edge to the antennas, m, above 0.
    frequency : array_like
        Hz.

    Returns
    -------
    ndarray or float
        ν (Rec. ITU-R P.526-15 eq. 26); −√2 where the first Fresnel zone is just clear.

    Raises
    ------
    ValueError
        If a distance or frequency lies outside its range.
    """
    name = "knife_edge_parameter"
    d1 = _positive(name, "first_distance", first_distance)
    d2 = _positive(name, "second_distance", second_distance)
    return height * np.sqrt(2.0 * (1.0 / d1 + 1.0 / d2) / _wavelength(name, frequency))


def knife_edge_loss(nu: Any) -> Any:
    """Loss by a single knife edge, ``6.9 + 20 log10(√((ν − 0.1)² + 1) + ν − 0.1)``.

    Parameters
    ----------
    nu : array_like
        From `knife_edge_parameter`.

    Returns
    -------
    ndarray or float
        dB, 0 at and below ν = −0.78; within 0.15 dB of the Fresnel integral above (tested).

    References
    ----------
    Rec. ITU-R P.526-15 section 4.1 eq. 31.
    """
    v = np.asarray(nu, dtype=float) - 0.1
    loss = 6.9 + 20.0 * np.log10(np.sqrt(v**2 + 1.0) + v)
    return np.where(v <= -0.88, 0.0, loss)[()]


def _beyond_horizon(
    wavelength: Any, h1: Any, h2: Any, d: Any, bend: Any, ground: tuple[Any, Any, str]
) -> Any:
    """Field over free space, dB, negative in the shadow: section 3.1.1.2."""
    epsilon, sigma, polarisation = ground
    # 18 000 σ / f(MHz) is 60 λ σ; 0.36 (ae f)^(−1/3) in km and MHz is (2π ae / λ)^(−1/3).
    loss = 60.0 * wavelength * sigma
    admittance = (wavelength * bend / (2.0 * np.pi)) ** (1.0 / 3.0)
    admittance = admittance * ((epsilon - 1.0) ** 2 + loss**2) ** -0.25
    if polarisation == "vertical":
        admittance = admittance * np.sqrt(epsilon**2 + loss**2)
    square = admittance**2
    beta = (1.0 + 1.6 * square + 0.67 * square**2) / (1.0 + 4.5 * square + 1.53 * square**2)
    x = beta * d * (np.pi * bend**2 / wavelength) ** (1.0 / 3.0)
    unit = 2.0 * beta * (np.pi**2 * bend / wavelength**2) ** (1.0 / 3.0)
    far = 11.0 + 10.0 * np.log10(x) - 17.6 * x
    near = -20.0 * np.log10(x) - 5.6488 * x**1.425
    along = np.where(x >= 1.6, far, near)
    return along + sum(_height_gain(beta * unit * h, admittance) for h in (h1, h2))


def _height_gain(b: Any, admittance: Any) -> Any:
    above = np.maximum(b - 1.1, 0.9)
    high = 17.6 * np.sqrt(above) - 5.0 * np.log10(above) - 8.0
    low = 20.0 * np.log10(b + 0.1 * b**3)
    return np.maximum(np.where(b > 2.0, high, low), 2.0 + 20.0 * np.log10(admittance))


def _clearance(wavelength: Any, h1: Any, h2: Any, d: Any, bend: Any) -> tuple[Any, Any]:
    """Height of the line of sight over the point of reflection, and what it should be, m."""
    m = 0.25 * d**2 * bend / (h1 + h2)
    c = (h1 - h2) / (h1 + h2)
    # cos(π/3 + arccos(s)/3) = sin(arcsin(s)/3): no cancellation as the Earth becomes flat.
    s = np.clip(1.5 * c * np.sqrt(3.0 * m / (m + 1.0) ** 3), -1.0, 1.0)
    b = 2.0 * np.sqrt((m + 1.0) / (3.0 * m)) * np.sin(np.arcsin(s) / 3.0)
    d1 = 0.5 * d * (1.0 + b)
    d2 = d - d1
    height = ((h1 - 0.5 * d1**2 * bend) * d2 + (h2 - 0.5 * d2**2 * bend) * d1) / d
    return height, 0.552 * np.sqrt(d1 * d2 * wavelength / d)


def _wavelength(name: str, frequency: Any) -> Any:
    f = np.asarray(frequency, dtype=float)
    if np.any((f < _LOWEST_FREQUENCY) | (f > _HIGHEST_FREQUENCY)):
        raise ValueError(
            f"{name}: frequency {np.min(f) / 1e6:g} to {np.max(f) / 1e6:g} MHz; it must lie "
            "between 10 MHz and 1 THz, in Hz"
        )
    return LIGHT_SPEED / f


def _positive(name: str, what: str, value: Any, finite: bool = True) -> Any:
    found = np.asarray(value, dtype=float)
    if np.any(found <= 0.0) or (finite and np.any(np.isinf(found))):
        raise ValueError(
            f"{name}: {what} {np.min(found):g} to {np.max(found):g}; it must be above 0"
            + (" and finite" if finite else "")
        )
    return found
