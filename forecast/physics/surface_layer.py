"""The lowest metres that soundings miss: temperature and humidity between surface and first level.

Monin–Obukhov similarity: ``T(z) = T_s + (T*/κ) [ln(z/z_0t) − ψ_h(z/L)] − Γ z`` and the same for
specific humidity without Γ. Over sea the scales come from the bulk algorithm COARE 3.5 (Fairall et
al. 2003, J. Climate 16, 571–591; Charnock relation of Edson et al. 2013, J. Phys. Oceanogr. 43,
1589–1610): smooth-flow and Charnock roughness, scalar roughness from the roughness Reynolds
number, gustiness in free convection, surface humidity 0.98 of saturation over salt water. The cool
skin is left out: the surface temperature is taken as that of the skin. Over land roughness lengths
and skin temperature are given. As in COARE, ψ(z_0/L) is neglected and u* includes gustiness.

**Very stable air**, light wind over much colder water, is modelled as far as the stable function in
use has been measured (`forecast.physics.stability.LARGEST_ZETA`: z/L up to 1, 10 or 100). That
reaches past the critical gradient Richardson number of 0.20–0.25, where steady turbulence gives way
to bursts (Grachev et al. 2013, Boundary-Layer Meteor. 147, 51–82); there the functions are fits to
averages and part ways, and that spread is the uncertainty. With air 5 K warmer at 10 m than the
water, Dyer holds down to winds of some 5 m/s, Beljaars–Holtslag and Grachev to some 2 m/s. Beyond,
a function has no answer: the column is marked ``too_stable`` and its scales are NaN.
"""

from __future__ import annotations

from functools import cache
from typing import Any, NamedTuple

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.moisture import _SATURATION, CELSIUS_OFFSET, EPSILON
from forecast.physics.stability import (
    LARGEST_ZETA,
    STABLE_FUNCTIONS,
    psi_heat,
    psi_momentum,
    psi_unstable,
    unstable_table,
)

__all__ = ["SurfaceLayer", "solve_land", "solve_sea", "surface_profile"]

KARMAN = 0.4
GRAVITY = 9.80665  # m/s²
ADIABATIC = 0.0098  # K/m, as COARE uses it
_GUST_FACTOR = 1.2  # β of the convective gustiness
_LEAST_GUST = 0.2  # m/s
_CHARNOCK_SLOPE, _CHARNOCK_WIND = 0.0017, 19.0  # s/m, m/s
_SALT = 0.98  # saturation over sea water relative to fresh water
_MOST_ITERATIONS = 60
_TOLERANCE = 1e-3  # relative, residual of u* before its last step, and of 1/L
_LOG_10 = np.log(10.0)
_LOG_LARGEST_Z0T = np.log(1.6e-4)
_LOG_Z0T = np.log(5.8e-5)
_A, _B, _C, _D, _E0, _E1, _E2 = _SATURATION["water"]


