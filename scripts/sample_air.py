"""The invented air over the Bay of Ferrow, and how a balloon and a model would see it.

Everything here is invented: the bay, its pier station at Cape Vellory and the weather; the
position is open ocean. One smooth description feeds both the ascents and the model file, so that
they agree where they meet:

* day 0-3 breezy westerlies under a weak inversion;
* day 3-7 a high: the subsidence inversion sinks from 1500 m to about 500 m (elevated ducts);
* day 7-12 light wind carries warm air over upwelling cold water: a surface inversion of more than
  0.12 K/m by day, humid below and drier above (light follows the Earth, radio surface ducts);
* day 12-14 a front: mixed and humid through the depth, no ducts;
* day 14-20 showery air, then the next high;
* day 20-25 a second spell of cold water, ended by another front.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator
from scipy.ndimage import gaussian_filter1d
from scipy.optimize import brentq

from forecast.physics.moisture import (
    relative_humidity,
    saturation_vapour_pressure,
    specific_humidity_from_relative_humidity,
    vapour_pressure_from_specific_humidity,
)

Array = NDArray[np.float64]

SEED = 20240524
START = datetime(2024, 5, 24)
STATION = "Cape Vellory"
LATITUDE, LONGITUDE = 46.52, -27.90
DECK = 2.0  # the launch deck is a pier, m above the sea
# What happens in the real world, by index of the launch:
DRY_GAP_LAUNCH = 13  # humidity sensor lost at 3.5 km
SHORT_LAUNCH = 29  # balloon burst at 1.9 km
DIPPING_LAUNCH = 57  # balloon sinks for some seconds in an icy shower

GRAVITY = 9.80665  # m s-2, standard
GAS_CONSTANT_DRY = 287.0597  # J kg-1 K-1
EARTH = 6.371e6  # m
HIGHEST_HUMIDITY = 0.985

# The weather by day since START; the other columns are the fields of `Weather`.
# fmt: off
WEATHER = np.array([
    # day   sst   air  cold  rh rh0  base deep rise left  low high  wind from press
    [-1.0, 12.4, 12.6, 0.00, 78, 82, 1500, 320, 2.0, 0.70, 8.0, 6.0,  9.0, 265, 1013],
    [ 1.5, 12.3, 12.4, 0.00, 79, 83, 1450, 300, 2.2, 0.66, 8.2, 6.0,  9.5, 270, 1014],
    [ 3.0, 12.3, 12.6, 0.02, 77, 82, 1350, 190, 3.8, 0.48, 8.2, 6.0,  7.0, 300, 1021],
    [ 4.5, 12.2, 13.0, 0.05, 76, 82, 1000, 130, 5.0, 0.38, 7.8, 5.6,  5.0, 330, 1028],
    [ 6.5, 12.0, 13.8, 0.15, 74, 82,  560, 100, 6.0, 0.36, 7.2, 5.4,  3.6,  20, 1031],
    [ 7.6, 11.2, 15.8, 0.45, 68, 84,  620, 120, 4.5, 0.42, 6.8, 5.6,  3.0,  70, 1028],
    [ 8.8, 10.0, 18.0, 0.92, 58, 88,  800, 160, 2.5, 0.55, 6.8, 5.8,  2.4, 100, 1024],
    [10.4,  9.6, 18.4, 1.00, 56, 90,  900, 200, 2.2, 0.55, 6.8, 5.8,  2.6, 110, 1020],
    [11.4, 10.2, 17.2, 0.55, 64, 88, 1100, 300, 1.5, 0.65, 6.5, 6.0,  4.5, 150, 1013],
    [12.2, 11.4, 13.2, 0.02, 88, 90, 3000, 900, 0.0, 0.90, 5.8, 5.8, 14.0, 215, 1002],
    [13.3, 11.7, 11.9, 0.00, 86, 87, 3000, 900, 0.0, 0.85, 6.4, 6.2, 13.0, 285, 1006],
    [14.5, 11.9, 11.6, 0.00, 76, 79, 2400, 600, 0.6, 0.75, 8.4, 6.5, 10.0, 310, 1013],
    [16.5, 12.1, 12.2, 0.00, 75, 80, 1600, 260, 2.5, 0.60, 8.4, 6.2,  7.5, 300, 1019],
    [18.0, 12.2, 12.8, 0.05, 75, 82, 1000, 140, 4.6, 0.42, 8.0, 5.8,  5.0, 340, 1026],
    [19.6, 12.0, 13.6, 0.18, 73, 82,  640, 100, 5.6, 0.38, 7.4, 5.5,  3.8,  30, 1029],
    [20.8, 11.3, 15.6, 0.45, 68, 84,  640, 110, 4.6, 0.42, 6.9, 5.6,  3.2,  70, 1027],
    [21.9, 10.3, 17.9, 0.90, 59, 88,  760, 150, 3.0, 0.52, 6.8, 5.8,  2.6,  95, 1024],
    [23.2,  9.9, 18.2, 0.95, 58, 89,  900, 200, 2.2, 0.56, 6.8, 5.8,  2.8, 115, 1019],
    [24.1, 10.6, 16.2, 0.40, 70, 88, 1300, 400, 1.2, 0.70, 6.4, 6.0,  6.5, 165, 1011],
    [24.8, 11.4, 13.2, 0.02, 88, 90, 3000, 900, 0.0, 0.90, 5.8, 5.8, 13.5, 220, 1003],
    [26.0, 11.7, 12.0, 0.00, 86, 87, 3000, 900, 0.0, 0.85, 6.4, 6.2, 12.5, 285, 1006],
])
# fmt: on


class Weather(NamedTuple):
    """State of the air at one time."""

    sst: float  # sea surface, degC
    air: float  # air above the cold layer, brought down to the sea, degC
    cold: float  # how far a cold-water spell has set in, 0-1
    rh_air: float  # relative humidity of that air, %
    rh_sea: float  # relative humidity next to the sea, %
    base: float  # subsidence inversion: base, m
    depth: float  # its depth, m
    rise: float  # its rise of temperature beyond the lapse, K
    left: float  # share of the humidity left above it
    low: float  # lapse below it, K/km
    high: float  # lapse above it, K/km
    wind: float  # at 10 m, m/s
    origin: float  # direction the wind comes from, degree
    press: float  # at sea level, hPa


#: Unsettled weather between the rows of the table: size of each field's slow waves.
WAVES = Weather(0.05, 0.25, 0.02, 1.5, 1.0, 45.0, 9.0, 0.3, 0.02, 0.1, 0.1, 0.5, 7.0, 0.6)


@dataclass(frozen=True)
class Column:
    """Air at one time on given heights above the sea (m), SI units throughout."""

    height: Array
    pressure: Array
    temperature: Array
    specific_humidity: Array
    eastward_wind: Array
    northward_wind: Array
    sea_temperature: float


class Scenario:
    """The invented air as a function of time and height."""

    def __init__(self) -> None:
        table = WEATHER[:, 1:].copy()
        # Bearings are unwrapped so that the wind turns the short way round.
        turning = Weather._fields.index("origin")
        table[:, turning] = np.unwrap(table[:, turning], period=360.0)
        self._rows = PchipInterpolator(WEATHER[:, 0], table)
        self._phase = np.random.default_rng(SEED).uniform(0.0, 2 * np.pi, (len(WAVES), 3))

    def weather(self, day: float) -> Weather:
        """The table at one time (days since `START`), with slow waves added."""
        periods = np.array([2.3, 0.93, 0.41])
        waves = np.sin(2 * np.pi * day / periods + self._phase) @ np.array([0.6, 0.5, 0.35])
        return Weather(*(self._rows(day) + np.array(WAVES) * waves))

    def column(self, day: float, height: Array, east: float = 0.0, north: float = 0.0) -> Column:
        """Air over one place at one time, hydrostatic and nowhere supersaturated.

        Parameters
        ----------
        day : float
            Days since `START`.
        height : ndarray
            Heights above the sea, m, ascending from near 0.
        east, north : float
            Offset from the station, degrees: the cold water lies along the coast.
        """
        now = self.weather(day)
        # Warmest about 17 UTC (15 h by the Sun); the cold layer is strongest with it.
        beat = np.cos(2 * np.pi * (day - 17.0 / 24.0))
        near_coast = np.exp(-((0.6 * east - 0.4 * north) ** 2) / 0.18)
        cold = np.clip(now.cold, 0.0, 1.0)
        spell = cold * (0.70 + 0.30 * beat) * near_coast
        sst = now.sst + 1.2 * (1.0 - near_coast) + 0.15 * beat
        warm = 273.15 + now.air + (0.35 + 0.75 * cold) * beat
        layer = 52.0 + 75.0 * (1.0 - spell)

        # Integrate the lapse on a grid fine enough for the sharpest layer, then sample. Towards
        # the tropopause the lapse fades.
        step = 2.0
        fine = np.arange(0.0, height[-1] + 20.0, step)
        above = 0.5 * (1.0 + np.tanh((fine - now.base - 0.5 * now.depth) / (0.25 * now.depth)))
        fading = np.clip((15500.0 - fine) / 4000.0, 0.0, 1.0)
        lapse = 1e-3 * (now.low + (now.high - now.low) * above) * fading
        fallen = np.concatenate([[0.0], np.cumsum(0.5 * (lapse[1:] + lapse[:-1]) * step)])
        chill = 6.4 * spell * np.clip(1.0 - fine / layer, 0.0, 1.0) ** 1.5
        temperature = warm - fallen + max(now.rise, 0.0) * above - chill

        surface = 100.0 * now.press
        q_air = specific_humidity_from_relative_humidity(now.rh_air / 100.0, warm, surface)
        q_sea = specific_humidity_from_relative_humidity(
            now.rh_sea / 100.0, temperature[0], surface
        )
        aloft = now.left * np.exp(-np.clip(fine - now.base, 0.0, None) / 2300.0)
        humidity = q_air * ((1.0 - above) * np.exp(-fine / 9000.0) + above * aloft)
        humidity = humidity + (q_sea - q_air) * np.clip(1.0 - fine / (1.25 * layer), 0, 1) ** 1.5
        pressure, humidity = settle(fine, temperature, humidity, surface)

        # Logarithmic up to 120 m over a sea of 0.2 mm roughness, then a steady rise; veering.
        speed = now.wind * np.log1p(np.minimum(fine, 120.0) / 2e-4) / np.log1p(10.0 / 2e-4)
        speed = speed + 1.8e-3 * np.clip(fine - 120.0, 0.0, 10500.0)
        bearing = np.radians(now.origin + 25.0 * (1.0 - np.exp(-fine / 900.0)))

        def at(values: Array) -> Array:
            return np.interp(height, fine, values)

        return Column(
            height=height,
            pressure=np.exp(at(np.log(pressure))),
            temperature=at(temperature),
            specific_humidity=at(humidity),
            eastward_wind=at(-speed * np.sin(bearing)),
            northward_wind=at(-speed * np.cos(bearing)),
            sea_temperature=273.15 + float(sst),
        )

    def mixed_depth(self, day: float) -> float:
        """Boundary layer height, m: the cold layer in a spell, else up to the inversion."""
        now = self.weather(day)
        return float(np.clip(now.base, 300.0, 2500.0) * (1.0 - np.clip(now.cold, 0.0, 0.93)))


def settle(
    height: Array, temperature: Array, humidity: Array, surface: float
) -> tuple[Array, Array]:
    """Hydrostatic pressure above a surface pressure, and humidity held below saturation."""
    pressure = surface * np.exp(-(height - height[0]) / 8200.0)
    for _ in range(3):
        highest = specific_humidity_from_relative_humidity(HIGHEST_HUMIDITY, temperature, pressure)
        humidity = np.clip(humidity, 2e-6, highest)
        pressure = surface * np.exp(
            -np.concatenate([[0.0], np.cumsum(log_steps(height, temperature, humidity))])
        )
    return pressure, humidity


def log_steps(height: Array, temperature: Array, humidity: Array) -> Array:
    """Fall of ln(pressure) from each level to the next: hypsometric equation, layer means."""
    virtual = temperature * (1.0 + 0.6078 * humidity)
    gravity = GRAVITY * (EARTH / (EARTH + height)) ** 2
    ratio = gravity / (GAS_CONSTANT_DRY * virtual)
    return 0.5 * (ratio[1:] + ratio[:-1]) * np.diff(height)


@dataclass(frozen=True)
class Ascent:
    """One launch: seconds since release, drifting position and the air there."""

    launch: datetime
    seconds: Array
    latitude: Array
    longitude: Array
    air: Column
    relative_humidity: Array


def fly(scenario: Scenario, index: int) -> Ascent:
    """The launch with this index: the scenario's air plus what a real balloon adds.

    Small-scale structure is smooth over some 60 m, as sensor lag and the usual processing of
    sondes leave it; white noise would make a layer of every pair of levels.
    """
    rng = np.random.default_rng([SEED, index])
    launch = START + timedelta(hours=6 * index, minutes=int(rng.integers(2, 14)))
    day = (launch - START) / timedelta(days=1)
    top = 1900.0 if index == SHORT_LAUNCH else float(rng.uniform(6200.0, 7400.0))
    steps = int(top / 9.0)
    rate = 5.0 + 0.35 * smooth_noise(rng, steps, 12.0)
    if index == DIPPING_LAUNCH:
        rate[180:188] = -1.6
    seconds = 2.0 * np.arange(steps + 1)
    height = DECK + np.concatenate([[0.0], np.cumsum(2.0 * rate)])
    keep = height <= top
    seconds, height = seconds[keep], height[keep]

    grid = np.arange(DECK, top + 400.0, 10.0)
    air = scenario.column(day, grid)
    # Fine structure fades out towards the sea, where the scenario itself decides.
    fade = 1.0 - np.exp(-(((grid - DECK) / 220.0) ** 2))
    temperature = air.temperature + 0.07 * fade * smooth_noise(rng, grid.size, 6.0)
    wet = 1.0 + 0.012 * fade * smooth_noise(rng, grid.size, 6.0)
    for _ in range(int(rng.integers(2, 5))):  # drier and moister sheets of the free air
        middle, width = rng.uniform(2200.0, 6500.0), rng.uniform(120.0, 380.0)
        wet = wet * (1.0 + rng.uniform(-0.35, 0.30) * np.exp(-(((grid - middle) / width) ** 2)))
    pressure, humidity = settle(
        grid, temperature, air.specific_humidity * wet, float(air.pressure[0])
    )
    gust = 0.5 * fade
    u = air.eastward_wind + gust * smooth_noise(rng, grid.size, 9.0)
    v = air.northward_wind + gust * smooth_noise(rng, grid.size, 9.0)

    def at(values: Array) -> Array:
        return np.interp(height, grid, values)

    on_way = Column(
        height,
        np.exp(at(np.log(pressure))),
        at(temperature),
        at(humidity),
        at(u),
        at(v),
        air.sea_temperature,
    )
    east = np.concatenate([[0.0], np.cumsum(2.0 * on_way.eastward_wind[:-1])])
    north = np.concatenate([[0.0], np.cumsum(2.0 * on_way.northward_wind[:-1])])
    rh = relative_humidity(on_way.specific_humidity, on_way.temperature, on_way.pressure)
    if index == DRY_GAP_LAUNCH:
        rh = np.where(height > 3500.0, np.nan, rh)
    return Ascent(
        launch,
        seconds,
        LATITUDE + np.degrees(north / EARTH),
        LONGITUDE + np.degrees(east / (EARTH * np.cos(np.radians(LATITUDE)))),
        on_way,
        rh,
    )


def smooth_noise(rng: np.random.Generator, size: int, width: float) -> Array:
    """Noise of unit variance whose neighbours over `width` samples go together."""
    noise = gaussian_filter1d(rng.standard_normal(size), width, mode="nearest")
    return noise * np.sqrt(2.0 * np.sqrt(np.pi) * width)


def hybrid_halves() -> tuple[Array, Array]:
    """Coefficients a (Pa) and b (1) of the layer interfaces, top first, about 17 km down to 0."""
    depth = 22.0 * 1.115 ** np.arange(60)
    half_height = np.concatenate([[0.0], np.cumsum(depth)])
    half_height = half_height[half_height < 17000.0]
    pressure = 101325.0 * np.where(
        half_height < 11000.0,
        np.clip(1.0 - 2.25577e-5 * half_height, 0.0, None) ** 5.25588,
        0.223361 * np.exp(-(half_height - 11000.0) / 6341.6),
    )
    sigma = (pressure - pressure[-1]) / (101325.0 - pressure[-1])
    b = sigma**1.35
    return (pressure - b * 101325.0)[::-1], b[::-1]


def model_column(
    scenario: Scenario, day: float, east: float, north: float, a: Array, b: Array
) -> tuple[Column, float]:
    """Air at the model's full levels, top first, and the surface pressure (Pa)."""
    grid = np.concatenate([np.arange(0.0, 1000.0, 5.0), np.arange(1000.0, 18600.0, 50.0)])
    air = scenario.column(day, grid, east, north)
    surface = float(air.pressure[0])
    half = a + b * surface
    # A model layer holds the mean over its depth; the top interface lies below the grid's top.
    half_height = np.interp(-np.log(half), -np.log(air.pressure), grid)
    depth = -np.diff(half_height)

    def layer_mean(values: Array) -> Array:
        whole = np.concatenate([[0.0], np.cumsum(0.5 * (values[1:] + values[:-1]) * np.diff(grid))])
        return -np.diff(np.interp(half_height, grid, whole)) / depth

    full = 0.5 * (half[1:] + half[:-1])
    temperature = layer_mean(air.temperature)
    humidity = np.minimum(
        layer_mean(air.specific_humidity),
        specific_humidity_from_relative_humidity(HIGHEST_HUMIDITY, temperature, full),
    )
    return (
        Column(
            0.5 * (half_height[1:] + half_height[:-1]),
            full,
            temperature,
            humidity,
            layer_mean(air.eastward_wind),
            layer_mean(air.northward_wind),
            air.sea_temperature,
        ),
        surface,
    )


def dew_point(specific_humidity: float, pressure: float) -> float:
    """Dew point over water, K: where saturation at this pressure (Pa) equals the vapour."""
    vapour = vapour_pressure_from_specific_humidity(specific_humidity, pressure)
    return float(
        brentq(lambda t: saturation_vapour_pressure(t, pressure) - vapour, 200.0, 320.0, xtol=1e-9)
    )
