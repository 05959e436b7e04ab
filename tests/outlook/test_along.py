"""Air that changes along a sightline, and ground under it, as settings ask for them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from pyproj import Geod

from forecast.errors import InputError
from forecast.outlook import make_outlook
from forecast.outlook.along import Stations, member_stations, row_stations, station_distances
from forecast.outlook.speaking import speaking_profiles
from forecast.outlook.surroundings import Surroundings
from forecast.outlook.viewing import view_sightline
from forecast.schema import SIGHTLINE_STATES
from forecast.settings import Site
from tests.outlook.build import START, air, line, profiles, settings

GEOD = Geod(ellps="WGS84")
HERE, THERE = (51.0, -20.0), (51.3, -19.5)
AZIMUTH, _, DISTANCE = GEOD.inv(HERE[1], HERE[0], THERE[1], THERE[0])


def place(share, aside=0.0):
    """Latitude and longitude at a share of the way, so many m beside it."""
    east, north, _ = GEOD.fwd(HERE[1], HERE[0], AZIMUTH, share * DISTANCE)
    east, north, _ = GEOD.fwd(east, north, AZIMUTH + 90.0, aside)
    return north, east


SITES = (
    Site("cape", *HERE),
    Site("reef", *place(0.5, 4e3)),
    Site("isle", *place(1.1)),
)
PATH = line(
    name="path", wave="optical", observer_height=10.0, target_height=120.0, observer=HERE,
    target=THERE, distance=DISTANCE, azimuth=AZIMUTH % 360.0, along=("isle", "reef"),
)  # fmt: skip


def test_sites_stand_where_they_are_nearest_to_the_path():
    names, distance = station_distances(PATH, SITES)
    assert names == ["cape", "reef", "isle"]
    # Behind the target counts as at the target.
    np.testing.assert_allclose(distance, [0.0, 0.5 * DISTANCE, DISTANCE], atol=20.0)


def test_rows_stand_for_each_other_within_three_hours():
    site = np.array(["cape", "cape", "reef", "reef", "isle"])
    time = START + np.array([0, 12, 2, 16, 13]) * np.timedelta64(1, "h")
    found = row_stations([line(), PATH], SITES, site, time)
    assert set(found) == {1}
    # cape at 0 h: reef at 2 h, isle (13 h) too far; cape at 12 h: reef at 16 h too far.
    np.testing.assert_array_equal(found[1].column, [[0, 2, -1], [1, -1, 4], *[[-1, -1, -1]] * 3])


def test_members_meet_member_by_member():
    rows = {0: Stations(np.array([0.0, 1.0]), np.array([[0, 1], [-1, -1]]))}
    owner = np.array([0, 0, 0, 1, 1])
    found = member_stations(rows, np.array([0, 1]), owner)[0].column
    np.testing.assert_array_equal(found, [[0, 3], [1, 4], [2, 3], [-1, -1], [-1, -1]])


def outlook_of(lids, chosen=PATH, **more):
    """Outlook of one valid time; a lid height or None for each site."""
    rows = [
        {"air": air(inversion=lid), "site": site.name, "station": site.name}
        for site, lid in zip(SITES, lids, strict=True)
    ]
    alone = replace(chosen, name="alone", along=())
    wanted = settings(sightlines=(chosen, alone), members=8, sites=SITES)
    data = profiles(rows)
    return make_outlook(data, wanted, **more), data, wanted


def row_of(outlook, site="cape"):
    return int(np.flatnonzero(outlook["site"].values.astype(str) == site)[0])


def test_the_same_air_everywhere_is_that_of_the_site_alone():
    outlook, _, _ = outlook_of((40.0, 40.0, 40.0))
    hidden = outlook["hidden_height"].values[row_of(outlook)]
    assert hidden[0] == pytest.approx(hidden[1], abs=0.1)
    seen = outlook["apparent_elevation"].values[row_of(outlook)]
    assert seen[0] == pytest.approx(seen[1], abs=5e-6)


def test_a_lid_only_out_at_sea_shows_more_than_none_and_less_than_everywhere():
    bare, _, _ = outlook_of((None, None, None))
    part, _, _ = outlook_of((None, 0.0, 0.0))
    whole, _, _ = outlook_of((0.0, 0.0, 0.0))
    none, some, all_ = (float(o["hidden_height"].values[row_of(o), 0]) for o in (bare, part, whole))
    assert all_ < some < none
    # The site alone knows nothing of it.
    alone = float(part["hidden_height"].values[row_of(part), 1])
    assert alone == pytest.approx(none, abs=0.1)
    # Members too go through the air of all three: their spread lies around the best guess.
    low, high = (
        float(part[f"hidden_height_{e}"].values[row_of(part), 0]) for e in ("lower", "upper")
    )
    assert low < none - 1.0
    assert low - 5.0 <= some <= high + 5.0


def test_a_ridge_shuts_the_sightline_and_is_named_and_drawn():
    crest = 0.4 * DISTANCE
    ground = np.array(
        [[0.0, 5.0], [crest - 500.0, 0.0], [crest, 180.0], [crest + 500.0, 0.0], [DISTANCE, 0.0]]
    )
    around = Surroundings(ground={"path": ground})
    outlook, data, wanted = outlook_of((None, None, None), around=around)
    row = row_of(outlook)
    assert outlook["sightline_state"].values[row, 0] == SIGHTLINE_STATES["shut"]
    assert outlook["blocked_by"].values[row, 0] == pytest.approx(0.4 * DISTANCE, abs=1e3)
    assert outlook["sightline_probability"].values[row, 0] == 0.0
    assert np.isnan(outlook["blocked_by"].values[row, 1])
    told = speaking_profiles(data, wanted, around)
    view = view_sightline(told, outlook, wanted, 0, row, around)
    np.testing.assert_array_equal(view.terrain, ground)
    assert f"{0.4 * DISTANCE / 1e3:.1f} km" in " ".join(view.words)
    # An eye under the ground it would stand on cannot be judged.
    chance = outlook["stand_probability"].values[row, 0]
    heights = outlook["stand_height"].values[0]
    assert np.all(np.isnan(chance[heights < 5.0]))
    assert np.all(np.isfinite(chance[heights >= 5.0]))


def test_a_sightline_whose_ground_could_not_be_read_is_not_told_of():
    around = Surroundings(blind=frozenset({"path"}))
    outlook, data, wanted = outlook_of((40.0, None, None), around=around)
    row = row_of(outlook)
    assert outlook["sightline_state"].values[row, 0] == -1
    assert np.isnan(outlook["sightline_probability"].values[row, 0])
    assert np.isfinite(outlook["sightline_probability"].values[row, 1])
    with pytest.raises(InputError, match="ground could not be read"):
        view_sightline(speaking_profiles(data, wanted, around), outlook, wanted, 0, row, around)
