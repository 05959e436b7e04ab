"""Refractive index of moist air: radio refractivity and the optical phase index.

Radio: Rec. ITU-R P.453-14, Annex 1, the three-term form with dry-air pressure; the coefficients
of Rüeger (2002) ("best average", from memory) are selectable as a second opinion. Light: Ciddor
(1996), Applied Optics 35, 1566–1573, phase and group index, with the saturation vapour pressure
replaced by the vapour that the profile really holds; Birch & Downs (1993, 1994) as a check.

The radio formula is written once, as scalar arithmetic, and serves numpy arrays here and compiled
kernels elsewhere.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.moisture import (
    CELSIUS_OFFSET,
    EPSILON,
    vapour_pressure_from_specific_humidity,
)

__all__ = [
    "OPTICAL_WAVELENGTHS",
    "RADIO_COEFFICIENTS",
    "optical_refractivity",
    "optical_refractivity_birch_downs",
    "radio_refractivity",
    "refractivity_from_state",
]

#: Coefficients k1 (K/hPa), k2 (K/hPa), k3 (K²/hPa) of ``k1 Pd/T + k2 e/T + k3 e/T²``.
RADIO_COEFFICIENTS = {
    "itu_p453_14": (77.6, 72.0, 3.75e5),
    "rueger_2002": (77.6890, 71.2952, 3.75463e5),
}

#: Range of vacuum wavelengths (m) in which Ciddor's equations hold.
OPTICAL_WAVELENGTHS = (300e-9, 1700e-9)


def radio_refractivity(
    pressure: Any, temperature: Any, vapour_pressure: Any, coefficients: str = "itu_p453_14"
) -> Any:
    """Radio refractivity N of moist air.

    Parameters
    ----------
    pressure : array_like
        Total air pressure, Pa (the dry part is formed here).
    temperature : array_like
        Air temperature, K.
    vapour_pressure : array_like
        Water vapour pressure, Pa.
    coefficients : str
        Name in `RADIO_COEFFICIENTS`.

    Returns
    -------
    ndarray or float
        N, N-units. Stated accuracy of the recommendation 0.5 %, up to 100 GHz.

    Raises
    ------
    ValueError
        If `coefficients` is not a known name.

    References
    ----------
    Rec. ITU-R P.453-14, Annex 1, section 1; Rüeger, J. M. (2002), FIG XXII, Washington.
    """
    if coefficients not in RADIO_COEFFICIENTS:
        known = ", ".join(RADIO_COEFFICIENTS)
        raise ValueError(f"radio_refractivity: coefficients {coefficients!r}; choose from {known}")
    k1, k2, k3 = RADIO_COEFFICIENTS[coefficients]
    e_hpa = np.asarray(vapour_pressure, dtype=float) * 1e-2
    dry_hpa = np.asarray(pressure, dtype=float) * 1e-2 - e_hpa
    inverse = 1.0 / np.asarray(temperature, dtype=float)
    return inverse * (k1 * dry_hpa + e_hpa * (k2 + k3 * inverse))


def refractivity_from_state(pressure: float, temperature: float, specific_humidity: float) -> float:
    """Radio N (P.453-14) straight from pressure (Pa), temperature (K), specific humidity (kg/kg).

    Plain scalar arithmetic so that kernels can compile it; the same formula as
    `radio_refractivity` with `vapour_pressure_from_specific_humidity`, which the tests hold to
    rounding.
    """
    p_hpa = pressure * 1e-2
    e_hpa = specific_humidity * p_hpa / (EPSILON + (1.0 - EPSILON) * specific_humidity)
    inverse = 1.0 / temperature
    return inverse * (77.6 * (p_hpa - e_hpa) + e_hpa * (72.0 + 3.75e5 * inverse))


def optical_refractivity(
    pressure: Any,
    temperature: Any,
    specific_humidity: Any,
    wavelength: float = 550e-9,
    co2: float = 450e-6,
    group: bool = False,
) -> Any:
    """Optical refractivity (n − 1) 1e6 of moist air after Ciddor (1996).

    Parameters
    ----------
    pressure : array_like
        Total air pressure, Pa.
    temperature : array_like
        Air temperature, K. Equations checked for −40…+100 °C.
    specific_humidity : array_like
        Specific humidity, kg/kg.
    wavelength : float
        Vacuum wavelength, m, 300e-9…1700e-9.
    co2 : float
        Mole fraction of carbon dioxide.
    group : bool
        The group index ``n − λ dn/dλ`` (Ciddor & Hill 1999, Appl. Opt. 38, 1663–1667) in place
        of the phase index: for pulses and modulated light.

    Returns
    -------
    ndarray or float
        (n − 1) 1e6.

    Raises
    ------
    ValueError
        If the wavelength lies outside the range of the equations.

    References
    ----------
    Ciddor, P. E. (1996), Appl. Opt. 35, 1566–1573, eqs. 1–5 and appendices A, B.
    """
    _check_wavelength("optical_refractivity", wavelength)
    p = np.asarray(pressure, dtype=float)
    t_k = np.asarray(temperature, dtype=float)
    q = np.asarray(specific_humidity, dtype=float)
    # Mole fraction of vapour: the ratio e/p, both from the mass mixture (no enhancement factor
    # enters, since the vapour is given and not inferred from saturation).
    vapour_fraction = vapour_pressure_from_specific_humidity(q, 1.0)

    sigma2 = (1e-6 / wavelength) ** 2  # (µm^-1)^2
    dry_standard = 1e-8 * (
        5792105.0 * _term(238.0185, sigma2, group) + 167917.0 * _term(57.362, sigma2, group)
    )
    dry_standard *= 1.0 + 0.534e-6 * (co2 * 1e6 - 450.0)
    # n as a power series in σ: n − λ dn/dλ = n + σ dn/dσ multiplies each σ^2j by 2j + 1.
    weight = (1.0, 3.0, 5.0, 7.0) if group else (1.0, 1.0, 1.0, 1.0)
    vapour_standard = 1.022e-8 * (
        weight[0] * 295.235
        + weight[1] * 2.6422 * sigma2
        - weight[2] * 0.032380 * sigma2**2
        + weight[3] * 0.004028 * sigma2**3
    )

    gas_constant = 8.314510
    dry_molar_mass = 1e-3 * (28.9635 + 12.011 * (co2 - 400e-6))
    water_molar_mass = 0.018015
    dry_standard_density = (
        101325.0
        * dry_molar_mass
        / (_compressibility(288.15, 101325.0, 0.0) * gas_constant * 288.15)
    )
    vapour_standard_density = (
        1333.0 * water_molar_mass / (_compressibility(293.15, 1333.0, 1.0) * gas_constant * 293.15)
    )
    molar_density = p / (_compressibility(t_k, p, vapour_fraction) * gas_constant * t_k)
    dry_density = molar_density * dry_molar_mass * (1.0 - vapour_fraction)
    vapour_density = molar_density * water_molar_mass * vapour_fraction
    return 1e6 * (
        dry_density / dry_standard_density * dry_standard
        + vapour_density / vapour_standard_density * vapour_standard
    )


def optical_refractivity_birch_downs(
    pressure: Any, temperature: Any, specific_humidity: Any, wavelength: float = 550e-9
) -> Any:
    """Optical phase refractivity (n − 1) 1e6 after Birch & Downs: the second opinion.

    Parameters
    ----------
    pressure, temperature, specific_humidity, wavelength
        As in `optical_refractivity`; the equations are meant for laboratory air, 5…30 °C, 450
        µmol/mol CO2. Vapour enters by its partial pressure, with the temperature dependence of
        the water term that the NIST documentation adds.

    Returns
    -------
    ndarray or float
        (n − 1) 1e6.

    Raises
    ------
    ValueError
        If the wavelength lies outside 300…1700 nm.

    References
    ----------
    Birch, K. P. and Downs, M. J. (1993), Metrologia 30, 155–162; (1994) 31, 315–316; water term:
    Stone & Zimmermann, NIST Engineering Metrology Toolbox (from its documentation).
    """
    _check_wavelength("optical_refractivity_birch_downs", wavelength)
    p = np.asarray(pressure, dtype=float)
    t_k = np.asarray(temperature, dtype=float)
    t_c = t_k - CELSIUS_OFFSET
    e = vapour_pressure_from_specific_humidity(specific_humidity, p)
    sigma2 = (1e-6 / wavelength) ** 2
    standard = 1e-8 * (8342.54 + 2406147.0 / (130.0 - sigma2) + 15998.0 / (38.9 - sigma2))
    density = p / 96095.43 * (1.0 + 1e-8 * (0.601 - 0.00972 * t_c) * p) / (1.0 + 0.0036610 * t_c)
    water = 292.75 / t_k * (3.7345 - 0.0401 * sigma2) * 1e-10 * e
    return 1e6 * (standard * density - water)


def _check_wavelength(function: str, wavelength: float) -> None:
    low, high = OPTICAL_WAVELENGTHS
    if not low <= wavelength <= high:
        raise ValueError(
            f"{function}: wavelength {wavelength * 1e9:.0f} nm; the equations hold for "
            f"{low * 1e9:.0f} to {high * 1e9:.0f} nm"
        )


def _term(resonance: float, sigma2: float, group: bool) -> float:
    """Dispersion term 1/(k − σ²), or (k + σ²)/(k − σ²)² for the group index."""
    if group:
        return (resonance + sigma2) / (resonance - sigma2) ** 2
    return 1.0 / (resonance - sigma2)


def _compressibility(t_k: Any, p: Any, vapour_fraction: Any) -> Any:
    """Compressibility of moist air, Ciddor (1996) eq. 12 (the BIPM 1981/91 equation)."""
    t = t_k - CELSIUS_OFFSET
    x = vapour_fraction
    ratio = p / t_k
    return (
        1.0
        - ratio
        * (
            1.58123e-6
            - 2.9331e-8 * t
            + 1.1043e-10 * t**2
            + (5.707e-6 - 2.051e-8 * t) * x
            + (1.9898e-4 - 2.376e-6 * t) * x**2
        )
        + ratio**2 * (1.83e-11 - 0.765e-8 * x**2)
    )
