"""Which files a run reads and which profiles belong to which site."""

from __future__ import annotations

import glob
import hashlib
import os
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import xarray as xr

    from forecast.settings import Settings, Site

__all__ = ["InputFile", "find_inputs", "fingerprint", "join_profiles", "match_to_site"]

#: Most files that one run takes; beyond, a pattern has surely gone astray.
MAX_FILES = 50_000


@dataclass(frozen=True)
class InputFile:
    """A file that a site's patterns found."""

    site: str
    path: Path


def find_inputs(settings: Settings) -> tuple[list[InputFile], list[str]]:
    """Files found by each site's patterns, in a fixed order, and what was odd.

    Parameters
    ----------
    settings : forecast.settings.Settings
        Patterns are relative to the settings file's folder; ``**`` descends.

    Returns
    -------
    files : list of InputFile
        Sorted by site order, then path; each file once per site.
    warnings : list of str
        Patterns without a file, and files beyond the limit.
    """
    files: list[InputFile] = []
    warnings: list[str] = []
    for site in settings.sites:
        found: set[Path] = set()
        for pattern in site.inputs:
            hits = glob.glob(pattern, root_dir=settings.base, recursive=True)
            paths = {settings.base / hit for hit in hits}
            paths = {path for path in paths if path.is_file()}
            if not paths:
                warnings.append(f"site {site.name}: no file matches {pattern!r}")
            found |= paths
        files += [InputFile(site.name, path) for path in sorted(found)]
    if len(files) > MAX_FILES:
        warnings.append(f"{len(files)} files found; only the first {MAX_FILES} are read")
        files = files[:MAX_FILES]
    return files, warnings


def fingerprint(path: Path) -> tuple[int, str]:
    """Size in bytes and sha256 of a file.

    Raises
    ------
    OSError
        If the file cannot be read.
    """
    with path.open("rb") as stream:
        digest = hashlib.file_digest(stream, "sha256").hexdigest()
        return os.fstat(stream.fileno()).st_size, digest


def match_to_site(profiles: xr.Dataset, site: Site) -> tuple[xr.Dataset, list[tuple[str, str]]]:
    """Keep the profiles that lie near a site and say why the others do not serve it.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles read for the site. Model profiles were taken at the site's own position and stay.
    site : forecast.settings.Site
        Position and match radius.

    Returns
    -------
    kept : xarray.Dataset
        With the coordinate ``site``.
    dropped : list of (str, str)
        File and reason.
    """
    from pyproj import Geod

    latitude = profiles["latitude"].values
    longitude = profiles["longitude"].values
    here = np.full(latitude.shape, site.latitude), np.full(latitude.shape, site.longitude)
    distance = np.asarray(Geod(ellps="WGS84").inv(here[1], here[0], longitude, latitude)[2])
    model = profiles["source_kind"].values.astype(str) == "model"
    near = model | (distance <= site.match_radius)
    names = profiles["source_file"].values.astype(str)
    dropped = [
        (
            str(names[i]),
            f"launched {distance[i] / 1e3:.0f} km from site {site.name}; "
            f"match_radius_km is {site.match_radius / 1e3:g}"
            if np.isfinite(distance[i])
            else f"has no position, so that it cannot be matched to site {site.name}",
        )
        for i in np.flatnonzero(~near)
    ]
    kept = profiles.isel(profile=np.flatnonzero(near))
    return kept.assign_coords(site=("profile", np.full(kept.sizes["profile"], site.name))), dropped


def join_profiles(parts: list[xr.Dataset]) -> xr.Dataset:
    """Join profiles of several sites into one dataset, padding to the most levels.

    Parameters
    ----------
    parts : list of xarray.Dataset
        Profiles datasets; at least one.

    Returns
    -------
    xarray.Dataset
        Dims (profile, level).
    """
    import xarray as xr

    levels = max(part.sizes["level"] for part in parts)
    with_member = any("member" in part.coords for part in parts)
    padded = []
    for part in parts:
        if with_member and "member" not in part.coords:
            none = np.full(part.sizes["profile"], -1, dtype=np.int32)
            part = part.assign_coords(member=("profile", none))
        part = part.pad(level=(0, levels - part.sizes["level"]), constant_values={"quality": 0})
        padded.append(part)
    return xr.concat(
        padded,
        dim="profile",
        data_vars="all",
        coords="different",
        join="override",
        compat="equals",
        combine_attrs="override",
    )
