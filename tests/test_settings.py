"""Settings must be right, or every fault is told at once with key, line and what is allowed."""

from __future__ import annotations

import math

import pytest

from forecast.errors import SettingsError
from forecast.settings import load_settings
from tests.reference import record

GOOD = """
[run]
title = "Test"
output = "out"
members = 16

[[site]]
name = "Cape"
latitude = 50.0
longitude = -5.0
altitude_m = 3.0
timezone = "Atlantic/Azores"
inputs = ["*.nc"]

[[sightline]]
name = "hill"
site = "Cape"
observer_height_m = 4.0
target_height_m = 300.0
observer = [50.0, -5.0]
target = [51.0, -3.0]
wavelength_nm = 633.0

[[sightline]]
name = "relay"
site = "Cape"
wave = "radio"
observer_height_m = 15.0
target_height_m = 30.0
target_base_height_m = 30.0
distance_km = 70.0
azimuth_deg = 250.0

[ingest.names]
air_temperature = "tdry [degC]"
"""


def load(tmp_path, text, name="s.toml"):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return load_settings(path)


def faults(tmp_path, text):
    with pytest.raises(SettingsError) as caught:
        load(tmp_path, text)
    return caught.value.faults


def test_values_are_si_inside(tmp_path):
    settings = load(tmp_path, GOOD)
    assert settings.output == (tmp_path / "out").resolve()
    site, (hill, relay) = settings.sites[0], settings.sightlines
    assert (site.altitude, site.match_radius) == (3.0, 50e3)
    assert relay.distance == 70e3
    assert relay.azimuth == 250.0
    assert (site.surface, site.sea_surface_temperature) == ("none", None)
    sea = GOOD.replace("[[site]]", '[[site]]\nsurface = "sea"\nsea_surface_temperature_c = 15.0')
    assert load(tmp_path, sea).sites[0].sea_surface_temperature == 288.15
    assert hill.wavelength == pytest.approx(633e-9)
    assert settings.names == {"air_temperature": "tdry [degC]"}
    assert len(settings.digest) == 64


def test_positions_become_a_geodesic(tmp_path):
    # Karney 2013, by pyproj and geographiclib: see the reference record.
    expected = record("geodesic_50_-5_51_-3")["expected"]
    hill = load(tmp_path, GOOD).sightlines[0]
    assert hill.distance == pytest.approx(expected["distance_m"], abs=1e-3)
    assert hill.azimuth == pytest.approx(expected["azimuth_deg"], abs=1e-6)


def test_without_azimuth_the_radius_is_the_mean(tmp_path):
    settings = load(tmp_path, GOOD.replace("azimuth_deg = 250.0\n", ""))
    assert math.isnan(settings.sightlines[1].azimuth)


def test_a_fault_in_a_place_names_its_line(tmp_path):
    place = '[[sightline.place]]\nname = "quay"\n'
    text = GOOD.replace("[ingest", f"{place}{place}ground_height_m = -3.0\n\n[ingest")
    (fault,) = faults(tmp_path, text)
    line = text.splitlines().index("ground_height_m = -3.0") + 1
    assert fault.startswith(f"sightline[1].place[1].ground_height_m (line {line}): found -3.0")
    assert "0 to 9000 m" in fault


def test_a_silhouette_a_band_and_places_become_si(tmp_path):
    text = GOOD.replace(
        "target_height_m = 300.0",
        'silhouette = [[-50, 0], [0, 250.0], [60, 0]]\nterrain = "ridge.csv"\nalong = ["Cape"]\n'
        "visibility_km = 40.0\nstand_heights_m = [9, 2, 9]",
    ).replace(
        "wavelength_nm = 633.0",
        'band = "V"\n[[sightline.place]]\nname = "quay"\nposition = [50.0, -5.0]\n'
        '[[sightline.place]]\nname = "hill"\nground_height_m = 80.0',
    )
    hill = load(tmp_path, text).sightlines[0]
    assert hill.target_height == 250.0  # the outline's highest point
    assert hill.silhouette[1] == (0.0, 250.0)
    assert hill.wavelength == 551e-9  # Binney & Merrifield 1998, table 2.1, from memory
    assert hill.terrain == (tmp_path / "ridge.csv").resolve()
    assert (hill.along, hill.visibility, hill.stand_heights) == (("Cape",), 40e3, (2.0, 9.0))
    quay, other = hill.places
    assert quay.distance == hill.distance  # from the same spot
    assert (other.distance, other.ground_height) == (hill.distance, 80.0)


