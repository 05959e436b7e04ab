"""Where to stand: what rays, reciprocity and counting say the odds by height must be."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from scipy.stats import beta

from forecast.outlook.intervals import probability_interval
from forecast.outlook.stand import (
    StandShares,
    Views,
    join_shares,
    stand_geometry,
    stand_heights,
    stand_shares,
    trace_places,
    trace_stands,
)
from forecast.outlook.stand_choice import (
    best_choice,
    best_occasion,
    known_from,
    stand_statistics,
    stand_words,
)
from forecast.outlook.surface import STATE_NAMES
from forecast.physics.earth import euler_radius
from forecast.physics.rays import build_medium
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import trace_sightlines
from forecast.physics.surface_join import join_surface_layer, trusted_level
from forecast.physics.surface_layer import solve_sea
from forecast.schema import SURFACE_STATES
from forecast.settings import STAND_HEIGHTS, Place, Sightline

LATITUDE = 46.0
# Invented air: 10 m and then every 40 m; 6.5 K/km lapse (ICAO standard), 6 g/kg.
_Z = np.concatenate([[10.0], np.arange(40.0, 3000.0, 40.0)])
_T = 288.15 - 0.0065 * _Z
_P = 101325.0 * (1.0 - 0.0065 * _Z / 288.15) ** 5.2559


def _line(**changes) -> Sightline:
    values = {
        "name": "far light",
        "site": "cape",
        "observer_height": 4.0,
        "target_height": 60.0,
        "distance": 40e3,
    }
    return Sightline(**{**values, **changes})


def _air(warmer: list[float] | None = None, columns: int = 1) -> dict[str, np.ndarray]:
    """Columns over water colder than the air at 10 m by `warmer` K, or without water at all."""
    columns = columns if warmer is None else len(warmer)
    q = np.full(_Z.size, 0.006)
    height, pressure, temperature, humidity = (np.tile(a, (columns, 1)) for a in (_Z, _P, _T, q))
    if warmer is None:
        return dict(zip(STATE_NAMES, (height, pressure, temperature, humidity), strict=True))
    layer = solve_sea(
        np.full(columns, 4.0), temperature[:, 0], humidity[:, 0], pressure[:, 0],
        temperature[:, 0] - np.array(warmer), height[:, 0], height[:, 0],
    )  # fmt: skip
    joined = join_surface_layer(
        height, pressure, temperature, humidity, trusted_level(height), layer
    )
    return {name: getattr(joined, name) for name in STATE_NAMES}


def _where(columns: int) -> tuple[np.ndarray, np.ndarray]:
    return np.full(columns, LATITUDE), np.full(columns, "cape")


def _smooth_air(columns: int, seed: int) -> dict[str, np.ndarray]:
    """Columns without any duct: lapse of 2 to 9 K/km, never more, at every level."""
    rng = np.random.default_rng(seed)
    z = np.linspace(0.0, 3000.0, 61)
    lapse = np.repeat(rng.uniform(0.002, 0.009, (columns, 12)), 5, axis=1)
    t = 288.0 - np.cumsum(np.concatenate([np.zeros((columns, 1)), lapse * 50.0], axis=1), axis=1)
    p = 101325.0 * np.exp(-0.0341632 * z / 280.0) * np.ones((columns, 1))
    height = np.tile(z, (columns, 1))
    return dict(zip(STATE_NAMES, (height, p, t, np.full(t.shape, 0.004)), strict=True))


# --- Rays ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("distance", [25e3, 40e3, 60e3])
def test_without_ducts_a_higher_eye_never_sees_less(distance):
    """Geometry: the ray that grazes the surface reaches farther down the higher the eye."""
    air = _smooth_air(40, seed=7)
    views = trace_stands([_line(target_height=60.0, distance=distance)], air, *_where(40))
    assert np.all(np.diff(views.is_open, axis=-1) >= 0.0)
    assert np.all(np.diff(views.extent, axis=-1) >= -1e-3)
    assert np.all(views.in_duct == 0.0)
    assert views.is_open.max() == 1.0
    assert views.is_open.min() == 0.0 or distance < 30e3  # the claim is not empty


def _optical_m(air: dict[str, np.ndarray], radius: float) -> tuple[np.ndarray, np.ndarray]:
    """Heights and M of a lone column's levels, from the ground up as the tracer continues it."""
    z, p, t, q = (air[name][0] for name in STATE_NAMES)
    good = np.isfinite(z)
    n = optical_refractivity(p[good], t[good], q[good], 550e-9)
    z = z[good]
    return z, n + 1e6 * z / radius


