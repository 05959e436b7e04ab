"""Compiled kernels must be those of the present code, wherever it was changed."""

from __future__ import annotations

import shutil
from pathlib import Path

import numba

import forecast
from forecast.physics import ducts
from forecast.physics.compiled import cache_folder, source_digest

PACKAGE = Path(forecast.__file__).parent


def test_a_change_in_what_kernels_are_made_of_is_another_cache_for_them_alone(tmp_path):
    copy = tmp_path / "forecast"
    shutil.copytree(PACKAGE, copy, ignore=shutil.ignore_patterns("__pycache__"))
    modules = ("physics.sightline", "physics.visible_heights", "physics.ducts")
    before = [source_digest(module, copy) for module in modules]
    assert before == [source_digest(module) for module in modules]
    # Kernels of sightline call functions of visible_heights; those of ducts do not.
    path = copy / "physics" / "visible_heights.py"
    path.write_text(path.read_text().replace("_FINE_STEPS = 10", "_FINE_STEPS = 11"))
    after = [source_digest(module, copy) for module in modules]
    assert [a != b for a, b in zip(after, before, strict=True)] == [True, True, False]
    # Codes that kernels know as constants come from the schema, by way of an import of an import.
    path = copy / "physics" / "earth.py"
    path.write_text(path.read_text() + "\n")
    assert source_digest("physics.sightline", copy) != after[0]


def test_kernels_are_cached_there_and_nobody_elses():
    folder = Path(cache_folder("physics.ducts"))
    assert folder.name == f"physics.ducts-{source_digest('physics.ducts')}"
    assert Path(ducts._count_all.stats.cache_path).is_relative_to(folder)
    assert str(folder) != numba.config.CACHE_DIR
