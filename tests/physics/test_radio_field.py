"""The radio field against images, modes and edges computed by other means, and its own laws.

A parabolic equation can look right and be wrong by its grid, its top or its source: each bar below
is against `tests.physics.field_references`, which solves none.
"""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.curvature import reference_refractivity
from forecast.physics.field_surface import (
    ground_permittivity,
    reflection_coefficient,
    roughness_reduction,
    sea_permittivity,
    surface_impedance,
)
from forecast.physics.radio_field import Beam, Surface, Terrain, propagate
from tests.physics.field_references import (
    LIGHT_SPEED,
    STANDARD_RADIUS,
    knife_edge,
    knife_edge_on_ground,
    residue_series,
    two_ray_flat,
    two_ray_slope,
)
from tests.physics.mode_references import Air, linear_air, spectral_field

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
            ({"earth_radius": -6371e3}, "radius"),
            ({"polarisation": "left"}, "polarisation"),
            ({"surface": Surface(0.5)}, "permittivity"),
            ({"surface": Surface(70.0 - 40.0j)}, "imaginary"),
            ({"terrain": Terrain([0.0, 20e3], [30.0, 0.0])}, "above the antenna"),
            ({"terrain": Terrain([0.0, 10e3], [0.0, 0.0])}, "path goes from 0"),
            ({"terrain": Terrain([0.0, 20e3], [0.0, np.nan])}, "finite"),
            ({"terrain": Terrain([0.0, 20e3], [0.0, 0.0], [30e3], [9.0])}, "outside the path"),
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


class TestVerticalPolarisation:
    @pytest.mark.parametrize(
        ("frequency", "antenna", "distance"), [(3e9, 20.0, 10e3), (10e9, 25.0, 5e3)]
    )
    def test_direct_ray_and_fresnel_image_over_sea(self, frequency, antenna, distance):
        sea = complex(sea_permittivity(frequency))
        heights = np.linspace(1.0, 100.0, 2000)
        expected = two_ray_flat(frequency, antenna, heights, distance, sea, "vertical")
        result = field(
            frequency, antenna, heights, distance, np.zeros(2), earth_radius=FLAT,
            polarisation="vertical", surface=Surface(sea),
        ).propagation_factor[0, 0]  # fmt: skip
        assert np.abs(result - expected).max() < 0.3  # the bar
        lows = (expected[1:-1] < expected[:-2]) & (expected[1:-1] < expected[2:])
        ours = (result[1:-1] < result[:-2]) & (result[1:-1] < result[2:])
        assert lows.sum() > 2
        np.testing.assert_allclose(heights[1:-1][ours], heights[1:-1][lows], rtol=0.01)

    @pytest.mark.parametrize(
        ("frequency", "source", "receiver", "distance"),
        [(30e6, 100.0, 50.0, 200e3), (0.3e9, 50.0, 100.0, 120e3), (1e9, 30.0, 30.0, 130e3)],
    )
    def test_far_beyond_the_horizon(self, frequency, source, receiver, distance):
        sea = complex(sea_permittivity(frequency))
        delta = surface_impedance(sea, "vertical")
        expected = residue_series(frequency, source, receiver, distance, impedance=delta)
        result = field(frequency, source, receiver, distance, polarisation="vertical")
        assert result.propagation_factor[0, 0, 0] == pytest.approx(expected, abs=0.1)

    @pytest.mark.parametrize(
        ("frequency", "antenna", "permittivity"),
        [
            (30e6, 3.0, complex(sea_permittivity(30e6))),
            (100e6, 5.0, ground_permittivity(100e6, "wet")),
            (1e9, 10.0, ground_permittivity(1e9, "medium dry")),
        ],
    )
    def test_low_antennas_and_the_surface_wave(self, frequency, antenna, permittivity):
        """Against the whole spectrum integrated, 30 km away; 30 MHz over sea clings most."""
        receivers = np.array([3.0, 30.0])
        expected = spectral_field(
            frequency,
            linear_air(),
            antenna,
            receivers,
            30e3,
            surface_impedance(permittivity, "vertical"),
        )
        result = field(
            frequency, antenna, receivers, 30e3, polarisation="vertical",
            surface=Surface(permittivity),
        ).propagation_factor[0, 0]  # fmt: skip
        np.testing.assert_allclose(result, expected, atol=0.1)


