"""The scripts that make their own environment say what is wrong when they cannot."""

from __future__ import annotations

import os
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
SCRIPTS = ["scripts/demo", "scripts/test", ".ci/run"]


@pytest.mark.parametrize("script", SCRIPTS)
def test_without_a_python_they_stop_and_say_what_to_do(script: str, tmp_path: Path) -> None:
    env = {**os.environ, "PYTHON": "false", "BENDCAST_VENV": str(tmp_path / "venv")}
    done = subprocess.run(
        [ROOT / script], env=env, cwd=tmp_path, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 1
    assert "Python 3.11 or newer" in done.stderr and "PYTHON=" in done.stderr
    assert not (tmp_path / "venv").exists()


@pytest.mark.parametrize("script", SCRIPTS)
def test_a_complete_environment_is_used_as_it_is(script: str, tmp_path: Path) -> None:
    """With the mark of this pyproject.toml nothing is installed; the next step runs instead."""
    venv = tmp_path / "venv"
    (venv / "bin").mkdir(parents=True)
    # Stands in for every program of the environment and ends the script with a code of its own.
    for name in ("python", "bendcast"):
        program = venv / "bin" / name
        program.write_text('#!/bin/sh\n[ "$3" = "import forecast" ] || exit 71\n')
        program.chmod(0o755)
    sums = subprocess.run(
        ["cksum"], input=(ROOT / "pyproject.toml").read_bytes(), capture_output=True, check=True
    )
    (venv / "installed-dev").write_text(f"{ROOT} {sums.stdout.decode()}")
    env = {**os.environ, "BENDCAST_VENV": str(venv)}
    done = subprocess.run(
        [ROOT / script], env=env, cwd=tmp_path, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 71
    assert "already complete" in done.stdout and "installing" not in done.stdout
