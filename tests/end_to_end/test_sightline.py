"""`bendcast sightline`: pictures and words of one time, or one clear reason why not."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.cli import main
from tests.end_to_end.build import SETTINGS, lay_out


@pytest.fixture(scope="module")
def place(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sightline")
    return folder, lay_out(folder)


def run(capsys, *arguments):
    code = main(["sightline", *map(str, arguments)])
    told = capsys.readouterr()
    return code, told.out, told.err


def test_pictures_and_words_of_a_time(place, capsys):
    folder, settings = place
    out = folder / "seen"
    # An offset is heeded: 08:10 at +02:00 is 06:10 UTC, nearest to the ascent of six o'clock.
    at = "2024-06-01T08:10+02:00"
    code, said, _ = run(capsys, settings, "--at", at, "--name", "lamp", "-o", out)
    assert code == 0
    assert "lamp, 2024-06-01T06" in said
    assert "visible heights at" in said
    assert "relay" not in said
    made = {path.name for path in out.iterdir() if not path.name.startswith(".")}
    assert len(made) == 4
    assert {name.rpartition(".")[2] for name in made} == {"png", "svg"}
    assert all(str(out / name) in said for name in made)
    assert (out / "lamp-where-to-stand.png").read_bytes()[:4] == b"\x89PNG"


def test_without_a_time_the_likeliest_of_each_is_drawn(place, capsys):
    folder, settings = place
    code, said, _ = run(capsys, settings, "-o", folder / "likely")
    assert code == 0
    assert "lamp, " in said
    assert "relay, " in said
    assert "nan" not in said.lower()


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("--name", "lmap"), 5, "found 'lmap'; the settings have lamp"),
        (("--at", "tomorrow"), 5, "found 'tomorrow'; expected a time such as"),
        (("--at", "2024-07-01"), 4, "choose a time within a day of the soundings"),
    ],
)
def test_what_cannot_be_drawn_is_one_clear_message(place, capsys, arguments, code, words):
    folder, settings = place
    found, _, err = run(capsys, settings, *arguments, "-o", folder / "none")
    assert (found, words in err) == (code, True), err
    assert not list((folder / "none").glob("*.png"))


def test_settings_without_a_sightline_say_so(tmp_path, capsys):
    settings = lay_out(tmp_path)
    text = SETTINGS.partition("[[sightline]]")[0]
    settings.write_text(text, encoding="utf-8")
    code, _, err = run(capsys, settings)
    assert code == 5
    assert "no [[sightline]]" in err


AROUND = """
[run]
title = "Bay"
output = "out"
members = 8

[[site]]
name = "Cape"
latitude = 46.52
longitude = -27.90
inputs = ["in/*.nc"]
surface = "sea"
water_series = "buoy.csv"

[[site]]
name = "Reef"
latitude = 46.40
longitude = -28.00
inputs = ["in/*.nc"]

[[sightline]]
name = "over the ness"
site = "Cape"
observer_height_m = 12.0
target_height_m = 60.0
observer = [46.52, -27.90]
target = [46.20, -28.15]
along = ["Reef"]
terrain = "ness.csv"
"""

BUOY = "time,sea_surface_temperature_c\n2024-06-01T00:00,11.0\n2024-06-02T00:00,11.2\n"
NESS = "distance_km,height_m\n0,4\n14.5,0\n15,95\n15.5,0\n40.5,0\n"


def around(folder, buoy=BUOY, ness=NESS):
    settings = lay_out(folder, settings=AROUND)
    (folder / "buoy.csv").write_text(buoy, encoding="utf-8")
    (folder / "ness.csv").write_text(ness, encoding="utf-8")
    return settings


def test_terrain_sites_along_and_a_buoy_go_through_the_whole_job(tmp_path, capsys):
    settings = around(tmp_path)
    code, said, err = run(capsys, settings, "--at", "2024-06-01T06:00", "-o", tmp_path / "seen")
    assert code == 0, err
    assert "Ground 15.0 km from the observer is in the way" in said
    assert main(["nightly", str(settings)]) == 0
    import xarray as xr

    with xr.open_dataset(tmp_path / "out" / "outlook.nc") as outlook:
        cape = outlook["site"].astype(str) == "Cape"
        assert float(outlook["blocked_by"].where(cape).max()) == pytest.approx(15e3, abs=600.0)
        # The buoy's water, not the files': 11.0 to 11.1 °C against what the air has.
        difference = outlook["air_sea_temperature_difference"].where(cape, drop=True)
        assert np.isfinite(difference).any()


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"ness": NESS.replace("40.5,0\n", "")}, "ness.csv: reaches from 0 to 15.5 km"),
        ({"ness": NESS.replace("15,95", "15,")}, "ness.csv: has no height at 15.00 km"),
        (
            {"ness": NESS.replace("0,4\n", "0,14\n", 1)},
            "ness.csv: puts the ground at 14 m under the",
        ),
        ({"buoy": BUOY.replace("_c\n", "_k\n")}, "buoy.csv"),
    ],
)
def test_a_bad_file_beside_the_soundings_is_set_aside_and_the_rest_goes_on(
    tmp_path, capsys, change, words
):
    settings = around(tmp_path, **change)
    assert main(["nightly", str(settings)]) == 3
    assert f"set aside: {words}" in capsys.readouterr().err
    page = (tmp_path / "out" / "index.html").read_text(encoding="utf-8")
    assert words.split(":")[0] in page