class TestRoughSea:
    @pytest.mark.parametrize("polarisation", ["horizontal", "vertical"])
    @pytest.mark.parametrize(("frequency", "waves"), [(3e9, 0.5), (10e9, 0.3), (10e9, 0.02)])
    def test_the_image_is_weaker(self, frequency, waves, polarisation):
        """Rays with the coefficient of Miller and Brown; a third of the image is left."""
        sea, antenna, distance = complex(sea_permittivity(frequency)), 20.0, 5e3
        heights = np.linspace(2.0, 80.0, 200)
        above = antenna + heights
        grazing = np.arctan(above / distance)
        direct, mirrored = np.hypot(distance, antenna - heights), np.hypot(distance, above)
        turn = roughness_reduction(frequency, waves, grazing)
        turn = turn * reflection_coefficient(sea, grazing, polarisation)
        k = 2.0 * np.pi * frequency / LIGHT_SPEED
        image = turn * direct / mirrored * np.exp(1j * k * (mirrored - direct))
        expected = 20.0 * np.log10(np.abs(1.0 + image))
        result = field(
            frequency, antenna, heights, distance, np.zeros(2), earth_radius=FLAT,
            polarisation=polarisation, surface=Surface(sea, waves),
        ).propagation_factor[0, 0]  # fmt: skip
        assert np.sqrt(np.mean((result - expected) ** 2)) < 0.3
        assert np.abs(result - expected).max() < 1.0


