"""The radio field against images, modes and edges computed by other means, and its own laws.

A parabolic equation can look right and be wrong by its grid, its top or its source: each bar below
is against `tests.physics.field_references`, which solves none.
"""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.radio_field import Beam, propagate
from tests.physics.field_references import (
    STANDARD_RADIUS,
    residue_series,
    two_ray_flat,
)
from tests.physics.mode_references import Air, spectral_field

FLAT = 1e15  # m: an Earth without curvature
LEVELS = np.array([0.0, 100e3])
STANDARD = 1e6 * LEVELS / STANDARD_RADIUS  # straight rays over the 4/3 Earth


def field(frequency, antenna, receivers, distance, modified=STANDARD, height=LEVELS, **options):
    return propagate(
        height,
        modified,
        frequency,
        antenna,
        distance=distance,
        receiver_heights=receivers,
        threads=1,
        **options,
    )


class TestSmoothSea:
    """Horizontal polarisation over a smooth, perfectly conducting surface."""

    @pytest.mark.parametrize(
        ("frequency", "antenna", "distance"),
        [(3e9, 20.0, 10e3), (10e9, 25.0, 5e3), (1e9, 30.0, 20e3), (3e9, 20.0, 3e3)],
    )
    def test_direct_ray_and_image(self, frequency, antenna, distance):
        heights = np.linspace(1.0, 120.0, 600)
        expected = two_ray_flat(frequency, antenna, heights, distance)
        result = field(
            frequency, antenna, heights, distance, np.zeros(2), earth_radius=FLAT
        ).propagation_factor[0, 0]
        strong = expected > 20.0 * np.log10(0.5)
        apart = result[strong] - expected[strong]
        assert np.sqrt(np.mean(apart**2)) < 0.05  # the bar
        assert np.abs(apart).max() < 0.05

    @pytest.mark.parametrize(
        ("frequency", "antenna", "distance", "nulls"),
        [(10e9, 25.0, 5e3, (2.997962593, 5.995928419)), (3e9, 20.0, 10e3, (24.98283276,))],
    )
    def test_nulls_lie_where_the_paths_differ_by_wavelengths(
        self, frequency, antenna, distance, nulls
    ):
        """Heights: exact image geometry."""
        for null in nulls:
            heights = null * np.linspace(0.95, 1.05, 401)
            result = field(
                frequency, antenna, heights, distance, np.zeros(2), earth_radius=FLAT
            ).propagation_factor[0, 0]
            assert heights[np.argmin(result)] == pytest.approx(null, rel=0.002)

    @pytest.mark.parametrize(
        ("frequency", "source", "receiver", "distances"),
        [
            (0.3e9, 50.0, 100.0, (120e3, 205e3)),
            (1e9, 30.0, 30.0, (80e3, 140e3)),
            (3e9, 25.0, 25.0, (60e3, 107e3)),
            (10e9, 10.0, 5.0, (40e3, 66e3)),
            (30e6, 300.0, 100.0, (300e3,)),
            (40e9, 10.0, 5.0, (35e3,)),
        ],
    )
    def test_far_beyond_the_horizon(self, frequency, source, receiver, distances):
        """Down to −100 dB."""
        expected = residue_series(frequency, source, receiver, np.array(distances))
        assert expected[-1] > -100.5
        result = field(frequency, source, receiver, distances).propagation_factor[0, :, 0]
        np.testing.assert_allclose(result, expected, atol=0.3)

    def test_beyond_the_horizon_at_records(self):
        """Residue series with 60 modes, computed by a short code of its own with mpmath."""
        for frequency, source, receiver, distance, expected in [
            (3e9, 25.0, 25.0, 60e3, -38.60829079),
            (1e9, 30.0, 30.0, 80e3, -46.97015263),
            (0.3e9, 50.0, 100.0, 120e3, -45.5159278),
            (9.4e9, 10.0, 5.0, 40e3, -49.21710433),
        ]:
            result = field(frequency, source, receiver, distance).propagation_factor[0, 0, 0]
            assert result == pytest.approx(expected, abs=0.05)


class TestLaws:
    def test_energy_is_kept_without_an_absorber(self):
        result = field(3e9, 25.0, 20.0, 200e3)
        open_top = result.steps._replace(absorber=False)
        closed = field(3e9, 25.0, 20.0, [50e3, 200e3], steps=open_top)
        np.testing.assert_allclose(closed.energy, 1.0, rtol=0.0, atol=1e-9)
        assert result.energy[0, 0] < 0.5  # with it, most has left through the top

    @pytest.mark.parametrize("frequency", [0.3e9, 3e9])
    def test_antennas_can_be_swapped(self, frequency):
        height = np.array([0.0, 40.0, 80.0, 2000.0])
        duct = np.array([320.0, 326.0, 300.0, 526.0])
        for low, high in ((10.0, 60.0), (25.0, 300.0)):
            there = field(frequency, low, high, 70e3, duct, height).path_loss[0, 0, 0]
            back = field(frequency, high, low, 70e3, duct, height).path_loss[0, 0, 0]
            assert there == pytest.approx(back, abs=0.2)

    def test_path_loss_is_that_of_free_space_less_the_factor(self):
        """Free space: 32.45 + 20 log f(MHz) + 20 log d(km), Rec. ITU-R P.525."""
        result = field(3e9, 25.0, 25.0, 30e3)
        free = 32.45 + 20.0 * np.log10(3000.0) + 20.0 * np.log10(30.0)
        assert result.path_loss + result.propagation_factor == pytest.approx(free, abs=0.01)


