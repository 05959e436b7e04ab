"""Contrast must fade, haze grow and lamps dim as the published laws say."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.constants import Avogadro

from forecast.physics.contrast import (
    CONTRAST_THRESHOLD,
    HAZE_HUMIDITY,
    REPORT_THRESHOLD,
    apparent_contrast,
    contrast_range,
    extinction_from_visibility,
    haze_extinction,
    lamp_illuminance,
    lamp_range,
    optical_depth,
    profile_at,
    rayleigh_cross_section,
    rayleigh_extinction,
    visual_range,
)

EXTINCTION = st.floats(1e-6, 0.1)


@pytest.mark.parametrize("micrometres", [0.3, 0.4, 0.55, 0.7, 0.85])
def test_cross_section_is_that_of_the_published_fit(micrometres):
    # Bodhaine et al. (1999) eq. 29 (from memory), fitted to their own equations for 360 µmol/mol
    # CO2, said to hold to 0.01 % up to 0.85 µm.
    x = micrometres**-2
    y = micrometres**2
    fit = (1.0455996 - 341.29061 * x - 0.90230850 * y) / (1.0 + 0.0027059889 * x - 85.968563 * y)
    found = rayleigh_cross_section(1e-6 * micrometres, co2=360e-6)
    assert found == pytest.approx(1e-32 * fit, rel=1e-4)


@pytest.mark.parametrize("micrometres", [0.6, 0.8, 1.0, 1.5])
def test_cross_section_agrees_with_another_author(micrometres):
    # Bucholtz (1995), Appl. Opt. 34, 2765, eq. 8 beyond 0.5 µm (from memory): other depolarisation.
    exponent = 3.99668 + 1.10298e-3 * micrometres + 2.71393e-2 / micrometres
    bucholtz = 4.01061e-32 * micrometres**-exponent
    assert rayleigh_cross_section(1e-6 * micrometres) == pytest.approx(bucholtz, rel=2e-3)


def test_optical_depth_of_the_whole_atmosphere():
    # Hansen & Travis (1974), Space Sci. Rev. 16, 527 (from memory): 0.0973 at 0.55 µm and
    # 1013.25 hPa. Molecules above a square metre: p N_A / (M g).
    x = 0.55**-2
    published = 0.008569 * x**2 * (1.0 + 0.0113 * x + 0.00013 * x**2)
    molecules = 101325.0 * Avogadro / (0.0289644 * 9.80665)
    assert rayleigh_cross_section(550e-9) * molecules == pytest.approx(published, rel=0.005)


def test_clean_air_limits_sight_to_some_340_km():
    # 3.912 / extinction; Penndorf (1957), J. Opt. Soc. Am. 47, 176: 1.162e-5 per m at 550 nm and
    # 15 °C (from memory), with an older depolarisation.
    clean = rayleigh_extinction(101325.0, 288.15)
    assert visual_range(clean) == pytest.approx(-np.log(0.02) / 1.162e-5, rel=0.02)


def test_clean_air_scatters_in_proportion_to_its_density():
    one, two = rayleigh_extinction([101325.0, 50662.5], [288.15, 288.15])
    assert two == pytest.approx(0.5 * one, rel=1e-12)
    assert rayleigh_extinction(101325.0, 300.0) < one


@pytest.mark.parametrize("wavelength", [200e-9, 2e-6, 550.0])
def test_wavelength_outside_validity_is_refused(wavelength):
    with pytest.raises(ValueError, match="nm; the equations hold for 300 to 1700 nm"):
        rayleigh_cross_section(wavelength)
    with pytest.raises(ValueError, match="extinction_from_visibility: wavelength"):
        extinction_from_visibility(1e4, 0.0, wavelength)


def test_koschmieder_s_constants():
    # 3.912 and 2.996 (WMO-No. 8, from memory), −ln 0.02 and −ln 0.05.
    assert visual_range(1e-4) == pytest.approx(39.12e3, rel=1e-4)
    assert visual_range(1e-4, REPORT_THRESHOLD) == pytest.approx(29.96e3, rel=1e-4)


@given(st.floats(-1.0, 50.0), EXTINCTION)
def test_contrast_at_its_range_is_the_threshold(inherent, extinction):
    far = contrast_range(inherent, extinction)
    left = apparent_contrast(inherent, extinction * far)
    if abs(inherent) <= CONTRAST_THRESHOLD:
        assert far == 0.0
    else:
        assert abs(left) == pytest.approx(CONTRAST_THRESHOLD, rel=1e-9)
        assert np.sign(left) == np.sign(inherent)


def test_without_extinction_sight_has_no_end():
    assert visual_range(0.0) == np.inf
    assert contrast_range(0.01, 0.0) == 0.0


def test_what_is_not_known_stays_unknown():
    assert np.isnan(visual_range(np.nan))
    assert np.isnan(contrast_range(np.nan, 1e-4))
    assert np.isnan(lamp_range(1e3, np.nan, 1e-6))
    assert np.isnan(haze_extinction(np.nan, 5e-5))


@given(st.floats(0.01e3, 200e3))
def test_visibility_and_extinction_go_round(visibility):
    # The report includes the scattering of clean air: haze and clean air give it back.
    clean = rayleigh_extinction(101325.0, 288.15)
    haze = extinction_from_visibility(visibility, clean)
    assert visual_range(haze + clean, REPORT_THRESHOLD) == pytest.approx(visibility, rel=1e-9)


def test_more_visibility_than_clean_air_allows_means_clean_air():
    clean = rayleigh_extinction(101325.0, 288.15)
    assert extinction_from_visibility(400e3, clean) == 0.0


def test_longer_waves_see_through_haze_but_not_through_fog():
    haze = [extinction_from_visibility(20e3, 0.0, w) for w in (550e-9, 1550e-9)]
    fog = [extinction_from_visibility(200.0, 0.0, w) for w in (550e-9, 1550e-9)]
    assert haze[1] == pytest.approx(haze[0] * (1550 / 550) ** -1.3, rel=1e-9)  # Kim et al. 2001
    assert fog[1] == fog[0]


@pytest.mark.parametrize("visibility", [0.0, -5.0])
def test_visibility_without_length_is_refused(visibility):
    with pytest.raises(ValueError, match="expected more than 0 m"):
        extinction_from_visibility(visibility, 0.0)


@given(st.floats(0.0, 0.9), st.floats(0.001, 0.05), st.floats(0.1, 1.0))
def test_haze_grows_with_humidity_by_its_exponent(humidity, more, exponent):
    less, grown = haze_extinction([humidity, humidity + more], 1e-4, exponent)
    expected = ((1.0 - humidity) / (1.0 - humidity - more)) ** exponent
    assert grown / less == pytest.approx(expected, rel=1e-9)
    assert less >= 1e-4


def test_haze_is_held_where_its_law_ends():
    held = haze_extinction(HAZE_HUMIDITY, 1e-4)
    assert haze_extinction([0.97, 1.0, 1.02], 1e-4) == pytest.approx([held] * 3, rel=1e-12)


@pytest.mark.parametrize("humidity", [80.0, -0.1])
def test_humidity_in_per_cent_is_refused(humidity):
    with pytest.raises(ValueError, match="expected a fraction"):
        haze_extinction(humidity, 1e-4)


def test_profiles_are_read_between_levels_and_held_beyond():
    # A missing height and a dip are skipped.
    z = np.array([[0.0, 10.0, np.nan, 8.0, 30.0], [np.nan] * 5])
    v = np.array([[1.0, 2.0, 99.0, 99.0, 4.0], [1.0, 2.0, 3.0, 4.0, 5.0]])
    found = profile_at(z, v, np.array([[-1.0, 5.0, 20.0, 40.0, np.nan]] * 2))
    assert found[0, :4].tolist() == [1.0, 1.5, 3.0, 4.0]
    assert np.isnan(found[0, 4])
    assert np.isnan(found[1]).all()


def test_profiles_that_do_not_fit_are_refused():
    with pytest.raises(ValueError, match="profile_at: levels"):
        profile_at(np.zeros((2, 3)), np.zeros((2, 4)), np.zeros((2, 5)))


def test_optical_depth_through_thinning_haze():
    # Closed form: extinction linear in height, ray a parabola z = z0 + b x² over d: mean height
    # z0 + b d² / 3; 200 steps of the trapezoidal rule leave 1.3e-5 of the parabola's part.
    z = np.array([[0.0, 1000.0]])
    extinction = np.array([[1e-4, 0.0]])
    x = np.linspace(0.0, 50e3, 201)
    height = (20.0 + 4e-8 * x**2)[None, :]
    expected = 50e3 * 1e-4 * (1.0 - (20.0 + 4e-8 * 50e3**2 / 3.0) / 1000.0)
    on_ray = profile_at(z, extinction, height)
    assert optical_depth(on_ray, x)[0] == pytest.approx(expected, rel=1e-5)


@given(st.floats(1.0, 1e9), st.floats(0.0, 0.05), st.floats(3e-8, 1e-3))
def test_lamp_at_its_range_gives_the_threshold(intensity, extinction, threshold):
    far = lamp_range(intensity, extinction, threshold)
    assert lamp_illuminance(intensity, extinction * far, far) == pytest.approx(threshold, rel=1e-6)


def test_lamp_in_empty_space_follows_the_inverse_square():
    assert lamp_range(1e4, 0.0, 1e-6) == pytest.approx(1e5, rel=1e-12)


def test_impossible_questions_are_refused():
    with pytest.raises(ValueError, match="expected −1 or more"):
        apparent_contrast(-1.2, 0.5)
    with pytest.raises(ValueError, match="lamp_illuminance: distance"):
        lamp_illuminance(1e3, 0.1, 0.0)
    with pytest.raises(ValueError, match="lamp_range: threshold"):
        lamp_range(1e3, 1e-4, 0.0)
    with pytest.raises(ValueError, match="contrast_range: extinction"):
        contrast_range(-1.0, -1e-4)
    with pytest.raises(ValueError, match="contrast_range: threshold"):
        contrast_range(-1.0, 1e-4, 0.0)