def test_every_fault_is_told_at_once_with_its_line(tmp_path):
    text = (
        GOOD.replace("members = 16", "membres = 16")
        .replace("latitude = 50.0", "latitude = 95.0")
        .replace("Atlantic/Azores", "Mars/Phobos")
        .replace(
            'site = "Cape"\nobserver_height_m = 4.0', 'site = "Cap"\nobserver_height_m = "low"'
        )
        .replace("distance_km = 70.0\n", "")
    )
    found = faults(tmp_path, text)
    assert len(found) == 6
    lines = text.splitlines()
    for key, words in {
        "run.membres": "did you mean members?",
        "site[0].latitude": "95",
        "site[0].timezone": "Mars/Phobos",
        "sightline[0].observer_height_m": "low",
        "sightline[0].site": "did you mean 'Cape'?",
        "sightline[1].distance_km": "is missing",
    }.items():
        (fault,) = [f for f in found if f.startswith(key)]
        assert words in fault
        if "missing" not in fault:
            number = int(fault.split("(line ")[1].split(")")[0])
            assert key.split(".")[-1] in lines[number - 1], fault
    assert not any("pydantic" in f or "http" in f for f in found)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("members = 16", "members = 7", "found 7; allowed: a whole number from 8 to 4096"),
        ("members = 16", "members = 16.5", "members"),
        ("latitude = 50.0", "latitude = nan", "latitude"),
        ("latitude = 50.0", "latitude = inf", "latitude"),
        # Text and truth values are not numbers, however much they look like it.
        ("latitude = 50.0", 'latitude = "50"', "found '50'; allowed: a number from -90 to 90"),
        ("latitude = 50.0", "latitude = true", "found true; allowed: a number"),
        ("members = 16", "members = 0x" + 5000 * "f", "more than 38 digits"),
        ("members = 16", "members = " + 5000 * "9", "a number is too long"),
        ("target_base_height_m = 30.0", "target_base_height_m = " + 400 * "9", "0 to 9000 m"),
        ('inputs = ["*.nc"]', "inputs = []", "inputs"),
        ('name = "Cape"', 'name = "Ca\\npe"', "control characters"),
        ('name = "Cape"', 'name = "  "', "blank"),
        ('name = "relay"', 'name = "hill"', "a second time"),
        ("target_base_height_m = 30.0", "target_base_height_m = 31.0", "must not exceed"),
        ("distance_km = 70.0", "distance_km = 70.0\nobserver = [1.0, 2.0]", "not both"),
        ("target = [51.0, -3.0]", "target = [151.0, -3.0]", "target"),
        ("target = [51.0, -3.0]", "target = [51.0, -3.0, 7.0]", "[latitude, longitude]"),
        ("target = [51.0, -3.0]", "target = [50.0, -5.0]", "lies 0 km from the observer"),
        ("target = [51.0, -3.0]", "target = [-50.0, 170.0]", "allowed: 0.01 to 1500 km"),
        ('wave = "radio"', 'wave = "radio"\nwavelength_nm = 600.0', "optical sightlines only"),
        ("altitude_m = 3.0", "sea_surface_temperature_c = 15.0", 'with surface = "sea" only'),
        ("altitude_m = 3.0", "sea_surface_temperature_c = 288.15", "from -3 to 40 °C"),
        ("altitude_m = 3.0", "roughness_m = 0.1", 'with surface = "land" only'),
        ("altitude_m = 3.0", "wind_speed_m_s = 5.0", 'with surface = "sea" or "land" only'),
        ("wavelength_nm = 633.0", 'wavelength_nm = 633.0\nband = "V"', "not both"),
        ("wavelength_nm = 633.0", 'band = "Q"', "U or B or V"),
        ("target_height_m = 300.0", "", "give it, or a silhouette"),
        ("target_height_m = 300.0", "silhouette = [[0, 5], [-1, 9]]", "must not fall"),
        ("target_height_m = 300.0", "silhouette = [[0, 5], [1, -9]]", "[offset, height]"),
        ("wavelength_nm = 633.0", 'along = ["Cap"]', "found 'Cap', which is no site"),
        ("wavelength_nm = 633.0", "sea_level_offset_m = 5.0", "the observer under water"),
        ("azimuth_deg = 250.0", 'along = ["Cape"]', "needs observer and target"),
        ("wavelength_nm = 633.0", '[[sightline.place]]\nname = "quay"\nheight_m = 2', "ground_"),
        (
            "azimuth_deg = 250.0",
            '[[sightline.place]]\nname = "quay"\nposition = [1, 2]',
            "needs the target's position",
        ),
        ("altitude_m = 3.0", 'surface = "lake"', '"none", "sea" or "land"'),
        ("air_temperature =", "air_temprature =", "did you mean air_temperature?"),
        ('"tdry [degC]"', '"tdry [degC"', "'variable [unit]'"),
        ('output = "out"', 'output = "s.toml"', "which is a file; expected a folder"),
        ("wavelength_nm = 633.0", "wavelength_nm = 3000.0", "1700"),
        ('wave = "radio"', 'wave = "sonar"', "optical"),
        ("[[site]]", "[[site]", "TOML"),
        ("[run]", "[run]\n[[sites]]", "did you mean site?"),
    ],
)
def test_each_fault_names_what_is_wrong(tmp_path, old, new, words):
    assert old in GOOD
    found = faults(tmp_path, GOOD.replace(old, new, 1))
    assert any(words in fault for fault in found), found