@pytest.mark.parametrize("warmer", [3.0, 5.0, 6.0])
def test_the_eye_is_in_the_duct_where_m_says_so(warmer):
    """Ray invariant: a level ray is held down if and only if some M above is less than at the eye.

    M at the eye is interpolated between the levels of the joined profile, the comparison is made
    here from N and z alone and not by the ray tracer.
    """
    air = _air([warmer])
    radius = float(euler_radius(LATITUDE, np.nan))
    z, m = _optical_m(air, radius)
    eyes = np.array(STAND_HEIGHTS)
    least_above = np.array([m[z > eye].min() for eye in eyes])
    held = np.interp(eyes, z, m) > least_above + 1e-6
    views = trace_stands([_line()], air, *_where(1))
    assert np.array_equal(views.in_duct[0, 0] == 1.0, held)
    top = z[np.argmin(m)]
    assert held.any() and np.array_equal(held, eyes < top)  # one duct, down to the water


def test_over_cold_water_low_beats_middling_but_not_high():
    """As found, water 6 K colder, 4 m/s, target at 40 km: M falls from the water up to 10 m.

    What must be so: a ray along the duct's top (the least M) leaves it upwards as from a horizon
    at that height. From an eye at the duct's top that happens at once, from an eye in the duct or
    above only after the way there; so both hide less than the eye at the top does.
    """
    air = _air([6.0])
    radius = float(euler_radius(LATITUDE, np.nan))
    z, m = _optical_m(air, radius)
    top = float(z[np.argmin(m)])
    assert top == 10.0
    line = _line(target_height=400.0, stand_heights=(0.5, 2.0, 5.0, top, 15.0, 30.0))
    hidden = 400.0 - trace_stands([line], air, *_where(1)).extent[0, 0]
    worst = int(np.argmax(hidden))
    assert line.stand_heights[worst] == top
    assert np.all(np.diff(hidden[: worst + 1]) > 1.0)  # falling into the duct's top: worse
    assert np.all(np.diff(hidden[worst:]) < -1.0)  # climbing out of it: better
    assert hidden[-1] < hidden[0] - 10.0  # and 30 m beats everything lower
    # Size by hand: above the top M rises by g per metre, so that a ray has risen by g x² / 2 at x
    # from where it is level. From the top itself that is all 40 km; from 30 m it first comes down
    # 20 m in x = √(2 · 20 m / g).
    above = (z > top) & (z < 400.0)
    g = 1e-6 * float(np.polyfit(z[above], m[above], 1)[0])
    assert hidden[worst] == pytest.approx(top + 0.5 * g * 40e3**2, rel=0.03)
    from_30 = 40e3 - np.sqrt(2.0 * 20.0 / g)
    assert hidden[-1] == pytest.approx(top + 0.5 * g * from_30**2, rel=0.05)


def test_a_point_is_seen_from_where_it_sees():
    """Reciprocity: the eye sees the lamp exactly where a ray fan from the lamp arrives.

    One trace from the lamp gives the lit heights at the observer's distance as intervals; the
    sweep traces from every eye. Eyes within 0.1 m of an interval's end are left out.
    """
    rng = np.random.default_rng(5)
    air = _air(list(rng.uniform(-3.0, 7.0, 60)))
    lamp = 36.0
    heights = tuple(np.round(np.geomspace(0.6, 90.0, 25), 3))
    line = _line(target_height=lamp, target_base_height=lamp, stand_heights=heights)
    views = trace_stands([line], air, *_where(60))
    n = optical_refractivity(*(air[name] for name in STATE_NAMES[1:]), 550e-9)
    medium = build_medium(
        air["height"], n, np.full(60, float(euler_radius(LATITUDE, np.nan))), "optical"
    )
    back = trace_sightlines(medium, lamp, 200.0, 40e3)
    low, high = (a[:, 0, None, :] for a in (back.visible_bottom, back.visible_top))
    eye = np.array(heights)[None, :, None]
    lit = ((eye >= low) & (eye <= high)).any(axis=-1)
    near_end = ((abs(eye - low) < 0.1) | (abs(eye - high) < 0.1)).any(axis=-1)
    # A point is open only from 1 m above its interval's lower end, so that "open" implies "lit".
    is_open = views.is_open[:, 0] == 1.0
    assert np.all(lit[is_open & ~near_end])
    assert 0.1 < lit.mean() < 0.95  # both happen
    # Conversely what is lit is open up to that margin, of which little is left.
    assert (lit & ~is_open & ~near_end).mean() < 0.05


