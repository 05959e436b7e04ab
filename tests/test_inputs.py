"""Every input once, none of our own products, and each profile where it belongs."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from forecast.inputs import find_inputs, join_profiles, reading_groups, share_out, unclaimed
from forecast.settings import Settings, Site

CAPE = Site("Cape", 50.0, -5.0, inputs=("in/*.nc",))
HEAD = Site("Head", 50.0, -4.0, inputs=("in/*.nc",), match_radius=100e3)


def settings(base, *sites):
    return Settings("Test", base / "out", sites, base=base)


def profiles(*rows):
    """Rows of (latitude, longitude, kind, station, file), one level each."""
    latitude, longitude, kind, station, file = zip(*rows, strict=True)
    return xr.Dataset(
        {
            "height": (("profile", "level"), np.zeros((len(rows), 1))),
            "quality": (("profile", "level"), np.zeros((len(rows), 1), dtype=np.int32)),
        },
        {
            "latitude": ("profile", np.array(latitude, dtype=float)),
            "longitude": ("profile", np.array(longitude, dtype=float)),
            "source_kind": ("profile", np.array(kind)),
            "station": ("profile", np.array(station)),
            "source_file": ("profile", np.array(file)),
        },
    )


def files_of(parts):
    return {str(p["site"].values[0]): list(p["source_file"].values.astype(str)) for p in parts}


def test_links_and_overlapping_patterns_lead_to_each_file_once(tmp_path):
    inputs = tmp_path / "in"
    (inputs / "deep").mkdir(parents=True)
    for name in ("b.nc", "a.nc", "deep/c.nc"):
        (inputs / name).write_bytes(b"x")
    (inputs / "folder.nc").mkdir()
    (inputs / "again.nc").symlink_to(inputs / "b.nc")
    (inputs / "dangling.nc").symlink_to(inputs / "none.nc")
    (inputs / "loop").symlink_to(inputs)
    site = Site("Cape", 50.0, -5.0, inputs=("in/*.nc", "in/**/*.nc", str(inputs / "a.nc"), "x/*"))
    found, warnings = find_inputs(settings(tmp_path, site), tmp_path / "out")
    names = [item.path.relative_to(tmp_path).as_posix() for item in found]
    assert len(names) == 3
    assert names == sorted(names)
    assert {(tmp_path / n).resolve().name for n in names} == {"a.nc", "b.nc", "c.nc"}
    assert warnings == ["site Cape: no file matches 'x/*'"]


def test_products_are_no_inputs_but_files_beside_them_are(tmp_path):
    for name in ("outlook.nc", "sonde.nc"):
        (tmp_path / name).write_bytes(b"x")
    site = Site("Cape", 50.0, -5.0, inputs=("*.nc",))
    found, warnings = find_inputs(settings(tmp_path, site), tmp_path, {"outlook.nc"})
    assert [item.path.name for item in found] == ["sonde.nc"]
    assert warnings == []


def test_a_pattern_gone_astray_is_bounded(tmp_path, monkeypatch):
    monkeypatch.setattr("forecast.inputs.MAX_FILES", 3)
    for i in range(6):
        (tmp_path / f"{i}.nc").write_bytes(b"x")
    site = Site("Cape", 50.0, -5.0, inputs=("*.nc",))
    found, warnings = find_inputs(settings(tmp_path, site), tmp_path / "out")
    assert len(found) == 3
    assert any("over 3 files" in warning for warning in warnings)


def test_a_file_is_read_once_for_all_sites_that_want_it_in_the_same_way(tmp_path):
    (tmp_path / "in").mkdir()
    for name in ("a.nc", "b.nc"):
        (tmp_path / "in" / name).write_bytes(b"x")
    near = Site("Near", 50.0, -5.0, inputs=("in/a.nc",), point_method="nearest")
    sites = (CAPE, HEAD, near)
    found, _ = find_inputs(settings(tmp_path, *sites), tmp_path / "out")
    groups = [
        ([site.name for site in members], [path.name for path in paths])
        for members, paths in reading_groups(found, sites)
    ]
    assert groups == [(["Cape", "Head"], ["a.nc", "b.nc"]), (["Near"], ["a.nc"])]


def test_an_ascent_serves_every_site_within_reach_and_no_other():
    # One degree of longitude at 50 degrees north is 71.7 km on WGS 84 (pyproj): from Cape to Head.
    given = profiles(
        (50.0, -5.0, "ascent", "s", "at_cape.nc"),
        (50.0, -4.0, "ascent", "s", "at_head.nc"),
        (50.0, 356.0, "ascent", "s", "at_head_360.nc"),
        (50.0, -4.5, "ascent", "s", "between.nc"),
        (60.0, -5.0, "ascent", "s", "north.nc"),
        (np.nan, np.nan, "ascent", "s", "no_position.nc"),
    )
    parts, strays = share_out(given, [CAPE, HEAD])
    assert files_of(parts) == {
        "Cape": ["at_cape.nc", "between.nc"],
        "Head": ["at_cape.nc", "at_head.nc", "at_head_360.nc", "between.nc"],
    }
    reasons = {stray.file: stray.reason for stray in strays}
    assert set(reasons) == {"north.nc", "no_position.nc"}
    assert "1113 km from site Cape; match_radius_km is 50" in reasons["north.nc"]
    assert "no position" in reasons["no_position.nc"]


def test_a_model_column_serves_the_site_it_was_taken_for():
    given = profiles(
        (50.0, -5.0, "model", "Cape", "grid.nc"), (50.0, -4.0, "model", "Head", "grid.nc")
    )
    parts, strays = share_out(given, [CAPE, HEAD])
    assert [float(p["longitude"].values[0]) for p in parts] == [-5.0, -4.0]
    assert [p.sizes["profile"] for p in parts] == [1, 1]
    assert strays == []


def test_a_file_that_serves_with_some_profiles_is_noted_not_refused():
    given = profiles(
        (50.0, -5.0, "ascent", "s", "net.nc"),
        (60.0, -5.0, "ascent", "t", "net.nc"),
        (70.0, -5.0, "ascent", "u", "net.nc"),
        (61.0, -5.0, "ascent", "v", "north.nc"),
        (60.5, -5.0, "ascent", "w", "north.nc"),
    )
    _, strays = share_out(given, [CAPE])
    refused, notes = unclaimed(strays, {"net.nc"})
    assert [stray.file for stray in refused] == ["north.nc"]
    assert refused[0].distance == pytest.approx(1168.6e3, abs=1e3)  # the nearer: 10.5 degrees
    assert notes == ["net.nc: 2 profiles lie beyond match_radius_km of every site"]


def test_joining_pads_levels_and_fills_what_only_some_have():
    one = profiles((50.0, -5.0, "ascent", "s", "a.nc"))
    two = profiles((50.0, -4.0, "model", "Head", "b.nc")).isel(level=[0, 0, 0])
    two = two.assign(sea_surface_temperature=("profile", [288.0])).assign_coords(
        member=("profile", np.array([2], dtype=np.int32))
    )
    joined = join_profiles([one, two])
    assert dict(joined.sizes) == {"profile": 2, "level": 3}
    assert joined["quality"].dtype == np.int32
    assert joined["quality"].values.tolist() == [[0, 0, 0], [0, 0, 0]]
    assert np.isnan(joined["height"].values[0, 1:]).all()
    assert list(joined["member"].values) == [-1, 2]
    np.testing.assert_array_equal(joined["sea_surface_temperature"].values, [np.nan, 288.0])
