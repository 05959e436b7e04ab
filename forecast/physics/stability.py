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

__all__ = ["STABLE_FUNCTIONS", "psi_heat", "psi_momentum"]

#: Functions for stable stratification, by name.
STABLE_FUNCTIONS = {"beljaars_holtslag_1991": 0, "dyer_1974": 1, "grachev_2007": 2}


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
