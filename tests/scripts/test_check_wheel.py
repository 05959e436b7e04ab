"""The wheel check names what a wheel lacks."""

from __future__ import annotations

import subprocess
import sys
import zipfile
from pathlib import Path

SCRIPT = Path(__file__).resolve().parents[2] / "scripts" / "check_wheel.py"


def test_a_missing_template_is_named(tmp_path: Path) -> None:
    package = SCRIPT.parent.parent / "forecast"
    names = [
        path.relative_to(package.parent).as_posix()
        for path in package.rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    ]
    assert "forecast/py.typed" in names
    outcome = {}
    for label, kept in (
        ("whole", names),
        ("lacking", [name for name in names if name != "forecast/py.typed"]),
    ):
        wheel = tmp_path / f"{label}.whl"
        with zipfile.ZipFile(wheel, "w") as bundle:
            for name in kept:
                bundle.writestr(name, "")
        outcome[label] = subprocess.run(
            [sys.executable, SCRIPT, wheel], capture_output=True, text=True, check=False
        )
    assert outcome["whole"].returncode == 0
    assert outcome["lacking"].returncode == 1
    assert "forecast/py.typed" in outcome["lacking"].stderr
