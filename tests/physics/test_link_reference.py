"""Reference losses against check records, the residue series, the Fresnel integral and limits.

Records p526_* and knife_edge_*: own calculations of the Recommendation's formulas (coefficients
from memory but derived anew), with mpmath and scipy.special.
"""

from __future__ import annotations

import itur
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from forecast.physics.link_reference import (
    LIGHT_SPEED,
    effective_earth_radius,
    free_space_loss,
    knife_edge_loss,
    knife_edge_parameter,
    reference_modified_refractivity,
    reference_path_loss,
    smooth_earth_loss,
)
from tests.physics.field_references import knife_edge, residue_series, surface_impedance
from tests.reference import record

# id p526_*: frequency, heights, distance km, P.526 value and residue series, dB.
SMOOTH = [
    (3.0e9, 25.0, 25.0, 60.0, -38.98488901, -38.60829079),
    (1.0e9, 30.0, 30.0, 80.0, -47.67792141, -46.97015263),
    (0.3e9, 50.0, 100.0, 120.0, -46.08300352, -45.5159278),
    (9.4e9, 10.0, 5.0, 40.0, -49.79624703, -49.21710433),
]


@pytest.mark.parametrize(("f", "h1", "h2", "km", "fit", "series"), SMOOTH)
def test_smooth_earth_beyond_the_horizon(f, h1, h2, km, fit, series):
    # 0.01 dB covers 2.188 and 9.575e-3 of the print against π/λ here.
    loss = smooth_earth_loss(f, h1, h2, 1e3 * km)
    assert loss == pytest.approx(-fit, abs=0.01)
    # The Recommendation's approximation of F(X) and G(Y) lies 0.3–0.8 dB under the true field.
    assert 0.3 < loss + series < 0.8


@pytest.mark.parametrize("f", [30e6, 0.3e9, 1e9, 3e9, 10e9])
def test_smooth_earth_follows_the_residue_series_for_horizontal_polarisation(f):
    d = np.array([60e3, 100e3, 200e3])
    loss = smooth_earth_loss(f, 20.0, 30.0, d)
    gap = loss + residue_series(f, 20.0, 30.0, d)
    assert np.all((gap > -0.1) & (gap < 0.8))


def test_vertical_polarisation_over_the_sea():
    # Ground-wave regime, low antennas: both polarisations differ by tens of dB, and the fit keeps
    # to the series (K about 0.9 at 30 MHz).
    f, d = 30e6, np.array([60e3, 100e3, 200e3])
    permittivity = 70.0 + 60j * LIGHT_SPEED / f * 5.0
    series = residue_series(
        f, 20.0, 30.0, d, impedance=surface_impedance(permittivity, "vertical"), count=80
    )
    vertical = smooth_earth_loss(f, 20.0, 30.0, d, polarisation="vertical")
    assert vertical == pytest.approx(-series, abs=2.5)
    assert np.all(smooth_earth_loss(f, 20.0, 30.0, d) - vertical > 20.0)
    # At 100 MHz and 20–30 m the fit's height gain, which has no phase, is 2–4 dB too large.
    f = 100e6
    permittivity = 70.0 + 60j * LIGHT_SPEED / f * 5.0
    series = residue_series(
        f, 20.0, 30.0, d, impedance=surface_impedance(permittivity, "vertical"), count=80
    )
    short = -series - smooth_earth_loss(f, 20.0, 30.0, d, polarisation="vertical")
    assert np.all((short > 1.5) & (short < 4.0))
    # At 3 GHz the surface hardly matters any more.
    both = [
        smooth_earth_loss(3e9, 20.0, 30.0, 60e3, polarisation=p) for p in ("vertical", "horizontal")
    ]
    assert both[0] == pytest.approx(both[1], abs=0.05)


@given(st.floats(1e8, 4e10), st.floats(2.0, 300.0), st.floats(2.0, 300.0), st.floats(-3.0, 3.0))
def test_loss_falls_with_height_rises_with_distance_and_does_not_jump(f, h1, h2, over):
    radius = 8.495e6
    horizon = np.sqrt(2 * radius) * (np.sqrt(h1) + np.sqrt(h2))
    d = horizon * 2.0**over
    loss = smooth_earth_loss(f, h1, h2, d)
    assert loss >= 0.0
    assert loss == pytest.approx(smooth_earth_loss(f, h2, h1, d), rel=1e-9, abs=1e-9)
    # Interpolated up to the horizon, diffraction beyond it: one value there.
    at = smooth_earth_loss(f, h1, h2, horizon * np.array([1 - 1e-9, 1 + 1e-9]))
    assert at[0] == pytest.approx(at[1], abs=1e-4)
    assert smooth_earth_loss(f, h1, h2, 1.05 * max(d, horizon)) > smooth_earth_loss(
        f, h1, h2, max(d, horizon)
    )


def test_a_clear_zone_costs_nothing_and_a_flat_earth_little():
    # 60 % of the first Fresnel zone clear: P.526 section 3.1.2 says no loss.
    assert smooth_earth_loss(10e9, 200.0, 200.0, 20e3) == 0.0
    curved = smooth_earth_loss(1e9, 20.0, 20.0, 30e3)
    flat = smooth_earth_loss(1e9, 20.0, 20.0, 30e3, effective_earth_radius(np.inf))
    hollow = smooth_earth_loss(1e9, 20.0, 20.0, 30e3, effective_earth_radius(-2.0))
    assert 0.0 < flat == hollow < curved