class TestTerrain:
    @pytest.mark.parametrize(
        ("frequency", "antenna", "distance", "slope"),
        [(3e9, 20.0, 10e3, 0.02), (3e9, 20.0, 10e3, 0.05), (3e9, 20.0, 10e3, -0.05),
         (1e9, 30.0, 10e3, 0.1)],
    )  # fmt: skip
    def test_a_slope_is_level_ground_turned(self, frequency, antenna, distance, slope):
        heights = np.linspace(2.0, 60.0, 100)
        expected = two_ray_slope(frequency, antenna, heights, distance, slope)
        base = 1000.0 if slope < 0.0 else 0.0
        x = np.linspace(0.0, distance, 21)
        result = field(
            frequency, base + antenna, base + slope * distance + heights, distance, np.zeros(2),
            earth_radius=FLAT, terrain=Terrain(x, base + slope * x),
        ).propagation_factor[0, 0]  # fmt: skip
        strong = expected > 20.0 * np.log10(0.5)
        assert np.abs(result - expected)[strong].max() < 0.3

    @pytest.mark.parametrize(
        ("frequency", "antenna", "edge", "at", "distance"),
        [(3e9, 50.0, 60.0, 10e3, 20e3), (1e9, 50.0, 80.0, 10e3, 20e3),
         (1e9, 40.0, 60.0, 5e3, 25e3), (10e9, 30.0, 30.0, 10e3, 20e3)],
    )  # fmt: skip
    def test_knife_edge_on_level_ground(self, frequency, antenna, edge, at, distance):
        """Four Fresnel integrals: both antennas and their images."""
        heights = np.linspace(5.0, 120.0, 100)
        expected = knife_edge_on_ground(frequency, antenna, heights, edge, at, distance)
        result = field(
            frequency, antenna, heights, distance, np.zeros(2), earth_radius=FLAT,
            terrain=Terrain([0.0, distance], [0.0, 0.0], [at], [edge]),
        ).propagation_factor[0, 0]  # fmt: skip
        heard = expected > -40.0
        assert np.abs(result - expected)[heard].max() < 0.5

    def test_knife_edge_in_free_space(self):
        """A beam too narrow to see the ground; loss by scipy's Fresnel integrals."""
        frequency, high, at, distance = 3e9, 400.0, 10e3, 20e3
        heights = high + np.array([-60.0, -20.0, 0.0, 20.0, 60.0])
        free, behind = (
            field(
                frequency, high, heights, distance, np.zeros(2), earth_radius=FLAT,
                beam=Beam("gaussian", 0.02),
                terrain=Terrain([0.0, distance], [0.0, 0.0], edges, [high] * len(edges)),
            ).propagation_factor[0, 0]
            for edges in ([], [at])
        )  # fmt: skip
        line = 0.5 * (high + heights)
        wavelength = LIGHT_SPEED / frequency
        nu = (high - line) * np.sqrt(2.0 * distance / (wavelength * at * (distance - at)))
        np.testing.assert_allclose(free - behind, knife_edge(nu), atol=0.5)

    def test_a_steep_ridge_blocks_as_its_edge_does(self):
        """Steeper than the map follows: a triangle 80 m high and 400 m wide, near a screen."""
        ranges = np.array([0.0, 9.8e3, 10e3, 10.2e3, 20e3])
        ridge = Terrain(ranges, np.array([0.0, 0.0, 80.0, 0.0, 0.0]))
        screen = Terrain(ranges, np.zeros(5), [10e3], [80.0])
        over, behind = (
            field(
                1e9, 30.0, [30.0, 60.0], 20e3, np.zeros(2), earth_radius=FLAT, terrain=t
            ).propagation_factor[0, 0]
            for t in (ridge, screen)
        )
        np.testing.assert_allclose(over, behind, atol=2.0)

    def test_below_the_ground_is_no_field(self):
        hill = Terrain([0.0, 10e3, 20e3], [0.0, 100.0, 100.0])
        result = field(1e9, 30.0, [50.0, 130.0], [10e3, 20e3], terrain=hill)
        assert np.all(np.isnan(result.propagation_factor[0, :, 0]))
        assert np.all(np.isfinite(result.propagation_factor[0, :, 1]))


class TestBeams:
    @pytest.mark.parametrize("beam", [Beam("gaussian", 0.02, 0.005), Beam("sinc", 0.02, -0.005)])
    def test_pattern_is_seen_from_afar(self, beam):
        """Each ray weighted by its own angle, the image by that below the horizon."""
        high, distance, k = 500.0, 10e3, 2.0 * np.pi * 3e9 / LIGHT_SPEED

        def pattern(angle):
            off = (np.sin(angle) - np.sin(beam.tilt)) / np.sin(0.5 * beam.width)
            if beam.kind == "gaussian":
                return 0.5 ** (0.5 * off**2)
            return np.sinc(1.3915574 / np.pi * off)

        heights = np.linspace(400.0, 600.0, 81)
        direct = np.hypot(distance, heights - high)
        mirrored = np.hypot(distance, heights + high)
        image = pattern(-np.arctan((heights + high) / distance)) * direct / mirrored
        expected = pattern(np.arctan((heights - high) / distance))
        expected = np.abs(expected - image * np.exp(1j * k * (mirrored - direct)))
        result = field(
            3e9, high, heights, distance, np.zeros(2), earth_radius=FLAT, beam=beam
        ).propagation_factor[0, 0]
        np.testing.assert_allclose(result, 20.0 * np.log10(expected), atol=0.1)


