"""Compiled kernels must be those of the present code, wherever it was changed."""

from __future__ import annotations

import shutil
from pathlib import Path

import numba

import forecast
from forecast.physics import ducts
from forecast.physics.compiled import cache_folder, source_digest

PACKAGE = Path(forecast.__file__).parent


def test_a_change_in_any_kernel_source_is_another_cache(tmp_path):
    copy = tmp_path / "forecast"
    shutil.copytree(PACKAGE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    before = source_digest(copy)
    assert before == source_digest(PACKAGE)
    # A function that kernels of other files call.
    path = copy / "physics" / "visible_heights.py"
    path.write_text(path.read_text().replace("_FINE_STEPS = 10", "_FINE_STEPS = 11"))
    assert source_digest(copy) != before


def test_kernels_are_cached_there_and_nobody_elses():
    folder = Path(cache_folder())
    assert folder.name == f"kernels-{source_digest(PACKAGE)}"
    assert Path(ducts._count_all.stats.cache_path).is_relative_to(folder)
    assert str(folder) != numba.config.CACHE_DIR
