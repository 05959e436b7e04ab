"""Compilation of kernels, with a cache that knows when anything a kernel is made of has changed.

Numba keeps compiled code per file and looks only at that file's own time stamp: edit a function
that a kernel in another file calls, and the old code goes on running. So each module's kernels lie
in a folder named after the content of the module and of all of ours that it imports.
"""

from __future__ import annotations

import hashlib
import os
import re
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

_PACKAGE = Path(__file__).resolve().parents[1]
_IMPORT = re.compile(rb"^(?:from|import) forecast\.([\w.]+)", re.MULTILINE)


def source_digest(module: str, package: Path = _PACKAGE) -> str:
    """Digest of a module and of every module of the package that it imports, near or far.

    Parameters
    ----------
    module : str
        Its dotted name within the package, such as ``physics.rays``.
    package : Path
        Folder of the package.

    Returns
    -------
    str
        16 hexadecimal digits.
    """
    sources: dict[str, bytes] = {}
    wanted = [module]
    while wanted:
        name = wanted.pop()
        path = package.joinpath(*name.split("."))
        path = path / "__init__.py" if path.is_dir() else path.with_suffix(".py")
        if name not in sources and path.is_file():
            sources[name] = path.read_bytes()
            wanted += [found.decode() for found in _IMPORT.findall(sources[name])]
    digest = hashlib.sha256(numba.__version__.encode())
    for name in sorted(sources):
        digest.update(name.encode() + b"\x00" + sources[name])
    return digest.hexdigest()[:16]


@cache
def cache_folder(module: str) -> str:
    """Folder of a module's compiled kernels: beside the code if it can be written, else the user's.

    ``NUMBA_CACHE_DIR``, if set, comes first. Folders of the module's earlier code beside the
    present one are deleted. Empty if no place can be written: then kernels are compiled anew in
    each process.

    Parameters
    ----------
    module : str
        As for `source_digest`.

    Returns
    -------
    str
        The folder, which exists.
    """
    name = f"{module}-{source_digest(module)}"
    user = Path(os.environ.get("XDG_CACHE_HOME") or Path("~/.cache").expanduser()) / "bendcast"
    own = os.environ.get("NUMBA_CACHE_DIR")
    for place in ([Path(own)] if own else []) + [_PACKAGE / "physics" / "__pycache__", user]:
        folder = place / "kernels" / name
        try:
            folder.mkdir(parents=True, exist_ok=True)
            with tempfile.TemporaryFile(dir=folder):
                pass
        except OSError:
            continue
        for old in folder.parent.glob(f"{module}-*"):
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

    def decorate(function: Callable[..., Any]) -> Any:
        folder = cache_folder(function.__module__.partition(".")[2])
        if not folder:
            options["cache"] = False
        # Numba chooses the place when it decorates; other users of Numba keep theirs.
        before = numba.config.CACHE_DIR
        numba.config.CACHE_DIR = folder or before
        try:
            return numba.njit(**options)(function)
        finally:
            numba.config.CACHE_DIR = before

    return decorate
