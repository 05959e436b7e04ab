"""Fetched archives are trusted for nothing: paths, sizes, content and an interrupted fetch."""

from __future__ import annotations

import dataclasses
import hashlib
import io
import json
import tarfile
import zipfile
from pathlib import Path

import pytest

from tests.open_data import fetcher

SDIST = fetcher.Package("toy", "1.0", "0" * 64, False, "none", ("data/*.nc",))


def tar_with(path: Path, members: dict[str, bytes], links: tuple[str, ...] = ()) -> Path:
    with tarfile.open(path, "w:gz") as tar:
        for name, data in members.items():
            entry = tarfile.TarInfo(name)
            entry.size = len(data)
            tar.addfile(entry, io.BytesIO(data))
        for name in links:
            entry = tarfile.TarInfo(name)
            entry.type, entry.linkname = tarfile.SYMTYPE, "/etc/passwd"
            tar.addfile(entry)
    return path


@pytest.mark.parametrize(
    ("inside", "expected"),
    [
        ("data/a.nc", "data/a.nc"),
        ("data//a.nc", "data/a.nc"),
        ("../a.nc", None),
        ("data/../../a.nc", None),
        ("/data/a.nc", None),
        ("data\\..\\a.nc", None),
        ("C:/data/a.nc", None),
        ("", None),
    ],
)
def test_only_paths_inside_the_folder_are_written(inside: str, expected: str | None) -> None:
    assert fetcher.safe_path(inside) == expected


def test_only_data_files_are_unpacked(tmp_path: Path) -> None:
    archive = tar_with(
        tmp_path / "toy-1.0.tar.gz",
        {
            "toy-1.0/data/a.nc": b"abc",
            "toy-1.0/setup.py": b"raise SystemExit",
            "toy-1.0/../data/b.nc": b"out",
            "/toy-1.0/../../data/c.nc": b"out",
        },
        links=("toy-1.0/data/link.nc",),
    )
    fetcher.unpack(archive, SDIST, tmp_path / "into" / "here")
    found = sorted(p.relative_to(tmp_path / "into") for p in (tmp_path / "into").rglob("*.*"))
    assert [str(p) for p in found] == ["here/data/a.nc", "here/manifest.json"]
    assert not list(tmp_path.glob("**/b.nc"))


def test_a_wheel_keeps_its_paths(tmp_path: Path) -> None:
    archive = tmp_path / "toy-1.0-py3-none-any.whl"
    with zipfile.ZipFile(archive, "w") as bundle:
        bundle.writestr("data/a.nc", b"abc")
        bundle.writestr("../data/b.nc", b"out")
    fetcher.unpack(archive, dataclasses.replace(SDIST, wheel=True), tmp_path / "into")
    assert (tmp_path / "into" / "data" / "a.nc").read_bytes() == b"abc"
    assert not (tmp_path / "data").exists()


def test_sizes_are_bounded(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(fetcher, "MAX_MEMBER_BYTES", 2)
    archive = tar_with(tmp_path / "toy-1.0.tar.gz", {"toy-1.0/data/a.nc": b"abc"})
    with pytest.raises(fetcher.FetchError, match="larger"):
        fetcher.unpack(archive, SDIST, tmp_path / "into")


def test_an_archive_without_data_is_an_error(tmp_path: Path) -> None:
    archive = tar_with(tmp_path / "toy-1.0.tar.gz", {"toy-1.0/data/readme": b"abc"})
    with pytest.raises(fetcher.FetchError, match="no data files"):
        fetcher.unpack(archive, SDIST, tmp_path / "into")


def test_a_damaged_cache_is_noticed(tmp_path: Path) -> None:
    archive = tar_with(tmp_path / "toy-1.0.tar.gz", {"toy-1.0/data/a.nc": b"abc"})
    folder = tmp_path / "toy-1.0"
    assert not fetcher.is_whole(folder, SDIST)
    fetcher.unpack(archive, SDIST, folder)
    assert fetcher.is_whole(folder, SDIST)
    assert not fetcher.is_whole(folder, dataclasses.replace(SDIST, sha256="1" * 64))
    (folder / "data" / "a.nc").write_bytes(b"")
    assert not fetcher.is_whole(folder, SDIST)


@pytest.mark.parametrize("stray", [b"other bytes", None])
def test_a_file_that_is_not_the_one_asked_for_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stray: bytes | None
) -> None:
    """Whatever pip delivers is checked again here; a failing pip is an error with its words."""

    def pip(command, **options):
        if stray is None:
            return fetcher.subprocess.CompletedProcess(command, 1, "", "no route to host")
        target = Path(command[command.index("--dest") + 1])
        (target / "toy-1.0.tar.gz").write_bytes(stray)
        return fetcher.subprocess.CompletedProcess(command, 0, "", "")

    monkeypatch.setattr(fetcher.subprocess, "run", pip)
    monkeypatch.setitem(fetcher.PACKAGES, "toy", SDIST)
    with pytest.raises(fetcher.FetchError, match=r"sha256 is|no route to host"):
        fetcher.fetch("toy", tmp_path / "cache")
    # Nothing half-made stays behind; the lock file may.
    assert [p.name for p in (tmp_path / "cache").iterdir() if p.suffix != ".lock"] == []


def test_a_fetch_is_made_once(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    archive = tar_with(tmp_path / "toy-1.0.tar.gz", {"toy-1.0/data/a.nc": b"abc"})
    package = dataclasses.replace(SDIST, sha256=hashlib.sha256(archive.read_bytes()).hexdigest())
    calls = []

    def pip(command, **options):
        calls.append(command)
        target = Path(command[command.index("--dest") + 1])
        (target / archive.name).write_bytes(archive.read_bytes())
        return fetcher.subprocess.CompletedProcess(command, 0, "", "")

    monkeypatch.setattr(fetcher.subprocess, "run", pip)
    monkeypatch.setitem(fetcher.PACKAGES, "toy", package)
    first = fetcher.fetch("toy", tmp_path / "cache")
    second = fetcher.fetch("toy", tmp_path / "cache")
    assert first == second and len(calls) == 1
    manifest = json.loads((first / "manifest.json").read_text())
    assert manifest["files"] == {"data/a.nc": 3} and manifest["sha256"] == package.sha256
    command = calls[0]
    assert "--no-deps" in command and "--require-hashes" in command
    assert command[command.index("--no-binary") + 1] == "toy"


def test_an_unknown_name_lists_the_known_ones() -> None:
    with pytest.raises(fetcher.FetchError, match="act_atmos"):
        fetcher.fetch("nonesuch")
