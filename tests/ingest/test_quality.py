"""Doubtful levels are marked by name; what physics cannot use is dropped; heights always rise."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.errors import InputError
from forecast.ingest import quality as rules
from forecast.ingest.soundings import Sounding, to_column
from forecast.physics.moisture import relative_humidity, specific_humidity_from_relative_humidity
from forecast.schema import QUALITY_FLAGS

from .make_files import Air, make_air


def sound(air: Air, **changes) -> Sounding:
    base = {
        "time": air.time,
        "station": air.station,
        "source_file": "a.nc",
        "pressure": air.p.copy(),
        "temperature": air.t.copy(),
        "specific_humidity": specific_humidity_from_relative_humidity(air.rh, air.t, air.p),
        "altitude": air.z.copy(),
        "latitude": air.latitude,
        "longitude": air.longitude,
        "surface_altitude": air.ground,
    }
    return Sounding(**{**base, **changes})


def flagged(column, name) -> list[int]:
    return list(np.flatnonzero(column.quality & QUALITY_FLAGS[name]))


def fine(seed=0) -> Air:
    """An ascent of 5 m/s read every 2 s up to 3 km: 10 m between levels."""
    air = make_air(301, seed=seed)
    smooth = make_air(2, ground=12.0)
    air.z = 12.0 + 10.0 * np.arange(301.0)
    air.t = 288.0 - 6.0e-3 * (air.z - 12.0)
    air.p = smooth.p[0] * (air.t / 288.0) ** (9.80665 / (287.05 * 6.0e-3))
    air.rh = np.linspace(0.8, 0.5, 301)
    air.u, air.v = np.zeros(301), np.zeros(301)
    return air


def test_good_air_carries_no_flag():
    column = to_column(sound(fine()))
    assert rules.flag_counts(column.quality) == {}
    np.testing.assert_allclose(column.height, fine().z - 12.0, atol=1e-9)


def test_a_first_level_at_the_ground_is_kept():
    """Height 0 is a height."""
    column = to_column(sound(fine()))
    assert column.height[0] == 0.0 and column.usable[0]


def test_a_sounding_written_from_above_is_turned():
    air = fine()
    upside_down = sound(
        air,
        pressure=air.p[::-1],
        temperature=air.t[::-1],
        altitude=air.z[::-1],
        specific_humidity=sound(air).specific_humidity[::-1],
        u=np.arange(301.0)[::-1],
    )
    column, straight = to_column(upside_down), to_column(sound(air))
    for name in ("height", "pressure", "temperature", "specific_humidity", "quality"):
        np.testing.assert_array_equal(getattr(column, name), getattr(straight, name))
    assert column.u[0] == 0.0


def test_the_way_down_is_left_out():
    air = fine()
    down = np.r_[np.arange(301), np.arange(299, 150, -3)]
    column = to_column(
        sound(
            air,
            pressure=air.p[down],
            temperature=air.t[down] + np.where(np.arange(down.size) > 300, 2.0, 0.0),
            specific_humidity=sound(air).specific_humidity[down],
            altitude=air.z[down],
        )
    )
    assert column.height.size == 301
    assert flagged(column, "descending_branch") == [300]
    np.testing.assert_allclose(column.temperature, air.t)


def test_a_dip_of_the_balloon():
    """Levels at or below one already reached lose their height; those above go on."""
    air = fine()
    z = air.z.copy()
    z[100:104] = z[99] + np.array([-4.0, -8.0, -3.0, 0.0])
    column = to_column(sound(air, altitude=z))
    assert flagged(column, "height_not_monotonic") == [100, 101, 102, 103]
    assert np.isnan(column.height[100:104]).all()
    assert np.isfinite(column.temperature[100:104]).all(), "only the height is dropped"
    known = column.height[np.isfinite(column.height)]
    assert (np.diff(known) > 0.0).all() and known.size == 297


def test_of_equal_heights_the_first_is_kept():
    air = fine()
    z, p = air.z.copy(), air.p.copy()
    z[51] = z[50]
    z[61], p[61] = z[60], p[60]
    column = to_column(sound(air, altitude=z, pressure=p))
    assert flagged(column, "height_not_monotonic") == [51]
    assert flagged(column, "duplicate_level") == [61]
    assert np.isfinite(column.height[[50, 60]]).all()
    assert np.isnan(column.height[[51, 61]]).all()


@given(st.lists(st.integers(-30, 60), min_size=2, max_size=60), st.integers(0, 10))
def test_usable_heights_always_rise(steps, seed):
    """Whatever the balloon does, heights that physics sees are strictly rising."""
    z = np.cumsum(np.array(steps, dtype=float)) + 100.0
    rising = rules.rising_levels(z)
    assert (np.diff(z[rising]) > 0.0).all()
    # None is thrown away needlessly: every level left out lies at or below one that is kept.
    for i in np.flatnonzero(~rising):
        assert z[:i].max() >= z[i]


def test_a_height_that_jumps_is_no_new_top():
    """One wild height must not make all later levels 'not monotonic'."""
    air = fine()
    z = air.z.copy()
    z[40] += 2000.0
    z[80] -= 300.0
    column = to_column(sound(air, altitude=z))
    assert flagged(column, "spike") == [40, 80]
    assert np.isnan(column.height[[40, 80]]).all()
    assert np.isfinite(column.height).sum() == 299


@pytest.mark.parametrize("end", [0, 300])
def test_a_wild_height_at_an_end_is_no_ground_and_no_top(end):
    air = fine()
    z = air.z.copy()
    z[end] = 50_000.0
    column = to_column(sound(air, altitude=z))
    assert flagged(column, "spike") == [end]
    assert np.isfinite(column.height).sum() == 300


def test_spikes_of_temperature_and_humidity():
    air = fine()
    t, rh = air.t.copy(), air.rh.copy()
    t[120] += 6.0
    rh[200] = 0.1
    q = specific_humidity_from_relative_humidity(rh, air.t, air.p)
    column = to_column(sound(air, temperature=t, specific_humidity=q))
    assert flagged(column, "spike") == [120, 200]
    assert np.isnan(column.temperature[120])
    assert np.isnan(column.specific_humidity[[120, 200]]).all()
    assert np.isfinite(column.temperature[200])


def test_a_sharp_inversion_is_no_spike():
    """10 K over one level that stays is weather; so is a peak between levels far apart."""
    air = fine()
    t = air.t + np.where(np.arange(301) >= 50, 10.0, 0.0)
    q = specific_humidity_from_relative_humidity(0.3, t, air.p)
    assert flagged(to_column(sound(air, temperature=t, specific_humidity=q)), "spike") == []
    coarse = make_air(20)
    t = coarse.t.copy()
    t[5] += 8.0
    q = specific_humidity_from_relative_humidity(0.3, t, coarse.p)
    assert flagged(to_column(sound(coarse, temperature=t, specific_humidity=q)), "spike") == []


def test_out_of_range():
    air = fine()
    t = air.t.copy()
    t[10], t[11] = 1000.0, 20.0
    q = sound(air).specific_humidity
    q[20], q[21] = 2.0, -0.5
    column = to_column(sound(air, temperature=t, specific_humidity=q))
    assert flagged(column, "temperature_out_of_range") == [10, 11]
    assert flagged(column, "humidity_out_of_range") == [20, 21]
    assert np.isnan(column.temperature[[10, 11]]).all()
    assert np.isnan(column.specific_humidity[[10, 11, 20, 21]]).all()
    assert not column.usable[[10, 11, 20, 21]].any()


def test_supersaturation_is_kept_to_105_percent_and_cut_there():
    air = fine()
    rh = air.rh.copy()
    rh[30:34] = [1.0, 1.04, 1.06, 1.2]
    q = specific_humidity_from_relative_humidity(rh, air.t, air.p)
    column = to_column(sound(air, specific_humidity=q))
    assert flagged(column, "supersaturation") == [32, 33]
    humidity = relative_humidity(column.specific_humidity, column.temperature, column.pressure)
    np.testing.assert_allclose(humidity[30:34], [1.0, 1.04, 1.05, 1.05], rtol=1e-12)


def test_slightly_negative_humidity_counts_as_dry():
    air = fine()
    q = sound(air).specific_humidity
    q[280:] = -1e-5  # −0.2 % relative humidity
    column = to_column(sound(air, specific_humidity=q))
    assert (column.specific_humidity[280:] == 0.0).all()
    assert flagged(column, "humidity_out_of_range") == list(range(280, 301))


def test_frozen_sensors():
    air = fine()
    t, rh = air.t.copy(), air.rh.copy()
    t[100:160] = t[100]  # 590 m
    rh[10:150] = rh[10]  # 1390 m
    q = specific_humidity_from_relative_humidity(rh, t, air.p)
    column = to_column(sound(air, temperature=t, specific_humidity=q))
    assert flagged(column, "frozen_sensor") == list(range(10, 160))
    assert np.isfinite(column.temperature).all(), "marked, not dropped"


def test_a_saturated_cloud_and_a_short_isothermal_layer_are_not_frozen():
    air = fine()
    t, rh = air.t.copy(), air.rh.copy()
    t[100:140] = t[100]  # 390 m
    rh[10:150] = 1.0
    q = specific_humidity_from_relative_humidity(rh, t, air.p)
    assert flagged(to_column(sound(air, temperature=t, specific_humidity=q)), "frozen_sensor") == []


def test_hydrostatic_mismatch():
    """A pressure sensor that lags by 4 hPa from 1.5 km on: 36 m off over the next 300 m."""
    air = fine()
    p = air.p.copy()
    p[150:] += 400.0
    column = to_column(sound(air, pressure=p))
    marked = flagged(column, "hydrostatic_mismatch")
    assert marked[0] == 150 and set(marked) <= set(range(150, 181))
    assert column.usable.all()


def test_gap_near_the_ground():
    air = fine()
    q = sound(air).specific_humidity
    q[5:20] = np.nan  # 50 to 190 m: 160 m between usable levels
    q[200:220] = np.nan  # high up a gap is no matter
    column = to_column(sound(air, specific_humidity=q))
    assert flagged(column, "gap_near_ground") == [20]


def test_values_missing_between_significant_levels_stay_as_levels():
    air = fine()
    t = air.t.copy()
    t[1:300:2] = np.nan
    column = to_column(sound(air, temperature=t))
    assert column.height.size == 301 and column.usable.sum() == 151
    assert flagged(column, "value_missing") == list(range(1, 300, 2))
    assert np.isfinite(column.height).all() and np.isfinite(column.pressure).all()


def test_a_first_level_far_above_the_station():
    air = fine()
    cut = {
        name: getattr(sound(air), name)[15:]
        for name in ("pressure", "temperature", "specific_humidity", "altitude")
    }
    column = to_column(sound(air, **cut))
    assert flagged(column, "first_level_not_at_station") == [0]
    assert column.height[0] == pytest.approx(150.0)


def test_levels_below_the_ground_are_not_used():
    """A station at 112 m: the first ten levels of the file are reduced below it."""
    column = to_column(sound(fine(), surface_altitude=112.0))
    assert flagged(column, "first_level_not_at_station") == list(range(10))
    assert np.isnan(column.height[:10]).all() and column.height[10] == 0.0


def test_rounding_at_the_ground_is_no_fault():
    column = to_column(sound(fine(), surface_altitude=12.4))
    assert column.height[0] == 0.0 and column.height[1] == pytest.approx(9.6)
    assert rules.flag_counts(column.quality) == {}


# --- heights that the file does not give ----------------------------------------------------------


def test_missing_heights_follow_from_pressure():
    """The invented air is hydrostatic (g = 9.80665 m/s², dry): its heights come back."""
    air = fine()
    dry = np.zeros(301)
    column = to_column(sound(air, altitude=None, specific_humidity=dry))
    assert len(flagged(column, "height_from_hypsometry")) == 301
    # Gravity at 48° is 9.809 m/s² at sea level and falls with height: 0.03 % over 3 km.
    np.testing.assert_allclose(column.height, air.z - 12.0, atol=1.5)
    assert column.altitude[0] == 12.0


def test_missing_heights_start_at_the_surface_pressure():
    """First level 40 m up, known only by the pressure at the ground."""
    air = fine()
    part = {"pressure": air.p[4:], "temperature": air.t[4:]}
    column = to_column(
        sound(
            air,
            altitude=None,
            specific_humidity=np.zeros(297),
            extras={"surface_air_pressure": float(air.p[0])},
            **part,
        )
    )
    assert column.height[0] == pytest.approx(40.0, abs=0.1)
    assert column.altitude[0] == pytest.approx(52.0, abs=0.1)


def test_missing_heights_without_any_ground_count_from_the_first_level():
    column = to_column(sound(fine(), altitude=None, surface_altitude=np.nan))
    assert column.height[0] == 0.0
    assert np.isnan(column.altitude).all() and np.isnan(column.surface_altitude)


def test_heights_above_ground_need_no_altitude():
    air = fine()
    above = sound(air, altitude=air.z - 12.0, above_ground=True, surface_altitude=np.nan)
    np.testing.assert_allclose(to_column(above).height, air.z - 12.0)
    known = sound(air, altitude=air.z - 12.0, above_ground=True)
    np.testing.assert_allclose(to_column(known).altitude, air.z)


def test_at_sea_altitude_is_height():
    air = fine()
    column = to_column(sound(air, altitude=air.z - 12.0, surface_altitude=0.0))
    np.testing.assert_array_equal(column.altitude, column.height)


# --- what is set aside ----------------------------------------------------------------------------


def keep_first(values):
    return np.where(np.arange(values.size) == 0, values, np.nan)


@pytest.mark.parametrize(
    ("parts", "said"),
    [
        (("specific_humidity",), "only the first humidity value is present of 301 levels"),
        (
            ("temperature", "specific_humidity"),
            "only the first temperature and humidity values are present of 301 levels",
        ),
    ],
)
def test_only_first_values(parts, said):
    whole = sound(fine())
    changes = {name: keep_first(getattr(whole, name)) for name in parts}
    with pytest.raises(InputError, match=said):
        to_column(sound(fine(), **changes))


def test_fewer_than_two_usable_levels():
    """Temperature and humidity known, but hardly ever at the same level."""
    whole = sound(fine())
    t, q = whole.temperature, whole.specific_humidity
    t[150:] = np.nan
    q[:149] = np.nan
    with pytest.raises(InputError, match=r"only 1 of 301 levels can be used.*value_missing 300"):
        to_column(sound(fine(), temperature=t, specific_humidity=q))


def test_the_given_sounding_is_not_changed():
    air = fine()
    given = sound(air, temperature=np.where(np.arange(301) == 7, 999.0, air.t))
    before = {k: np.copy(v) for k, v in vars(given).items() if isinstance(v, np.ndarray)}
    to_column(given)
    for name, value in before.items():
        np.testing.assert_array_equal(getattr(given, name), value)
