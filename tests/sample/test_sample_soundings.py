"""The invented soundings of the demo hold together as air, as files and as a story."""

from __future__ import annotations

import os
import subprocess
import sys
from datetime import datetime, timedelta
from pathlib import Path

import netCDF4
import numpy as np
import pytest

from forecast.physics.moisture import (
    relative_humidity,
    specific_humidity_from_dew_point,
    specific_humidity_from_relative_humidity,
)

ROOT = Path(__file__).resolve().parents[2]
SAMPLE = ROOT / "sample_soundings"
ASCENTS = sorted((SAMPLE / "ascents").glob("*.nc"))
MODEL = SAMPLE / "model" / "ferrow_model_20240613_00.nc"
START = datetime(2024, 5, 24)
#: The file cut off on purpose.
DAMAGED = "vellory_sonde_20240604_1208.nc"

#: The scripts import the package from this tree, installed or not.
WITH_SOURCE = {**os.environ, "PYTHONPATH": str(ROOT)}

GRAVITY = 9.80665
DRY_AIR = 287.06  # J kg-1 K-1


def read(path: Path) -> dict[str, np.ndarray]:
    """All variables of an ascent as floats, NaN where missing, with the launch time."""
    with netCDF4.Dataset(path) as file:
        values = {
            name: np.ma.filled(file[name][...].astype(float), np.nan)
            for name in ("time", "alt", "pres", "temp", "rh", "wspd", "wdir", "lat", "lon", "sst")
        }
        clock = file["time"]
        values["launch"] = netCDF4.num2date(
            clock[0], clock.units, clock.calendar, only_use_cftime_datetimes=False
        )
    return values


@pytest.fixture(scope="module")
def ascents() -> list[dict[str, np.ndarray]]:
    return [read(path) for path in ASCENTS if path.name != DAMAGED]