@pytest.mark.parametrize(("h1", "h2", "radius"), [(20.0, 50.0, 8.5e6), (40.0, 8.0, 1e12)])
def test_in_sight_the_loss_is_the_share_of_the_zone_that_is_blocked(h1, h2, radius):
    # Section 3.1.2 anew: the point of reflection by equal grazing angles, found by a root finder,
    # instead of the cubic's closed form.
    f, d = 1e9, 25e3
    x = brentq(
        lambda u: (h1 / u - u / 2 / radius) - (h2 / (d - u) - (d - u) / 2 / radius), 1.0, d - 1.0
    )
    clearance = h1 + (h2 - h1) * x / d - x * (d - x) / (2.0 * radius)
    needed = 0.552 * np.sqrt(x * (d - x) * LIGHT_SPEED / f / d)
    assert 0.0 < clearance < needed
    grazing = 0.5 * (d / (np.sqrt(h1) + np.sqrt(h2))) ** 2 * (1.0 - 1e-9)
    expected = (1.0 - clearance / needed) * smooth_earth_loss(f, h1, h2, d, grazing)
    assert smooth_earth_loss(f, h1, h2, d, radius) == pytest.approx(expected, rel=1e-5)


def test_low_k_costs_more():
    k = np.array([0.6, 1.0, 4.0 / 3.0, 3.0, np.inf, -5.0])
    loss = reference_path_loss(3e9, 30.0, 30.0, 45e3, k)
    assert np.all(np.diff(loss) <= 0.0)
    assert loss[0] > loss[2] + 10.0
    assert np.isnan(reference_path_loss(3e9, 30.0, 30.0, 45e3, np.nan))


def test_free_space():
    # Rec. P.525: 32.4 + 20 log f(MHz) + 20 log d(km); the 32.4 is 32.4478 rounded.
    assert free_space_loss(1e9, 1e3) == pytest.approx(32.4478 + 60.0, abs=1e-4)
    assert np.diff(free_space_loss(2e9, np.array([1e3, 2e3])))[0] == pytest.approx(6.0206)


def test_reference_atmosphere():
    # Rec. ITU-R P.453 section 2.1, analytic.
    for row in ("itu_ref_N_0km", "itu_ref_N_1km", "itu_ref_N_10km"):
        reference = record(row)
        height = 1e3 * reference["inputs"]["h_km"]
        assert reference_modified_refractivity(height) == pytest.approx(
            reference["expected"]["M"], rel=1e-6
        )


@pytest.mark.parametrize("nu", np.linspace(-0.7, 20.0, 30))
def test_knife_edge_keeps_to_the_fresnel_integral(nu):
    # Within 0.5 dB is the bar; the fit does better.
    assert knife_edge_loss(nu) == pytest.approx(knife_edge(nu), abs=0.15)


def test_knife_edge_records_and_end():
    # id knife_edge_*: P.526 J(ν), from memory.
    nu = np.array([-0.78 + 1e-12, 0.0, 0.5, 1.0, 3.0])
    expected = [0.004038135159, 6.032852209, 10.28780374, 13.92572893, 22.41595383]
    assert knife_edge_loss(nu) == pytest.approx(expected, abs=1e-8)
    assert np.all(knife_edge_loss(np.array([-0.79, -5.0])) == 0.0)
    # ν = √2 h / F1: at the rim of the first zone √2, on the line 0.
    rim = np.sqrt(0.3 * 10e3 * 20e3 / 30e3)
    assert knife_edge_parameter(rim, 10e3, 20e3, LIGHT_SPEED / 0.3) == pytest.approx(np.sqrt(2.0))


def test_gases_cost_what_the_docstring_says():
    # Rec. ITU-R P.676-12 line by line, through a library.
    for ghz, told in ((1.0, 0.005), (3.0, 0.008), (10.0, 0.014), (22.2, 0.19), (40.0, 0.13)):
        gamma = itur.models.itu676.gamma_exact(ghz, 1013.25, 7.5, 288.15).value
        assert gamma == pytest.approx(told, rel=0.1)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: free_space_loss(3.0, 1e3), "10 MHz and 1 THz"),
        (lambda: free_space_loss(1e9, 0.0), "distance"),
        (lambda: smooth_earth_loss(1e9, -1.0, 10.0, 1e4), "first_height"),
        (lambda: smooth_earth_loss(1e9, 1.0, 10.0, 1e4, polarisation="slant"), "horizontal"),
        (lambda: smooth_earth_loss(1e9, 1.0, 10.0, 1e4, conductivity=-1.0), "conductivity"),
        (lambda: effective_earth_radius(0.0), "4/3"),
        (lambda: knife_edge_parameter(1.0, 0.0, 1.0, 1e9), "first_distance"),
    ],
)
def test_bad_input_is_named(call, message):
    with pytest.raises(ValueError, match=message):
        call()
