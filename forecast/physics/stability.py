"""Integrated stability functions ψ of the surface layer, for momentum and heat.

Unstable: the blend of Kansas and free-convection forms of COARE (Fairall et al. 1996, J. Geophys.
Res. 101, 3747–3764). Stable: here published functions part ways, ψ_h(1) from −5.0 to −2.9, so the
choice is an argument: ``beljaars_holtslag_1991`` (COARE's own form, J. Appl. Meteor. 30, 327–341),
``dyer_1974`` (Boundary-Layer Meteor. 7, 363–372, −5 ζ) and ``grachev_2007`` (Boundary-Layer
Meteor. 124, 315–333).
"""

from __future__ import annotations

import numpy as np

from forecast.physics.compiled import njit

__all__ = [
    "LARGEST_ZETA",
    "STABLE_FUNCTIONS",
    "psi_heat",
    "psi_momentum",
    "psi_unstable",
    "unstable_table",
]

#: Functions for stable stratification, by name.
STABLE_FUNCTIONS = {"beljaars_holtslag_1991": 0, "dyer_1974": 1, "grachev_2007": 2}

#: Largest z/L for which each has been put to the test of measurements, by code. Beljaars &
#: Holtslag: Cabauw nights to about 10; Dyer: the linear law to about 1 (Högström 1988,
#: Boundary-Layer Meteor. 42, 55–78, finds it bending from 0.5); Grachev et al.: SHEBA ice camp to
#: about 100. All from memory.
LARGEST_ZETA = (10.0, 1.0, 100.0)

_TABLE_END = -20.0  # ζ at which the table of the unstable functions ends
_TABLE_STEPS = 512


@njit(cache=True, nogil=True, error_model="numpy")
def psi_heat(zeta, code):  # pragma: no cover - compiled
    """Integrated stability function for heat; unstable as COARE 3.5 (Fairall et al. 1996)."""
    if zeta >= 0.0:
        if code == 1:
            return -5.0 * zeta
        if code == 2:
            # Grachev et al. 2007, eq. 13: a_h = b_h = 5, c_h = 3.
            b = np.sqrt(5.0)
            return -2.5 * np.log(1.0 + 3.0 * zeta + zeta * zeta) + (-5.0 / b + 7.5 / b) * (
                np.log((2.0 * zeta + 3.0 - b) / (2.0 * zeta + 3.0 + b))
                - np.log((3.0 - b) / (3.0 + b))
            )
        decay = np.exp(-min(50.0, 0.35 * zeta))
        tail = 2.0 / 3.0 * ((zeta - 5.0 / 0.35) * decay + 5.0 / 0.35)
        return -((1.0 + 2.0 / 3.0 * zeta) ** 1.5 + tail - 1.0)
    x = np.sqrt(1.0 - 15.0 * zeta)
    kansas = 2.0 * np.log(0.5 * (1.0 + x))
    return _blend(zeta, kansas, (1.0 - 34.15 * zeta) ** (1.0 / 3.0))


@njit(cache=True, nogil=True, error_model="numpy")
def psi_momentum(zeta, code):  # pragma: no cover - compiled
    """Integrated stability function for momentum."""
    if zeta >= 0.0:
        if code == 1:
            return -5.0 * zeta
        if code == 2:
            # Grachev et al. 2007, eq. 12: a_m = 5, b_m = a_m / 6.5.
            a, b = 5.0, 5.0 / 6.5
            root = ((1.0 - b) / b) ** (1.0 / 3.0)
            x = (1.0 + zeta) ** (1.0 / 3.0)
            s = np.sqrt(3.0)
            return -3.0 * a / b * (x - 1.0) + a * root / (2.0 * b) * (
                2.0 * np.log((x + root) / (1.0 + root))
                - np.log((x * x - x * root + root * root) / (1.0 - root + root * root))
                + 2.0
                * s
                * (np.arctan((2.0 * x - root) / (s * root)) - np.arctan((2.0 - root) / (s * root)))
            )
        decay = np.exp(-min(50.0, 0.35 * zeta))
        return -(0.7 * zeta + 0.75 * (zeta - 5.0 / 0.35) * decay + 0.75 * 5.0 / 0.35)
    x = (1.0 - 15.0 * zeta) ** 0.25
    kansas = (
        2.0 * np.log(0.5 * (1.0 + x))
        + np.log(0.5 * (1.0 + x * x))
        - 2.0 * np.arctan(x)
        + 2.0 * np.arctan(1.0)
    )
    return _blend(zeta, kansas, (1.0 - 10.15 * zeta) ** (1.0 / 3.0))


@njit(cache=True, nogil=True, error_model="numpy")
def _blend(zeta, kansas, y):  # pragma: no cover - compiled
    """Kansas form near neutral, free-convection form far from it."""
    s = np.sqrt(3.0)
    convective = (
        1.5 * np.log((1.0 + y + y * y) / 3.0) - s * np.arctan((1.0 + 2.0 * y) / s) + np.pi / s
    )
    f = zeta * zeta / (1.0 + zeta * zeta)
    return (1.0 - f) * kansas + f * convective


@njit(cache=True, nogil=True, error_model="numpy")
def unstable_table():  # pragma: no cover - compiled
    """ψ_m and ψ_h of unstable air as cubics, for `psi_unstable`.

    Returns
    -------
    ndarray
        (step, 2, 4) coefficients over s = ζ/(ζ − 1), even steps from 0 to ζ = −20.
    """
    end = _TABLE_END / (_TABLE_END - 1.0)
    h = end / _TABLE_STEPS
    table = np.empty((_TABLE_STEPS, 2, 4))
    for i in range(_TABLE_STEPS):
        for k in range(2):
            # The cubic through four evenly spaced points of the step.
            f = np.empty(4)
            for j in range(4):
                s = (i + j / 3.0) * h
                zeta = -s / (1.0 - s)
                f[j] = psi_heat(zeta, 0) if k else psi_momentum(zeta, 0)
            table[i, k, 0] = f[0]
            table[i, k, 1] = -5.5 * f[0] + 9.0 * f[1] - 4.5 * f[2] + f[3]
            table[i, k, 2] = 9.0 * f[0] - 22.5 * f[1] + 18.0 * f[2] - 4.5 * f[3]
            table[i, k, 3] = -4.5 * f[0] + 13.5 * f[1] - 13.5 * f[2] + 4.5 * f[3]
    return table


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def psi_unstable(zeta, heat, table):  # pragma: no cover - compiled
    """ψ_h (`heat` 1) or ψ_m (0) for ζ ≤ 0 from `unstable_table`, within 1e-7; exact below −20."""
    if zeta <= _TABLE_END:
        return psi_heat(zeta, 0) if heat else psi_momentum(zeta, 0)
    at = zeta / (zeta - 1.0) * (_TABLE_STEPS / (_TABLE_END / (_TABLE_END - 1.0)))
    i = min(int(at), _TABLE_STEPS - 1)
    x = at - i
    c = table[i, heat]
    return c[0] + x * (c[1] + x * (c[2] + x * c[3]))