class SurfaceLayer(NamedTuple):
    """Scales of the surface layer, one value per column.

    ``friction_velocity`` m/s, ``temperature_scale`` K (positive: the surface cools the air),
    ``humidity_scale`` kg/kg, ``obukhov_length`` m, ``roughness`` and ``scalar_roughness`` m,
    ``surface_temperature`` K, ``surface_humidity`` kg/kg. ``converged`` is True where these are an
    answer; elsewhere they are NaN, because an input is missing, because the air is ``too_stable``
    for the stable function, or because the iteration did not settle. ``iterations``: how many it
    took, 0 where an input is missing; ``stable_function``: its code.
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
    too_stable: np.ndarray
    iterations: np.ndarray
    stable_function: np.ndarray

    @property
    def unsettled(self) -> np.ndarray:
        """Where the iteration did not settle, though all inputs were there."""
        return ~self.converged & ~self.too_stable & (self.iterations > 0)


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
        input is missing or the air too stable.

    Raises
    ------
    ValueError
        If a surface temperature lies outside its range (°C labelled K, say), a wind is negative,
        or the stable function is unknown.
    """
    return _solve(
        wind_speed, air_temperature, specific_humidity, pressure, sea_surface_temperature, np.nan,
        wind_height, air_height, boundary_layer_height, np.nan, np.nan, stable_function,
        ("sea_surface_temperature", 268.0, 320.0),
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
    z0 = np.asarray(roughness, dtype=float)
    _within("roughness", z0, 1e-5, 5.0, "m")
    z0t = 0.1 * z0 if scalar_roughness is None else np.asarray(scalar_roughness, dtype=float)
    return _solve(
        wind_speed, air_temperature, specific_humidity, pressure, skin_temperature,
        surface_humidity, wind_height, air_height, boundary_layer_height, z0, z0t,
        stable_function, ("skin_temperature", 200.0, 350.0),
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


@cache
def _table() -> np.ndarray:
    return unstable_table()


def _within(name: str, value: np.ndarray, low: float, high: float, unit: str) -> None:
    bad = value[np.isfinite(value) & ~((value >= low) & (value <= high))]
    if bad.size:
        raise ValueError(f"{name}: found {bad.flat[0]:g}; expected {low:g} to {high:g} {unit}")


def _solve(
    wind: Any, t: Any, q: Any, p: Any, surface_t: Any, surface_q: Any, wind_height: Any,
    air_height: Any, inversion: Any, z0: Any, z0t: Any, stable_function: str,
    surface: tuple[str, float, float],
) -> SurfaceLayer:  # fmt: skip
    if stable_function not in STABLE_FUNCTIONS:
        known = ", ".join(STABLE_FUNCTIONS)
        raise ValueError(f"stable_function {stable_function!r}; choose from {known}")
    given = [
        np.asarray(a, dtype=float)
        for a in (wind, t, q, p, surface_t, surface_q, wind_height, air_height, inversion, z0, z0t)
    ]
    shape = np.broadcast_shapes(*(a.shape for a in given))
    size = int(np.prod(shape))
    # A single value is not spread out: the kernel steps through it by nought.
    flat = [(a if a.size == 1 else np.broadcast_to(a, shape)).reshape(-1) for a in given]
    steps = np.array([0 if a.size == 1 else 1 for a in flat])
    scales = np.empty((8, size))
    converged, too_stable = np.empty(size, dtype=np.bool_), np.empty(size, dtype=np.bool_)
    iterations = np.empty(size, dtype=np.int8)
    code = STABLE_FUNCTIONS[stable_function]
    faults = _solve_all(
        *flat, steps, code, LARGEST_ZETA[code], surface[1], surface[2], _table(), scales,
        converged, too_stable, iterations,
    )  # fmt: skip
    if faults:
        _within("wind_speed", given[0], 0.0, 120.0, "m/s")
        _within("air_temperature", given[1], 180.0, 340.0, "K; is it in °C?")
        _within(surface[0], given[4], *surface[1:], "K; is it in °C?")
    codes = np.full(size, code, dtype=np.int8)
    return SurfaceLayer._make([*scales, converged, too_stable, iterations, codes])


@njit(cache=True, nogil=True, error_model="numpy", inline="always")
def _humidity_of_sea(t, p):  # pragma: no cover - compiled
    """Specific humidity next to salt water; `forecast.physics.moisture` for one value."""
    t_c, p_hpa = t - CELSIUS_OFFSET, 1e-2 * p
    enhancement = 1.0 + 1e-4 * (_E0 + p_hpa * (_E1 + _E2 * t_c * t_c))
    e = _SALT * 100.0 * _A * enhancement * np.exp((_B - t_c / _D) * t_c / (t_c + _C))
    return EPSILON * e / (p - (1.0 - EPSILON) * e)


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _solve_all(
    wind, air_t, air_q, air_p, skin_t, skin_q, wind_z, air_z, inversion, z0_given, z0t_given,
    step, code, largest_zeta, coldest, warmest, table, out, converged, too_stable, iterations,
):  # fmt: skip  # pragma: no cover - compiled
    faults = 0
    for c in prange(converged.size):
        u, t, q, p = (
            wind[c * step[0]], air_t[c * step[1]], air_q[c * step[2]], air_p[c * step[3]]
        )  # fmt: skip
        ts, zu, zt = skin_t[c * step[4]], wind_z[c * step[6]], air_z[c * step[7]]
        given, given_t = z0_given[c * step[9]], z0t_given[c * step[10]]
        over_sea = np.isnan(given)
        qs = _humidity_of_sea(ts, p) if over_sea else skin_q[c * step[5]]
        if u < 0.0 or u > 120.0 or t < 180.0 or t > 340.0 or ts < coldest or ts > warmest:
            faults += 1
        out[6, c], out[7, c] = ts, qs
        answer, state, n = _solve_one(
            u, t, t + ADIABATIC * zt - ts, q, q - qs, zu, zt, inversion[c * step[8]], over_sea,
            given, given_t, code, largest_zeta, table,
        )  # fmt: skip
        for k in range(6):
            out[k, c] = answer[k]
        converged[c], too_stable[c], iterations[c] = state == 0, state == 1, n
    return faults


@njit(cache=True, nogil=True, error_model="numpy")
def _solve_one(
    wind, t, dt, q, dq, zu, zt, inversion, over_sea, z0, z0t, code, largest_zeta, table
):  # pragma: no cover - compiled
    """(u*, T*, q*, L, z0, z0t), state (0 solved, 1 too stable, 2 neither), iterations.

    Every quantity follows from x = 1/L, u* and gustiness; x is sought as the fixed point of
    ``g(x) = g/T · B/U² · f_m²/f_h`` with ``f = ln(z/z0) − ψ(z x)``, by the secant through the
    last two pairs in stable air.
    """
    nothing = (np.nan, np.nan, np.nan, np.nan, np.nan, np.nan)
    if not np.isfinite(wind + dt + dq + zu + zt + inversion):
        return nothing, 2, 0
    buoyancy = GRAVITY / t * (dt * (1.0 + 0.61 * q) + 0.61 * t * dq)
    t_c = t - CELSIUS_OFFSET
    viscosity = 1.326e-5 * (1.0 + t_c * (6.542e-3 + t_c * (8.301e-6 - t_c * 4.84e-9)))
    log_viscosity = np.log(viscosity) if over_sea else 0.0
    log_zu = np.log(zu)
    log_zt = log_zu if zt == zu else np.log(zt)
    largest = largest_zeta / max(zu, zt)
    # First guess: u* of neutral air, 1/L from the bulk Richardson number (Grachev & Fairall 1997,
    # J. Appl. Meteor. 36, 406–414).
    ut = np.sqrt(wind * wind + (0.25 if buoyancy < 0.0 else _LEAST_GUST**2))
    charnock = 0.0
    if over_sea:
        u10 = ut * (_LOG_10 + 9.2) / (log_zu + 9.2)  # z0 of 0.1 mm
        us = u10 * (0.0265 + 0.00095 * u10)  # the drag of Edson et al. 2013, as a line
        charnock = max(_CHARNOCK_SLOPE * min(u10, _CHARNOCK_WIND) - 0.005, 0.0)
        log_us = np.log(us)
    else:
        log_z0, log_z0t, log_us = np.log(z0), np.log(z0t), 0.0
        us = KARMAN * ut / (log_zu - log_z0)
    x, x_before, g_before, gust = 0.0, 0.0, 0.0, _LEAST_GUST
    for n in range(_MOST_ITERATIONS):
        inverse_us = 1.0 / us
        steepness = 0.0  # d ln z0 / d ln u*
        if over_sea:
            waves, smooth = charnock * us * us / GRAVITY, 0.11 * viscosity * inverse_us
            z0 = waves + smooth
            log_z0 = np.log(z0)
            log_z0t = min(_LOG_LARGEST_Z0T, _LOG_Z0T - 0.72 * (log_z0 + log_us - log_viscosity))
            steepness = (3.0 * waves - smooth) / z0
        if n == 0:
            rough = log_zu - log_z0
            cc = rough * rough / (log_zt - log_z0t)
            richardson = zu * buoyancy / (ut * ut)
            if richardson < 0.0:
                limit = -zu / (inversion * 0.004 * _GUST_FACTOR**3)
                x = cc * richardson / (1.0 + richardson / limit) / zu
            else:
                x = min(cc * richardson * (1.0 + 3.0 * richardson / cc) / zu, largest)
        if x < 0.0:
            fm = log_zu - log_z0 - psi_unstable(zu * x, 0, table)
            inverse_fh = 1.0 / (log_zt - log_z0t - psi_unstable(zt * x, 1, table))
        else:
            fm = log_zu - log_z0 - psi_momentum(zu * x, code)
            inverse_fh = 1.0 / (log_zt - log_z0t - psi_heat(zt * x, code))
        inverse_fm = 1.0 / fm
        drift = KARMAN * ut * inverse_fm * inverse_us - 1.0
        g = buoyancy * inverse_fh * (fm / ut) ** 2
        if x == largest and g > largest and n > 2:
            return nothing, 1, n + 1
        if n > 0 and abs(drift) < _TOLERANCE and abs(g - x) * zu < _TOLERANCE * (0.2 + abs(x) * zu):
            scale = KARMAN * inverse_fh
            length = 1.0 / x if x != 0.0 else np.inf
            us *= 1.0 + drift / (1.0 - steepness * inverse_fm)
            return (us, dt * scale, dq * scale, length, np.exp(log_z0), np.exp(log_z0t)), 0, n + 1
        # u* by Newton's step, roughness going along; bounded far from the answer.
        factor = 1.0 + min(max(drift / (1.0 - steepness * inverse_fm), -0.5), 1.0)
        if buoyancy < 0.0:
            # w*³ = −g/T θ_v* u* h; after the first, Halley's step from the gust before.
            cube = -buoyancy * KARMAN * inverse_fh * us * factor * inversion * _GUST_FACTOR**3
            if n == 0:
                gust = np.exp(np.log(cube) / 3.0)
            else:
                before = gust * gust * gust
                gust *= (before + 2.0 * cube) / (2.0 * before + cube)
            speed = np.sqrt(wind * wind + max(gust, _LEAST_GUST) ** 2)
            # In unstable air f_m²/f_h hardly changes: gusts aside, g is the answer.
            gustier = speed / ut
            x = g / (gustier * gustier)
            factor *= gustier
            ut = speed
        else:
            slope = (g - g_before) / (x - x_before) if n > 0 and x != x_before else 0.0
            # The step of the secant, or of a fixed point where the secant leads astray.
            new = x + (g - x) / (1.0 - slope) if slope < 0.9 else g
            x_before, g_before = x, g
            x = min(new if new >= 0.0 else g, largest)
        us *= factor
        log_us = np.log(us)
        if over_sea:
            # Edson et al. 2013: the mean 10 m neutral wind, gusts taken out.
            ahead = log_z0 + steepness * (factor - 1.0)
            mean = us / KARMAN * (_LOG_10 - ahead) * wind / ut
            charnock = max(_CHARNOCK_SLOPE * min(mean, _CHARNOCK_WIND) - 0.005, 0.0)
    return nothing, 2, _MOST_ITERATIONS


@njit(cache=True, nogil=True, parallel=True, error_model="numpy")
def _profile(
    z, ts, qs, length, z0, z0t, surface_t, surface_q, code, temperature, humidity
):  # pragma: no cover - compiled
    for c in prange(z.shape[0]):
        for i in range(z.shape[1]):
            shape = (np.log(z[c, i] / z0t[c]) - psi_heat(z[c, i] / length[c], code[c])) / KARMAN
            temperature[c, i] = surface_t[c] + ts[c] * shape - ADIABATIC * z[c, i]
            humidity[c, i] = surface_q[c] + qs[c] * shape
