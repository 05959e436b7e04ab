"""Refractive index of moist air: radio refractivity and the optical phase index.

Radio: Rec. ITU-R P.453-14, Annex 1, the three-term form with dry-air pressure; the coefficients
of Rüeger (2002) ("best average", from memory) are selectable as a second opinion. Light: Ciddor
(1996), Applied Optics 35, 1566–1573, phase index, with the saturation vapour pressure replaced by
the vapour that the profile really holds.

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
) -> Any:
    """Optical phase refractivity (n − 1) 1e6 of moist air after Ciddor (1996).

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
    low, high = OPTICAL_WAVELENGTHS
    if not low <= wavelength <= high:
        raise ValueError(
            f"optical_refractivity: wavelength {wavelength * 1e9:.0f} nm; Ciddor's equations "
            f"hold for {low * 1e9:.0f} to {high * 1e9:.0f} nm"
        )
    p = np.asarray(pressure, dtype=float)
    t_k = np.asarray(temperature, dtype=float)
    q = np.asarray(specific_humidity, dtype=float)
    # Mole fraction of vapour: the ratio e/p, both from the mass mixture (no enhancement factor
    # enters, since the vapour is given and not inferred from saturation).
    vapour_fraction = vapour_pressure_from_specific_humidity(q, 1.0)

    sigma2 = (1e-6 / wavelength) ** 2  # (µm^-1)^2
    dry_standard = 1e-8 * (5792105.0 / (238.0185 - sigma2) + 167917.0 / (57.362 - sigma2))
    dry_standard *= 1.0 + 0.534e-6 * (co2 * 1e6 - 450.0)
    vapour_standard = 1.022e-8 * (
        295.235 + 2.6422 * sigma2 - 0.032380 * sigma2**2 + 0.004028 * sigma2**3
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
