"""Heights and pressures of levels: closed forms, an independent library, standard atmosphere."""

from __future__ import annotations

import earthkit.meteo.constants.constants as earthkit_constants
import numpy as np
import pytest
from earthkit.meteo.vertical import array as earthkit
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from forecast.ingest import vertical
from tests import reference

#: Ratio of the gas constants used by earthkit-meteo and here; the only constant that differs for
#: dry air.
GAS_RATIO = earthkit_constants.Rd / vertical.DRY_AIR_GAS_CONSTANT


def coefficients() -> tuple[np.ndarray, np.ndarray]:
    """137 levels of a public global model, as earthkit-meteo carries them, top first."""
    return earthkit.hybrid_level_parameters(137)


def columns(rng: np.random.Generator, count: int, levels: int) -> tuple[np.ndarray, ...]:
    """Random but plausible temperature, humidity, surface pressure, bottom first."""
    t = 295.0 - np.linspace(0.0, 80.0, levels) + rng.normal(0.0, 2.0, (count, levels))
    q = 0.018 * np.exp(-np.linspace(0.0, 12.0, levels)) * rng.uniform(0.3, 1.0, (count, 1))
    return t, q, rng.uniform(9.0e4, 1.04e5, count)


def test_pressure_and_geopotential_agree_with_earthkit_meteo():
    a, b = coefficients()
    t, q, ps = columns(np.random.default_rng(1), 20, 137)
    half = vertical.hybrid_pressure(a[::-1], b[::-1], ps)
    full = vertical.full_level_pressure(half)
    theirs = earthkit.pressure_on_hybrid_levels(ps, a, b, vertical_dim=1, output="full")
    np.testing.assert_allclose(full, theirs[:, ::-1], rtol=1e-13)

    ground = np.linspace(0.0, 9000.0, 20)
    for humidity, tolerance in ((np.zeros_like(q), 1e-12), (q, 3e-6)):
        # Moist air: epsilon is 0.621981 there and 0.621980 here.
        ours = vertical.geopotential_on_full_levels(t, humidity, half, ground)
        theirs = earthkit.geopotential_on_hybrid_levels(
            t.T[::-1], humidity.T[::-1], ground, ps, a, b
        ).T[:, ::-1]
        np.testing.assert_allclose(
            (ours - ground[:, None]) * GAS_RATIO, theirs - ground[:, None], rtol=tolerance
        )


def test_half_level_and_trapezoid_integration_agree():
    """Two discretisations of one integral: near the ground they differ by centimetres."""
    a, b = coefficients()
    levels = np.arange(137)
    t, q = 290.0 - 0.5 * levels[None], 0.012 * np.exp(-levels[None] / 20.0)
    half = vertical.hybrid_pressure(a[::-1], b[::-1], np.array([101325.0]))
    p = vertical.full_level_pressure(half)
    model = vertical.geopotential_on_full_levels(t, q, half) / vertical.STANDARD_GRAVITY
    trapezoid = vertical.hypsometric_height(p, t, q, model[:, 0])
    low = model < 1000.0
    assert np.abs(trapezoid - model)[low].max() < 0.05
    assert np.abs(trapezoid - model)[model < 15000.0].max() < 2.0


@given(st.floats(200.0, 310.0), st.floats(0.0, 0.02), st.integers(2, 60))
def test_isothermal_atmosphere_is_exact(temperature, humidity, levels):
    """Closed form: H = Rd Tv / g0 · ln(p0/p), however the levels are spaced."""
    p = 1.0e5 * np.cumprod(np.linspace(0.999, 0.9, levels))
    t, q = np.full(levels, temperature), np.full(levels, humidity)
    scale = (
        vertical.DRY_AIR_GAS_CONSTANT
        * float(vertical.virtual_temperature(temperature, humidity))
        / vertical.STANDARD_GRAVITY
    )
    height = vertical.hypsometric_height(p, t, q, 12.0)
    np.testing.assert_allclose(height, 12.0 + scale * np.log(p[0] / p), rtol=1e-13, atol=1e-9)
    back = vertical.hydrostatic_pressure(
        scale * np.log(1.0e5 / p), vertical.virtual_temperature(t, q), 1.0e5
    )
    np.testing.assert_allclose(back, p, rtol=1e-13)
    ground = vertical.surface_height(p, height, vertical.virtual_temperature(t, q), 1.0e5)
    assert ground == pytest.approx(12.0 - scale * np.log(1.0e5 / p[0]), abs=1e-8)


def test_virtual_temperature_linear_in_log_pressure_is_exact():
    """Closed form: the mean of a linear function is the mean of its ends."""
    p = np.array([1.0e5, 7.0e4, 3.0e4])
    t = 280.0 + 15.0 * np.log(p / 1.0e5)
    x = np.log(1.0e5 / p)
    expected = vertical.DRY_AIR_GAS_CONSTANT / vertical.STANDARD_GRAVITY * (280 * x - 7.5 * x * x)
    np.testing.assert_allclose(vertical.hypsometric_height(p, t, 0.0), expected, rtol=1e-13)


