"""The scheduled run, as cron would start it: what it writes, twice, and what a failure leaves."""

from __future__ import annotations

import hashlib
import json
import os
import re
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from forecast.cli import main
from forecast.nightly import plan_run, run_nightly
from forecast.settings import load_settings
from tests.end_to_end.build import SETTINGS, lay_out, write_ascent

PRODUCTS = {
    "cape.png", "cape.svg", "index.html", "outlook.nc", "run.json", "windows.csv", "windows.json",
}  # fmt: skip
#: Of each sightline's windows, and of each sightline that has one.
PICTURES = re.compile(r"(lamp|relay)-(2024-06-0\dt\d\d|where-to-stand)\.(png|svg)")


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    """A run of its own process, with a fixed stamp."""
    folder = tmp_path_factory.mktemp("nightly")
    settings = lay_out(folder)
    result = subprocess.run(
        [sys.executable, "-m", "forecast", "nightly", str(settings)],
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
        env={**os.environ, "SOURCE_DATE_EPOCH": "1900000000"},
    )
    return folder, settings, result


def products(folder):
    return {p.name for p in folder.iterdir() if not p.name.startswith(".")}


def test_everything_is_there_and_said(done):
    folder, _, result = done
    assert result.returncode == 0, result.stderr
    made = products(folder / "out")
    pictures = made - PRODUCTS
    assert made >= PRODUCTS
    assert all(PICTURES.fullmatch(name) for name in pictures)
    assert {"lamp-where-to-stand.png", "relay-where-to-stand.svg"} <= pictures
    assert "page:" in result.stdout
    # No terminal: plain lines, no bar and no colour codes.
    assert "read profiles: 6 of 6" in result.stderr
    assert "\x1b" not in result.stderr


def test_the_record_is_true(done):
    folder, settings, _ = done
    record = json.loads((folder / "out" / "run.json").read_text())
    assert len(record["inputs"]) == 6
    for item in record["inputs"]:
        content = (folder / item["file"]).read_bytes()
        assert item["bytes"] == len(content)
        assert item["sha256"] == hashlib.sha256(content).hexdigest()
    assert set(record["products"]) == products(folder / "out") - {"run.json"}
    for name, item in record["products"].items():
        content = (folder / "out" / name).read_bytes()
        assert item["sha256"] == hashlib.sha256(content).hexdigest()
    assert record["settings"]["sha256"] == hashlib.sha256(settings.read_bytes()).hexdigest()
    assert record["started"] == "2030-03-17T17:46:40Z"
    assert record["set_aside"] == []
    assert (record["exit_code"], record["outcome"]) == (0, "all done")


def test_page_tables_and_netcdf_agree(done):
    folder, _, _ = done
    out = folder / "out"
    windows = json.loads((out / "windows.json").read_text())["windows"]
    assert windows, "the sample's cold-water days must open something"
    page = (out / "index.html").read_text()
    with xr.open_dataset(out / "outlook.nc") as outlook:
        names = list(outlook["sightline_name"].values)
        for window in windows:
            assert window["reason"].split(".")[0] in page.replace("&#39;", "'")
            when = np.datetime64(window["best_time"].removesuffix("Z"))
            row = int(np.flatnonzero(outlook["time"].values == when)[0])
            if window["kind"] == "sightline":
                chance = outlook["sightline_probability"].values[
                    row, names.index(window["subject"])
                ]
            else:
                ceiling = {"300 m": 0, "1 km": 1, "3 km": 2}[window["subject"].split("under ")[1]]
                chance = outlook["duct_probability"].values[row, ceiling]
            assert chance == pytest.approx(window["probability"], abs=1e-4)


def test_a_second_run_gives_the_same_bytes_but_for_the_stamps(done):
    folder, settings, _ = done
    before = {n: (folder / "out" / n).read_bytes() for n in PRODUCTS}
    assert main(["nightly", str(settings), "-q"]) == 0
    after = {n: (folder / "out" / n).read_bytes() for n in PRODUCTS}
    for name in PRODUCTS - {"run.json", "index.html", "outlook.nc"}:
        assert after[name] == before[name], name
    stamp = re.compile(rb"20\d\d-\d\d-\d\dT\d\d:\d\d:\d\dZ(?=\">|</time>)")
    assert stamp.sub(b"", after["index.html"]) == stamp.sub(b"", before["index.html"])
    old, new = (json.loads(files["run.json"]) for files in (before, after))
    for record in (old, new):
        del record["started"], record["seconds"], record["products_made"]
        for name in ("index.html", "outlook.nc"):
            del record["products"][name]["sha256"]
    assert old == new


