"""Compilation of kernels, with a cache that knows when any kernel has changed.

Numba keeps compiled code per file and looks only at that file's own time stamp: edit a function
that a kernel in another file calls, and the old code goes on running. So the cache lies in a
folder named after the content of every kernel source; a change anywhere starts a new one.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import tempfile
from collections.abc import Callable
from contextlib import suppress
from functools import cache
from pathlib import Path
from typing import Any

import numba
from numba import prange

__all__ = ["cache_folder", "njit", "prange"]

_SOURCES = ("physics", "outlook")
_PREFIX = "kernels-"


def source_digest(package: Path) -> str:
    """Digest of all sources that hold kernels or what kernels are made of.

    Parameters
    ----------
    package : Path
        Folder of the package.

    Returns
    -------
    str
        16 hexadecimal digits.
    """
    digest = hashlib.sha256(numba.__version__.encode())
    for folder in _SOURCES:
        for path in sorted((package / folder).glob("*.py")):
            digest.update(path.name.encode() + b"\x00" + path.read_bytes())
    return digest.hexdigest()[:16]


@cache
def cache_folder() -> str:
    """Folder of compiled kernels: beside the code if it can be written there, else the user's.

    ``NUMBA_CACHE_DIR``, if set, comes first. Folders of earlier code beside the present one are
    deleted. Empty if no place can be written: then kernels are compiled anew in each process.
    """
    package = Path(__file__).resolve().parents[1]
    name = _PREFIX + source_digest(package)
    user = Path(os.environ.get("XDG_CACHE_HOME") or Path("~/.cache").expanduser()) / "bendcast"
    own = os.environ.get("NUMBA_CACHE_DIR")
    for place in ([Path(own)] if own else []) + [package / "physics" / "__pycache__", user]:
        folder = place / name
        try:
            folder.mkdir(parents=True, exist_ok=True)
            with tempfile.TemporaryFile(dir=folder):
                pass
        except OSError:
            continue
        for old in place.glob(f"{_PREFIX}*"):
            if old.name != name:
                with suppress(OSError):
                    shutil.rmtree(old)
        return str(folder)
    return ""


def njit(**options: Any) -> Callable[[Callable[..., Any]], Any]:
    """Decorate a kernel as `numba.njit` does, caching it in `cache_folder`.

    Parameters
    ----------
    **options
        Those of `numba.njit`. ``cache=True`` is dropped where nothing can be written.

    Returns
    -------
    callable
        Decorator.
    """
    folder = cache_folder()
    if not folder:
        options["cache"] = False

    def decorate(function: Callable[..., Any]) -> Any:
        # Numba chooses the place when it decorates; other users of Numba keep theirs.
        before = numba.config.CACHE_DIR
        numba.config.CACHE_DIR = folder or before
        try:
            return numba.njit(**options)(function)
        finally:
            numba.config.CACHE_DIR = before

    return decorate
