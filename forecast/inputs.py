"""Which files a run reads and which profiles belong to which site."""

from __future__ import annotations

import glob
import hashlib
import os
from collections import Counter
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from forecast.errors import printable

if TYPE_CHECKING:
    import xarray as xr

    from forecast.settings import Settings, Site

__all__ = [
    "InputFile",
    "Stray",
    "find_inputs",
    "fingerprint",
    "join_profiles",
    "reading_groups",
    "share_out",
    "unclaimed",
]

#: Most files that one run takes; beyond, a pattern has surely gone astray.
MAX_FILES = 50_000


@dataclass(frozen=True)
class InputFile:
    """A file that a site's patterns found."""

    site: str
    path: Path


@dataclass(frozen=True)
class Stray:
    """A profile that serves no site: the nearest site, its distance and match radius in m."""

    file: str
    site: str
    distance: float
    radius: float

    @property
    def reason(self) -> str:
        """Why it does not serve the site."""
        if not np.isfinite(self.distance):
            return f"has no position, so that it cannot be matched to site {self.site}"
        return (
            f"launched {self.distance / 1e3:.0f} km from site {self.site}; match_radius_km is "
            f"{self.radius / 1e3:g}"
        )


def find_inputs(
    settings: Settings, output: Path, products: Collection[str] = ()
) -> tuple[list[InputFile], list[str]]:
    """Files found by each site's patterns, in a fixed order, and what was odd.

    Parameters
    ----------
    settings : forecast.settings.Settings
        Patterns are relative to the settings file's folder; ``**`` descends.
    output : Path
        Folder of the products.
    products : collection of str
        Names of files there that a run writes: they are no inputs, whatever a pattern says.

    Returns
    -------
    files : list of InputFile
        Sorted by site order, then path; each file once per site, however many ways (patterns,
        links) lead to it.
    warnings : list of str
        Patterns without a file, and files beyond the limit.
    """
    files: list[InputFile] = []
    warnings: list[str] = []
    own = {os.path.realpath(output / name) for name in products}
    for site in settings.sites:
        found: dict[str, Path] = {}
        for pattern in site.inputs:
            hits = glob.iglob(os.path.expanduser(pattern), root_dir=settings.base, recursive=True)
            taken = list(islice(hits, MAX_FILES + 1))
            if len(taken) > MAX_FILES:
                warnings.append(f"site {site.name}: {pattern!r} matches over {MAX_FILES} files")
            paths = sorted(p for hit in taken if os.path.isfile(p := settings.base / hit))
            if not paths:
                warnings.append(f"site {site.name}: no file matches {pattern!r}")
            for path in paths:
                real = os.path.realpath(path)
                if real not in own:
                    found.setdefault(real, path)
        files += [InputFile(site.name, path) for path in sorted(found.values())]
    if len(files) > MAX_FILES:
        warnings.append(f"{len(files)} files found; only the first {MAX_FILES} are read")
        files = files[:MAX_FILES]
    return files, warnings


def reading_groups(
    inputs: list[InputFile], sites: Collection[Site]
) -> list[tuple[list[Site], list[Path]]]:
    """Files that serve the same sites in the same way, so that each is read once.

    Parameters
    ----------
    inputs : list of InputFile
        From `find_inputs`.
    sites : collection of forecast.settings.Site
        Sites of the settings, in order.

    Returns
    -------
    list of (sites, paths)
        The sites of a group share their ``point_method``.
    """
    groups: dict[tuple[str, ...], list[Path]] = {}
    for method in dict.fromkeys(site.point_method for site in sites):
        names = {site.name for site in sites if site.point_method == method}
        wanted: dict[Path, list[str]] = {}
        for item in inputs:
            if item.site in names:
                wanted.setdefault(item.path, []).append(item.site)
        for path, by in wanted.items():
            groups.setdefault(tuple(by), []).append(path)
    known = {site.name: site for site in sites}
    return [([known[name] for name in names], paths) for names, paths in groups.items()]


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


def share_out(profiles: xr.Dataset, sites: Sequence[Site]) -> tuple[list[xr.Dataset], list[Stray]]:
    """Give each site the profiles that serve it.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles. A model column was taken at the place of the site that its ``station`` names; an
        ascent serves every site within whose match radius it was launched.
    sites : sequence of forecast.settings.Site
        Positions and match radii.

    Returns
    -------
    parts : list of xarray.Dataset
        One per site that is served, with the coordinate ``site``.
    strays : list of Stray
        One per profile that serves none, with the site that comes nearest.
    """
    from pyproj import Geod

    geod = Geod(ellps="WGS84")
    latitude, longitude = profiles["latitude"].values, profiles["longitude"].values
    model = profiles["source_kind"].values.astype(str) == "model"
    station = profiles["station"].values.astype(str)
    distance = np.full((len(sites), latitude.size), np.inf)
    serves = np.zeros(distance.shape, dtype=bool)
    parts = []
    for i, site in enumerate(sites):
        here = np.full((2, latitude.size), [[site.longitude], [site.latitude]])
        away = np.asarray(geod.inv(here[0], here[1], longitude, latitude)[2])
        distance[i] = np.where(np.isfinite(away), away, np.inf)
        serves[i] = np.where(model, station == site.name, distance[i] <= site.match_radius)
        rows = np.flatnonzero(serves[i])
        if rows.size:
            mine = profiles.isel(profile=rows)
            parts.append(mine.assign_coords(site=("profile", np.full(rows.size, site.name))))
    nearest = distance.argmin(axis=0)
    files = profiles["source_file"].values.astype(str)
    strays = []
    for row in np.flatnonzero(~serves.any(axis=0)):
        site = sites[nearest[row]]
        away_m = float(distance[nearest[row], row])
        strays.append(Stray(str(files[row]), site.name, away_m, site.match_radius))
    return parts, strays


def unclaimed(strays: Sequence[Stray], used: Collection[str]) -> tuple[list[Stray], list[str]]:
    """Tell files that serve no site from those that serve one with some of their profiles.

    Parameters
    ----------
    strays : sequence of Stray
        Profiles that serve no site.
    used : collection of str
        Files with a profile that serves a site.

    Returns
    -------
    refused : list of Stray
        Of each file that serves no site, the profile nearest to one.
    notes : list of str
        Of each other file, how many profiles were left out.
    """
    nearest: dict[str, Stray] = {}
    for stray in strays:
        held = nearest.get(stray.file)
        if held is None or stray.distance < held.distance:
            nearest[stray.file] = stray
    counts = Counter(stray.file for stray in strays if stray.file in used)
    notes = [
        f"{printable(file)}: {count} profiles lie beyond match_radius_km of every site"
        for file, count in counts.items()
    ]
    return [stray for stray in nearest.values() if stray.file not in used], notes


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
        # Told for each: what is left out of a mapping is padded with zero, not with NaN.
        blank = {name: 0 if var.dtype.kind in "iu" else np.nan for name, var in part.items()}
        part = part.pad(level=(0, levels - part.sizes["level"]), constant_values=blank)
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
