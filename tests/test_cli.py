"""The command must answer quickly, in words, with the exit code it documents."""

from __future__ import annotations

import json
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
    assert main(["chart", "x.nc", "--top", "-4", "--timezone", "Moon"]) == 5
    error = capsys.readouterr().err
    assert "did you mean run?" in error
    assert "--top" in error
    assert "--timezone" in error
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
    with pytest.raises(KeyError):
        main(["check", "--debug", str(tmp_path / "s.toml")])


def test_a_closed_pipe_is_no_error():
    command = f"{sys.executable} -m forecast check {SAMPLES / 'outlook.toml'} | head -c 1"
    done = subprocess.run(
        ["bash", "-c", f"set -o pipefail; {command}"], capture_output=True, text=True, check=False
    )
    assert "Traceback" not in done.stderr
    assert "BrokenPipe" not in done.stderr
