"""Sightlines at one time, as `bendcast sightline` draws and tells them."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

import numpy as np

from forecast.errors import InputError, SettingsError, printable
from forecast.nightly import plan_run, writing
from forecast.products import Progress, publish, staging_folder
from forecast.reading import RunRecord, read_profiles, read_surroundings

if TYPE_CHECKING:
    from forecast.outlook.view import SightlineView
    from forecast.settings import Settings

__all__ = ["SightlinePictures", "SightlineRequest", "check_request", "draw_sightlines"]

_FARTHEST_HOURS = 24.0  # from the time asked for to the valid time that is drawn


@dataclass(frozen=True)
class SightlineRequest:
    """What the command line says, unchecked; no time means the likeliest valid time of each."""

    output: Path
    at: str | None = None
    names: tuple[str, ...] = ()


@dataclass(frozen=True)
class SightlinePictures:
    """Files written, and what was told of each sightline, of inputs set aside, of the rest."""

    files: list[Path]
    words: list[str]
    set_aside: list[dict[str, str]]
    notes: list[str]


def check_request(
    request: SightlineRequest, settings: Settings
) -> tuple[list[int], np.datetime64 | None]:
    """Which sightlines, and which time.

    Parameters
    ----------
    request : SightlineRequest
        As given.
    settings : forecast.settings.Settings
        Holds the sightlines.

    Returns
    -------
    numbers : list of int
        Of the sightlines, all if none is named.
    time : datetime64 or None
        UTC; a time without offset is UTC.

    Raises
    ------
    SettingsError
        Listing every fault.
    """
    known = [line.name for line in settings.sightlines]
    faults = []
    if not known:
        faults.append("the settings have no [[sightline]]; add one")
    for name in request.names:
        if known and name not in known:
            faults.append(f"--name: found {name!r}; the settings have {', '.join(known[:6])}")
    time = None
    if request.at is not None:
        try:
            moment = datetime.fromisoformat(request.at)
        except ValueError:
            faults.append(
                f"--at: found {request.at!r}; expected a time such as 2031-06-11T04:00, UTC unless "
                "it carries an offset"
            )
        else:
            if moment.tzinfo is not None:
                moment = moment.astimezone(UTC).replace(tzinfo=None)
            time = np.datetime64(moment, "s")
    if faults:
        raise SettingsError("command line", faults)
    wanted = request.names or tuple(known)
    return [known.index(name) for name in dict.fromkeys(wanted)], time


def draw_sightlines(
    settings: Settings,
    numbers: list[int],
    time: np.datetime64 | None,
    output: Path,
    tell: Progress,
) -> SightlinePictures:
    """Draw and tell sightlines at a time.

    Parameters
    ----------
    settings : forecast.settings.Settings
        Sites, inputs, sightlines.
    numbers : list of int
        Of the sightlines wanted.
    time : datetime64 or None
        UTC; the valid time nearest to it is taken, or the likeliest one.
    output : Path
        Folder; two pictures per sightline go there, each as PNG and SVG.
    tell : callable
        Progress.

    Returns
    -------
    SightlinePictures
        What was made and told.

    Raises
    ------
    InputError
        If no profile is usable, or none within a day of the time.
    OutputError
        If the folder cannot be written.
    """
    from forecast.outlook import make_outlook
    from forecast.outlook.speaking import speaking_profiles
    from forecast.outlook.stand_choice import stand_words
    from forecast.outlook.viewing import likeliest_row, nearest_row, view_sightline
    from forecast.output.files import safe_stem
    from forecast.output.sight_charts import save_sightline_figure
    from forecast.output.stand_chart import save_stand_chart

    plan = plan_run(settings, output)
    record = RunRecord("", warnings=list(plan.warnings))
    profiles = read_profiles(plan, record, tell)
    if profiles is None:
        raise InputError(
            "no input is usable", source=settings.title, remedy="see what was set aside"
        )
    around = read_surroundings(settings, record)
    outlook = make_outlook(profiles, settings, tell, around)
    told = speaking_profiles(profiles, settings, around)
    words: list[str] = []
    stems: set[str] = set()
    with writing(output), staging_folder(output) as staging:
        for done, number in enumerate(numbers, 1):
            line = settings.sightlines[number]
            if time is None:
                row = likeliest_row(outlook, number)
            else:
                row = nearest_row(outlook, line, time)
            if row < 0:
                words.append(f"{printable(line.name)}: no usable profile at {printable(line.site)}")
                continue
            _refuse_far(outlook["time"].values[row], time)
            view = view_sightline(told, outlook, settings, number, row, around)
            stem = safe_stem(f"{line.name} {np.datetime_as_string(view.time, 'm')}", stems)
            stems.add(stem)
            save_sightline_figure(staging / stem, view)
            stand = safe_stem(f"{line.name} where to stand", stems)
            stems.add(stand)
            save_stand_chart(staging / stand, outlook, number, timezone=view.zone)
            words.append(_told(view, stand_words(outlook, number)))
            tell(done, len(numbers), "pictures")
        files = publish(staging, output)
    return SightlinePictures(files, words, record.set_aside, record.warnings)


def _refuse_far(found: np.datetime64, wanted: np.datetime64 | None) -> None:
    if wanted is None:
        return
    hours = abs((found - wanted) / np.timedelta64(1, "h"))
    if hours > _FARTHEST_HOURS:
        raise InputError(
            f"the valid time nearest to {np.datetime_as_string(wanted, 'm')} UTC is "
            f"{np.datetime_as_string(found.astype('datetime64[m]'))} UTC, {hours:.0f} h away",
            source="--at",
            remedy="choose a time within a day of the soundings",
        )


def _told(view: SightlineView, stand: str) -> str:
    """What the pictures show, for a terminal."""
    local = view.time.astype("datetime64[s]").astype(datetime).replace(tzinfo=UTC)
    here = local.astimezone(ZoneInfo(view.zone))
    chance, lower, upper = (
        f"{100.0 * p:.0f} %" if np.isfinite(p) else "not known" for p in view.probability
    )
    intervals = ", ".join(
        f"{low:.1f} to {high:.1f} m" if np.isfinite(high) else f"all above {low:.1f} m"
        for low, high in view.visible
    )
    lines = [
        f"{printable(view.line.name)}, {np.datetime_as_string(view.time, 'm')} UTC "
        f"({here:%Y-%m-%d %H:%M} {view.zone}), {view.source}",
        f"{view.state}; likely open: {chance} ({lower} to {upper})",
        f"visible heights at {view.line.distance / 1e3:.1f} km: {intervals or 'none'}",
        *view.words,
        stand,
    ]
    return "\n  ".join(line for line in lines if line)