def test_a_nearer_place_has_at_least_the_odds_of_a_farther_one():
    """Standard lapse, same ground: less Earth in between hides less of the target."""
    places = tuple(Place(f"{d:g} km", 3.0, 1e3 * d) for d in (20.0, 30.0, 40.0, 55.0))
    line = _line(places=places, target_height=120.0)
    air = _smooth_air(25, seed=3)
    views = trace_places([line], air, *_where(25))
    assert views.is_open.shape == (25, 1, 4, len(STAND_HEIGHTS))
    assert np.all(np.diff(views.is_open, axis=2) <= 0.0)
    assert np.all(np.diff(views.extent, axis=2) <= 1e-3)
    assert views.is_open.min() == 0.0 and views.is_open.max() == 1.0


def test_ground_counts_as_height_of_the_eye():
    """2 m on ground of 5 m is 7 m above the water; a tide of 1 m takes 1 m from eye and target."""
    air = _smooth_air(10, seed=4)
    line = _line(places=(Place("bank", 5.0, 40e3),), target_height=120.0)
    at = line.stand_heights.index
    stand = trace_stands([line], air, *_where(10)).extent[:, 0]
    place = trace_places([line], air, *_where(10)).extent[:, 0, 0]
    assert np.array_equal(place[:, at(2.0)], stand[:, at(7.0)])
    tide = _line(sea_level_offset=1.0, target_height=121.0)
    high_water = trace_stands([tide], air, *_where(10)).extent[:, 0]
    assert np.array_equal(high_water[:, at(3.0)], stand[:, at(2.0)])
    assert np.all(np.isnan(high_water[:, at(0.5)]))  # under water nobody stands


def test_air_that_is_missing_is_unknown_and_not_shut():
    air = _smooth_air(4, seed=1)
    for a in air.values():
        a[1] = np.nan
    latitude, site = _where(4)
    site[2] = "elsewhere"
    views = trace_stands([_line()], air, latitude, site)
    for values in views:
        assert np.isnan(values[1:3]).all() and np.isfinite(values[[0, 3]]).all()
    shares = stand_shares([_line()], air, latitude, site, np.array([0, 0, 1, 2]), 3)
    told = trace_stands([_line()], air, latitude, site).is_open[0, 0]
    assert np.array_equal(shares.stand_open[0, 0], told)  # of the one member that is known
    assert np.isnan(shares.stand_open[1]).all()
    out = stand_statistics([_line()], shares, np.full(3, 6.0), np.zeros(3))
    assert np.isnan(out["stand_probability_lower"][1][1]).all()
    assert np.isnan(out["best_stand_height"][1][1, 0])


# --- Counting ------------------------------------------------------------------------------------


def _lines_of_all_kinds() -> list[Sightline]:
    return [
        _line(places=(Place("pier", 1.0, 39e3), Place("hill", 40.0, 43e3))),
        _line(name="hop", wave="radio", distance=60e3, target_height=30.0,
              target_base_height=30.0, stand_heights=(2.0, 25.0)),
        _line(name="none", site="elsewhere", places=(Place("pier", 1.0, 39e3),)),
    ]  # fmt: skip


