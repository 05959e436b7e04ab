"""The outlook must say what the physics says, share by share, and say when it cannot know."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import beta

import forecast
from forecast.outlook import make_outlook
from forecast.outlook.duct_events import duct_cover, duct_under
from forecast.outlook.intervals import probability_interval
from forecast.physics.ducts import find_ducts
from forecast.schema import SIGHTLINE_STATES
from forecast.settings import Site
from tests.outlook.build import air, line, profiles, settings


def test_interval_is_the_jeffreys_posterior():
    # Brown, Cai & DasGupta 2001; reference: scipy.stats.beta.
    hits, trials = np.array([1.0, 7.0, 31.0]), np.array([32.0, 32.0, 32.0])
    lower, upper = probability_interval(hits, trials)
    assert lower == pytest.approx(beta(hits + 0.5, trials - hits + 0.5).ppf(0.05), abs=1e-10)
    assert upper == pytest.approx(beta(hits + 0.5, trials - hits + 0.5).ppf(0.95), abs=1e-10)
    lower, upper = probability_interval([0.0, 32.0, np.nan], 32.0)
    assert lower[0] == 0.0
    assert upper[1] == 1.0
    assert 0.0 < upper[0] < 0.1
    assert 0.9 < lower[1] < 1.0
    assert np.isnan(lower[2])
    assert np.isnan(upper[2])


def test_standard_air_has_no_duct_and_a_strong_lid_has_one():
    data = profiles([{"air": air()}, {"air": air(inversion=500.0), "hours": 6}])
    outlook = make_outlook(data, settings())
    chance = outlook["duct_probability"].values
    assert chance[0] == pytest.approx([0.0, 0.0, 0.0])
    # The lid lies at 500 to 560 m: over 300 m, under 1 km.
    assert chance[1] == pytest.approx([0.0, 1.0, 1.0])
    inside = outlook["duct_likelihood"].sel(height_bin=[100.0, 525.0, 1500.0]).values[1]
    assert inside[1] == pytest.approx(1.0, abs=0.2)
    assert inside[2] == 0.0


def test_a_profile_cut_short_cannot_tell_of_what_it_does_not_reach():
    data = profiles([{"air": air(top=600.0)}])
    outlook = make_outlook(data, settings())
    chance = outlook["duct_probability"].values[0]
    assert chance[0] == 0.0
    assert np.isnan(chance[1:]).all()
    assert np.isnan(outlook["duct_probability_upper"].values[0, 1:]).all()
    assert np.isnan(outlook["duct_likelihood"].sel(height_bin=1000.0).values[0])


def test_an_ascent_speaks_before_a_model_and_a_short_lead_before_a_long_one():
    data = profiles(
        [
            {"air": air(), "kind": "model", "lead": 6, "file": "old.nc"},
            {"air": air(), "kind": "model", "lead": 0, "file": "new.nc"},
            {"air": air(), "kind": "ascent", "file": "sonde.nc"},
            {"air": air(), "kind": "model", "lead": 30, "hours": 6, "file": "old.nc"},
            {"air": air(), "kind": "model", "lead": 6, "hours": 6, "file": "new.nc"},
        ]
    )
    outlook = make_outlook(data, settings())
    assert list(outlook["source_file"].values) == ["sonde.nc", "new.nc"]


def test_the_order_of_inputs_changes_nothing():
    rows = [
        {"air": air(inversion=100.0 * i), "hours": 6 * i, "site": s}
        for i in range(1, 4)
        for s in ("cape", "bay")
    ]
    whole = make_outlook(profiles(rows), settings(sightlines=(line(),)))
    mixed = make_outlook(profiles(rows[::-1]), settings(sightlines=(line(),)))
    assert whole.identical(mixed)


def test_an_ensemble_is_used_as_it_is():
    # Three of ten members have the lid: the probability is 3/10, no noise added.
    rows = [
        {
            "air": air(inversion=500.0 if m < 3 else None),
            "kind": "model",
            "lead": 6,
            "member": m,
        }
        for m in range(10)
    ]
    outlook = make_outlook(profiles(rows), settings())
    assert outlook.sizes["profile"] == 1
    assert outlook["member_count"].values[0] == 10
    assert outlook["duct_probability"].values[0] == pytest.approx([0.0, 0.3, 0.3])


def test_rows_agree_with_the_public_face():
    data = profiles([{"air": air(inversion=200.0)}, {"air": air(), "hours": 6}])
    path = line()
    outlook = make_outlook(data, settings(sightlines=(path,)))
    refraction = forecast.refract(data)
    n = outlook.sizes["level"]
    np.testing.assert_allclose(
        outlook["modified_refractivity"].values,
        refraction["modified_refractivity"].values[:, :n],
        rtol=1e-13,
    )
    ducts = forecast.find_ducts(refraction)
    np.testing.assert_allclose(outlook["duct_top"].values, ducts["duct_top"].values)
    seen = forecast.trace_sightlines(
        refraction, path.observer_height, path.target_height, path.distance
    )
    np.testing.assert_array_equal(outlook["sightline_state"].values, seen["sightline_state"].values)
    np.testing.assert_allclose(
        outlook["hidden_height"].values, seen["hidden_height"].values, atol=1e-6
    )


def test_a_surface_duct_opens_the_link_and_standard_air_does_not():
    data = profiles([{"air": air(inversion=40.0)}, {"air": air(), "hours": 6}])
    outlook = make_outlook(data, settings(sightlines=(line(),)))
    state = outlook["sightline_state"].values[:, 0]
    assert state[0] == SIGHTLINE_STATES["open"]
    assert state[1] == SIGHTLINE_STATES["shut"]
    assert outlook["sightline_probability"].values[0, 0] > 0.6
    assert outlook["sightline_probability"].values[1, 0] == 0.0
    low = outlook["hidden_height_lower"].values[:, 0]
    high = outlook["hidden_height_upper"].values[:, 0]
    assert (low <= high).all()


def test_a_sightline_belongs_to_its_site_alone():
    data = profiles([{"air": air(), "site": "bay"}, {"air": air(), "site": "cape"}])
    outlook = make_outlook(data, settings(sightlines=(line(),)))
    assert outlook["sightline_state"].values[0, 0] == -1
    assert np.isnan(outlook["sightline_probability"].values[0, 0])
    assert np.isfinite(outlook["sightline_probability"].values[1, 0])


def test_a_coarse_profile_is_less_sure():
    fine = air(inversion=500.0)
    coarse = {name: a.copy() for name, a in fine.items()}
    for a in coarse.values():
        a[np.arange(a.size) % 6 != 0] = np.nan
    outlook = make_outlook(
        profiles([{"air": fine}, {"air": coarse, "hours": 6}]), settings(members=64)
    )
    assert outlook["near_ground_resolution"].values == pytest.approx([20.0, 120.0])
    width = (outlook["duct_probability_upper"] - outlook["duct_probability_lower"]).values[:, 0]
    assert width[1] > 3.0 * width[0]


def over_water(difference, **changes):
    """Profiles 10 m apart in height with wind, and a site over water colder by `difference`."""
    fine = air()
    data = profiles([{"air": fine}])
    wind = np.full(data["height"].shape, 4.0)
    data = data.assign(
        eastward_wind=(("profile", "level"), wind),
        northward_wind=(("profile", "level"), 0.0 * wind),
    )
    site = Site("cape", 51.0, -20.0, surface="sea", sea_surface_temperature=288.02 - difference)
    values = {"sites": (replace(site, **changes),), "members": 64}
    low = line(wave="optical", observer_height=3.0, target_height=30.0, distance=30e3)
    return data, settings(sightlines=(low,), **values)


def test_cold_water_shows_more_and_warm_water_less():
    # Light is bent down where air warms upward from cold water and up over warm water; the
    # standard value lies between (common practice; the size is checked with the ray invariant
    # when the sightlines themselves are).
    hidden = {}
    for difference in (-4.0, 3.0):
        data, chosen = over_water(difference)
        outlook = make_outlook(data, chosen)
        assert outlook["surface_layer_state"].values[0] == 1
        assert outlook["air_sea_temperature_difference"].values[0] == pytest.approx(
            difference, abs=0.05
        )
        hidden[difference] = float(outlook["hidden_height"].values[0, 0])
        standard = float(outlook["hidden_height_standard"].values[0])
    assert hidden[3.0] < standard - 3.0
    assert hidden[-4.0] > standard + 1.0


def test_without_water_temperature_nothing_is_pretended():
    data, chosen = over_water(0.0, sea_surface_temperature=None)
    outlook = make_outlook(data, chosen)
    assert outlook["surface_layer_state"].values[0] == 2
    plain = make_outlook(data, settings(sightlines=chosen.sightlines, members=64))
    np.testing.assert_array_equal(outlook["hidden_height"].values, plain["hidden_height"].values)
    # ... and the outlook is less sure of the sightline, not of the ducts.
    for name, wider in (("sightline", True), ("duct", False)):
        upper, other = (o[f"{name}_probability_upper"].values for o in (outlook, plain))
        assert ((upper > other).all()) == wider


def test_ducts_are_those_of_the_profile_not_of_the_surface_layer():
    # Evaporation ducts are nearly always there: counted as ducts they would hide all others.
    data, chosen = over_water(-4.0)
    outlook = make_outlook(data, chosen)
    assert outlook["duct_probability"].values[0, 0] == 0.0
    assert 1.0 < outlook["evaporation_duct_height"].values[0] < 40.0


def test_intervals_hold_their_probability():
    data = profiles([{"air": air(inversion=h), "hours": i} for i, h in enumerate((30, 90, 270))])
    outlook = make_outlook(data, settings(sightlines=(line(),)))
    for name in ("duct", "sightline"):
        chance = outlook[f"{name}_probability"].values
        assert (outlook[f"{name}_probability_lower"].values <= chance).all()
        assert (outlook[f"{name}_probability_upper"].values >= chance).all()


def test_no_profile_is_a_clear_error():
    data = profiles([{"air": air()}]).isel(profile=slice(0, 0))
    with pytest.raises(forecast.InputError, match="no profile"):
        make_outlook(data, settings())


def test_progress_counts_to_the_end():
    calls = []
    data = profiles([{"air": air(), "hours": i} for i in range(3)])
    make_outlook(data, settings(), progress=lambda *a: calls.append(a))
    assert calls[-1] == (3, 3, "members")


def test_duct_events_equal_plain_loops():
    rng = np.random.default_rng(5)
    z = np.sort(rng.uniform(0.0, 2000.0, (50, 30)), axis=1)
    m = 330.0 + np.cumsum(rng.normal(1.0, 4.0, z.shape), axis=1)
    table = find_ducts(z, m)
    ceilings, heights = np.array([300.0, 1000.0]), np.arange(0.0, 2000.0, 50.0)
    under = duct_under(table, ceilings, 2.0)
    cover = duct_cover(table, heights, 2.0)
    for c in range(z.shape[0]):
        strong = [
            (table.base[c, d], table.top[c, d])
            for d in range(table.count[c])
            if table.strength[c, d] >= 2.0
        ]
        for k, ceiling in enumerate(ceilings):
            assert under[c, k] == any(top <= ceiling for _, top in strong)
        for k, height in enumerate(heights):
            assert cover[c, k] == any(base <= height <= top for base, top in strong)
