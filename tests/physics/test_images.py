"""Images, visible intervals and the horizon must be those that rays show."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.rays import build_medium, trace_rays
from forecast.physics.sightline import standard_medium, trace_sightlines
from tests.reference import records

RADIUS = 6371e3


def column(rng):
    """Random air with one to three strong layers, M-units by height."""
    z = np.sort(np.r_[0.0, rng.uniform(1.0, 1500.0, rng.integers(8, 30))])
    z = z[np.r_[True, np.diff(z) > 0.5]]
    slope = rng.normal(0.117, 0.05, z.size - 1)
    for _ in range(rng.integers(1, 4)):
        k = rng.integers(0, max(1, z.size // 2))
        slope[k : k + rng.integers(1, 3)] = -rng.uniform(0.02, 0.6)
    return z, 330.0 + np.r_[0.0, np.cumsum(slope * np.diff(z))]


def images_by_fan(medium, observer, distance, height):
    """Count directions in which rays pass `height`, refining each change of side."""

    def ends(theta):
        rays = trace_rays(medium, observer, theta[None, :], distance, reflect=False)
        return np.where(np.isfinite(rays.blocked_at[0]), np.nan, rays.height[0])

    def count(theta, depth):
        h = ends(theta)
        side = h > height
        change = np.flatnonzero(np.isfinite(h[:-1]) & np.isfinite(h[1:]) & (side[:-1] != side[1:]))
        upright = inverted = 0
        for i in change:
            if abs(h[i + 1] - h[i]) < 0.05:
                upright += h[i + 1] > h[i]
                inverted += h[i + 1] < h[i]
            elif depth:  # a jump between branches stays a jump however near one looks
                u, v = count(np.linspace(theta[i], theta[i + 1], 2001), depth - 1)
                upright, inverted = upright + u, inverted + v
        return upright, inverted

    return count(np.linspace(-12e-3, 30e-3, 60_001), 3)


def test_images_equal_those_of_a_fan():
    rng = np.random.default_rng(9)
    several = 0
    for _ in range(150):
        z, m = column(rng)
        medium = build_medium(z[None], (m - 1e6 * z / RADIUS)[None], RADIUS)
        observer, distance = rng.uniform(1.0, 150.0), rng.uniform(20e3, 100e3)
        height = rng.uniform(5.0, 400.0)
        table = trace_sightlines(medium, observer, height, distance, height)
        found = (int(table.upright_images[0, 0]), int(table.inverted_images[0, 0]))
        assert found == images_by_fan(medium, observer, distance, height)
        several += sum(found) > 1 or found[1] > 0
    assert several >= 3, "the draw must hold mirages"


def test_a_warm_lid_shows_a_far_target_three_times():
    # Superior mirage of three images, upright, inverted, upright (any textbook of atmospheric
    # optics, from memory): air 5 N thinner above a lid at 25 m, eye and target below it.
    z = np.r_[np.arange(0.0, 120.0, 2.0), 150.0, 300.0, 1000.0, 3000.0]
    n = 280.0 - 0.0265 * z - 2.5 * (1.0 + np.tanh((z - 25.0) / 5.0))
    medium = build_medium(z[None], n[None], RADIUS, "optical")
    height = np.arange(10.0, 23.0)
    table = trace_sightlines(medium, 12.0, height, 25e3, height)
    assert (table.upright_images[0] == 2).all()
    assert (table.inverted_images[0] == 1).all()


def test_standard_air_shows_one_upright_image():
    table = trace_sightlines(standard_medium("optical"), 10.0, 200.0, 40e3, 200.0)
    assert (table.upright_images[0, 0], table.inverted_images[0, 0]) == (1, 0)
    assert table.visible_bottom[0, 0, 0] == table.hidden_height[0, 0]
    assert np.isinf(table.visible_top[0, 0, 0])


@pytest.mark.parametrize("row", records("dip_"), ids=lambda r: r["id"])
def test_dip_of_the_horizon(row):
    # "with_k_0p17" of the record: refraction coefficient 0.17, that of standard air at 550 nm
    # (0.170 at 6.5 K/km: record optical_curvature_288.15K). 1 % of the dip for the rest.
    height = row["inputs"]["eye_height_m"]
    table = trace_sightlines(standard_medium("optical"), height, 1.0, 1e3)
    dip = np.degrees(-table.horizon_elevation[0, 0]) * 60.0
    assert dip == pytest.approx(row["expected"]["with_k_0p17"], rel=0.01)
    straight = trace_sightlines(standard_medium("straight"), height, 1.0, 1e3)
    assert np.degrees(-straight.horizon_elevation[0, 0]) * 60.0 == pytest.approx(
        row["expected"]["geometric_arcmin"], abs=0.01
    )


def test_a_surface_duct_lifts_the_horizon_above_level():
    # Rays that a duct turns back meet the sea again and again: the horizon stands at the
    # critical angle of the duct, √(2e-6 ΔM) with ΔM from the eye to the duct's top.
    m_eye, m_top = 328.0, 320.0
    z, m = np.array([0.0, 10.0, 40.0, 1000.0]), np.array([330.0, m_eye, m_top, 440.0])
    medium = build_medium(z[None], (m - 1e6 * z / RADIUS)[None], RADIUS)
    table = trace_sightlines(medium, 10.0, 5.0, 50e3)
    assert table.horizon_elevation[0, 0] == pytest.approx(np.sqrt(2e-6 * (m_eye - m_top)), rel=2e-3)


def test_a_near_target_is_seen_down_to_its_foot_and_its_elevation_is_known():
    # Closer than the horizon: straight rays, plain trigonometry (flat to 0.1 % at 3 km).
    table = trace_sightlines(standard_medium("straight"), 50.0, 20.0, 3e3, 20.0)
    assert table.hidden_height[0, 0] == 0.0
    assert (table.upright_images[0, 0], table.inverted_images[0, 0]) == (1, 0)
    drop = 3e3**2 / (2.0 * RADIUS)
    expected = np.arctan((20.0 - 50.0 - drop) / 3e3)
    assert table.apparent_elevation[0, 0] == pytest.approx(expected, rel=1e-3)
