#!/usr/bin/env python3
"""By how much the two formulas of air's optical index differ: Ciddor against Birch & Downs.

Prints the Markdown table that the documentation page about trust near the ground quotes.
"""

from __future__ import annotations

import sys

import numpy as np

from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.refractive_index import (
    optical_refractivity,
    optical_refractivity_birch_downs,
)

PRESSURE = 101325.0  # Pa
TEMPERATURES = (-20.0, 0.0, 20.0, 30.0, 40.0)  # °C
HUMIDITIES = (0.0, 0.5, 1.0)
WAVELENGTHS = (300.0, 405.0, 550.0, 633.0, 850.0, 1064.0, 1550.0, 1700.0)  # nm


def differences(
    temperature: float, humidity: float, wavelengths: tuple[float, ...] = WAVELENGTHS
) -> np.ndarray:
    """Ciddor less Birch & Downs, phase index, in 1e-8 of n.

    Parameters
    ----------
    temperature : float
        °C.
    humidity : float
        Relative humidity over water, 0…1, made into vapour by Rec. ITU-R P.453-14.
    wavelengths : tuple of float
        nm in vacuum, 300…1700.

    Returns
    -------
    ndarray
        (wavelength,).
    """
    t = temperature + 273.15
    q = specific_humidity_from_relative_humidity(humidity, t, PRESSURE)
    return np.array(
        [
            100.0
            * float(
                optical_refractivity(PRESSURE, t, q, 1e-9 * w)
                - optical_refractivity_birch_downs(PRESSURE, t, q, 1e-9 * w)
            )
            for w in wavelengths
        ]
    )


def table() -> str:
    """Return the table: a row for each temperature and humidity, a column for each wavelength."""
    head = ["air, 1013.25 hPa", *(f"{w:.0f} nm" for w in WAVELENGTHS)]
    rows = [head, ["---"] + ["---:"] * len(WAVELENGTHS)]
    for t in TEMPERATURES:
        for rh in HUMIDITIES:
            name = f"{t:.0f} °C, {100 * rh:.0f} %".replace("-", "−")
            cells = [f"{d:+.1f}".replace("-", "−") for d in differences(t, rh)]
            rows.append([name, *cells])
    return "\n".join(f"| {' | '.join(row)} |" for row in rows)


if __name__ == "__main__":
    sys.stdout.write(table() + "\n")
