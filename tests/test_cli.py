"""The command must answer quickly, in words, with the exit code it documents."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from forecast import __version__
from forecast.cli import main
from tests.test_settings import GOOD

SAMPLES = Path(__file__).parents[1] / "sample_soundings"


def run(*arguments, **options):
    return subprocess.run(
        [sys.executable, "-m", "forecast", *map(str, arguments)],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
        **options,
    )


def test_help_imports_nothing_heavy():
    # Names of modules loaded by --help; the time they would cost is what must be spared.
    code = (
        "import sys\n"
        "from forecast.cli import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit:\n    pass\n"
        "print(' '.join(sys.modules), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = set(done.stderr.split())
    heavy = {"numpy", "xarray", "pydantic", "netCDF4", "numba", "matplotlib", "rich", "typing"}
    assert not heavy & loaded
    for words in ("nightly", "inspect", "chart", "check", "exit codes", "examples"):
        assert words in done.stdout


def test_version(capsys):
    with pytest.raises(SystemExit) as caught:
        main(["--version"])
    assert caught.value.code == 0
    assert capsys.readouterr().out.strip() == f"bendcast {__version__}"


@pytest.mark.parametrize("command", ["nightly", "inspect", "chart", "check"])
def test_each_command_has_help(command, capsys):
    with pytest.raises(SystemExit) as caught:
        main([command, "--help"])
    assert caught.value.code == 0
    assert "usage: bendcast" in capsys.readouterr().out


def test_wrong_usage_is_exit_code_2():
    assert run().returncode == 2
    assert run("launch").returncode == 2
    assert run("nightly").returncode == 2


def test_check_says_what_it_would_do(tmp_path, capsys):
    (tmp_path / "s.toml").write_text(GOOD)
    assert main(["check", str(tmp_path / "s.toml")]) == 0
    out = capsys.readouterr().out
    for words in ("settings are right", "Cape", "hill", "180.3 km", "no file matches"):
        assert words in out


def test_wrong_settings_are_exit_code_5(tmp_path, capsys):
    (tmp_path / "s.toml").write_text(GOOD.replace("[run]", "[rum]"))
    assert main(["check", str(tmp_path / "s.toml")]) == 5
    assert main(["nightly", str(tmp_path / "s.toml")]) == 5
    assert main(["chart", "x.nc", "--top", "-4", "--timezone", "Moon", "--point", "95,1"]) == 5
    error = capsys.readouterr().err
    assert "did you mean run?" in error
    assert "--top" in error
    assert "--timezone" in error
    assert "--point: found '95,1'" in error
    assert "Traceback" not in error


def test_dry_run_prints_the_plan_and_writes_nothing(tmp_path, capsys):
    (tmp_path / "s.toml").write_text(GOOD)
    (tmp_path / "a.nc").write_bytes(b"")
    assert main(["nightly", str(tmp_path / "s.toml"), "--dry-run"]) == 0
    out = capsys.readouterr().out
    assert "Cape: a.nc" in out
    assert "1. find inputs" in out
    assert not (tmp_path / "out").exists()


def test_inspect_as_text_and_json(capsys):
    ascent = sorted((SAMPLES / "ascents").glob("*.nc"))[0]
    assert main(["inspect", str(ascent)]) == 0
    text = capsys.readouterr().out
    assert ascent.name in text
    assert "air_temperature" in text
    assert main(["inspect", "--json", str(ascent)]) == 0
    (report,) = json.loads(capsys.readouterr().out)
    assert ascent.name in json.dumps(report)


def test_inspect_of_something_else_is_refused_with_its_reason(tmp_path, capsys):
    (tmp_path / "note.nc").write_text("not netCDF")
    assert main(["inspect", str(tmp_path / "note.nc")]) == 4
    assert "note.nc" in capsys.readouterr().out


def test_chart_of_one_ascent(tmp_path, capsys):
    ascent = sorted((SAMPLES / "ascents").glob("*.nc"))[0]
    assert main(["chart", str(ascent), "-o", str(tmp_path), "--members", "8", "-q"]) == 0
    names = {p.name for p in tmp_path.iterdir()}
    assert "outlook.nc" in names
    assert {Path(n).suffix for n in names} == {".nc", ".png", ".svg"}
    assert sorted(capsys.readouterr().out.split()) == sorted(str(tmp_path / n) for n in names)


def test_chart_of_nothing_usable_is_exit_code_4(tmp_path, capsys):
    (tmp_path / "empty.nc").write_bytes(b"")
    assert main(["chart", str(tmp_path / "empty.nc"), "-o", str(tmp_path / "out")]) == 4
    assert "empty.nc" in capsys.readouterr().err
    assert not (tmp_path / "out").exists()


def test_output_that_cannot_be_written_is_exit_code_6(tmp_path, capsys):
    ascent = sorted((SAMPLES / "ascents").glob("*.nc"))[0]
    (tmp_path / "taken").write_text("a file where the folder should be")
    code = main(["chart", str(ascent), "-o", str(tmp_path / "taken"), "--members", "8", "-q"])
    assert code == 6
    assert "cannot be written" in capsys.readouterr().err


def test_a_defect_is_told_without_traceback_unless_asked(monkeypatch, capsys, tmp_path):
    (tmp_path / "s.toml").write_text(GOOD)

    def broken(*_):
        raise KeyError("oops")

    monkeypatch.setattr("forecast.nightly.plan_run", broken)
    assert main(["check", str(tmp_path / "s.toml")]) == 1
    error = capsys.readouterr().err
    assert "unexpected KeyError" in error
    assert "Traceback" not in error
    # The exit code is the same with --debug: a scheduler must not be misled by it.
    assert main(["check", "--debug", str(tmp_path / "s.toml")]) == 1
    assert "Traceback" in capsys.readouterr().err
    monkeypatch.undo()
    (tmp_path / "s.toml").write_text("")
    assert main(["check", "--debug", str(tmp_path / "s.toml")]) == 5


def in_shell(command):
    script = command.replace("bendcast", f"{sys.executable} -m forecast")
    return subprocess.run(
        ["bash", "-c", script], capture_output=True, text=True, check=False, timeout=120
    )


def test_a_closed_pipe_is_no_error():
    done = in_shell(f"set -o pipefail; bendcast check {SAMPLES / 'outlook.toml'} | head -c 1")
    assert "Traceback" not in done.stderr
    assert "BrokenPipe" not in done.stderr


def test_a_reader_that_goes_away_does_not_stop_the_chart_nor_hide_its_exit_code(tmp_path):
    ascent = sorted((SAMPLES / "ascents").glob("*.nc"))[0]
    (tmp_path / "empty.nc").write_bytes(b"")
    done = in_shell(
        f"bendcast chart --members 8 {tmp_path / 'empty.nc'} {ascent} -o {tmp_path / 'out'} 2>&1 "
        "| true; exit ${PIPESTATUS[0]}"
    )
    assert done.returncode == 3
    assert (tmp_path / "out" / "outlook.nc").is_file()


def test_closed_standard_streams_are_no_error():
    done = in_shell(f"bendcast check {SAMPLES / 'outlook.toml'} >&- 2>&-")
    assert done.returncode == 0


def test_a_file_name_that_no_encoding_can_print_is_escaped(tmp_path):
    (tmp_path / "s.toml").write_text(GOOD)
    with open(os.fsencode(tmp_path) + b"/sonde\xff.nc", "wb"):
        pass
    done = in_shell(f"PYTHONIOENCODING=ascii bendcast nightly --dry-run {tmp_path / 's.toml'}")
    assert done.returncode == 0, done.stderr
    assert "sonde\\udcff.nc" in done.stdout


def test_a_wrong_mapping_is_told_as_such(tmp_path, capsys):
    ascent = sorted((SAMPLES / "ascents").glob("*.nc"))[0]
    wrong = ["--name", "air_temprature=T", "--name", "T", "--name", "air_pressure=p [hPa"]
    for command in ("inspect", "chart"):
        assert main([command, str(ascent), *wrong]) == 5
        error = capsys.readouterr().err
        assert "3 faults" in error
        assert "did you mean air_temperature" in error


def test_a_file_given_twice_is_read_once(tmp_path):
    ascent = str(sorted((SAMPLES / "ascents").glob("*.nc"))[0])
    assert main(["chart", ascent, ascent, "-o", str(tmp_path), "--members", "8", "-q"]) == 0


def test_charts_of_one_call_are_bounded_and_chosen(tmp_path, monkeypatch, capsys):
    # The sample forecast is a grid of nine columns; without a place each is a station of its own.
    model = str(sorted((SAMPLES / "model").glob("*.nc"))[0])
    monkeypatch.setattr("forecast.charting.MOST_CHARTS", 8)
    assert main(["chart", model, "-o", str(tmp_path / "a"), "-q"]) == 5
    error = capsys.readouterr().err
    assert "there are 9 stations or columns" in error
    assert "--point" in error
    assert not (tmp_path / "a").exists()
    assert main(["chart", model, "-o", str(tmp_path / "a"), "-q", "--station", "Atlantis"]) == 5
    assert "found 'Atlantis'; the files hold lat 46.25 lon -27.65," in capsys.readouterr().err
    chosen = ["--station", "lat 46.50 lon -27.90", "--members", "8"]
    assert main(["chart", model, "-o", str(tmp_path / "b"), "-q", *chosen]) == 0
    assert len(list((tmp_path / "b").glob("*.png"))) == 1
    at = ["--point", "46.5,-27.9", "--members", "8"]
    assert main(["chart", model, "-o", str(tmp_path / "c"), "-q", *at]) == 0
    assert len(list((tmp_path / "c").glob("*.png"))) == 1