@pytest.mark.parametrize(
    "identifier", ["icao_1000m", "icao_2000m", "icao_10000m", "icao_11000m", "icao_15000m"]
)
def test_standard_atmosphere(identifier):
    """ICAO Doc 7488/3: height from pressure, and geometric from geopotential height.

    The standard atmosphere's sphere has the radius 6356766 m and gravity 9.80665 m/s2 at the
    ground; on WGS 84 that is latitude 45.54 degrees to five digits.
    """
    record = reference.record(identifier)
    target = record["expected"]["H_geopotential_m"]
    h = np.linspace(0.0, target, 2000)
    t = np.maximum(288.15 - 0.0065 * h, 216.65)
    # Lapse rate layer, then isothermal layer: ICAO Doc 7488/3, equations 12 and 13.
    foot = np.minimum(h, 11000.0)
    exponent = vertical.STANDARD_GRAVITY / (vertical.DRY_AIR_GAS_CONSTANT * 0.0065)
    p = 101325.0 * (1.0 - 0.0065 * foot / 288.15) ** exponent
    p *= np.exp(-vertical.STANDARD_GRAVITY * (h - foot) / (vertical.DRY_AIR_GAS_CONSTANT * 216.65))
    assert p[-1] == pytest.approx(100.0 * record["expected"]["p_hPa"], rel=record["tolerance"])
    assert vertical.hypsometric_height(p, t, 0.0)[-1] == pytest.approx(target, abs=0.01)
    given_height = record["inputs"]["h_geometric_m"]
    assert vertical.geometric_altitude(target, 45.54) == pytest.approx(given_height, rel=1e-5)


@pytest.mark.parametrize("latitude", [0.0, 37.0, 45.0, 60.0, 90.0])
def test_geometric_altitude_is_the_integral_of_normal_gravity(latitude):
    """NIMA TR8350.2 eq. 4-3: γ(h) = γ [1 − 2 h (1 + f + m − 2 f sin²φ)/a + 3 h²/a²]."""
    a, f, m = 6378137.0, 1.0 / 298.257223563, 0.00344978650684
    s2 = np.sin(np.radians(latitude)) ** 2
    # Closed formula with the semi-axes: an independent way to write Somigliana's.
    semi_minor, polar, equatorial = 6356752.3142, 9.8321849378, 9.7803253359
    gravity = (a * equatorial * (1 - s2) + semi_minor * polar * s2) / np.sqrt(
        a**2 * (1 - s2) + semi_minor**2 * s2
    )
    assert vertical.normal_gravity(latitude) == pytest.approx(gravity, rel=1e-9)
    for altitude in (100.0, 3000.0, 20000.0):
        work, _ = quad(
            lambda h: gravity * (1 - 2 * h * (1 + f + m - 2 * f * s2) / a + 3 * (h / a) ** 2),
            0.0,
            altitude,
        )
        h = work / vertical.STANDARD_GRAVITY
        assert vertical.geometric_altitude(h, latitude) == pytest.approx(altitude, abs=0.1)
        assert vertical.geopotential_height(altitude, latitude) == pytest.approx(h, abs=0.1)


@given(st.floats(-90.0, 90.0), st.floats(-400.0, 20000.0))
def test_geometric_altitude_and_its_inverse(latitude, altitude):
    there = vertical.geopotential_height(altitude, latitude)
    assert vertical.geometric_altitude(there, latitude) == pytest.approx(altitude, abs=1e-7)


def test_missing_levels_are_bridged():
    """A gap leaves the levels around it where they are when virtual temperature is linear."""
    p = 1.0e5 * np.exp(-np.linspace(0.0, 1.0, 6))
    t = 285.0 - np.linspace(0.0, 30.0, 6)
    whole = vertical.hypsometric_height(p, t, 0.0)
    for missing in ([2], [0], [5], [2, 3]):
        holed = t.copy()
        holed[missing] = np.nan
        h = vertical.hypsometric_height(p, holed, 0.0)
        keep = np.setdiff1d(np.arange(6), missing)
        np.testing.assert_allclose(h[keep], whole[keep] - whole[keep[0]], rtol=1e-12, atol=1e-9)
        assert np.isnan(h[missing]).all()


def test_layer_up_to_zero_pressure_has_the_documented_alpha():
    """IFS section 2.2.1: α = ln 2 in the topmost layer."""
    half = np.array([1.0e5, 5.0e4, 0.0])
    t = np.array([280.0, 240.0])
    phi = vertical.geopotential_on_full_levels(t, 0.0 * t, half)
    below = vertical.DRY_AIR_GAS_CONSTANT * 280.0 * np.log(2.0)
    assert phi[1] == pytest.approx(below + vertical.DRY_AIR_GAS_CONSTANT * 240.0 * np.log(2.0))


def test_surface_height_between_levels_and_with_levels_under_ground():
    p = np.array([[1.0e5, 9.0e4, 8.0e4]] * 3)
    h = np.array([[100.0, 1000.0, 2000.0], [np.nan, 1000.0, 2000.0], [100.0, 1000.0, 2000.0]])
    tv = np.full((3, 3), 280.0)
    ps = np.array([9.5e4, 9.5e4, 7.0e4])
    z = vertical.surface_height(p, h, tv, ps)
    share = np.log(9.5e4 / 9.0e4) / np.log(1.0e5 / 9.0e4)
    assert z[0] == pytest.approx(1000.0 + share * (100.0 - 1000.0))
    scale = vertical.DRY_AIR_GAS_CONSTANT * 280.0 / vertical.STANDARD_GRAVITY
    assert z[1] == pytest.approx(1000.0 - scale * np.log(9.5e4 / 9.0e4))
    assert np.isnan(z[2])


def test_below_ground_by_pressure_or_altitude():
    p, z = np.array([[1.0e5, 9.0e4, 8.0e4]]), np.array([[50.0, 900.0, 1900.0]])
    unknown = np.array([np.nan])
    by_pressure = vertical.below_ground(p, z, np.array([9.5e4]), unknown)
    by_altitude = vertical.below_ground(p, z, unknown, np.array([900.0]))
    assert by_pressure.tolist() == by_altitude.tolist() == [[True, False, False]]
    assert not vertical.below_ground(p, z, unknown, unknown).any()