def test_with_the_stamp_fixed_every_product_is_the_same(done, tmp_path, monkeypatch):
    _, settings, _ = done
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1900000000")
    outs = [tmp_path / "a", tmp_path / "b"]
    for out in outs:
        assert main(["nightly", str(settings), "-q", "-o", str(out)]) == 0
    for name in PRODUCTS - {"run.json"}:
        assert (outs[0] / name).read_bytes() == (outs[1] / name).read_bytes(), name


@pytest.fixture
def ready(tmp_path):
    """Settings with an earlier, whole set of products."""
    settings = lay_out(tmp_path, slice(32, 34))
    assert main(["nightly", str(settings), "-q"]) == 0
    return settings


def contents(folder):
    return {p.name: p.read_bytes() for p in folder.iterdir()}


@pytest.mark.parametrize(
    "where", ["forecast.output.page.write_page", "forecast.output.netcdf.write_outlook"]
)
def test_a_failure_while_making_products_leaves_the_old_ones(ready, monkeypatch, where, capsys):
    out = ready.parent / "out"
    before = contents(out)

    def fail(*_, **__):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(where, fail)
    assert main(["nightly", str(ready), "-q"]) == 6
    assert contents(out) == before
    assert "No space left on device" in capsys.readouterr().err


def test_an_interrupt_leaves_the_old_products(ready, monkeypatch):
    out = ready.parent / "out"
    before = contents(out)

    def interrupt(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("forecast.output.tables.write_windows_json", interrupt)
    assert main(["nightly", str(ready), "-q"]) == 130
    assert contents(out) == before


def test_a_stop_signal_leaves_the_old_products(ready, monkeypatch):
    out = ready.parent / "out"
    before = contents(out)
    ignored = signal.getsignal(signal.SIGTERM)

    def stop(*_, **__):
        os.kill(os.getpid(), signal.SIGTERM)

    monkeypatch.setattr("forecast.output.tables.write_windows_json", stop)
    with pytest.raises(SystemExit) as caught:
        main(["nightly", str(ready), "-q"])
    assert caught.value.code == 128 + signal.SIGTERM
    assert contents(out) == before
    assert signal.getsignal(signal.SIGTERM) == ignored


def test_what_a_killed_run_left_behind_is_cleared_away(ready):
    out = ready.parent / "out"
    (out / ".staging-dead").mkdir()
    (out / ".staging-dead" / "index.html").write_text("half")
    assert main(["nightly", str(ready), "-q"]) == 0
    assert not list(out.glob(".staging-*"))


def test_two_runs_do_not_collide(ready, capsys):
    from filelock import FileLock

    with FileLock(ready.parent / "out" / ".bendcast.lock"):
        assert main(["nightly", str(ready), "-q"]) == 6
    assert "another run is writing here" in capsys.readouterr().err


def test_charts_of_sites_that_are_gone_are_deleted_and_nothing_else(ready):
    out = ready.parent / "out"
    (out / "mine.txt").write_text("not a product")
    ready.write_text(ready.read_text().replace('"Cape"', '"Head"'))
    assert main(["nightly", str(ready), "-q"]) == 0
    names = products(out)
    assert "head.png" in names
    assert "cape.png" not in names
    assert "mine.txt" in names


def test_nothing_usable_keeps_the_old_products_and_says_so(ready, capsys):
    out = ready.parent / "out"
    before = contents(out)
    for path in (ready.parent / "in").iterdir():
        path.write_bytes(b"")
    assert main(["nightly", str(ready), "-q"]) == 4
    after = contents(out)
    assert {n for n in before if before[n] != after[n]} == {"run.json"}
    record = json.loads(after["run.json"])
    assert len(record["set_aside"]) == 2
    assert "nothing usable" in capsys.readouterr().err


def test_a_night_without_inputs_does_not_make_the_next_forget_old_charts(ready):
    out, inputs = ready.parent / "out", ready.parent / "in"
    inputs.rename(ready.parent / "away")
    assert main(["nightly", str(ready), "-q"]) == 4
    record = json.loads((out / "run.json").read_text())
    assert record["exit_code"] == 4
    for name, item in record["products"].items():  # it tells what lies there
        assert hashlib.sha256((out / name).read_bytes()).hexdigest() == item["sha256"]
    (ready.parent / "away").rename(inputs)
    ready.write_text(ready.read_text().replace('"Cape"', '"Head"'))
    assert main(["nightly", str(ready), "-q"]) == 0
    assert "cape.png" not in products(out)


def test_products_are_never_taken_for_inputs(tmp_path):
    # The pattern finds out/outlook.nc of the run before.
    settings = lay_out(tmp_path, slice(32, 34))
    settings.write_text(settings.read_text().replace("in/*.nc", "**/*.nc"))
    for _ in range(2):
        assert main(["nightly", str(settings), "-q"]) == 0
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert [Path(item["file"]).parent.name for item in record["inputs"]] == ["in", "in"]


def test_one_time_stamp_for_the_whole_run(ready):
    out = ready.parent / "out"
    started = json.loads((out / "run.json").read_text())["started"]
    with xr.open_dataset(out / "outlook.nc") as outlook:
        assert outlook.attrs["date_created"] == started
        assert outlook.attrs["history"].startswith(started)
    assert started in (out / "index.html").read_text()


def test_sites_that_share_a_pattern_share_the_files(tmp_path):
    # Six ascents near Cape and one near Far, all found by both sites' patterns; one near neither.
    settings = lay_out(tmp_path)
    far = SETTINGS.split("[[site]]")[1].split("[[sightline]]")[0]
    far = far.replace('"Cape"', '"Far"').replace("46.52", "50.0").replace("-27.90", "-20.0")
    settings.write_text(SETTINGS + "\n[[site]]" + far)
    nowhere = np.full(120, 10.0)
    write_ascent(tmp_path / "in" / "far.nc", 3, lat=nowhere + 40.0, lon=nowhere - 30.0)
    write_ascent(tmp_path / "in" / "lost.nc", 4, lat=nowhere, lon=nowhere)
    (tmp_path / "in" / "empty.nc").write_bytes(b"")
    assert main(["nightly", str(settings), "-q"]) == 3
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert len(record["inputs"]) == 9
    assert all(item["sites"] == ["Cape", "Far"] for item in record["inputs"])
    reasons = {item["file"]: item["reason"] for item in record["set_aside"]}
    assert len(record["set_aside"]) == 2
    assert set(reasons) == {"lost.nc", "empty.nc"}
    assert "km from site Far" in reasons["lost.nc"]  # the nearer of the two
    with xr.open_dataset(tmp_path / "out" / "outlook.nc") as outlook:
        sites = list(outlook["site"].values)
    assert (sites.count("Cape"), sites.count("Far")) == (6, 1)


def test_a_sounding_from_elsewhere_is_set_aside_with_its_distance(tmp_path):
    text = lay_out(tmp_path).read_text().replace("latitude = 46.52", "latitude = 48.52")
    (tmp_path / "settings.toml").write_text(text)
    result = run_nightly(plan_run(load_settings(tmp_path / "settings.toml")))
    assert result.exit_code == 4
    assert len(result.set_aside) == 6
    assert all("222 km from site Cape" in item["reason"] for item in result.set_aside)


def test_inputs_given_in_any_order_and_twice_change_nothing(tmp_path):
    settings = lay_out(tmp_path, slice(32, 34))
    assert main(["nightly", str(settings), "-q", "-o", str(tmp_path / "a")]) == 0
    twice = 'inputs = ["in/*.nc", "in/**/*.nc"]'
    settings.write_text(settings.read_text().replace('inputs = ["in/*.nc"]', twice))
    assert main(["nightly", str(settings), "-q", "-o", str(tmp_path / "b")]) == 0
    for name in ("windows.csv", "cape.png"):
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()
