"""The lowest metres that soundings miss: temperature and humidity between surface and first level.

Monin–Obukhov similarity: ``T(z) = T_s + (T*/κ) [ln(z/z_0t) − ψ_h(z/L)] − Γ z`` and the same for
specific humidity without Γ. Over sea the scales come from the bulk algorithm COARE 3.5 (Fairall et
al. 2003, J. Climate 16, 571–591; Charnock relation of Edson et al. 2013, J. Phys. Oceanogr. 43,
1589–1610): smooth-flow and Charnock roughness, scalar roughness from the roughness Reynolds
number, gustiness in free convection, surface humidity 0.98 of saturation over salt water. The cool
skin is left out: the surface temperature is taken as that of the skin. Over land roughness lengths
and skin temperature are given.

As in COARE, ψ(z_0/L) is neglected and u* includes gustiness.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.moisture import (
    CELSIUS_OFFSET,
    saturation_vapour_pressure,
    specific_humidity_from_vapour_pressure,
)
from forecast.physics.stability import STABLE_FUNCTIONS, psi_heat, psi_momentum

__all__ = [
    "SurfaceLayer",
    "solve_land",
    "solve_sea",
    "surface_profile",
]

KARMAN = 0.4
GRAVITY = 9.80665  # m/s²
ADIABATIC = 0.0098  # K/m, as COARE uses it
_GUST_FACTOR = 1.2  # β of the convective gustiness
_LEAST_GUST = 0.2  # m/s
_MOST_ITERATIONS = 60
_TOLERANCE = 1e-5  # relative, on the three scales
_LARGEST_ZETA = 50.0  # beyond, turbulence has ceased and similarity with it


class SurfaceLayer(NamedTuple):
    """Scales of the surface layer, one value per column.

    ``friction_velocity`` m/s, ``temperature_scale`` K (positive: the surface cools the air),
    ``humidity_scale`` kg/kg, ``obukhov_length`` m, ``roughness`` and ``scalar_roughness`` m,
    ``surface_temperature`` K, ``surface_humidity`` kg/kg; ``converged`` is False where the
    iteration did not settle, ``iterations`` how many it took, ``stable_function`` its code.
    """

    friction_velocity: np.ndarray
    temperature_scale: np.ndarray
    humidity_scale: np.ndarray
    obukhov_length: np.ndarray
    roughness: np.ndarray
    scalar_roughness: np.ndarray
    surface_temperature: np.ndarray
    surface_humidity: np.ndarray
    converged: np.ndarray
    iterations: np.ndarray
    stable_function: np.ndarray


def solve_sea(
    wind_speed: Any,
    air_temperature: Any,
    specific_humidity: Any,
    pressure: Any,
    sea_surface_temperature: Any,
    wind_height: Any = 10.0,
    air_height: Any = 2.0,
    boundary_layer_height: Any = 600.0,
    stable_function: str = "beljaars_holtslag_1991",
) -> SurfaceLayer:
    """Surface-layer scales over sea by COARE 3.5.

    Parameters
    ----------
    wind_speed : array_like
        Wind speed relative to the water at `wind_height`, m/s; zero is allowed (gustiness).
    air_temperature, specific_humidity : array_like
        K and kg/kg at `air_height`.
    pressure : array_like
        Surface pressure, Pa.
    sea_surface_temperature : array_like
        Skin temperature of the water, K, 268…320.
    wind_height, air_height : array_like
        Heights of the measurements, m, 0.5…200.
    boundary_layer_height : array_like
        For the convective gustiness, m.
    stable_function : str
        A name in `STABLE_FUNCTIONS`.

    Returns
    -------
    SurfaceLayer
        Arrays of the common shape, flattened to one dimension; NaN and not converged where an
        input is missing.

    Raises
    ------
    ValueError
        If a surface temperature lies outside its range (°C labelled K, say), a wind is negative,
        or the stable function is unknown.
    """
    sst = np.asarray(sea_surface_temperature, dtype=float)
    _within("sea_surface_temperature", sst, 268.0, 320.0, "K; is it in °C?")
    saturated = 0.98 * saturation_vapour_pressure(sst, pressure)
    surface_q = specific_humidity_from_vapour_pressure(saturated, pressure)
    return _solve(
        wind_speed, air_temperature, specific_humidity, pressure, sst, surface_q, wind_height,
        air_height, boundary_layer_height, np.nan, np.nan, stable_function,
    )  # fmt: skip


def solve_land(
    wind_speed: Any,
    air_temperature: Any,
    specific_humidity: Any,
    pressure: Any,
    skin_temperature: Any,
    surface_humidity: Any,
    roughness: Any,
    scalar_roughness: Any = None,
    wind_height: Any = 10.0,
    air_height: Any = 2.0,
    boundary_layer_height: Any = 600.0,
    stable_function: str = "beljaars_holtslag_1991",
) -> SurfaceLayer:
    """Surface-layer scales over land of given roughness and skin temperature.

    Parameters
    ----------
    wind_speed, air_temperature, specific_humidity, pressure, wind_height, air_height : array_like
        As in `solve_sea`.
    skin_temperature : array_like
        Radiating temperature of the ground, K, 200…350.
    surface_humidity : array_like
        Specific humidity at the ground, kg/kg; that of the air if the ground is dry.
    roughness : array_like
        Roughness length for momentum, m, 1e-5…5.
    scalar_roughness : array_like, optional
        For temperature and humidity, m; a tenth of `roughness` if not given (Garratt 1992, The
        Atmospheric Boundary Layer, sect. 4.2; from memory).
    boundary_layer_height, stable_function
        As in `solve_sea`.

    Returns
    -------
    SurfaceLayer
        As `solve_sea`.

    Raises
    ------
    ValueError
        If a value lies outside its range or the stable function is unknown.
    """
    skin = np.asarray(skin_temperature, dtype=float)
    _within("skin_temperature", skin, 200.0, 350.0, "K; is it in °C?")
    z0 = np.asarray(roughness, dtype=float)
    _within("roughness", z0, 1e-5, 5.0, "m")
    z0t = 0.1 * z0 if scalar_roughness is None else np.asarray(scalar_roughness, dtype=float)
    return _solve(
        wind_speed, air_temperature, specific_humidity, pressure, skin, surface_humidity,
        wind_height, air_height, boundary_layer_height, z0, z0t, stable_function,
    )  # fmt: skip


def surface_profile(layer: SurfaceLayer, height: Any) -> tuple[np.ndarray, np.ndarray]:
    """Temperature and specific humidity of the surface layer at given heights.

    Parameters
    ----------
    layer : SurfaceLayer
        Scales, (column,).
    height : array_like
        Heights above the surface, m, above the scalar roughness; (level,) or (column, level).

    Returns
    -------
    tuple of ndarray
        Air temperature (K) and specific humidity (kg/kg), (column, level).
    """
    columns = layer.friction_velocity.shape[0]
    z = np.asarray(height, dtype=float)
    z = np.array(np.broadcast_to(z, (columns, z.shape[-1])))
    temperature, humidity = np.empty(z.shape), np.empty(z.shape)
    _profile(z, *layer[1:8], layer.stable_function, temperature, humidity)
    return temperature, humidity


def _within(name: str, value: np.ndarray, low: float, high: float, unit: str) -> None:
    bad = value[np.isfinite(value) & ~((value >= low) & (value <= high))]
    if bad.size:
        raise ValueError(f"{name}: found {bad.flat[0]:g}; expected {low:g} to {high:g} {unit}")


def _solve(
    wind: Any, t: Any, q: Any, p: Any, surface_t: Any, surface_q: Any, wind_height: Any,
    air_height: Any, inversion: Any, z0: Any, z0t: Any, stable_function: str
) -> SurfaceLayer:  # fmt: skip
    if stable_function not in STABLE_FUNCTIONS:
        known = ", ".join(STABLE_FUNCTIONS)
        raise ValueError(f"stable_function {stable_function!r}; choose from {known}")
    speed = np.asarray(wind, dtype=float)
    _within("wind_speed", speed, 0.0, 120.0, "m/s")
    _within("air_temperature", np.asarray(t, dtype=float), 180.0, 340.0, "K; is it in °C?")
    arrays = np.broadcast_arrays(
        *(
            np.asarray(a, dtype=float)
            for a in (
                speed,
                t,
                q,
                surface_t,
                surface_q,
                wind_height,
                air_height,
                inversion,
                z0,
                z0t,
            )
        )
    )
    flat = [np.array(np.ravel(a)) for a in arrays]
    size = flat[0].size
    out = np.full((6, size), np.nan)
    converged = np.zeros(size, dtype=np.bool_)
    iterations = np.zeros(size, dtype=np.int16)
    code = STABLE_FUNCTIONS[stable_function]
    _solve_all(*flat, code, out, converged, iterations)
    codes = np.full(size, code, dtype=np.int8)
    return SurfaceLayer(
        out[0], out[1], out[2], out[3], out[4], out[5], flat[3], flat[4], converged, iterations,
        codes,
    )  # fmt: skip


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _solve_all(
    wind,
    t,
    q,
    surface_t,
    surface_q,
    zu,
    zt,
    inversion,
    z0_given,
    z0t_given,
    code,
    out,
    converged,
    iterations,
):  # pragma: no cover - compiled
    for c in prange(wind.size):
        virtual = 1.0 + 0.61 * q[c]
        dt = t[c] + ADIABATIC * zt[c] - surface_t[c]
        dq = q[c] - surface_q[c]
        if not np.isfinite(wind[c] + dt + dq + zu[c] + zt[c]):
            continue
        t_c = t[c] - CELSIUS_OFFSET
        viscosity = 1.326e-5 * (1.0 + t_c * (6.542e-3 + t_c * (8.301e-6 - t_c * 4.84e-9)))
        over_sea = np.isnan(z0_given[c])
        gust = 0.5
        ut = np.sqrt(wind[c] ** 2 + gust**2)
        charnock = 0.011
        z0 = 1e-4 if over_sea else z0_given[c]
        z0t = 1e-4 if over_sea else z0t_given[c]
        us = ut * KARMAN / np.log(zu[c] / z0)
        ts = dt * KARMAN / np.log(zt[c] / z0t)
        qs = dq * KARMAN / np.log(zt[c] / z0t)
        inverse_l = 0.0
        for n in range(_MOST_ITERATIONS):
            buoyancy = ts * virtual + 0.61 * t[c] * qs
            new = KARMAN * GRAVITY / t[c] * buoyancy / (us * us)
            new = min(new, _LARGEST_ZETA / zu[c])
            # Stable cases swing; meeting half-way after a few steps settles them.
            inverse_l = new if n < 4 else 0.5 * (inverse_l + new)
            if over_sea:
                z0 = charnock * us * us / GRAVITY + 0.11 * viscosity / us
                z0t = min(1.6e-4, 5.8e-5 / (z0 * us / viscosity) ** 0.72)
            us1 = ut * KARMAN / (np.log(zu[c] / z0) - psi_momentum(zu[c] * inverse_l, code))
            heat = KARMAN / (np.log(zt[c] / z0t) - psi_heat(zt[c] * inverse_l, code))
            ts1, qs1 = dt * heat, dq * heat
            change = max(
                abs(us1 - us) / us1,
                abs(ts1 - ts) / (abs(ts1) + 1e-6),
                abs(qs1 - qs) / (abs(qs1) + 1e-9),
            )
            us, ts, qs = us1, ts1, qs1
            flux = -GRAVITY / t[c] * us * (ts * virtual + 0.61 * t[c] * qs)
            gust = _LEAST_GUST
            if flux > 0.0:
                gust = max(_LEAST_GUST, _GUST_FACTOR * (flux * inversion[c]) ** (1.0 / 3.0))
            ut = np.sqrt(wind[c] ** 2 + gust**2)
            if over_sea:
                # Edson et al. 2013: the mean 10 m neutral wind, gusts taken out.
                mean = us / KARMAN * np.log(10.0 / z0) * wind[c] / ut
                charnock = max(0.0017 * min(mean, 19.0) - 0.005, 0.0)
            iterations[c] = n + 1
            if n > 3 and change < _TOLERANCE:
                converged[c] = True
                break
        out[0, c] = us
        out[1, c] = ts
        out[2, c] = qs
        out[3, c] = 1.0 / inverse_l if inverse_l != 0.0 else np.inf
        out[4, c] = z0
        out[5, c] = z0t


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _profile(
    z, ts, qs, length, z0, z0t, surface_t, surface_q, code, temperature, humidity
):  # pragma: no cover - compiled
    for c in prange(z.shape[0]):
        for i in range(z.shape[1]):
            shape = (np.log(z[c, i] / z0t[c]) - psi_heat(z[c, i] / length[c], code[c])) / KARMAN
            temperature[c, i] = surface_t[c] + ts[c] * shape - ADIABATIC * z[c, i]
            humidity[c, i] = surface_q[c] + qs[c] * shape
