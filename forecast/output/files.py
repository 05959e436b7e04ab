"""Files written whole or not at all, and file names that no outside text can abuse."""

from __future__ import annotations

import os
import re
import tempfile
import unicodedata
from collections.abc import Collection, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

__all__ = ["atomic_path", "safe_stem", "write_bytes_atomic", "write_text_atomic"]

_LONGEST_STEM = 60
_DEVICES = {f"{device}{number}" for device in ("com", "lpt") for number in range(1, 10)}
_RESERVED = {"con", "prn", "aux", "nul", "index", "outlook", "windows", "run"} | _DEVICES


@contextmanager
def atomic_path(path: str | Path) -> Iterator[Path]:
    """Give a temporary name beside `path` to write to, and move it into place at the end.

    Parameters
    ----------
    path : str or Path
        Where the file shall be.

    Yields
    ------
    Path
        An empty file in the same folder. If the block raises, it is deleted and `path` stays as
        it was.
    """
    path = Path(path)
    handle, name = tempfile.mkstemp(prefix=f".{path.name[:40]}.", suffix=".part", dir=path.parent)
    os.close(handle)
    part = Path(name)
    try:
        yield part
        # mkstemp makes private files; products are as readable as any file the user writes.
        umask = os.umask(0)
        os.umask(umask)
        part.chmod(0o666 & ~umask)
        with part.open("rb") as stream:
            os.fsync(stream.fileno())
        os.replace(part, path)
    except BaseException:
        with suppress(OSError):
            part.unlink()
        raise


def write_bytes_atomic(path: str | Path, content: bytes) -> None:
    """Write bytes to a file, whole or not at all."""
    with atomic_path(path) as part:
        part.write_bytes(content)


def write_text_atomic(path: str | Path, content: str) -> None:
    """Write text as UTF-8 to a file, whole or not at all."""
    write_bytes_atomic(path, content.encode("utf-8"))


def safe_stem(name: str, taken: Collection[str] = ()) -> str:
    """File name stem for a site: letters, digits and hyphens only, bounded, not taken yet.

    Parameters
    ----------
    name : str
        Any text.
    taken : collection of str
        Stems in use already.

    Returns
    -------
    str
        Stem without an ending.
    """
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode().lower()
    stem = re.sub(r"[^a-z0-9]+", "-", plain).strip("-")[:_LONGEST_STEM].strip("-") or "site"
    # Names that some systems reserve or that other products use.
    if stem in _RESERVED:
        stem = f"site-{stem}"
    candidate, number = stem, 2
    while candidate in taken:
        candidate = f"{stem}-{number}"
        number += 1
    return candidate
