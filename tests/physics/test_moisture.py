"""Saturation and humidity conversions against P.453 values, IAPWS figures, CoolProp and MetPy."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.physics.moisture import (
    CELSIUS_OFFSET,
    EPSILON,
    relative_humidity,
    saturation_vapour_pressure,
    specific_humidity_from_dew_point,
    specific_humidity_from_mixing_ratio,
    specific_humidity_from_relative_humidity,
    specific_humidity_from_vapour_pressure,
    vapour_pressure_from_specific_humidity,
)
from tests.reference import record, records
from tests.strategies import AirState, air_states


@pytest.mark.parametrize("row", records("esat_p453_"), ids=lambda r: r["id"])
def test_saturation_is_that_of_p453(row):
    # Rec. ITU-R P.453-13/-14 Annex 1 section 1, enhancement factor included; 1e-6 relative.
    at = row["inputs"]
    phase = "ice" if "_ice_" in row["id"] else "water"
    found = saturation_vapour_pressure(at["T_C"] + 273.15, at["p_hPa"] * 100.0, phase) / 100.0
    assert found == pytest.approx(row["expected"]["e_s_hPa"], rel=1e-6)


def test_enhancement_factor_is_of_the_present_edition():
    # The older transcription (0.00320) would give an e_s 0.34 % lower at 30 °C.
    row = record("esat_p453_water_30C")
    found = saturation_vapour_pressure(303.15, 101325.0) / 100.0
    assert found / row["expected"]["e_s_no_EF_hPa"] == pytest.approx(row["expected"]["EF"], 1e-6)
    assert row["expected"]["EF"] - row["expected"]["EF_old_transcription_0p00320"] > 3e-3


@pytest.mark.parametrize("row", records("esat_pure_"), ids=lambda r: r["id"])
def test_pure_saturation_is_near_iapws(row):
    """Without the enhancement factor, P.453 lies within 0.05 % of IAPWS from 0 to 40 °C.

    −0.04 % at 20 °C; below freezing the Murphy & Koop (2005) liquid curve is the reference,
    0.35 % at −40 °C, the edge of the range. Figures: IAPWS-IF97, IAPWS R14-08, Murphy & Koop,
    each computed by a general library.
    """
    t_c = row["inputs"]["T_C"]
    t_k = t_c + 273.15
    # At vanishing pressure the enhancement factor keeps its constant term only.
    water = saturation_vapour_pressure(t_k, 0.0) / (1.0 + 7.2e-4)
    ice = saturation_vapour_pressure(t_k, 0.0, "ice") / (1.0 + 2.2e-4)
    expected = row["expected"]
    assert water == pytest.approx(expected["p453_no_EF_water_Pa"], rel=1e-6)
    assert ice == pytest.approx(expected["p453_no_EF_ice_Pa"], rel=1e-6)
    if t_c >= 0.0:
        assert water == pytest.approx(expected["iapws97_PSat_Pa"], rel=5e-4)
    else:
        reference = expected["murphy_koop_liquid_Pa"]
        assert water == pytest.approx(reference, rel=1e-3 if t_c > -20.0 else 4e-3)
        assert ice == pytest.approx(expected["iapws_R14_sublimation_ice_Pa"], rel=6e-4)


def test_pure_saturation_at_20_degrees_is_four_hundredths_of_a_percent_low():
    expected = record("esat_pure_20C")["expected"]
    water = saturation_vapour_pressure(293.15, 0.0) / (1.0 + 7.2e-4)
    assert water / expected["iapws97_PSat_Pa"] - 1.0 == pytest.approx(-3.7e-4, abs=5e-5)


@pytest.mark.parametrize("t_c", [1.0, 15.0, 30.0, 40.0])
@pytest.mark.parametrize("pressure", [70e3, 85e3, 101.325e3])
def test_moist_saturation_agrees_with_coolprop(t_c, pressure):
    # CoolProp HAPropsSI: IAPWS saturation, virial enhancement after Hyland & Wexler (1983).
    from CoolProp.HumidAirProp import HAPropsSI

    expected = HAPropsSI("P_w", "T", t_c + 273.15, "P", pressure, "RH", 1.0)
    assert saturation_vapour_pressure(t_c + 273.15, pressure) == pytest.approx(expected, rel=7e-4)


def test_water_and_ice_meet_near_the_triple_point():
    # One substance: both curves give 611.657 Pa at 273.16 K (IAPWS); P.453 to 1e-5.
    water = saturation_vapour_pressure(273.16, 0.0) / (1.0 + 7.2e-4)
    ice = saturation_vapour_pressure(273.16, 0.0, "ice") / (1.0 + 2.2e-4)
    assert water == pytest.approx(611.657, rel=1e-5)
    assert ice == pytest.approx(611.657, rel=1e-5)


def test_celsius_offset_is_not_the_triple_point():
    # BIPM, SI brochure: t = T − 273.15 K.
    assert CELSIUS_OFFSET == 273.15


def test_unknown_phase_is_refused():
    with pytest.raises(ValueError, match="phase is 'snow'; choose 'water' or 'ice'"):
        saturation_vapour_pressure(280.0, 1e5, "snow")


@given(air_states(), st.floats(0.0, 1.0))
def test_conversions_undo_each_other(air: AirState, share: float):
    p, t = air.pressure, air.temperature
    q = specific_humidity_from_relative_humidity(air.relative_humidity, t, p)
    assert relative_humidity(q, t, p) == pytest.approx(air.relative_humidity, rel=1e-12, abs=1e-15)
    e = share * 0.2 * p
    assert vapour_pressure_from_specific_humidity(
        specific_humidity_from_vapour_pressure(e, p), p
    ) == pytest.approx(e, rel=1e-12, abs=1e-12)


@given(air_states())
def test_dew_point_of_saturated_air_is_its_temperature(air: AirState):
    assert specific_humidity_from_dew_point(air.temperature, air.pressure) == pytest.approx(
        specific_humidity_from_relative_humidity(1.0, air.temperature, air.pressure), rel=1e-14
    )


@given(air_states())
def test_more_vapour_means_more_specific_humidity(air: AirState):
    low = specific_humidity_from_relative_humidity(
        0.5 * air.relative_humidity, air.temperature, air.pressure
    )
    high = specific_humidity_from_relative_humidity(
        air.relative_humidity, air.temperature, air.pressure
    )
    assert 0.0 <= low <= high < 1.0


def test_mass_ratios_agree_with_metpy():
    # MetPy's ratio of molar masses is 0.62196, ours 0.62198: 4e-5 relative.
    mpcalc = pytest.importorskip("metpy.calc")
    from metpy.units import units

    e, p = np.array([100.0, 1500.0, 4200.0]), np.array([70e3, 95e3, 101e3])
    w = mpcalc.mixing_ratio(e * units.Pa, p * units.Pa).to("kg/kg").magnitude
    q = mpcalc.specific_humidity_from_mixing_ratio(w * units("kg/kg")).magnitude
    assert specific_humidity_from_vapour_pressure(e, p) == pytest.approx(q, rel=5e-5)
    assert specific_humidity_from_mixing_ratio(w) == pytest.approx(q, rel=1e-14)
    assert vapour_pressure_from_specific_humidity(q, p) == pytest.approx(e, rel=5e-5)


def test_dew_point_agrees_with_metpy_but_for_the_saturation_law():
    """MetPy inverts its own saturation curve; ours holds 0.4 % enhancement on top.

    MetPy lies 0.19 % under IAPWS at 20 °C, P.453 with enhancement about 0.4 % over pure IAPWS:
    together below 0.8 % of vapour pressure, 0.15 K of dew point.
    """
    mpcalc = pytest.importorskip("metpy.calc")
    from metpy.units import units

    dew = np.array([263.15, 278.15, 293.15])
    p = np.array([70e3, 95e3, 101e3])
    q = specific_humidity_from_dew_point(dew, p)
    back = mpcalc.dewpoint_from_specific_humidity(p * units.Pa, q * units("kg/kg"))
    assert back.to("K").magnitude == pytest.approx(dew, abs=0.15)


def test_mixing_ratio_by_definition():
    # 10 g of vapour on 1 kg of dry air: 10/1010 of the mixture; ε = 0.62198 (ICAO Doc 7488/3 M).
    assert specific_humidity_from_mixing_ratio(0.010) == pytest.approx(10.0 / 1010.0, rel=1e-15)
    assert abs(EPSILON - 0.62198) < 1e-5


def test_missing_values_and_shapes_pass_through():
    q = specific_humidity_from_relative_humidity(
        np.array([[0.5], [np.nan]]), 290.0, np.array([1e5, 9e4, np.nan])
    )
    assert q.shape == (2, 3)
    assert np.isnan(q).tolist() == [[False, False, True], [True, True, True]]
