"""The page about trust near the ground must quote what the scripts print."""

from __future__ import annotations

import importlib.util
import re
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

_ROOT = Path(__file__).resolve().parent.parent.parent
_PAGE = _ROOT / "forecast" / "docs" / "near_the_ground.md"


def _script(name: str) -> ModuleType:
    spec = importlib.util.spec_from_file_location(name, _ROOT / "scripts" / f"{name}.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


experiment, optical = _script("resolution_experiment"), _script("optical_table")


def _quoted(head: str) -> list[str]:
    """Lines of the page's table with that first cell."""
    lines = _PAGE.read_text(encoding="utf-8").splitlines()
    start = next(i for i, line in enumerate(lines) if line.startswith(f"| {head} |"))
    end = next(i for i in range(start, len(lines)) if not lines[i].startswith("|"))
    return lines[start:end]


_NUMBER = re.compile(r"\d+\.?\d*")


def _check(quoted: list[str], printed: list[str], allowed: float) -> None:
    """Words equal, numbers within the last digit: another processor may round the other way."""
    assert [_NUMBER.sub("#", a) for a in quoted] == [_NUMBER.sub("#", b) for b in printed]
    for a, b in zip(quoted, printed, strict=True):
        first, second = (np.array([float(v) for v in _NUMBER.findall(line)]) for line in (a, b))
        assert first == pytest.approx(second, abs=allowed), (a, b)


@pytest.mark.parametrize("kind", experiment.KINDS)
def test_the_page_quotes_the_resolution_experiment(kind):
    quoted = _quoted("air | seen as")
    start = next(i for i, line in enumerate(quoted) if line.startswith(f"| {kind} |"))
    # Rows after the first of a kind leave its name out.
    stop = next((i for i in range(start + 1, len(quoted)) if quoted[i][:4] != "|  |"), len(quoted))
    printed = experiment.resolution_table(kinds=(kind,)).splitlines()
    _check(quoted[:2] + quoted[start:stop], printed, allowed=1.01)


def test_the_page_quotes_the_sweep_of_heights():
    _check(_quoted("eye"), experiment.sweep_table().splitlines(), allowed=1.01)


def test_the_page_quotes_the_difference_of_the_optical_formulas():
    _check(_quoted("air, 1013.25 hPa"), optical.table().splitlines(), allowed=0.101)


def test_instruments_lag_and_models_average():
    """A sonde that passes a step of 1 K shows it late; a model's layer shows its mean."""
    z = experiment.FINE
    step = experiment.Column(
        z, np.full(z.size, 1e5), np.where(z < 100.0, 280.0, 281.0), np.full(z.size, 0.005)
    )
    sonde = experiment.as_sonde(step, np.random.default_rng(1))
    assert np.all(sonde.t[sonde.z < 99.0] == pytest.approx(280.0))
    just_above = sonde.t[(sonde.z > 100.0) & (sonde.z < 106.0)]
    assert np.all((just_above > 280.0) & (just_above < 281.0))
    assert sonde.z[0] == 2.0 and 10.0 <= sonde.z[1] <= 30.0
    model = experiment.as_model(step, np.random.default_rng(1))
    mixed = (model.t > 280.0) & (model.t < 281.0)
    assert 1 <= np.count_nonzero(mixed) <= 2
    assert 9.0 < model.z[0] < 11.0
