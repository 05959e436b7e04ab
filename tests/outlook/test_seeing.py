"""Whether a target could be seen must follow from Sun, haze and fog, and be said with limits."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

from forecast.outlook.seeing import (
    LAMP_THRESHOLDS,
    NEAR_SATURATION,
    seeing_conditions,
)
from forecast.outlook.seeing_words import SUN_WARNING, seeing_words
from forecast.outlook.sightlines import look_along, sightline_geometry
from forecast.outlook.surface import STATE_NAMES
from forecast.physics.contrast import CONTRAST_THRESHOLD, HAZE_SCALE_HEIGHT, lamp_range
from forecast.physics.moisture import (
    relative_humidity,
    specific_humidity_from_relative_humidity,
)
from forecast.physics.surface_join import join_surface_layer, trusted_level
from forecast.physics.surface_layer import solve_sea
from forecast.schema import (
    TWILIGHT_CLASSES,
    VARIABLES,
    VISUAL_RANGE_SOURCES,
    WEATHER_ON_PATH,
    describe,
)
from forecast.settings import Sightline

# Invented: a site on 46° N 7° E. The Sun stands near 36°, west-south-west (253°), at 15 UTC.
AFTERNOON = np.datetime64("2031-05-01T15:00:00", "s")
NIGHT = np.datetime64("2031-05-01T23:30:00", "s")
SUNSET = np.datetime64("2031-05-01T18:00:00", "s")
HEIGHT = np.concatenate([[2.0], np.arange(10.0, 3000.0, 20.0)])


def _air(humidity=0.6, height=HEIGHT, above=None, moist=1.0) -> dict[str, np.ndarray]:
    """ICAO standard air (6.5 K/km) with one relative humidity, another between two heights (m)."""
    t = 288.15 - 0.0065 * height
    p = 101325.0 * (1.0 - 0.0065 * height / 288.15) ** 5.2559
    rh = np.full(height.size, float(humidity))
    if above is not None:
        rh[(height >= above[0]) & (height <= above[1])] = moist
    q = specific_humidity_from_relative_humidity(rh, t, p)
    return dict(zip(STATE_NAMES, (height, p, t, q), strict=True))


def _line(**changes) -> Sightline:
    values = {
        "name": "far rock",
        "site": "cape",
        "observer_height": 8.0,
        "target_height": 120.0,
        "distance": 40e3,
        "azimuth": 40.0,
    }
    return Sightline(**{**values, **changes})


def _see(line, airs, time=AFTERNOON, visibility=None, latitude=46.0) -> xr.Dataset:
    """Seeing of one sightline through some profiles, as the outlook holds it."""
    lines = line if isinstance(line, list) else [line]
    airs = airs if isinstance(airs, list) else [airs]
    state = {name: np.stack([a[name] for a in airs]) for name in STATE_NAMES}
    rows = len(airs)
    place, site = np.full(rows, latitude), np.full(rows, "cape")
    geometry = sightline_geometry(lines, place, site)
    seen = look_along(lines, state, place, site, geometry)
    found = seeing_conditions(
        lines,
        state,
        np.broadcast_to(time, rows),
        place,
        np.full(rows, 7.0),
        site,
        seen["apparent_elevation"][1],
        visibility,
    )
    wave = np.array([each.wave for each in lines], dtype=str)
    return xr.Dataset({**geometry, **found}, coords={"sightline_wave": ("sightline", wave)})


def test_everything_told_is_named_in_the_schema():
    seen = _see(_line(lamp_intensity=1e4), _air())
    told = set(seen.data_vars)
    assert all(VARIABLES[str(name)].dims == seen[name].dims for name in told)
    assert {"sun_altitude", "visual_range", "weather_on_path", "lamp_range_upper"} <= told
    assert describe(seen)["visual_range"].attrs["units"] == "m"


def test_given_visibility_sets_the_range():
    # WMO-No. 8: visibility is the range at a contrast of 0.05; at 0.02 it is ln 0.02 / ln 0.05
    # times as long. The path lies in the lowest 120 m, where haze thins by less than a tenth.
    found = float(_see(_line(visibility=20e3), _air())["visual_range"][0, 0])
    at_ground = 20e3 * np.log(0.02) / np.log(0.05)
    assert at_ground < found < at_ground * np.exp(120.0 / HAZE_SCALE_HEIGHT)


def test_settings_win_over_data_and_data_over_humidity():
    airs = [_air()] * 5
    # −1 and NaN say nothing; stations report 9999 m for "10 km or more"; 0 m is dense fog.
    reported = np.array([12e3, np.nan, -1.0, 9999.0, 0.0])
    told = _see(_line(), airs, visibility=reported)
    source = VISUAL_RANGE_SOURCES
    assert told["visual_range_source"].values[:, 0].tolist() == [
        source[name] for name in ("profile", "humidity", "humidity", "humidity", "profile")
    ]
    assert 0.0 < told["visual_range"][4, 0] < 50.0
    own = _see(_line(visibility=30e3), airs, visibility=reported)
    assert (own["visual_range_source"] == source["settings"]).all()
    assert np.ptp(own["visual_range"].values) == 0.0


@settings(max_examples=30)
@given(st.floats(0.0, 1.0), st.floats(0.5, 2000.0), st.floats(10e3, 300e3))
def test_ranges_are_bounded_by_clean_air(humidity, observer, distance):
    seen = _see(_line(observer_height=observer, distance=distance), _air(humidity))
    value = {str(n): float(seen[n].values[0, 0]) for n in seen if "range" in str(n)}
    assert value["visual_range_lower"] <= value["visual_range"] <= value["visual_range_upper"]
    assert value["visual_range_upper"] < value["visual_range_limit"]
    # Rayleigh limit at 550 nm: 340 km at sea level, more where the air is thinner.
    assert 330e3 < value["visual_range_limit"] < 460e3


def test_damp_air_lets_see_less_far():
    seen = _see(_line(), [_air(rh) for rh in (0.3, 0.6, 0.8, 0.9)])
    assert (np.diff(seen["visual_range"].values[:, 0]) < 0.0).all()


def test_haze_is_thinner_from_a_mountain():
    # Closed form: mean of exp(−z/H) between two heights that lie level in the mean.
    low = _see(_line(observer_height=20.0, target_height=20.0, distance=5e3), _air())
    high = _see(_line(observer_height=1200.0, target_height=1200.0, distance=5e3), _air())
    haze = [
        1.0 / float(s["visual_range"][0, 0]) - 1.0 / float(s["visual_range_limit"][0, 0])
        for s in (low, high)
    ]
    assert haze[1] / haze[0] == pytest.approx(np.exp(-1180.0 / HAZE_SCALE_HEIGHT), rel=2e-3)


def test_contrast_fades_to_the_threshold_at_the_target_s_range():
    seen = _see([_line(), _line(contrast=3.0)], _air())
    for i, inherent in enumerate((-0.9, 3.0)):
        left = float(seen["apparent_contrast"][0, i])
        span = float(seen["target_range"][0, i])
        expected = inherent * (CONTRAST_THRESHOLD / abs(inherent)) ** (40e3 / span)
        assert left == pytest.approx(expected, rel=1e-9)


def test_infrared_sees_farther_through_haze():
    seen = _see([_line(), _line(wavelength=1550e-9)], _air(0.8))
    assert seen["visual_range"][0, 1] > 2.0 * seen["visual_range"][0, 0]


@pytest.mark.parametrize(
    ("between", "humidity", "observer", "expected"),
    [
        ((0.0, 60.0), 1.0, 8.0, "saturated_level"),  # fog on the way
        ((0.0, 60.0), 0.96, 8.0, "near_saturation"),  # within a sonde's error of it
        ((800.0, 900.0), 1.0, 8.0, "no_saturated_level"),  # cloud far above the ray
        ((800.0, 900.0), 1.0, 1500.0, "saturated_level"),  # looking down through it
        ((0.0, 60.0), 1.2, 8.0, "saturated_level"),  # supersaturated
    ],
)
def test_fog_counts_where_the_ray_goes(between, humidity, observer, expected):
    seen = _see(_line(observer_height=observer), _air(0.6, above=between, moist=humidity))
    assert seen["weather_on_path"].item() == WEATHER_ON_PATH[expected]


def test_ray_sags_into_fog_that_both_ends_stand_above():
    # Rays between two points 30 m high and 30 km apart sag by some d²/8ka = 15 m (k = 1.2, closed
    # form) towards the Earth: into fog of 20 m, not into fog of 10 m.
    line = _line(observer_height=30.0, target_height=30.0, target_base_height=30.0, distance=30e3)
    fine = np.arange(2.0, 3000.0, 2.0)
    for top, expected in ((20.0, "saturated_level"), (10.0, "no_saturated_level")):
        seen = _see(line, _air(0.6, height=fine, above=(0.0, top)))
        assert seen["weather_on_path"].item() == WEATHER_ON_PATH[expected]


def test_fog_under_the_lowest_level_is_not_known():
    seen = _see(_line(), _air(0.6, height=HEIGHT[HEIGHT > 60.0]))
    assert seen["weather_on_path"].item() == WEATHER_ON_PATH["unknown"]
    assert "fog and low cloud are not known" in seeing_words(seen, 0, 0)


def test_fog_above_a_profile_s_top_is_not_known():
    low = _air(0.6, height=HEIGHT[HEIGHT < 60.0])
    seen = _see(_line(observer_height=200.0, target_height=200.0), low)
    assert seen["weather_on_path"].item() == WEATHER_ON_PATH["unknown"]


def test_saturated_skin_of_the_sea_is_no_fog():
    # Air in touch with sea water is nearly saturated in any weather (98 % over salt water,
    # Kraus & Businger 1994, from memory); at 2 m the air above is back, damp here but not near it.
    one = {name: a[None, :] for name, a in _air(0.92, height=HEIGHT[HEIGHT > 5.0]).items()}
    z, p, t, q = (one[name] for name in STATE_NAMES)
    water = t[:, 0] - 0.5
    layer = solve_sea(np.array([6.0]), t[:, 0], q[:, 0], p[:, 0], water, z[:, 0], z[:, 0])
    joined = join_surface_layer(z, p, t, q, trusted_level(z), layer)
    state = {name: getattr(joined, name)[0] for name in STATE_NAMES}
    skin = relative_humidity(*(state[name][:1] for name in reversed(STATE_NAMES[1:])))
    assert skin[0] > NEAR_SATURATION
    seen = _see(_line(observer_height=0.0), state)  # the ray starts at the water itself
    assert seen["weather_on_path"].item() == WEATHER_ON_PATH["no_saturated_level"]
    assert seen["path_relative_humidity"].item() < NEAR_SATURATION


def test_hidden_target_has_a_sight_too():
    # 300 km away nothing of it shows; the path then follows the Earth.
    seen = _see(_line(distance=300e3), _air())
    assert np.isfinite(seen["visual_range"]).all()
    assert "is 300 km away: too far" in seeing_words(seen, 0, 0)


def test_night_asks_for_a_lamp():
    seen = _see([_line(), _line(lamp_intensity=1e5)], _air(), NIGHT)
    assert seen["twilight_class"].item() == TWILIGHT_CLASSES["night"]
    assert np.isnan(seen["apparent_contrast"]).all()
    assert "too dark" in seeing_words(seen, 0, 0)
    assert "its lamp shows out to" in seeing_words(seen, 0, 1)
    # The lamp's range is Allard's, with the illuminance the eye needs at night.
    mean = -np.log(0.02) / float(seen["visual_range"][0, 1])
    expected = float(lamp_range(1e5, mean, LAMP_THRESHOLDS["night"]))
    assert float(seen["lamp_range"][0, 1]) == pytest.approx(expected, rel=1e-9)
    assert np.isnan(seen["lamp_range"][0, 0])


def test_lamp_is_lost_earlier_the_lighter_it_is():
    hours = AFTERNOON + np.arange(0, 9).astype("m8[h]")
    seen = _see(_line(lamp_intensity=1e5), [_air()] * hours.size, hours)
    reach = seen["lamp_range"].values[:, 0]
    assert (np.diff(reach) >= 0.0).all()
    assert reach[-1] > 3.0 * reach[0]


def test_sun_near_the_target_is_warned_of():
    alone = _see(_line(), _air(), SUNSET)
    azimuth = float(alone["sun_azimuth"][0])
    toward = _see(_line(azimuth=azimuth - 2.0), _air(), SUNSET)
    away = _see(_line(azimuth=(azimuth + 180.0) % 360.0), _air(), SUNSET)
    assert toward["sun_separation"].item() < SUN_WARNING
    words = seeing_words(toward, 0, 0)
    assert "2° right of the target" in words
    assert words.endswith("never point optics near the Sun.")
    assert away["sun_separation"].item() > 170.0
    assert "never point" not in seeing_words(away, 0, 0)
    assert "behind the observer" in seeing_words(away, 0, 0)


def test_sun_below_the_horizon_is_not_warned_of():
    dusk = SUNSET + np.timedelta64(1, "h")
    alone = _see(_line(), _air(), dusk)
    toward = _see(_line(azimuth=float(alone["sun_azimuth"][0])), _air(), dusk)
    assert toward["twilight_class"].item() == TWILIGHT_CLASSES["civil_twilight"]
    assert toward["sun_separation"].item() < SUN_WARNING
    assert "never point" not in seeing_words(toward, 0, 0)


def test_what_is_not_known_is_said():
    dry = _air()
    dry["specific_humidity"] = np.full_like(dry["specific_humidity"], np.nan)
    nowhere = _see(_line(azimuth=np.nan), _air(), latitude=np.nan)
    blind = seeing_conditions(
        [_line()],
        {name: a[None, :] for name, a in dry.items()},
        np.array([AFTERNOON]),
        np.array([46.0]),
        np.array([7.0]),
        np.array(["cape"]),
        np.array([[0.0]]),
    )
    no_azimuth = _see(_line(azimuth=np.nan), _air())
    assert "Where the Sun stands is not known" in seeing_words(nowhere, 0, 0)
    assert "by day" in seeing_words(nowhere, 0, 0)
    assert nowhere["twilight_class"].item() == -1
    assert np.isnan(no_azimuth["sun_separation"]).all()
    assert "Without an azimuth nothing warns" in seeing_words(no_azimuth, 0, 0)
    assert blind["visual_range_source"][1].item() == VISUAL_RANGE_SOURCES["none"]
    assert blind["weather_on_path"][1].item() == WEATHER_ON_PATH["unknown"]
    lines = {"azimuth": ("sightline", [40.0]), "distance": ("sightline", [40e3])}
    wave = {"sightline_wave": ("sightline", np.array(["optical"]))}
    words = seeing_words(xr.Dataset({**blind, **lines}, coords=wave), 0, 0)
    assert "how far haze lets one see is not known" in words
    assert "nan" not in words


def test_rain_is_known_only_through_a_visibility():
    airs = [_air()] * 2
    seen = _see(_line(), airs, visibility=np.array([np.nan, 15e3]))
    assert "rain and snow are not known" in seeing_words(seen, 0, 0)
    assert "rain" not in seeing_words(seen, 1, 0)


def test_fog_takes_away_the_lower_bound():
    # Humidity does not tell how thick fog is: nothing may be called near enough in it.
    foggy = _air(0.7, above=(0.0, 60.0))
    seen = _see([_line(distance=3e3), _line(distance=3e3, visibility=30e3)], foggy)
    assert seen["visual_range_lower"][0, 0] == 0.0
    assert "perhaps near enough, and only without fog" in seeing_words(seen, 0, 0)
    assert seen["visual_range_lower"][0, 1] > 30e3  # given: 1.3 × 24 km


def test_radio_is_left_out():
    seen = _see([_line(), _line(wave="radio")], _air())
    assert np.isnan(seen["visual_range"][0, 1])
    assert seen["weather_on_path"][0, 1] == -1
    assert seeing_words(seen, 0, 1) == ""


@pytest.mark.parametrize("visibility", [0.0, -10.0])
def test_visibility_that_cannot_be_is_refused(visibility):
    with pytest.raises(ValueError, match=r"visibility .* m; expected more than 0 m"):
        _see(_line(visibility=visibility), _air())


def test_sightlines_are_told_one_by_one_as_together():
    lines = [_line(), _line(distance=70e3, azimuth=200.0), _line(wave="radio"), _line(site="none")]
    together = _see(lines, [_air(0.5), _air(0.9)])
    for i, line in enumerate(lines):
        alone = _see(line, [_air(0.5), _air(0.9)])
        for name in ("visual_range", "sun_separation", "weather_on_path"):
            np.testing.assert_array_equal(together[name].values[:, i], alone[name].values[:, 0])
