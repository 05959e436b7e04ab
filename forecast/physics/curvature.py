"""How strongly a layer bends rays: M, curvature, the effective Earth radius factor, layer classes.

Definitions: Rec. ITU-R P.453-14 section 4 and P.310-10 (modified refractivity, effective Earth
radius factor, trapping layer); Rec. ITU-R P.834-9 section 2 (ray curvature).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.schema import LAYER_CLASSES

__all__ = [
    "NORMAL_GRADIENT_BOUND",
    "STANDARD_GRADIENT",
    "classify_layers",
    "effective_earth_radius_factor",
    "modified_refractivity",
    "ray_curvature",
    "reference_refractivity",
]

#: Gradient below which a layer is super-refractive, N/km (k = 2; common practice, no source).
NORMAL_GRADIENT_BOUND = -79.0

#: Gradient of the standard radio atmosphere, k = 4/3 with a = 6371 km, N/km.
STANDARD_GRADIENT = -39.2403


def modified_refractivity(refractivity: Any, height: Any, earth_radius: Any) -> Any:
    """Modified refractivity ``M = N + 1e6 z / a`` (Rec. ITU-R P.453-14 section 4).

    Parameters
    ----------
    refractivity : array_like
        N, N-units.
    height : array_like
        Height above the ground or sea, m.
    earth_radius : array_like
        Local radius of the Earth, m.

    Returns
    -------
    ndarray or float
        M, M-units.
    """
    return np.asarray(refractivity) + 1e6 * np.asarray(height) / earth_radius


def ray_curvature(gradient_per_km: Any, refractivity: Any = 0.0, elevation: Any = 0.0) -> Any:
    """Curvature of a ray, 1/m, positive towards the Earth: ``κ = −(1/n)(dn/dz) cos θ``.

    Parameters
    ----------
    gradient_per_km : array_like
        dN/dz, N-units per km.
    refractivity : array_like
        N at the ray, N-units.
    elevation : array_like
        Elevation angle of the ray, rad.

    Returns
    -------
    ndarray or float
        Curvature, 1/m.
    """
    n = 1.0 + 1e-6 * np.asarray(refractivity, dtype=float)
    return -1e-9 * np.asarray(gradient_per_km, dtype=float) / n * np.cos(elevation)


def effective_earth_radius_factor(gradient_per_km: Any, earth_radius: Any) -> Any:
    """Effective Earth radius factor ``k = 1 / (1 + a dn/dz)``, signed.

    Parameters
    ----------
    gradient_per_km : array_like
        dN/dz, N-units per km.
    earth_radius : array_like
        Local radius, m.

    Returns
    -------
    ndarray or float
        k: infinite where rays follow the Earth, negative in trapping layers (rays bend more
        than the Earth does).
    """
    bend = 1.0 + 1e-9 * np.asarray(gradient_per_km, dtype=float) * earth_radius
    with np.errstate(divide="ignore"):
        return np.asarray(1.0 / bend)[()]


def classify_layers(gradient_per_km: Any, earth_radius: Any) -> Any:
    """Refraction class of each layer from dN/dz; codes of `forecast.schema.LAYER_CLASSES`.

    ============== =================================== ===============================
    class          dN/dz (N/km)                        source of the bound
    ============== =================================== ===============================
    trapping       below −1e9/a (dM/dz < 0)            ITU-R P.453-14 section 4
    super-refr.    −1e9/a … −79                        k ≈ 2; common practice, no source
    normal         −79 … 0                             common practice, no source
    sub-refr.      above 0                             common practice, no source
    ============== =================================== ===============================

    Parameters
    ----------
    gradient_per_km : array_like
        dN/dz, N-units per km.
    earth_radius : array_like
        Local radius, m.

    Returns
    -------
    ndarray of int8
        Class codes, −1 where the gradient is missing.
    """
    gradient = np.asarray(gradient_per_km, dtype=float)
    codes = np.full(np.broadcast(gradient, earth_radius).shape, -1, dtype=np.int8)
    codes[gradient > 0.0] = LAYER_CLASSES["sub_refractive"]
    codes[gradient <= 0.0] = LAYER_CLASSES["normal"]
    codes[gradient < NORMAL_GRADIENT_BOUND] = LAYER_CLASSES["super_refractive"]
    codes[1e6 / np.asarray(earth_radius) + 1e-3 * gradient < 0.0] = LAYER_CLASSES["trapping"]
    return codes


def reference_refractivity(height: Any) -> Any:
    """Refractivity of the ITU mean reference atmosphere, ``315 exp(−h / 7.35 km)``.

    Parameters
    ----------
    height : array_like
        Height, m.

    Returns
    -------
    ndarray or float
        N, N-units.

    References
    ----------
    Rec. ITU-R P.453-14 section 2.1 (constants from memory).
    """
    return 315.0 * np.exp(-np.asarray(height, dtype=float) / 7350.0)