def test_shares_are_what_counting_one_by_one_gives():
    lines = _lines_of_all_kinds()
    rng = np.random.default_rng(2)
    owner = rng.permutation(np.repeat([0, 1, 2], [5, 8, 6]))
    air = _air(list(rng.uniform(-2.0, 7.0, owner.size)))
    latitude, site = _where(owner.size)
    shares = stand_shares(lines, air, latitude, site, owner, 3)
    stand, place = (f(lines, air, latitude, site) for f in (trace_stands, trace_places))
    for row in range(3):
        mine = [c for c in range(owner.size) if owner[c] == row]
        for i, line in enumerate(lines[:2]):
            for s in range(len(line.stand_heights)):
                opened = [float(stand.is_open[c, i, s]) for c in mine]
                assert shares.stand_open[row, i, s] == sum(opened) / len(mine)
                extents = sorted(float(stand.extent[c, i, s]) for c in mine)
                middle = len(mine) // 2
                median = extents[middle]
                if len(mine) % 2 == 0:
                    median = 0.5 * (extents[middle - 1] + median)
                assert shares.stand_extent[row, i, s] == pytest.approx(median, abs=1e-9)
                for p in range(len(line.places)):
                    opened = [float(place.is_open[c, i, p, s]) for c in mine]
                    assert shares.place_open[row, i, p, s] == sum(opened) / len(mine)
    assert np.isnan(shares.stand_open[:, 1, 2:]).all()  # shorter list of heights: padding
    assert np.isnan(shares.stand_open[:, 2]).all()
    assert np.isnan(shares.place_open[:, 1:]).all()
    assert shares.place_members.tolist() == [[5, 0, 0], [8, 0, 0], [6, 0, 0]]
    assert len(set(shares.stand_open[np.isfinite(shares.stand_open)])) > 3


def test_intervals_are_those_of_the_effective_number():
    lines = _lines_of_all_kinds()
    air = _air(list(np.linspace(-2.0, 7.0, 24)))
    latitude, site = _where(24)
    shares = stand_shares(lines, air, latitude, site, np.repeat([0, 1], 12), 2)
    sure = np.array([6.0, 12.0])
    out = stand_statistics(lines, shares, sure, np.zeros(2))
    chance = out["stand_probability"][1]
    lower, upper = probability_interval(chance * sure[:, None, None], sure[:, None, None])
    np.testing.assert_array_equal(out["stand_probability_lower"][1], np.minimum(lower, chance))
    np.testing.assert_array_equal(out["stand_probability_upper"][1], np.maximum(upper, chance))
    known = np.isfinite(chance)
    assert np.all(out["stand_probability_lower"][1][known] <= chance[known])
    for name, (dims, values) in out.items():
        assert len(dims) == values.ndim, name
    assert out["best_place_overall"][1].tolist()[1:] == [-1, -1]


def test_rows_may_be_worked_on_in_parts():
    lines = _lines_of_all_kinds()
    air = _air(list(np.linspace(-2.0, 7.0, 12)))
    latitude, site = _where(12)
    owner = np.repeat([0, 1], 6)
    whole = stand_shares(lines, air, latitude, site, owner, 2)
    parts = []
    for k in range(2):
        mine = owner == k
        some = {n: a[mine] for n, a in air.items()}
        parts.append(stand_shares(lines, some, latitude[mine], site[mine], owner[mine] * 0, 1))
    for a, b in zip(whole, join_shares(parts), strict=True):
        np.testing.assert_array_equal(a, b)


def test_many_places_are_judged_by_fewer_members_and_are_less_sure():
    """The work stays bounded; the interval is then that of the members used, 16 at least."""
    places = tuple(Place(f"p{i}", float(i), 40e3 if i % 2 else 150e3) for i in range(60))
    line = _line(places=places)
    air = _air(list(np.linspace(-2.0, 7.0, 64)))
    latitude, site = _where(64)
    shares = stand_shares([line], air, latitude, site, np.zeros(64, int), 1)
    assert shares.place_members.tolist() == [[16]]
    every_fourth = {n: a[::4] for n, a in air.items()}
    views = trace_places([line], every_fourth, latitude[::4], site[::4])
    np.testing.assert_allclose(shares.place_open[0], views.is_open.mean(axis=0))
    out = stand_statistics([line], shares, np.array([50.0]), np.zeros(1))
    _, upper = probability_interval(0.0, 16.0)
    never = shares.place_open == 0.0
    assert never.any()
    np.testing.assert_allclose(out["place_probability_upper"][1][never], upper)


