"""The surface layer of a site: the best source is used, and what cannot be known is said."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from forecast.ingest.water_series import WaterSeries
from forecast.outlook import make_outlook
from forecast.outlook import surface as surface_module
from forecast.outlook.reasons import sightline_reason
from forecast.outlook.surroundings import Surroundings
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.surface_layer import solve_sea
from forecast.schema import (
    LEVEL_ORIGINS,
    QUALITY_FLAGS,
    SURFACE_AIR_SOURCES,
    SURFACE_REASONS,
    SURFACE_SOURCES,
    SURFACE_STATES,
    SURFACE_WIND_SOURCES,
)
from forecast.settings import Site
from tests.outlook.build import START, air, line, profiles, settings

LEVEL_T = 288.02  # K, of the air at 20 m, the lowest trusted level


def told(site=None, wind=4.0, series=None, members=32, rows=1, **values):
    """Outlook of standard air 20 m apart over a site by the sea; `values` go into the profiles."""
    data = profiles([{"air": air(), "hours": h} for h in range(rows)])
    if wind is not None:
        speed = np.full(data["height"].shape, wind)
        data = data.assign(
            eastward_wind=(("profile", "level"), speed),
            northward_wind=(("profile", "level"), 0.0 * speed),
        )
    data = data.assign(
        {name: (("profile", "level") if np.ndim(a) == 2 else ("profile",), np.broadcast_to(
            a, data["height"].shape if np.ndim(a) == 2 else (rows,))) for name, a in values.items()}
    )  # fmt: skip
    site = replace(Site("cape", 51.0, -20.0, surface="sea"), **(site or {}))
    low = line(wave="optical", observer_height=3.0, target_height=30.0, distance=30e3)
    chosen = settings(sites=(site,), sightlines=(low,), members=members)
    around = Surroundings(water={} if series is None else {"cape": series})
    return make_outlook(data, chosen, around=around)


def value(outlook, name):
    return outlook[name].values[0]


def code_name(outlook, name, table):
    return {number: word for word, number in table.items()}[int(value(outlook, name))]


def buoy(kelvin, wind=np.nan):
    return WaterSeries(
        START.astype("datetime64[s]") + np.array([0, 3600]) * np.timedelta64(1, "s"),
        np.full(2, kelvin), np.full(2, wind),
    )  # fmt: skip


def test_settings_come_before_the_series_and_the_series_before_the_profiles():
    cases = [
        ({"sea_surface_temperature": 290.0}, buoy(291.0), 292.0, "settings", 290.0),
        ({}, buoy(291.0), 292.0, "series", 291.0),
        ({}, buoy(np.nan), 292.0, "profile", 292.0),
        ({}, None, 292.0, "profile", 292.0),
    ]
    for site, series, own, source, expected in cases:
        outlook = told(site, series=series, sea_surface_temperature=own)
        assert code_name(outlook, "surface_source", SURFACE_SOURCES) == source
        difference = value(outlook, "air_sea_temperature_difference")
        assert difference == pytest.approx(LEVEL_T - expected, abs=0.01)
        assert value(outlook, "surface_layer_state") == SURFACE_STATES["modelled"]


def test_wind_comes_from_settings_series_ten_metres_then_the_level():
    ten = {"eastward_wind_10m": 3.0, "northward_wind_10m": 4.0}
    cases = [
        ({"wind_speed": 8.0}, buoy(286.0, 7.0), ten, "settings"),
        ({}, buoy(286.0, 7.0), ten, "series"),
        ({}, buoy(286.0), ten, "ten_metres"),
        ({}, buoy(286.0), {}, "level"),
    ]
    heights = []
    for site, series, values, source in cases:
        outlook = told(site, wind=6.0, series=series, **values)
        assert code_name(outlook, "surface_wind_source", SURFACE_WIND_SOURCES) == source
        heights.append(float(value(outlook, "evaporation_duct_height")))
    assert len(set(heights)) == 4  # each wind makes its own layer


def test_a_series_speaks_only_near_its_values():
    outlook = told(series=buoy(286.0), rows=12)
    known = outlook["surface_layer_state"].values == SURFACE_STATES["modelled"]
    # Values at 0 and 1 h, tolerance 6 h: valid times 0 … 7 h.
    assert known.tolist() == [True] * 8 + [False] * 4
    reason = outlook["surface_layer_reason"].values
    assert (reason[8:] == SURFACE_REASONS["no_surface_temperature"]).all()


def test_air_at_two_metres_is_what_the_layer_is_solved_from():
    q = specific_humidity_from_relative_humidity(0.8, 289.5, 101300.0)
    site = {"sea_surface_temperature": 291.0}
    outlook = told(site, wind=6.0, air_temperature_2m=289.5, specific_humidity_2m=q)
    assert code_name(outlook, "surface_air_source", SURFACE_AIR_SOURCES) == "two_metres"
    z, t = value(outlook, "joined_height"), value(outlook, "joined_air_temperature")
    origin = value(outlook, "level_origin")
    names = {word: origin == number for word, number in LEVEL_ORIGINS.items()}
    assert z[names["modelled_surface_layer"]].max() <= 2.0
    between = z[names["interpolated"]]
    assert between.min() > 2.0 and between.max() < 20.0
    # At 2 m the air is what was given; the level above is as measured.
    assert t[z == 2.0] == pytest.approx(289.5, abs=1e-3)
    assert t[names["measured"]][0] == pytest.approx(LEVEL_T, abs=1e-6)
    alone = told(site, wind=6.0, air_temperature_2m=289.5)  # no humidity: the level's own air
    assert code_name(alone, "surface_air_source", SURFACE_AIR_SOURCES) == "level"


def test_land_needs_a_skin_temperature_and_evaporates_nothing():
    ground = {"surface": "land", "roughness": 0.03}
    outlook = told({**ground, "surface_temperature": 285.0})
    assert value(outlook, "surface_layer_state") == SURFACE_STATES["modelled"]
    z, t = value(outlook, "joined_height"), value(outlook, "joined_air_temperature")
    assert (np.diff(t[z < 20.0] + 0.0098 * z[z < 20.0]) > 0.0).all()  # cooling ground
    assert z[0] > 0.003  # nothing below a tenth of the roughness
    assert np.isnan(value(outlook, "evaporation_duct_height"))
    own = told(ground, surface_temperature=285.0)
    assert code_name(own, "surface_source", SURFACE_SOURCES) == "profile"
    # The sea's temperature is not the ground's.
    nothing = told(ground, sea_surface_temperature=285.0)
    assert value(nothing, "surface_layer_state") == SURFACE_STATES["unknown"]
    assert value(nothing, "surface_layer_reason") == SURFACE_REASONS["no_surface_temperature"]


@pytest.mark.parametrize(
    ("site", "wind", "reason"),
    [
        ({}, 4.0, "no_surface_temperature"),
        ({"sea_surface_temperature": 286.0}, None, "no_wind"),
        ({"sea_surface_temperature": 286.0}, np.nan, "no_wind"),
        ({"sea_surface_temperature": 280.0}, 0.5, "too_stable"),
    ],
)
def test_what_cannot_be_modelled_is_unknown_with_its_reason_and_less_sure(site, wind, reason):
    outlook = told(site, wind=wind, members=64)
    assert value(outlook, "surface_layer_state") == SURFACE_STATES["unknown"]
    assert code_name(outlook, "surface_layer_reason", SURFACE_REASONS) == reason
    assert (value(outlook, "level_origin") != LEVEL_ORIGINS["modelled_surface_layer"]).all()
    sure = told({"sea_surface_temperature": 289.0}, members=64)
    width = [
        float(
            value(o, "sightline_probability_upper")[0] - value(o, "sightline_probability_lower")[0]
        )
        for o in (outlook, sure)
    ]
    assert width[0] > 2.0 * width[1]


def test_a_water_temperature_that_cannot_be_one_is_not_used():
    outlook = told(sea_surface_temperature=11.0)  # °C, or a fill value, in a file of kelvins
    assert value(outlook, "surface_layer_state") == SURFACE_STATES["unknown"]


def test_very_stable_air_is_modelled_while_a_function_holds_and_the_interval_is_wider():
    # 20 m up, 5 K warmer: Dyer's law ends at z/L = 1 well before the others do.
    shares = {}
    for wind in (2.0, 4.0, 9.0):
        outlook = told({"sea_surface_temperature": LEVEL_T - 5.0}, wind=wind, members=64)
        shares[wind] = float(value(outlook, "surface_function_share"))
        if wind == 4.0:
            assert value(outlook, "surface_layer_state") == SURFACE_STATES["modelled"]
            few = outlook
    assert shares[9.0] == 1.0
    assert shares[4.0] == pytest.approx(2.0 / 3.0)
    assert shares[2.0] == 0.0
    # Members with less wind or colder water still may be too stable: counted, not hidden.
    assert 0 < value(few, "surface_layer_too_stable") < 32
    assert value(few, "surface_layer_unconverged") == 0


def test_members_that_do_not_settle_are_counted(monkeypatch):
    def stubborn(wind, *args, **keywords):
        layer = solve_sea(wind, *args, **keywords)
        members = layer.converged.size > 1  # the profile itself settles
        return layer._replace(converged=layer.converged & (not members))

    monkeypatch.setattr(surface_module, "solve_sea", stubborn)
    outlook = told({"sea_surface_temperature": 290.0}, members=64)
    assert value(outlook, "surface_layer_unconverged") == 64
    assert value(outlook, "surface_layer_state") == SURFACE_STATES["modelled"]
    assert value(outlook, "surface_layer_too_stable") == 0
    monkeypatch.undo()
    settled = told({"sea_surface_temperature": 290.0}, members=64)
    assert value(settled, "surface_layer_unconverged") == 0


def test_no_wind_at_all_is_gustiness_over_warm_water():
    outlook = told({"sea_surface_temperature": 293.0, "wind_speed": 0.0})
    assert value(outlook, "surface_layer_state") == SURFACE_STATES["modelled"]
    assert 0.0 < value(outlook, "evaporation_duct_height") < 50.0


def test_levels_filled_in_ingest_stay_marked_as_interpolated():
    quality = np.zeros((1, air()["height"].size), dtype=np.int32)
    quality[0, 3] = QUALITY_FLAGS["interpolated"]  # 60 m
    quality[0, 5] = QUALITY_FLAGS["spike"]
    outlook = told({"sea_surface_temperature": 290.0}, quality=quality)
    z, origin = value(outlook, "joined_height"), value(outlook, "level_origin")
    above = z >= 20.0
    assert z[above][origin[above] == LEVEL_ORIGINS["interpolated"]].tolist() == [60.0]
    assert (origin[above & (z != 60.0)] == LEVEL_ORIGINS["measured"]).all()
    assert (origin[z < 20.0] == LEVEL_ORIGINS["modelled_surface_layer"]).all()
    assert z[np.isfinite(z)].max() == 300.0
    assert (origin[np.isnan(z)] == -1).all()


def test_the_joined_air_is_what_refraction_sees():
    outlook = told({"sea_surface_temperature": 290.0})
    z, m = value(outlook, "joined_height"), value(outlook, "joined_modified_refractivity")
    # Warm water: M falls to the height of the evaporation duct, then rises.
    lowest = z[np.nanargmin(m[z < 20.0])]
    assert lowest == pytest.approx(value(outlook, "evaporation_duct_height"), rel=0.35)
    above = z >= 20.0
    own = np.interp(z[above], value(outlook, "height"), value(outlook, "modified_refractivity"))
    np.testing.assert_allclose(m[above], own, atol=1e-6)
    plain = told({"surface": "none"})
    assert (value(plain, "level_origin")[:16] == LEVEL_ORIGINS["measured"]).all()
    assert value(plain, "surface_layer_state") == SURFACE_STATES["none"]


def test_the_reason_says_what_is_known_of_the_lowest_metres_and_from_where():
    def words(**more):
        return sightline_reason(told(**more), 0, 0)

    sea = {"sea_surface_temperature": 283.15}
    assert "K colder than the air above it (temperature from the settings)" in words(site=sea)
    assert "(temperature from the series)" in words(series=buoy(284.0))
    assert "not known (no temperature of water or ground): less sure" in words()
    assert "not known (no wind): less sure" in words(site=sea, wind=None)
    calm = {"sea_surface_temperature": 278.15}
    assert "(air too stable for any published function)" in words(site=calm, wind=0.3)