def test_a_file_that_is_no_settings_is_one_clear_message(tmp_path):
    with pytest.raises(SettingsError, match="cannot be read"):
        load_settings(tmp_path / "none.toml")
    (tmp_path / "b.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(SettingsError, match="not valid TOML"):
        load_settings(tmp_path / "b.toml")
    (tmp_path / "big.toml").write_bytes(b"#" * 1_000_002)
    with pytest.raises(SettingsError, match="larger than"):
        load_settings(tmp_path / "big.toml")
    (tmp_path / "deep.toml").write_bytes(b"a = " + b"[" * 100_000)
    with pytest.raises(SettingsError, match="nested too deep"):
        load_settings(tmp_path / "deep.toml")
    with pytest.raises(SettingsError, match="cannot be read"):
        load_settings(tmp_path)


def test_a_file_without_end_is_not_read_whole():
    # /dev/zero never ends; only the bound stops the reading.
    with pytest.raises(SettingsError, match="larger than"):
        load_settings("/dev/zero")


def test_thousands_of_faults_are_bounded(tmp_path):
    found = faults(tmp_path, "".join(f"key{i} = 1\n" for i in range(40_000)))
    assert len(found) == 51
    assert found[-1] == "and 39951 more"  # the missing site is a fault too


def test_faults_come_in_the_order_of_the_file(tmp_path):
    text = GOOD.replace("latitude = 50.0", "latitude = 91.0").replace(
        "distance_km = 70.0", "distance_km = -1.0"
    )
    found = faults(tmp_path, text.replace('name = "relay"', 'name = "hill"'))
    lines = [int(fault.split("(line ")[1].split(")")[0]) for fault in found]
    assert len(lines) == 3
    assert lines == sorted(lines)


def test_a_byte_order_mark_is_no_fault(tmp_path):
    (tmp_path / "s.toml").write_bytes(b"\xef\xbb\xbf" + GOOD.encode())
    assert load_settings(tmp_path / "s.toml").title == "Test"


def test_lines_are_found_in_dotted_keys_and_nested_tables(tmp_path):
    dotted = GOOD.replace("[run]", "").replace("title = ", "run.title = ")
    dotted = dotted.replace("output = ", "run.output = ").replace("members = 16", "run.members = 1")
    (fault,) = faults(tmp_path, dotted)
    assert fault.startswith("run.members (line 5): found 1; allowed")
    (fault,) = faults(tmp_path, GOOD.replace('"tdry [degC]"', "7"))
    line = GOOD.split("\n").index('air_temperature = "tdry [degC]"') + 1
    assert fault.startswith(f"ingest.names.air_temperature (line {line}): found 7; allowed")


def test_control_characters_in_keys_and_values_are_shown_escaped(tmp_path):
    text = GOOD.replace('name = "Cape"', 'name = "\\u001b[31mCape"\n"k\\u001b\\n" = 1')
    found = faults(tmp_path, text)
    assert all(fault.isprintable() for fault in found)
    assert any("k\\x1b\\n" in fault for fault in found)


def test_the_sample_settings_are_right():
    from pathlib import Path

    path = Path(__file__).parents[1] / "sample_soundings" / "outlook.toml"
    assert len(load_settings(path).sightlines) == 3


ODD_VALUES = [
    "-1", "1.5", "true", '""', '"x"', "[]", "[1, 2]", "[[1]]", "{}", "{a = 1}", "inf", "nan",
    "1979-05-27", "07:32:00", "1e308", "0x" + 400 * "f", '"' + 400 * "y" + '"', "'''a\nb'''",
    "[true, false]", "[{}]",
]  # fmt: skip


@pytest.mark.parametrize("value", ODD_VALUES)
def test_any_value_for_any_key_is_taken_or_told_in_plain_words(tmp_path, value):
    lines = GOOD.split("\n")
    for number, line in enumerate(lines):
        if "=" not in line:
            continue
        key = line.split("=")[0]
        try:
            load(tmp_path, "\n".join([*lines[:number], f"{key}= {value}", *lines[number + 1 :]]))
        except SettingsError as error:
            assert error.faults
            for fault in error.faults:
                assert fault.isprintable()
                # No words of the validating library, no Python names for TOML things.
                assert not any(word in fault for word in ("Input should", "None", "dict", "http"))