class TestBatchAndPath:
    def test_cases_do_not_touch_each_other(self):
        """A batch, on any number of threads, is its cases one by one."""
        height, duct = evaporation_duct(12.0)
        batch = np.stack([duct, duct + 0.01 * height, duct + 20.0, 0.12 * height + 300.0])
        steps = field(3e9, 20.0, 15.0, 40e3, batch, height).steps
        together = propagate(
            height, batch, 3e9, 20.0, distance=[20e3, 40e3], receiver_heights=[5.0, 15.0],
            steps=steps, threads=2,
        )  # fmt: skip
        assert together.path_loss.shape == (4, 2, 2)
        for i, one in enumerate(batch):
            alone = field(3e9, 20.0, [5.0, 15.0], [20e3, 40e3], one, height, steps=steps)
            # Only the reference wavenumber, taken from all cases, differs.
            np.testing.assert_allclose(
                together.path_loss[i], alone.path_loss[0], rtol=0.0, atol=0.02
            )

    def test_padded_levels_are_left_out(self):
        height, duct = evaporation_duct(12.0)
        padded = np.r_[height, np.nan], np.r_[duct, np.nan]
        np.testing.assert_array_equal(
            field(3e9, 20.0, 15.0, 40e3, duct, height).path_loss,
            field(3e9, 20.0, 15.0, 40e3, padded[1], padded[0]).path_loss,
        )

    def test_equal_profiles_along_the_path_are_one_profile(self):
        height, duct = evaporation_duct(12.0)
        one = field(3e9, 20.0, 15.0, 60e3, duct, height).path_loss
        many = field(
            3e9, 20.0, 15.0, 60e3, np.stack([duct] * 3), height, profile_ranges=[0.0, 20e3, 90e3]
        ).path_loss
        np.testing.assert_allclose(many, one, rtol=0.0, atol=1e-6)

    def test_a_beam_bends_with_a_gradient_that_grows_along_the_path(self):
        """The mean height of a wave obeys Newton: z'' = dm/dz, which goes from one to another."""
        distance, high, first, last = 40e3, 400.0, 1.18e-7, 1.97e-7
        height = np.array([0.0, 1000.0, 5000.0])
        air = 1e6 * np.stack([first * height, last * height])
        receivers = np.linspace(250.0, 800.0, 401)
        result = field(
            3e9, high, receivers, distance, air, height, profile_ranges=[0.0, distance],
            beam=Beam("gaussian", 0.004),
        ).propagation_factor[0, 0]  # fmt: skip
        power = 10.0 ** (0.1 * result)
        centre = np.sum(power * receivers) / np.sum(power)
        climb = distance**2 * (first / 2.0 + (last - first) / 6.0)
        assert centre - high == pytest.approx(climb, rel=0.01)

    def test_reciprocal_along_a_changing_path(self):
        height, duct = evaporation_duct(15.0)
        plain = 330.0 + 0.118 * height
        there = field(
            3e9, 10.0, 40.0, 60e3, np.stack([duct, plain]), height, profile_ranges=[0.0, 60e3]
        )
        back = field(
            3e9, 40.0, 10.0, 60e3, np.stack([plain, duct]), height, profile_ranges=[0.0, 60e3]
        )
        assert there.path_loss[0, 0, 0] == pytest.approx(back.path_loss[0, 0, 0], abs=0.2)

    def test_excess_is_over_the_reference_atmosphere(self):
        height, duct = evaporation_duct(15.0)
        levels = np.geomspace(1.0, 40e3, 500) - 1.0
        mean = reference_refractivity(levels) + 1e6 * levels / 6371e3
        result = field(3e9, 10.0, 10.0, 60e3, duct, height, reference=True)
        usual = field(3e9, 10.0, 10.0, 60e3, mean, levels)
        expected = usual.path_loss - result.path_loss
        assert result.excess is not None
        assert result.propagation_factor.shape == (1, 1, 1)
        assert result.excess == pytest.approx(expected, abs=0.1)
        assert result.excess[0, 0, 0] > 10.0  # a duct carries beyond the horizon
        same = field(3e9, 10.0, 10.0, 60e3, mean, levels, reference=True)
        assert same.excess == pytest.approx(0.0, abs=0.05)
