"""Everything a run reads, and what it sets aside with which reason."""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.inputs import (
    InputFile,
    Stray,
    fingerprint,
    join_profiles,
    reading_groups,
    share_out,
    unclaimed,
)

if TYPE_CHECKING:
    import xarray as xr

    from forecast.ingest.terrain import Terrain
    from forecast.outlook.surroundings import Surroundings
    from forecast.settings import Settings, Sightline

__all__ = ["Plan", "RunRecord", "read_profiles", "read_surroundings"]

#: Steps of a run, in order.
STEPS = ("find inputs", "read profiles", "outlook", "products", "publish, the page last")

#: Called with (done, total, label).
Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class Plan:
    """What a run will do."""

    settings: Settings
    inputs: list[InputFile]
    warnings: list[str]
    output: Path
    steps: tuple[str, ...] = STEPS


@dataclass
class RunRecord:
    """What run.json tells, gathered along the way."""

    started: str
    inputs: list[dict[str, Any]] = field(default_factory=list)
    set_aside: list[dict[str, str]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)

    def refuse(self, site: str, path: Path, error: InputError) -> None:
        """Note a file that is set aside."""
        reason = f"{error.reason}; {error.remedy}" if error.remedy else error.reason
        self.set_aside.append(
            {"site": printable(site), "file": printable(path.name), "reason": printable(reason)}
        )

    @contextmanager
    def timed(self, step: str) -> Iterator[None]:
        """Note how long a step takes."""
        start = time.monotonic()
        yield
        self.seconds[step] = time.monotonic() - start


def read_profiles(plan: Plan, record: RunRecord, tell: Progress) -> xr.Dataset | None:
    """Profiles of every site, matched to it; None if nothing is usable."""
    from forecast.ingest import read_files

    readable = _fingerprints(plan, record)
    groups = reading_groups(
        [item for item in plan.inputs if item.path in readable], plan.settings.sites
    )
    total = sum(len(paths) for _, paths in groups)
    parts: list[xr.Dataset] = []
    strays = []
    done = 0
    for sites, paths in groups:
        label = printable(", ".join(site.name for site in sites))

        def step(count: int, _: int, __: str, offset: int = done) -> None:
            tell(offset + count, total, "read profiles")

        reading = read_files(
            paths,
            names=plan.settings.names or None,
            points=[(site.name, site.latitude, site.longitude) for site in sites],
            method=sites[0].point_method,
            progress=step,
        )
        done += len(paths)
        for item in reading.set_aside:
            record.set_aside.append({"site": label, "file": item.file, "reason": item.reason})
        noun = "site" if len(sites) == 1 else "sites"
        record.warnings += [f"{noun} {label}: {printable(note)}" for note in reading.notes]
        if reading.profiles is not None:
            served, left = share_out(reading.profiles, sites)
            parts += served
            strays += left
    _settle(plan, record, parts, strays)
    return join_profiles(parts) if parts else None


def read_surroundings(settings: Settings, record: RunRecord) -> Surroundings:
    """Read water series and terrain; a file that is wrong is set aside with its reason.

    Parameters
    ----------
    settings : forecast.settings.Settings
        Names the files.
    record : RunRecord
        Takes what was set aside.

    Returns
    -------
    forecast.outlook.surroundings.Surroundings
        Without what was set aside: a site without its series knows no more than its profiles, a
        sightline without its terrain is not told of.
    """
    from forecast.outlook.surroundings import Surroundings

    water, ground, blind = {}, {}, set()
    for site in settings.sites:
        if site.water_series is not None:
            from forecast.ingest.water_series import read_water_series

            try:
                water[site.name] = read_water_series(site.water_series)
            except InputError as error:
                record.refuse(site.name, site.water_series, error)
    for line in settings.sightlines:
        if line.terrain is not None:
            from forecast.ingest.terrain import read_terrain

            try:
                ridge = read_terrain(
                    line.terrain, observer=line.observer, target=line.target, distance=line.distance
                )
                _refuse_buried(line, ridge)
                ground[line.name] = np.stack([ridge.distance, ridge.height], axis=-1)
            except InputError as error:
                record.refuse(line.site, line.terrain, error)
                blind.add(line.name)
    return Surroundings(water, ground, frozenset(blind))


def _refuse_buried(line: Sightline, ridge: Terrain) -> None:
    """Heights that lie under the ground are a mistake of one or the other."""
    for what, height, at in (
        ("the observer", line.observer_height, 0),
        ("the target's top", line.target_height, -1),
    ):
        if height < ridge.height[at]:
            raise InputError(
                f"puts the ground at {ridge.height[at]:g} m under {what} of sightline "
                f"{line.name!r}, which is at {height:g} m",
                source=ridge.source,
                remedy="heights in the settings are above mean sea level; check both",
            )


def _settle(plan: Plan, record: RunRecord, parts: list[xr.Dataset], strays: list[Stray]) -> None:
    """Record what was read but serves no site, and sites that nothing serves."""
    used = {file for part in parts for file in part["source_file"].values.astype(str)}
    refused, notes = unclaimed(strays, used)
    for stray in refused:
        record.set_aside.append(
            {"site": stray.site, "file": printable(stray.file), "reason": printable(stray.reason)}
        )
    record.warnings += notes
    served = {str(part["site"].values[0]) for part in parts}
    record.warnings += [
        f"site {site.name}: no usable profile"
        for site in plan.settings.sites
        if site.name not in served
    ]


def _fingerprints(plan: Plan, record: RunRecord) -> set[Path]:
    """Note size and sha256 of each input; one that cannot be opened is set aside here."""
    sites: dict[Path, list[str]] = {}
    for item in plan.inputs:
        sites.setdefault(item.path, []).append(item.site)
    readable = set()
    for path, names in sites.items():
        file = printable(os.path.relpath(path, plan.settings.base))
        try:
            size, digest = fingerprint(path)
        except OSError as error:
            reason = f"cannot be read: {error.strerror}"
            record.set_aside.append(
                {"site": ", ".join(names), "file": printable(path.name), "reason": reason}
            )
            continue
        record.inputs.append({"sites": names, "file": file, "bytes": size, "sha256": digest})
        readable.add(path)
    return readable