@pytest.fixture(scope="module")
def remade(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The whole set made again by the script, in a process of its own."""
    folder = tmp_path_factory.mktemp("remade")
    script = ROOT / "scripts" / "make_sample_soundings.py"
    subprocess.run([sys.executable, script, folder], check=True, env=WITH_SOURCE, timeout=300)
    return folder


def test_all_files_are_there_and_small() -> None:
    # Issue: small invented data, 3 MB in all; 20 days, 6-hourly.
    assert len(ASCENTS) == 80
    assert sum(path.stat().st_size for path in SAMPLE.rglob("*") if path.is_file()) <= 3_000_000


def test_exactly_one_file_is_damaged() -> None:
    broken = []
    for path in ASCENTS:
        try:
            netCDF4.Dataset(path).close()
        except OSError:
            broken.append(path.name)
    assert broken == [DAMAGED]


def test_launches_are_six_hours_apart(ascents) -> None:
    launches = [ascent["launch"] for ascent in ascents]
    nominal = [START + timedelta(hours=6 * k) for k in range(80) if k != 46]
    late = [(a - b) / timedelta(minutes=1) for a, b in zip(launches, nominal, strict=True)]
    assert min(late) >= 0 and max(late) <= 15


def test_ascents_have_the_resolution_of_a_real_sonde(ascents) -> None:
    for ascent in ascents:
        assert np.all(np.diff(ascent["time"]) == 2.0)
        rate = np.diff(ascent["alt"]) / 2.0
        assert 4.6 < np.median(rate) < 5.4
    # One balloon sinks on its way, as real ones do in icing; no other does.
    assert sum(bool((np.diff(ascent["alt"]) < -1.0).any()) for ascent in ascents) == 1


def test_humidity_never_exceeds_saturation(ascents) -> None:
    assert max(np.nanmax(ascent["rh"]) for ascent in ascents) <= 100.0
    assert min(np.nanmin(ascent["rh"]) for ascent in ascents) >= 0.0
    with netCDF4.Dataset(MODEL) as file:
        t, q = file["t"][...].data, file["q"][...].data
        half = (
            file["hyai"][...][None, :, None, None]
            + file["hybi"][...][None, :, None, None] * np.exp(file["lnsp"][...])[:, None]
        )
    assert relative_humidity(q, t, 0.5 * (half[:, 1:] + half[:, :-1])).max() <= 1.0


def test_pressure_and_height_are_hydrostatic(ascents) -> None:
    """Hypsometric thickness from p, T and humidity against the altitude steps in the file.

    Over 500 m the packing (0.02 hPa, 0.2 m: at most 0.3 m together, near the top) and the fall of
    gravity with height (0.2 % at 7 km, 1.1 m) are all that may remain.
    """
    for ascent in ascents:
        p = 100.0 * ascent["pres"]
        t = ascent["temp"] + 273.15
        rh = np.where(np.isnan(ascent["rh"]), 30.0, ascent["rh"])
        q = specific_humidity_from_relative_humidity(rh / 100.0, t, p)
        virtual = t * (1.0 + 0.608 * q)
        thickness = np.concatenate(
            [
                [0.0],
                np.cumsum(
                    -DRY_AIR / GRAVITY * 0.5 * (virtual[1:] + virtual[:-1]) * np.diff(np.log(p))
                ),
            ]
        )
        step = 50
        found = thickness[step:] - thickness[:-step]
        expected = ascent["alt"][step:] - ascent["alt"][:-step]
        assert np.abs(found - expected).max() < 1.6


def test_cold_water_episode(ascents) -> None:
    """Days 8.5 to 11: air 4-6 K warmer than the sea at 10 m, in light wind.

    By day the inversion in the lowest 60 m passes +0.12 K/m, where light follows the Earth
    (common practice; 0.129 K/m at 288 K from the refraction formula).
    """
    steepest = []
    for ascent in ascents:
        day = (ascent["launch"] - START) / timedelta(days=1)
        if not 8.4 < day < 11.1:
            continue
        height = ascent["alt"] - ascent["alt"][0]
        excess = np.interp(10.0, height, ascent["temp"]) - ascent["sst"]
        assert 4.0 <= excess <= 6.0
        assert np.interp(10.0, height, ascent["wspd"]) < 5.0
        low = height < 60.0
        steepest.append(np.max(np.diff(ascent["temp"][low]) / np.diff(height[low])))
    assert len(steepest) == 11
    assert max(steepest) > 0.12
    # Diurnal: at some hours of the same days the inversion is too weak for that.
    assert min(steepest) < 0.06


def test_front_is_mixed_and_windy(ascents) -> None:
    for ascent in ascents:
        day = (ascent["launch"] - START) / timedelta(days=1)
        if 12.2 < day < 13.3:
            low = ascent["alt"] < 2000.0
            smooth = np.interp(np.arange(100.0, 2000.0, 100.0), ascent["alt"], ascent["temp"])
            assert np.all(np.diff(smooth) < 0.0)
            assert np.nanmin(ascent["rh"][low]) > 70.0
            assert np.interp(12.0, ascent["alt"], ascent["wspd"]) > 10.0


def test_model_is_like_a_weather_model() -> None:
    with netCDF4.Dataset(MODEL) as file:
        half = file["hyai"][...] + file["hybi"][...] * 101325.0
        hours = file["time"][...]
        assert file["level"].positive == "down"
        assert file["hybi"][-1] == 1.0 and file["hyai"][-1] == 0.0
        assert file["t"].shape == (121, half.size - 1, 3, 3)
    assert 40 <= half.size - 1 <= 60
    assert np.array_equal(hours, np.arange(121))
    assert np.all(np.diff(half) > 0.0)
    # Height above ground from pressure, lower troposphere of the standard atmosphere.
    heights = 44330.8 * (1.0 - (half / 101325.0) ** 0.190263)
    assert 8 <= np.count_nonzero(0.5 * (heights[1:] + heights[:-1]) < 500.0) <= 13


def test_model_starts_where_the_ascents_end(ascents) -> None:
    """The last ascent and the first forecast hours describe the same air at the station."""
    last = ascents[-1]
    with netCDF4.Dataset(MODEL) as file:
        t2m, sst = float(file["t2m"][0, 1, 1]), float(file["sst"][0, 1, 1])
        q2m = float(
            specific_humidity_from_dew_point(
                float(file["d2m"][0, 1, 1]), float(np.exp(file["lnsp"][0, 1, 1]))
            )
        )
    q_ascent = float(
        specific_humidity_from_relative_humidity(
            last["rh"][0] / 100.0, last["temp"][0] + 273.15, 100.0 * last["pres"][0]
        )
    )
    assert abs(t2m - 273.15 - last["temp"][0]) < 1.5
    assert abs(sst - 273.15 - last["sst"]) < 0.5
    assert abs(q2m - q_ascent) < 1e-3


def test_committed_files_are_what_the_script_makes(remade: Path) -> None:
    """Same values in each file; the bytes also depend on the netCDF and HDF5 libraries."""
    made = sorted(path.relative_to(remade) for path in remade.rglob("*.nc"))
    kept = sorted(path.relative_to(SAMPLE) for path in SAMPLE.rglob("*.nc"))
    assert made == kept
    for path in kept:
        if path.name == DAMAGED:
            continue
        with netCDF4.Dataset(SAMPLE / path) as old, netCDF4.Dataset(remade / path) as new:
            old.set_auto_maskandscale(False)
            new.set_auto_maskandscale(False)
            assert list(old.variables) == list(new.variables)
            for name in old.variables:
                a, b = old[name][...], new[name][...]
                # One packing step for the last bit of another machine's exponential.
                same = a == b if a.dtype.kind == "S" else np.abs(a.astype(float) - b) <= 1.0
                assert np.all(same), (path, name)


def test_making_twice_gives_the_same_bytes(remade: Path, tmp_path: Path) -> None:
    """Nothing in a file depends on the clock or on what was made before it."""
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); from pathlib import Path; "
        "import make_sample_soundings as m; m.make_ascents(Path(sys.argv[2]), [46, 30, 7])"
    )
    command = [sys.executable, "-c", code, str(ROOT / "scripts"), str(tmp_path)]
    subprocess.run(command, check=True, env=WITH_SOURCE, timeout=120)
    again = sorted(tmp_path.glob("*.nc"))
    assert len(again) == 3
    for path in again:
        assert path.read_bytes() == (remade / "ascents" / path.name).read_bytes()