def test_the_best_is_chosen_by_chance_then_sureness_then_extent_then_the_lowest():
    nan = np.nan
    cases = [
        # chance, lower, extent, expected
        ([0.2, 0.8, 0.5], [0.1, 0.6, 0.3], [1.0, 2.0, 9.0], 1),
        ([0.8, 0.8, 0.5], [0.5, 0.6, 0.3], [9.0, 2.0, 9.0], 1),
        ([0.8, 0.8, 0.8], [0.6, 0.6, 0.6], [1.0, 3.0, 3.0], 1),
        ([0.8, 0.8, 0.8], [0.6, 0.6, 0.6], [3.0, 3.0 + 1e-9, 3.0], 0),
        ([0.0, 0.0, 0.0], [0.0, 0.0, 0.0], [0.0, 0.0, 0.0], -1),
        ([nan, 0.1, nan], [nan, 0.0, nan], [nan, 0.0, nan], 1),
        ([nan, nan, nan], [nan, nan, nan], [nan, nan, nan], -1),
    ]
    arrays = [np.array([case[i] for case in cases]) for i in range(3)]
    assert best_choice(*arrays).tolist() == [case[3] for case in cases]


def _shares(chance: np.ndarray, in_duct: np.ndarray | None = None) -> StandShares:
    """Shares of rows × one sightline × stands, no places."""
    a = np.asarray(chance, dtype=float)[:, None, :]
    duct = np.zeros(a.shape) if in_duct is None else np.broadcast_to(in_duct, a.shape)
    none = np.zeros((a.shape[0], 1, 0, a.shape[2]))
    judged = np.full((a.shape[0], 1), 1000.0)
    return StandShares(a, 10.0 * a, duct, none, none, 0.0 * judged, judged)


def test_over_all_times_the_highest_mean_wins_and_unknown_times_do_not_count():
    line = _line(stand_heights=(1.0, 5.0, 20.0))
    nan = np.nan
    shares = _shares([[0.9, 0.5, 0.4], [0.0, 0.6, 0.4], [nan, nan, nan]])
    out = stand_statistics([line], shares, np.full(3, 20.0), np.zeros(3))
    assert out["best_stand_height"][1][:2, 0].tolist() == [1.0, 5.0]
    assert out["best_stand_height_overall"][1].tolist() == [5.0]  # means 0.45, 0.55, 0.40


def test_a_height_that_is_not_known_is_never_named_best():
    """Over water without a surface layer nothing is known under the lowest level, here 12 m."""
    line = _line(stand_heights=(1.0, 5.0, 20.0))
    states = np.array([SURFACE_STATES[s] for s in ("unknown", "modelled", "none")])
    known = known_from(states, np.array([12.0, 12.0, 12.0]))
    assert known.tolist() == [12.0, 0.0, 0.0]
    out = stand_statistics([line], _shares([[0.9, 0.5, 0.4]] * 3), np.full(3, 20.0), known)
    assert out["best_stand_height"][1][:, 0].tolist() == [20.0, 1.0, 1.0]


# --- Words ---------------------------------------------------------------------------------------


def _outlook(chance, in_duct=None, surface="modelled", ascent=(), heights=(0.5, 10.0, 40.0)):
    """An outlook with what the words need: hourly rows of one site and one sightline."""
    line = _line(stand_heights=heights)
    rows = len(chance)
    state = np.full(rows, SURFACE_STATES[surface])
    lowest = np.full(rows, 12.0)
    data = dict(stand_geometry([line]))
    shares = _shares(chance, in_duct)
    data |= stand_statistics([line], shares, np.full(rows, 20.0), known_from(state, lowest))
    data |= {"surface_layer_state": ("profile", state), "lowest_level": ("profile", lowest)}
    start = np.datetime64("2031-05-01T02:00", "ns")
    kind = ["ascent" if i in ascent else "model" for i in range(rows)]
    coords = {
        "time": ("profile", start + np.arange(rows) * np.timedelta64(3600, "s")),
        "site": ("profile", ["cape"] * rows),
        "source_kind": ("profile", kind),
        "sightline_site": ("sightline", ["cape"]),
    }
    return xr.Dataset(data, coords=coords)


