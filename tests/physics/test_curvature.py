"""M, k, curvature and layer classes against P.453 figures and their definitions."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.physics.curvature import (
    STANDARD_GRADIENT,
    classify_layers,
    effective_earth_radius_factor,
    modified_refractivity,
    ray_curvature,
    reference_refractivity,
)
from forecast.schema import LAYER_CLASSES
from tests.reference import record, records

A = 6371e3


@pytest.mark.parametrize("row", records("itu_ref_N_"), ids=lambda r: r["id"])
def test_reference_atmosphere(row):
    # Rec. ITU-R P.453 section 2.1: 315 exp(−h/7.35), analytic.
    h = 1e3 * row["inputs"]["h_km"]
    expected = row["expected"]
    n = reference_refractivity(h)
    assert n == pytest.approx(expected["N"], rel=1e-6)
    assert modified_refractivity(n, h, A) == pytest.approx(expected["M"], rel=1e-6)
    gradient = -n / 7.35
    assert effective_earth_radius_factor(gradient, A) == pytest.approx(
        expected["k_local"], rel=1e-6
    )


def test_k_of_known_gradients():
    # k = 1/(1 + a dn/dh), analytic; STANDARD_GRADIENT is the one of k = 4/3.
    expected = record("k_from_gradients")["expected"]
    for gradient, name in (
        (-39.0, "k(-39)"),
        (-40.0, "k(-40)"),
        (-40.06953337546084, "k(dN_first_km)"),
        (-42.85714285714286, "k(initial -42.857)"),
    ):
        assert effective_earth_radius_factor(gradient, A) == pytest.approx(expected[name], rel=1e-6)
    assert pytest.approx(expected["gradient_for_4/3_N_per_km"], rel=1e-6) == STANDARD_GRADIENT
    assert effective_earth_radius_factor(STANDARD_GRADIENT, A) == pytest.approx(4 / 3, rel=1e-6)


def test_gradients_of_m():
    row = record("M_gradients")["expected"]
    per_km = {
        "dM/dh standard (4/3)": STANDARD_GRADIENT,
        "dM/dh vacuum": 0.0,
        "dM/dh for dN=-40": -40.0,
    }
    for name, gradient in per_km.items():
        rise = modified_refractivity(300.0 + gradient, 1000.0, A) - modified_refractivity(
            300.0, 0.0, A
        )
        assert rise == pytest.approx(row[name], abs=1e-4)


def test_k_is_signed_and_infinite_where_rays_follow_the_earth():
    # A radius of 1e9 m makes 1 + a dn/dz exactly 0 in binary at −1 N/km.
    k = effective_earth_radius_factor(np.array([-1.0, -1.5, -0.5]), 1e9)
    assert np.isinf(k[0])
    assert k[1] < 0.0 < k[2]
    assert effective_earth_radius_factor(0.0, A) == 1.0


@given(st.floats(-1000.0, 300.0), st.floats(6.33e6, 6.4e6))
def test_k_and_curvature_are_two_names_of_one_thing(gradient, radius):
    # 1/(k a) = 1/a − κ at n = 1 and a level ray (Rec. ITU-R P.834 section 2).
    k = effective_earth_radius_factor(gradient, radius)
    assert 1.0 / (k * radius) == pytest.approx(
        1.0 / radius - ray_curvature(gradient), rel=1e-9, abs=1e-20
    )


def test_curvature_by_definition():
    # κ = −(1/n) dn/dz cos θ: positive towards the Earth where N falls.
    assert ray_curvature(-157.0, 300.0, 0.0) == pytest.approx(1.57e-7 / 1.0003, rel=1e-14)
    assert ray_curvature(-157.0, 0.0, np.pi / 3) == pytest.approx(1.57e-7 / 2, rel=1e-12)
    assert ray_curvature(40.0) < 0.0


def test_layer_classes_at_their_bounds():
    critical = -1e9 / A
    gradient = np.array([20.0, 0.0, -40.0, -79.0, -79.01, critical * (1 - 1e-9), critical - 1e-6])
    names = [
        "sub_refractive",
        "normal",
        "normal",
        "normal",
        "super_refractive",
        "super_refractive",
        "trapping",
    ]
    assert classify_layers(gradient, A).tolist() == [LAYER_CLASSES[n] for n in names]
    assert classify_layers(np.array([np.nan]), A).tolist() == [-1]


@given(st.lists(st.floats(-1000.0, 300.0), min_size=1, max_size=20))
def test_trapping_is_where_k_is_negative(gradients):
    g = np.array(gradients)
    trapping = classify_layers(g, A) == LAYER_CLASSES["trapping"]
    assert np.array_equal(trapping, effective_earth_radius_factor(g, A) < 0.0)
