"""Rays near the horizon against astronomical refraction, and the horizon itself.

Refraction records: `refro` of SLALIB/PAL integrates the same model of the air by quadrature over
zenith angle (Hohenkerk & Sinclair 1985, NAO Technical Note 63): temperature falls by a constant
lapse to 11 km above the sea and stays constant from there to 80 km; vapour pressure follows a power
of temperature. Nothing of that method is shared with the tracer of this program.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import pytest
from scipy.optimize import brentq

from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.moisture import specific_humidity_from_vapour_pressure
from forecast.physics.rays import Medium, build_medium, trace_rays
from forecast.physics.refractive_index import optical_refractivity, radio_refractivity
from forecast.physics.sightline import standard_medium, trace_sightlines
from tests.reference import records

ARCMIN = np.degrees(1.0) * 60.0

# --- The model air of the records ----------------------------------------------------------------

_EARTH = 6378120.0  # m; constants of the model as in NAO Technical Note 63
_GAS, _DRY, _WATER = 8314.32, 28.9644, 18.0152  # J/(kmol K), kg/kmol
_VAPOUR_POWER = 18.36  # δ: vapour pressure ~ T^δ
_TROPOPAUSE, _TOP = 11e3, 80e3  # m


class Observed(NamedTuple):
    """Conditions of a record: K, hPa, relative humidity, µm, K/m, height m, latitude rad."""

    temperature: float
    pressure: float
    humidity: float
    wavelength: float
    lapse: float = 0.0065
    height: float = 0.0
    latitude: float = np.pi / 4.0


class ModelAir(NamedTuple):
    """The air above the observer: height above him (m), p and e (Pa), T (K), N of the records."""

    z: np.ndarray
    pressure: np.ndarray
    vapour: np.ndarray
    temperature: np.ndarray
    refractivity: np.ndarray


def _model_air(at: Observed) -> ModelAir:
    """Lay out the air of the records, finely: 2 m below the tropopause, 40 m above.

    N by the records' own formula (dry term of Ciddor & Hill 1999, radio terms of Rüeger 2002),
    so that it is the integration of rays that is tested.
    """
    z = np.r_[np.arange(0.0, _TROPOPAUSE - at.height, 2.0), _TROPOPAUSE - at.height]
    z = np.r_[z, np.arange(z[-1] + 40.0, _TOP - at.height, 40.0), _TOP - at.height]
    t0, p0 = at.temperature, at.pressure
    gravity = 9.784 * (1.0 - 0.0026 * np.cos(2.0 * at.latitude) - 2.8e-7 * at.height)
    weight = gravity * _DRY / _GAS  # K/m
    gamma, delta = weight / at.lapse, _VAPOUR_POWER
    t_c = t0 - 273.15
    saturation = 10.0 ** ((0.7859 + 0.03477 * t_c) / (1.0 + 0.00412 * t_c))
    saturation *= 1.0 + p0 * (4.5e-6 + 6e-10 * t_c * t_c)
    e0 = at.humidity * saturation / (1.0 - (1.0 - at.humidity) * saturation / p0)
    w = e0 * (1.0 - _WATER / _DRY) * gamma / (delta - gamma)

    light = at.wavelength <= 100.0
    s = at.wavelength**-2.0
    if light:
        dry, wet = (287.6155 + (1.62887 + 0.0136 * s) * s) * 273.15 / 1013.25, 11.2684
    else:
        dry, wet = 77.6890, 6.3938
    below = z <= _TROPOPAUSE - at.height
    t = t0 - at.lapse * np.minimum(z, _TROPOPAUSE - at.height)
    share = t / t0
    p = (p0 + w) * share**gamma - w * share**delta
    e = e0 * share**delta
    n = (dry * p - wet * e) / t + (0.0 if light else 375463.0 * e / t**2)
    # Above: isothermal, everything falls off together.
    fall = np.where(below, 1.0, np.exp(-weight / t * (z + at.height - _TROPOPAUSE)))
    return ModelAir(z, 100.0 * p * fall, 100.0 * e * fall, t, n * fall)


def _refraction(air: ModelAir, n: np.ndarray, height: float, zenith: float) -> float:
    """Total refraction (rad) at an observed zenith distance (rad), by the program's ray tracer.

    The direction of the ray relative to space: elevation at launch, less that at the top, plus
    the angle by which the vertical has turned.
    """
    radius = _EARTH + height
    medium = build_medium(air.z, n, radius, "optical")
    elevation = np.pi / 2.0 - zenith
    top = air.z[-1]

    def above(distance: float) -> float:
        return trace_rays(medium, 0.0, elevation, distance).height[0, 0] - top

    far = brentq(above, 0.3 * top / np.tan(max(elevation, 0.04)), 2e6, xtol=1e-6, rtol=1e-15)
    ends = trace_rays(medium, 0.0, elevation, far).elevation[0, 0]
    return elevation - ends + far / radius


# Records slalib_refro_*: published test numbers of SLALIB/PAL, seen in nine transcriptions.
_SLALIB = [
    (Observed(280.0, 678.9, 0.9, 0.55, 0.006, 3456.7, -0.3), 0.00106715763),
    (Observed(280.0, 678.9, 0.9, 1000.0, 0.006, 3456.7, -0.3), 0.001296416185),
]


@pytest.mark.parametrize(("at", "expected"), _SLALIB, ids=["light", "radio"])
def test_refraction_is_that_of_slalib(at, expected):
    # 1e-9 rad (0.2 mas), the tolerance of the record, at a zenith distance of 1.4 rad.
    air = _model_air(at)
    found = _refraction(air, air.refractivity, at.height, 1.4)
    assert found == pytest.approx(expected, abs=1e-9)


# Records refro_*: computed with the same library (palpy 1.8.4), in arc minutes.
_ZENITH = (45.0, 60.0, 75.0, 80.0, 85.0, 88.0, 89.0, 89.5, 90.0)
_REFRO = [
    (
        Observed(283.15, 1010.0, 0.0, 0.574),
        (0.9651511405, 1.667866106, 3.55041248, 5.293841206, 9.810269669, 18.11134761, 24.0285198,
         28.26439388, 33.80365316),
    ),
    (
        Observed(288.15, 1013.25, 0.0, 0.55),
        (0.9529181718, 1.646647202, 3.504376644, 5.223298263, 9.666355996, 17.78877834,
         23.54494634, 27.6500389, 33.00041857),
    ),
    (
        Observed(288.15, 1013.25, 0.6, 10000.0),
        (1.096639954, 1.895571041, 4.040558247, 6.037349746, 11.29185157, 21.50872528,
         29.53054452, 35.84102792, 45.08833959),
    ),
    (
        Observed(283.15, 1010.0, 0.0, 0.574, 0.0098),
        (0.9651538417, 1.667865138, 3.550221444, 5.292571122, 9.790260455, 17.88632004,
         23.43516174, 27.27429581, 32.1250712),
    ),
]  # fmt: skip


@pytest.mark.parametrize(("at", "expected"), _REFRO, ids=lambda v: getattr(v, "wavelength", ""))
def test_refraction_down_to_the_horizon(at, expected):
    """The records allow 0.05'; with their own refractivity the rays hold to 0.0002'.

    A ray launched level is among them: 33.8' in air that cools by 6.5 K/km, 32.1' at 9.8 K/km.
    It is the one that layers of 10 m leave 0.001' off.
    """
    air = _model_air(at)
    found = [ARCMIN * _refraction(air, air.refractivity, at.height, np.radians(z)) for z in _ZENITH]
    assert found == pytest.approx(list(expected), abs=2e-4)


@pytest.mark.parametrize(("at", "expected"), _REFRO, ids=lambda v: getattr(v, "wavelength", ""))
def test_refraction_from_pressure_temperature_and_humidity(at, expected):
    """The same from the state of the air by the program's own index: within the records' 0.05'.

    At the horizon in humid air the sets of radio constants part by 0.07' themselves: there the
    records' own (Rüeger) are chosen.
    """
    air = _model_air(at)
    if at.wavelength <= 100.0:
        q = specific_humidity_from_vapour_pressure(air.vapour, air.pressure)
        n = optical_refractivity(air.pressure, air.temperature, q, 1e-6 * at.wavelength)
    else:
        n = radio_refractivity(air.pressure, air.temperature, air.vapour, "rueger_2002")
    found = [ARCMIN * _refraction(air, n, at.height, np.radians(z)) for z in _ZENITH]
    assert found == pytest.approx(list(expected), abs=0.05)


# --- Dip and distance of the horizon -------------------------------------------------------------


def _air_of(bend: float, n0: float) -> Medium:
    """Air in which a level ray bends by `bend` Earth curvatures: d ln(n r)/dr = (1 − bend)/a."""
    z = np.linspace(0.0, 3000.0, 601)
    r = MEAN_EARTH_RADIUS + z
    index = (1.0 + 1e-6 * n0) * np.exp((1.0 - bend) * z / MEAN_EARTH_RADIUS)
    return build_medium(z, 1e6 * (index * MEAN_EARTH_RADIUS / r - 1.0), MEAN_EARTH_RADIUS)


_AIR = {
    "geometric_arcmin": _air_of(0.0, 0.0),
    "with_k_0p13": _air_of(0.13, 277.8),
    "with_k_0p17": _air_of(0.17, 277.8),
}


def _dip(medium: Medium, height: float) -> float:
    table = trace_sightlines(medium, height, 1.0, 1e3)
    return -ARCMIN * float(table.horizon_elevation[0, 0])


@pytest.mark.parametrize("row", records("dip_"), ids=lambda r: r["id"])
def test_dip_that_sightlines_report(row):
    """`horizon_elevation` against closed forms, to the records' 0.01'.

    Geometric acos(a/(a + h)); with a coefficient of refraction k the Earth's radius is a/(1 − k).
    Standard air at 550 nm bends by 0.1699 at the ground and less above.
    """
    height, expected = row["inputs"]["eye_height_m"], row["expected"]
    for name, medium in _AIR.items():
        assert _dip(medium, height) == pytest.approx(expected[name], abs=row["tolerance"])
    standard = _dip(standard_medium("optical"), height)
    assert standard == pytest.approx(expected["with_k_0p17"], abs=row["tolerance"])
    assert standard == pytest.approx(expected["na_1p76_arcmin"], rel=0.005)


_HORIZONS = [("geom_km", "geometric_arcmin"), ("optical_k017_km", "with_k_0p17")]


@pytest.mark.parametrize("row", records("horizon_dist_"), ids=lambda r: r["id"])
def test_the_horizon_ray_meets_the_sea_at_the_horizon(row):
    """A ray a hair below `horizon_elevation` is blocked at the closed form's distance.

    To the record's 0.01 km. The hair is 1e-12 rad: a ray so much below the grazing one meets the
    sea earlier by ``√(2 R x 1e-12)``, half a metre at x = 20 km.
    """
    height, expected = row["inputs"]["h_m"], row["expected"]
    for name, air in _HORIZONS:
        medium = _AIR[air]
        horizon = trace_sightlines(medium, height, 1.0, 1e3).horizon_elevation[0, 0]
        below = trace_rays(medium, height, horizon - 1e-12, 100e3, reflect=False)
        assert below.blocked_at[0, 0] / 1e3 == pytest.approx(expected[name], abs=row["tolerance"])
        above = trace_rays(medium, height, horizon + 1e-9, 100e3, reflect=False)
        assert np.isnan(above.blocked_at[0, 0])


@pytest.mark.parametrize("bend", [0.5, 0.9, 0.99])
def test_the_dip_falls_to_nought_as_light_comes_to_follow_the_earth(bend):
    # dip² = 2 h (1 − bend) / a for small angles.
    expected = ARCMIN * np.sqrt(2.0 * 20.0 * (1.0 - bend) / MEAN_EARTH_RADIUS)
    assert _dip(_air_of(bend, 277.8), 20.0) == pytest.approx(expected, rel=0.001)