class TestBadInput:
    @pytest.mark.parametrize(
        ("change", "message"),
        [
            ({"frequency": 29e6}, "frequency"),
            ({"frequency": 41e9}, "frequency"),
            ({"frequency": np.nan}, "frequency"),
            ({"antenna_height": -1.0}, "antenna height"),
            ({"distance": [2e3, 1e3]}, "rise"),
            ({"distance": []}, "distance"),
            ({"receiver_heights": [np.nan]}, "receiver"),
            ({"modified": [300.0, np.nan]}, "NaN"),
            ({"modified": [300.0, 400.0, 500.0]}, "shape"),
            ({"profile_ranges": [0.0, 1e3]}, "profile"),
            ({"beam": Beam("fan")}, "beam"),
            ({"beam": Beam("sinc", 0.0)}, "width"),
        ],
    )
    def test_is_told(self, change, message):
        good = {
            "height": LEVELS,
            "modified": STANDARD,
            "frequency": 3e9,
            "antenna_height": 20.0,
            "distance": 20e3,
            "receiver_heights": 20.0,
        }
        with pytest.raises(ValueError, match=message):
            propagate(**{**good, **change})

    def test_coarse_steps_are_refused_with_the_value_needed(self):
        good = field(3e9, 25.0, 20.0, 50e3).steps
        for change in ({"range_step": 5e3}, {"height_step": 5.0}):
            with pytest.raises(ValueError, match=r"too coarse; at most [0-9.]+ m"):
                field(3e9, 25.0, 20.0, 50e3, steps=good._replace(**change))

    def test_antenna_above_the_domain(self):
        low = field(3e9, 25.0, 20.0, 50e3).steps
        with pytest.raises(ValueError, match=r"above the domain.* m needed"):
            field(3e9, 5000.0, 20.0, 50e3, steps=low)


class TestDucts:
    """Bilinear M: falls by ``strength`` over ``depth``, then rises by 0.118 per m."""

    @staticmethod
    def air(depth, strength):
        height = np.array([0.0, depth, 100e3])
        return height, np.array([strength, 0.0, 0.118 * (100e3 - depth)])

    @pytest.mark.parametrize(
        ("depth", "strength", "frequency", "expected"),
        [
            (20.0, 5.0, 2.666325917e9, 0.1684532176),
            (20.0, 5.0, 3.332907396e9, 0.05848235748),
            (20.0, 5.0, 1.999744438e9, 0.3865410034),
            (50.0, 15.0, 0.6157615943e9, 0.1046114849),
            (50.0, 15.0, 0.7697019929e9, 0.03330458432),
            (200.0, 30.0, 0.1088522997e9, 0.05345233626),
            (200.0, 30.0, 0.1360653746e9, 0.02216992517),
        ],
    )
    def test_the_first_mode_loses_what_theory_says(self, depth, strength, frequency, expected):
        """dB/km of the exact first mode, computed with mpmath's Airy functions and Muller's root.

        From far away only that mode is left, if the next ones lose much more.
        """
        height, modified = self.air(depth, strength)
        ranges = np.array([250e3, 350e3])
        result = field(frequency, 0.6 * depth, 0.6 * depth, ranges, modified, height)
        one, other = result.propagation_factor[0, :, 0] - 10.0 * np.log10(ranges)
        assert (one - other) / 100.0 == pytest.approx(expected, rel=0.05)

    @pytest.mark.parametrize(
        ("depth", "strength", "frequency"),
        [
            (20.0, 5.0, 3e9),
            (20.0, 5.0, 10e9),
            (50.0, 15.0, 1e9),
            (50.0, 15.0, 3e9),
            (200.0, 30.0, 0.3e9),
            (200.0, 30.0, 1e9),
            (20.0, 40.0, 3e9),
        ],
    )
    def test_field_at_100_km(self, depth, strength, frequency):
        height, modified = self.air(depth, strength)
        receivers = depth * np.array([0.2, 0.5, 0.8])
        expected = spectral_field(
            frequency,
            Air(height[:2], modified[:2], 0.118),
            0.6 * depth,
            receivers,
            100e3,
        )
        result = field(frequency, 0.6 * depth, receivers, 100e3, modified, height)
        np.testing.assert_allclose(result.propagation_factor[0, 0], expected, atol=0.5)


def evaporation_duct(depth):
    """Logarithmic M with its least value at ``depth`` (Paulus–Jeske form, neutral air)."""
    height = np.r_[0.0, np.geomspace(0.1, 60.0, 40), 100.0, 1000.0, 20e3]
    return height, 330.0 + 0.125 * (height - depth * np.log1p(height / 1.5e-4))


class TestSteps:
    @pytest.mark.parametrize("frequency", [0.1e9, 1e9, 3e9, 10e9])
    @pytest.mark.parametrize("air", ["standard", "surface duct", "evaporation duct"])
    def test_halving_both_changes_little(self, frequency, air):
        """Less than 0.1 dB wherever the field is above −80 dB re free space."""
        height, modified = {
            "standard": (LEVELS, STANDARD),
            "surface duct": TestDucts.air(60.0, 12.0),
            "evaporation duct": evaporation_duct(14.0),
        }[air]
        ranges = np.array([20e3, 50e3, 80e3])
        receivers = np.array([4.0, 30.0, 100.0])
        coarse = field(frequency, 20.0, receivers, ranges, modified, height)
        steps = coarse.steps
        finer = steps._replace(
            range_step=0.5 * steps.range_step,
            height_step=0.5 * steps.height_step,
            points=2 * steps.points + 1,
        )
        fine = field(frequency, 20.0, receivers, ranges, modified, height, steps=finer)
        heard = fine.propagation_factor > -80.0
        apart = np.abs(coarse.propagation_factor - fine.propagation_factor)
        assert apart[heard].max() < 0.1
