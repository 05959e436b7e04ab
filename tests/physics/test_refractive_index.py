"""Radio N against P.453 figures and itur; the optical index against NIST and Ciddor's tables."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given

from forecast.physics.moisture import (
    saturation_vapour_pressure,
    specific_humidity_from_relative_humidity,
    specific_humidity_from_vapour_pressure,
)
from forecast.physics.refractive_index import (
    OPTICAL_WAVELENGTHS,
    optical_refractivity,
    optical_refractivity_birch_downs,
    radio_refractivity,
    refractivity_from_state,
)
from tests.reference import record, records
from tests.strategies import AirState, air_states

EARTH_RADIUS = 6371e3


def _radio_n(at: dict, coefficients: str = "itu_p453_14") -> float:
    p, t = at["p_hPa"] * 100.0, at["T_C"] + 273.15
    e = 0.01 * at["RH_percent_over_water"] * saturation_vapour_pressure(t, p)
    return radio_refractivity(p, t, e, coefficients)


@pytest.mark.parametrize("row", records("radio_N_p453_"), ids=lambda r: r["id"])
def test_radio_n_is_that_of_p453(row):
    # Rec. ITU-R P.453-13/-14 Annex 1 section 1; the project's bar is 0.01 N.
    assert _radio_n(row["inputs"]) == pytest.approx(row["expected"], abs=0.01)


@pytest.mark.parametrize("row", records("radio_N_p453_"), ids=lambda r: r["id"])
def test_radio_n_agrees_with_itur(row):
    """ITU-Rpy computes P.453 by itself: saturation from °C, the index from K and dry pressure."""
    itu453 = pytest.importorskip("itur.models.itu453")
    at = row["inputs"]
    e = itu453.water_vapour_pressure(
        at["T_C"], at["p_hPa"], at["RH_percent_over_water"], "water"
    ).value
    index = itu453.radio_refractive_index(at["p_hPa"] - e, e, at["T_C"] + 273.15)
    assert _radio_n(at) == pytest.approx((index.value - 1.0) * 1e6, abs=0.01)


@pytest.mark.parametrize("row", records("radio_N_components_"), ids=lambda r: r["id"])
def test_second_set_of_coefficients_is_selectable(row):
    # Rüeger (2002) "best average", from memory in the record as in the program.
    found = _radio_n(row["inputs"], "rueger_2002")
    assert found == pytest.approx(row["expected"]["N_rueger2002_bestavg"], abs=0.01)
    assert found != _radio_n(row["inputs"])


def test_pressure_is_taken_as_total_not_dry():
    # Reading total pressure as dry would add 77.6 e/T: 6.6 N here.
    row = record("radio_N_components_3")
    assert _radio_n(row["inputs"]) == pytest.approx(
        row["expected"]["N_dry_Pd"] + row["expected"]["N_wet"], abs=0.01
    )


def test_the_edition_of_the_enhancement_factor_matters():
    # 0.59 N at 30 °C, saturated: what the transcription with 0.00320 loses.
    row = record("p453_EF_edition_trap")
    e = saturation_vapour_pressure(303.15, 101325.0)
    old = record("esat_p453_water_30C")["expected"]
    e_old = 100.0 * old["e_s_no_EF_hPa"] * old["EF_old_transcription_0p00320"]
    lost = radio_refractivity(101325.0, 303.15, e) - radio_refractivity(101325.0, 303.15, e_old)
    assert lost == pytest.approx(row["expected"], abs=row["tolerance"])


@given(air_states())
def test_kernel_formula_is_the_public_one(air: AirState):
    p, t = air.pressure, air.temperature
    e = air.relative_humidity * saturation_vapour_pressure(t, p)
    q = specific_humidity_from_vapour_pressure(e, p)
    assert refractivity_from_state(p, t, q) == pytest.approx(radio_refractivity(p, t, e), rel=1e-13)


def test_unknown_coefficients_are_refused():
    with pytest.raises(ValueError, match="choose from itu_p453_14, rueger_2002"):
        radio_refractivity(1e5, 290.0, 1000.0, "best")


def _nist_vapour(at: dict) -> tuple[float, float, float]:
    """Pressure (Pa), temperature (K) and vapour mole fraction by Ciddor's own convention.

    Ciddor (1996), appendix C: f p_sv / p with f = 1.00062 + 3.14e-8 p + 5.6e-7 t² and p_sv by
    Davis's formula over water. Below 0 °C the NIST toolbox takes ice; IAPWS R14-08 gives
    103.24 Pa at −20 °C (the only such record; value from memory of Murphy & Koop 2005: 103.2).
    """
    p = at["p_Pa"] if "p_Pa" in at else 1e3 * at["p_kPa"]
    t_c = at["T_C"]
    t = t_c + 273.15
    factor = 1.00062 + 3.14e-8 * p + 5.6e-7 * t_c * t_c
    if "e_Pa" in at:  # a vapour pressure as measured: of the vapour alone
        return p, t, factor * at["e_Pa"] / p
    humidity = 0.01 * at.get("RH_percent", at.get("RH", 0.0))
    if t_c < 0.0 and humidity > 0.0:
        saturation = {-20.0: 103.24}[t_c]
    else:
        saturation = np.exp(1.2378847e-5 * t * t - 1.9121316e-2 * t + 33.93711047 - 6.3431645e3 / t)
    return p, t, factor * humidity * saturation / p


def _optical(at: dict) -> float:
    p, t, fraction = _nist_vapour(at)
    return optical_refractivity(
        p,
        t,
        specific_humidity_from_vapour_pressure(fraction * p, p),
        wavelength=1e-9 * at["vacuum_wavelength_nm"],
        co2=1e-6 * at["CO2_ppm"],
    )


@pytest.mark.parametrize("row", records("nist_ciddor_"), ids=lambda r: r["id"])
def test_optical_index_is_that_of_the_nist_toolbox(row):
    # NIST Engineering Metrology Toolbox, Ciddor equation: printed to nine digits.
    assert 1.0 + 1e-6 * _optical(row["inputs"]) == pytest.approx(row["expected"], abs=1e-9)


@pytest.mark.parametrize("row", records("ciddor1996_"), ids=lambda r: r["id"])
def test_optical_index_is_that_of_ciddors_tables(row):
    # Ciddor (1996), Appl. Opt. 35, 1566, tables 1-3, in 1e-8; table 2 compares measurements.
    assert 100.0 * _optical(row["inputs"]) == pytest.approx(row["expected"], abs=row["tolerance"])


@given(air_states())
def test_birch_and_downs_agree_with_ciddor(air: AirState):
    """The second opinion, in laboratory air: within 1e-7 of n, hence 0.1 of refractivity.

    Ciddor (1996) reports agreement at 2e-8 for dry air at 633 nm; vapour adds its share at the
    corners of 5-30 °C.
    """
    p = 80e3 + 0.4 * air.pressure
    t = 278.15 + (air.temperature - 233.15) * 25.0 / 85.0
    q = specific_humidity_from_relative_humidity(air.relative_humidity, t, p)
    first = optical_refractivity(p, t, q, 633e-9)
    assert optical_refractivity_birch_downs(p, t, q, 633e-9) == pytest.approx(first, abs=0.1)


@pytest.mark.parametrize("wavelength", [405e-9, 633e-9, 1064e-9, 1550e-9])
@pytest.mark.parametrize("humidity", [0.0, 0.015])
def test_group_index_is_the_derivative_of_the_phase_index(wavelength, humidity):
    # n_g = n − λ dn/dλ by definition; central difference.
    step = 1e-11
    above, below = (
        optical_refractivity(1e5, 290.0, humidity, wavelength + s) for s in (step, -step)
    )
    phase = optical_refractivity(1e5, 290.0, humidity, wavelength)
    group = optical_refractivity(1e5, 290.0, humidity, wavelength, group=True)
    assert group == pytest.approx(phase - wavelength * (above - below) / (2 * step), rel=1e-7)
    assert group > phase


def _curvature_ratio(at: dict, warming: float) -> float:
    """Ray curvature over Earth curvature, horizontal ray, dry hydrostatic air, by differences."""
    p, t = 100.0 * at["p_hPa"], at["T_K"]
    step = 0.5
    up, down = (
        optical_refractivity(
            p * (1.0 - s * 0.034162608 / t), t + s * warming, 0.0, 1e-9 * at["wavelength_nm"]
        )
        for s in (step, -step)
    )
    n = 1.0 + 1e-6 * optical_refractivity(p, t, 0.0, 1e-9 * at["wavelength_nm"])
    return -1e-6 * (up - down) / (2.0 * step) / n * EARTH_RADIUS


@pytest.mark.parametrize("row", records("optical_curvature_"), ids=lambda r: r["id"])
def test_light_bends_by_a_sixth_of_the_earths_curvature(row):
    # g M / R = 0.0341626 K/m (record autoconvective_lapse); ratio (n−1)/T (gM/R + dT/dh) a.
    for lapse, name in ((6.5, "6.5"), (9.8, "9.8"), (0.0, "0"), (-10.0, "-10")):
        found = _curvature_ratio(row["inputs"], -1e-3 * lapse)
        assert found == pytest.approx(row["expected"][f"ratio_lapse_{name}_K_per_km"], abs=0.002)
    # Straight rays in a homogeneous atmosphere.
    assert _curvature_ratio(row["inputs"], -0.034162608) == pytest.approx(0.0, abs=0.002)


@pytest.mark.parametrize("row", records("optical_curvature_"), ids=lambda r: r["id"])
def test_gradient_at_which_light_follows_the_earth(row):
    """0.112 K/m at 273 K, 0.129 at 288 K, 0.147 at 303 K: it depends on the air's state.

    Analytic (n−1)/T (gM/R + dT/dh) a = 1; the index and the ideal-gas form in it leave 1 %.
    """
    low, high = 0.05, 0.25
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _curvature_ratio(row["inputs"], middle) < 1 else (low, middle)
    assert low == pytest.approx(row["expected"]["dTdh_for_ratio_1_K_per_m"], rel=0.01)


@pytest.mark.parametrize("function", [optical_refractivity, optical_refractivity_birch_downs])
@pytest.mark.parametrize("wavelength", [299e-9, 1701e-9, 0.03, float("nan")])
def test_wavelengths_outside_the_equations_are_refused(function, wavelength):
    with pytest.raises(ValueError, match="300 to 1700 nm"):
        function(1e5, 290.0, 0.0, wavelength)


def test_limits_of_the_wavelength_are_usable_and_bluer_bends_more():
    blue, red = (optical_refractivity(1e5, 290.0, 0.01, w) for w in OPTICAL_WAVELENGTHS)
    assert blue > red > 250.0


def test_missing_values_pass_through():
    n = optical_refractivity(np.array([1e5, np.nan]), 290.0, np.array([[0.0], [np.nan]]))
    assert np.isnan(n).tolist() == [[False, True], [True, True]]
    n = radio_refractivity(np.array([1e5, np.nan]), 290.0, 1000.0)
    assert np.isnan(n).tolist() == [False, True]
