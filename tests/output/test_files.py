"""A product is whole or not there, and no name from outside decides where it lands."""

from __future__ import annotations

import os

import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.output.files import atomic_path, safe_stem, write_text_atomic


def test_a_failure_leaves_the_old_file_and_nothing_else(tmp_path):
    target = tmp_path / "page.html"
    write_text_atomic(target, "old")
    with pytest.raises(RuntimeError), atomic_path(target) as part:
        part.write_text("half")
        raise RuntimeError("power cut")
    assert target.read_text() == "old"
    assert os.listdir(tmp_path) == ["page.html"]


def test_a_product_is_as_readable_as_the_umask_allows(tmp_path):
    old = os.umask(0o022)
    try:
        write_text_atomic(tmp_path / "a", "x")
    finally:
        os.umask(old)
    assert (tmp_path / "a").stat().st_mode & 0o777 == 0o644


@given(st.text(max_size=200))
def test_stems_are_plain_whatever_the_name(name):
    stem = safe_stem(name)
    assert 0 < len(stem) <= 80
    assert set(stem) <= set("abcdefghijklmnopqrstuvwxyz0123456789-")
    assert not stem.startswith("-")


def test_stems_do_not_collide():
    first = safe_stem("Cape/Orrin")
    second = safe_stem("Cape Orrin", {first})
    assert first == "cape-orrin"
    assert second == "cape-orrin-2"
    # Names of other products are not for sites.
    assert safe_stem("index") != "index"
    assert safe_stem("windows") != "windows"
    # Nor are names of devices (Windows takes "com1.png" for a serial port).
    assert safe_stem("COM1") == "site-com1"
