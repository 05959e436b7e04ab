"""How much water vapour the air holds: saturation and conversions between humidity measures.

Saturation follows Recommendation ITU-R P.453-14, Annex 1, section 1 (saturation vapour pressure
and enhancement factor; the constants are those of P.453-13 as well). An older transcription of
the enhancement factor prints 0.00320 for 0.0320: ten times too small, 0.59 N at 30 °C saturated.

Relative humidity is over liquid water at every temperature unless a phase is given, because that
is what radiosondes report below 0 °C too (WMO-No. 8, Part I, chapter 4).
"""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = [
    "CELSIUS_OFFSET",
    "EPSILON",
    "relative_humidity",
    "saturation_vapour_pressure",
    "specific_humidity_from_dew_point",
    "specific_humidity_from_mixing_ratio",
    "specific_humidity_from_relative_humidity",
    "specific_humidity_from_vapour_pressure",
    "vapour_pressure_from_specific_humidity",
]

#: Zero of the Celsius scale, K (not the triple point, 273.16 K).
CELSIUS_OFFSET = 273.15

#: Ratio of the molar masses of water (18.01528 g/mol) and dry air (28.9644 g/mol).
EPSILON = 18.01528 / 28.9644

# P.453-14 Annex 1: a (hPa), b, c (degC), d (degC); enhancement factor constants.
_SATURATION = {
    "water": (6.1121, 18.678, 257.14, 234.5, 7.2, 0.0320, 5.9e-6),
    "ice": (6.1115, 23.036, 279.82, 333.7, 2.2, 0.0383, 6.4e-6),
}


def saturation_vapour_pressure(temperature: Any, pressure: Any, phase: str = "water") -> Any:
    """Saturation vapour pressure of moist air, enhancement factor included.

    ``e_s = EF a exp((b - t/d) t / (t + c))``,
    ``EF = 1 + 1e-4 (e0 + P (e1 + e2 t^2))``, t in degC and P in hPa.

    Parameters
    ----------
    temperature : array_like
        Air temperature, K. Valid −40…+50 °C over water, −80…0 °C over ice.
    pressure : array_like
        Total air pressure, Pa; broadcasts against `temperature`.
    phase : {"water", "ice"}
        Phase that the vapour is in balance with.

    Returns
    -------
    ndarray or float
        Saturation vapour pressure, Pa.

    Raises
    ------
    ValueError
        If `phase` is not one of the two.

    References
    ----------
    Rec. ITU-R P.453-14, Annex 1, section 1.
    """
    try:
        a, b, c, d, e0, e1, e2 = _SATURATION[phase]
    except KeyError:
        raise ValueError(
            f"saturation_vapour_pressure: phase is {phase!r}; choose 'water' or 'ice'"
        ) from None
    t_c = np.asarray(temperature, dtype=float) - CELSIUS_OFFSET
    p_hpa = np.asarray(pressure, dtype=float) * 1e-2
    enhancement = 1.0 + 1e-4 * (e0 + p_hpa * (e1 + e2 * t_c * t_c))
    return 100.0 * a * enhancement * np.exp((b - t_c / d) * t_c / (t_c + c))


def vapour_pressure_from_specific_humidity(specific_humidity: Any, pressure: Any) -> Any:
    """Vapour pressure (Pa) from specific humidity (kg/kg) and total pressure (Pa).

    ``e = q p / (ε + (1 − ε) q)``, exact for a mixture of ideal gases.
    """
    q = np.asarray(specific_humidity, dtype=float)
    return q * pressure / (EPSILON + (1.0 - EPSILON) * q)


def specific_humidity_from_vapour_pressure(vapour_pressure: Any, pressure: Any) -> Any:
    """Specific humidity (kg/kg) from vapour pressure (Pa) and total pressure (Pa)."""
    e = np.asarray(vapour_pressure, dtype=float)
    return EPSILON * e / (pressure - (1.0 - EPSILON) * e)


def specific_humidity_from_relative_humidity(
    relative_humidity: Any, temperature: Any, pressure: Any, phase: str = "water"
) -> Any:
    """Specific humidity (kg/kg) from relative humidity (1), temperature (K), pressure (Pa)."""
    e = np.asarray(relative_humidity, dtype=float) * saturation_vapour_pressure(
        temperature, pressure, phase
    )
    return specific_humidity_from_vapour_pressure(e, pressure)


def specific_humidity_from_dew_point(dew_point: Any, pressure: Any) -> Any:
    """Specific humidity (kg/kg) from dew point (K, over water) and total pressure (Pa)."""
    return specific_humidity_from_vapour_pressure(
        saturation_vapour_pressure(dew_point, pressure), pressure
    )


def specific_humidity_from_mixing_ratio(mixing_ratio: Any) -> Any:
    """Specific humidity (kg/kg) from humidity mixing ratio (kg/kg dry air)."""
    w = np.asarray(mixing_ratio, dtype=float)
    return w / (1.0 + w)


def relative_humidity(
    specific_humidity: Any, temperature: Any, pressure: Any, phase: str = "water"
) -> Any:
    """Relative humidity (1) from specific humidity (kg/kg), temperature (K), pressure (Pa)."""
    e = vapour_pressure_from_specific_humidity(specific_humidity, pressure)
    return e / saturation_vapour_pressure(temperature, pressure, phase)
