"""The words for what is seen must follow from closed forms and from the order of the images."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.appearance import appearance, class_words
from forecast.physics.rays import build_medium
from forecast.physics.sightline import standard_medium, trace_sightlines
from forecast.physics.transfer_curve import (
    ARC_SECOND,
    straight_elevation,
    transfer_heights,
    view_elevations,
)

A = 6371e3
FINE = np.concatenate([[0.0], np.geomspace(0.005, 50.0, 160), np.geomspace(51.0, 15e3, 120)])


def air(temperature):
    """Dry air at hydrostatic pressure of 6.5 K/km: what light takes from it is n − 1 ~ p/T."""
    pressure = 101325.0 * (1.0 - 0.0065 * FINE / 288.15) ** 5.2559
    return build_medium(FINE, 277.84 * (pressure / 101325.0) * (288.15 / temperature), A, "optical")


STANDARD = 288.15 - 0.0065 * FINE


def looks(medium, observer, base, top, distance, hidden=False):
    table = trace_sightlines(medium, observer, top, distance, base)

    def transfer(angle):
        return transfer_heights(medium, observer, angle, distance)

    return appearance(transfer, A, observer, base, top, distance, table, hidden), table


def words(medium, *geometry, hidden=False):
    return class_words(int(looks(medium, *geometry, hidden=hidden)[0].classes[0]))


def test_standard_air_neither_lifts_nor_stretches():
    found, table = looks(air(STANDARD), 10.0, 0.0, 100.0, 20e3)
    # 0.17 is the curvature in 6.5 K/km to two digits: 0.1 % of D/2a is 0.3″ here.
    assert abs(found.lift[0]) < 0.5 * ARC_SECOND
    assert found.magnification[0] == pytest.approx(1.0, abs=2e-3)
    assert found.classes[0] == 0
    top = straight_elevation(10.0, 100.0, 20e3, A)
    bottom = straight_elevation(10.0, table.hidden_height[0, 0], 20e3, A)
    assert found.apparent_height[0] == pytest.approx(float(top - bottom), abs=3 * ARC_SECOND)


@pytest.mark.parametrize(("gradient", "word"), [(-100.0, "looming"), (60.0, "sinking")])
def test_even_curvature_lifts_by_the_closed_form(gradient, word):
    # Over a distance D rays of curvature κ arrive D κ/2 higher than straight ones; the
    # curvature of a level ray is −dn/dz / n (Born & Wolf, 7th ed., sect. 3.2).
    z = np.linspace(0.0, 2000.0, 201)
    medium = build_medium(z, 300.0 + 1e-3 * gradient * z, A, "optical")
    found, _ = looks(medium, 20.0, 30.0, 90.0, 25e3)
    curvature = -1e-9 * gradient / 1.0003
    assert found.lift[0] == pytest.approx(12.5e3 * (curvature - 0.17 / A), rel=0.01)
    assert class_words(int(found.classes[0])) == [word]
    assert found.magnification[0] == pytest.approx(1.0, abs=0.01)


@pytest.mark.parametrize("excess", [1.0, 3.0])
def test_warm_water_gives_an_inferior_mirage(excess):
    # The lowest image is inverted: textbook case of air heated from below.
    found = words(air(STANDARD + excess * np.exp(-FINE / 1.5)), 5.0, 0.0, 60.0, 15e3)
    assert "inferior mirage" in found
    assert "superior mirage" not in found


def test_an_inversion_over_the_eye_gives_a_superior_mirage_that_looms():
    inversion = STANDARD + 6.0 / (1.0 + np.exp(-(FINE - 40.0) / 3.0))
    found = words(air(inversion), 20.0, 0.0, 150.0, 40e3)
    assert {"looming", "superior mirage"} <= set(found)
    assert "inferior mirage" not in found


def test_cold_water_lifts_and_squeezes_and_shows_what_standard_air_hides():
    cold = air(STANDARD - 4.0 * np.exp(-FINE / 15.0))
    assert words(cold, 5.0, 0.0, 60.0, 30e3) == ["looming", "stooping"]
    lamp, table = looks(cold, 4.0, 36.0, 36.0, 40e3, hidden=True)
    assert table.state[0, 0] == 2
    assert class_words(int(lamp.classes[0])) == ["looming"]
    assert np.isnan(lamp.magnification[0])  # a point has no height to stretch


def test_the_clear_height_stands_ten_seconds_over_the_horizon():
    # In straight rays: the height at 10″ above the dip, by plane trigonometry of the sphere; told
    # of a hidden target too.
    medium = standard_medium("straight", A)
    for top in (20.0, 400.0):
        found, table = looks(medium, 9.0, 0.0, top, 50e3)
        angle = table.horizon_elevation[0, 0] + 10.0 * ARC_SECOND
        assert straight_elevation(9.0, found.clear_height[0], 50e3, A) == pytest.approx(
            angle, abs=1.5 * ARC_SECOND
        )
        assert found.clear_height[0] > table.hidden_height[0, 0]


def test_nothing_seen_has_no_looks():
    found, _ = looks(air(STANDARD), 4.0, 0.0, 20.0, 60e3)
    assert np.isnan(found.arrival_elevation[0])
    assert np.isnan(found.lift[0])
    assert found.classes[0] == 0
    empty = build_medium(np.full((1, 3), np.nan), np.full((1, 3), np.nan), A, "optical")
    assert looks(empty, 4.0, 0.0, 20.0, 6e3)[0].classes[0] == 0


def test_directions_rise_and_hold_what_was_asked():
    angle = view_elevations(np.array([-2e-3, 0.01]), np.array([0.06, 0.01]))
    assert np.all(np.diff(angle, axis=1) > 0.0)
    assert angle[0, 0] < -2e-3 < 0.06 < angle[0, -1]
    # Folds live near the horizon: there the step is about an arc second.
    assert np.diff(angle, axis=1)[:, :1000].max() < 1.1 * ARC_SECOND


def test_transfer_heights_of_straight_rays_are_those_of_the_triangle():
    vacuum = standard_medium("straight", A)
    angle = np.array([-5e-3, 1e-3, 8e-3])
    found = transfer_heights(vacuum, 50.0, angle, np.array([5e3, 20e3]))[0]
    assert np.isnan(found[0, 1])  # met the sea before
    for i, j in ((0, 0), (1, 0), (1, 1), (2, 1)):
        distance = (5e3, 20e3)[j]
        assert straight_elevation(50.0, found[i, j], distance, A) == pytest.approx(
            angle[i], abs=1e-8
        )
