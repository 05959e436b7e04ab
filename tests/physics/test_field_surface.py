"""Constants of sea and ground, and what they and waves on the water do to a reflection."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import i0

from forecast.physics.field_boundary import join, mixed_coefficients, split
from forecast.physics.field_surface import (
    GROUNDS,
    Surface,
    effective_impedance,
    grazing_angles,
    ground_permittivity,
    reflection_coefficient,
    rough_sea_height,
    roughness_reduction,
    sea_permittivity,
    surface_impedance,
)


class TestConstants:
    def test_sea_water_conducts_at_low_frequencies(self):
        """P.527: some 80 and 5 S/m for average sea water at 20 °C well below 1 GHz.

        The model's own static values at 35 g/kg, 20 °C: 71.7 and 4.79 S/m (4.8 in tables of
        oceanography).
        """
        low = sea_permittivity(30e6, 293.15)
        assert low.real == pytest.approx(72.0, abs=1.0)
        conductivity = low.imag * 2.0 * np.pi * 30e6 * 8.8541878128e-12
        assert conductivity == pytest.approx(4.79, abs=0.02)

    def test_fresh_water_relaxes_near_17_ghz(self):
        """Pure water at 20 °C: static 80.1, greatest loss near 17 GHz (Debye; handbooks)."""
        f = np.geomspace(1e9, 100e9, 400)
        fresh = sea_permittivity(f, 293.15, 0.0)
        assert sea_permittivity(30e6, 293.15, 0.0).real == pytest.approx(80.1, abs=0.3)
        assert f[np.argmax(fresh.imag)] == pytest.approx(17.5e9, rel=0.06)

    @pytest.mark.parametrize("kind", GROUNDS)
    def test_ground_loses_and_wet_ground_more(self, kind):
        for frequency in (30e6, 1e9, 40e9):
            ground = ground_permittivity(frequency, kind)
            assert ground.imag > 0.0
            assert 2.9 < ground.real < 31.0
            assert abs(ground) <= abs(ground_permittivity(frequency, "wet"))

    def test_unknown_ground(self):
        with pytest.raises(ValueError, match="wet"):
            ground_permittivity(1e9, "swamp")


class TestReflection:
    @pytest.mark.parametrize("polarisation", ["horizontal", "vertical"])
    def test_grazing_waves_are_turned_over(self, polarisation):
        assert reflection_coefficient(70.0 + 40.0j, 1e-6, polarisation) == pytest.approx(
            -1.0, abs=1e-3
        )

    @given(st.floats(0.001, 0.2), st.floats(3.0, 80.0), st.floats(0.0, 1000.0))
    def test_impedance_gives_fresnel_near_grazing(self, angle, real, imaginary):
        """They differ by the square of the angle."""
        for polarisation in ("horizontal", "vertical"):
            permittivity = complex(real, imaginary)
            delta = surface_impedance(permittivity, polarisation)
            turn = (np.sin(angle) - delta) / (np.sin(angle) + delta)
            exact = reflection_coefficient(permittivity, angle, polarisation)
            assert abs(turn - exact) < angle**2

    def test_roughness_is_that_of_miller_and_brown(self):
        """Closed form from Bessel's function itself; 1 on a smooth sea, less on a rougher."""
        g = 2.0 * np.pi * 3e9 / 299792458.0 * 0.4 * np.sin(0.02)
        expected = np.exp(-2.0 * g**2) * i0(2.0 * g**2)
        assert roughness_reduction(3e9, 0.4, 0.02) == pytest.approx(expected, rel=1e-12)
        assert roughness_reduction(3e9, 0.0, 0.02) == 1.0
        assert np.all(np.diff(roughness_reduction(3e9, np.linspace(0.0, 3.0, 50), 0.02)) < 0.0)
        assert rough_sea_height(10.0) == pytest.approx(0.51)

    @pytest.mark.parametrize("polarisation", ["horizontal", "vertical"])
    def test_effective_impedance_mirrors_as_the_rough_sea(self, polarisation):
        sea = Surface(complex(sea_permittivity(3e9)), 0.5)
        delta = effective_impedance(sea, 3e9, polarisation, 0.03)
        smooth = surface_impedance(sea.permittivity, polarisation)
        expected = roughness_reduction(3e9, 0.5, 0.03)
        expected *= (np.sin(0.03) - smooth) / (np.sin(0.03) + smooth)
        assert (np.sin(0.03) - delta) / (np.sin(0.03) + delta) == pytest.approx(expected)

    def test_grazing_angle_falls_with_range_to_that_of_the_lowest_wave(self):
        angle = grazing_angles(3e9, 20.0, np.array([0.0, 1e3, 5e3, 50e3]), 0.0)
        assert np.all(np.diff(angle) < 0.0)
        assert angle[1] == pytest.approx(20.0 / 1e3, rel=0.02)
        assert grazing_angles(3e9, 20.0, np.array([50e3]), 0.006)[0] == pytest.approx(
            0.006, rel=0.011
        )


class TestMixedTransform:
    @pytest.mark.parametrize(
        "impedance", [0.1 - 0.07j, 0.02 - 0.02j, 8.0 + 2.0j, 0.4 - 0.01j, 1e-3 + 1e-3j]
    )
    @pytest.mark.parametrize("step", [0.05, 0.5, 3.0])
    def test_there_and_back(self, impedance, step):
        """With real parts of α on both sides of zero."""
        m = mixed_coefficients(impedance, 63.0, step, 400)
        assert abs(m.small) < 1.0
        n = np.arange(401)
        field = np.exp(-(((n - 60.0) / 40.0) ** 2) + 0.05j * n)[None].repeat(2, axis=0)
        field[1] *= 1j
        wave, clinging = np.empty((2, 400), dtype=complex), np.empty(2, dtype=complex)
        split(field, m.a, m.b, m.c, m.small, m.end, wave, clinging)
        back = np.empty_like(field)
        join(wave, clinging, m.a, m.small, m.large, m.end, m.square, back)
        np.testing.assert_allclose(back, field, atol=1e-11)

    def test_the_surface_wave_is_no_part_of_w(self):
        """It alone obeys the surface's condition at every height."""
        m = mixed_coefficients(0.02 - 0.02j, 0.63, 4.0, 2000)
        field = (m.small ** np.arange(2001))[None]
        wave, clinging = np.empty((1, 2000), dtype=complex), np.empty(1, dtype=complex)
        split(field, m.a, m.b, m.c, m.small, m.end, wave, clinging)
        assert np.abs(wave[:, :-1]).max() < 1e-15
        assert clinging[0] == pytest.approx(m.square, rel=1e-9)

    def test_waves_and_the_surface_wave_are_apart(self):
        """A wave and its image add nothing to the sum that holds the surface wave."""
        m = mixed_coefficients(0.02 - 0.02j, 0.63, 4.0, 4000)
        x = 0.3  # phase per step of height
        symbol = m.a * np.exp(1j * x) + m.b + m.c * np.exp(-1j * x)
        mirrored = m.a * np.exp(-1j * x) + m.b + m.c * np.exp(1j * x)
        n = np.arange(4001)
        field = (np.exp(-1j * x * n) - mirrored / symbol * np.exp(1j * x * n))[None]
        wave, clinging = np.empty((1, 4000), dtype=complex), np.empty(1, dtype=complex)
        split(field, m.a, m.b, m.c, m.small, m.end, wave, clinging)
        assert abs(clinging[0]) < 1e-10