def test_words_name_height_odds_and_time_and_compare_low_with_high():
    """80 % of 20 effective members: 5 and 95 % points of Beta(16.5, 4.5) are 0.63 and 0.91."""
    assert np.round(beta(16.5, 4.5).ppf([0.05, 0.95]), 2).tolist() == [0.63, 0.91]
    low = _outlook([[0.1, 0.1, 0.1], [0.8, 0.5, 0.35]], in_duct=[0.78, 0.4, 0.03])
    words = stand_words(low, 0)
    assert words.startswith("Best from 0.5 m (80 %, 63 to 91 %) at 2031-05-01 03:00 UTC;")
    assert "low beats high: from 40 m 35 %" in words
    assert "in 78 % of members at 0.5 m, in 3 % at 40 m" in words


def test_words_give_no_duct_as_the_reason_where_the_numbers_show_none():
    words = stand_words(_outlook([[0.8, 0.5, 0.35]], in_duct=[0.2, 0.2, 0.1]), 0)
    assert "low beats high" in words and "duct" not in words


@pytest.mark.parametrize(
    ("chance", "expected"),
    [
        ([0.2, 0.5, 0.9], "as found, higher is better: from 0.5 m 20 %"),
        ([0.5, 0.2, 0.9], "middling is worst: from 10 m 20 %, but from 0.5 m 50 %"),
        ([0.52, 0.5, 0.55], "other heights do as well, none under 50 %"),
    ],
)
def test_words_tell_the_order_as_found(chance, expected):
    assert expected in stand_words(_outlook([chance]), 0)


def test_words_say_never_where_nothing_opens():
    words = stand_words(_outlook([[0.0, 0.0, 0.0]] * 3), 0)
    assert words == "Never open from any height (0.5 to 40 m): 0 % at all 3 valid times."


def test_words_say_what_is_not_known():
    words = stand_words(_outlook([[0.9, 0.5, 0.35]], surface="unknown"), 0)
    assert words.startswith("Best from 40 m (35 %")
    assert "Heights below 12 m are not known" in words
    assert "not known" in stand_words(_outlook([[0.0] * 3], surface="unknown"), 0)
    assert "no usable air" in stand_words(_outlook([[np.nan] * 3]), 0)


def test_the_tide_counts_in_what_is_known():
    """Eyes stand 3 m higher above water that is 3 m lower: 10 m is then above the lowest level."""
    line = _line(stand_heights=(1.0, 10.0), sea_level_offset=-3.0)
    out = stand_statistics([line], _shares([[0.9, 0.5]]), np.full(1, 20.0), np.array([12.0]))
    assert out["best_stand_height"][1].tolist() == [[10.0]]
    assert stand_geometry([line])["stand_eye_height"][1].tolist() == [[4.0, 13.0]]


def test_words_look_ahead_of_the_latest_ascent():
    """What can still be planned is named, however likely it was before."""
    data = _outlook([[0.9, 0.9, 0.9], [0.2, 0.4, 0.3]], ascent=(0,))
    assert best_occasion(data, 0) == (1, 1)
    assert "03:00 UTC" in stand_words(data, 0)
    assert best_occasion(_outlook([[0.9, 0.9, 0.9], [0.2, 0.4, 0.3]]), 0) == (0, 0)


def test_geometry_is_padded_and_sorted():
    lines = _lines_of_all_kinds()
    table = stand_heights([_line(stand_heights=(30.0, 2.0)), _line(stand_heights=(1.0,))])
    np.testing.assert_array_equal(table, [[2.0, 30.0], [1.0, np.nan]])
    geometry = stand_geometry(lines)
    assert geometry["place_name"][1].tolist() == [["pier", "hill"], ["", ""], ["pier", ""]]
    assert "place_name" not in stand_geometry([_line()])
    assert Views._fields == ("is_open", "extent", "in_duct")
