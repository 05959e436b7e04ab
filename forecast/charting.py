"""Charts without settings: what `bendcast chart` was asked for, and the files it makes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

from forecast.errors import SettingsError, printable
from forecast.nightly import time_stamp, writing
from forecast.products import Progress, make_charts, publish, staging_folder
from forecast.settings import Settings, Site

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["ChartRequest", "chart_files", "check_request", "choose_stations"]

#: Most charts of one call; a regional grid would make thousands.
MOST_CHARTS = 24


@dataclass(frozen=True)
class ChartRequest:
    """What the command line says, unchecked: chart top in m, point as ``LAT,LON``."""

    output: Path
    timezone: str = "UTC"
    top: float = 3000.0
    members: int = 64
    point: str | None = None


def check_request(request: ChartRequest) -> tuple[Settings, list[tuple[str, float, float]] | None]:
    """Settings that stand in for a file's, and where to take gridded data.

    Parameters
    ----------
    request : ChartRequest
        As given.

    Returns
    -------
    settings : forecast.settings.Settings
        Without sites.
    points : list of (name, latitude, longitude) or None
        For `forecast.ingest.read_files`.

    Raises
    ------
    SettingsError
        Listing every fault.
    """
    faults = []
    try:
        ZoneInfo(request.timezone)
    except (KeyError, ValueError, OSError):
        faults.append(f"--timezone: found {request.timezone!r}; expected an IANA time zone")
    if not 100.0 <= request.top <= 15000.0:
        faults.append(f"--top: found {request.top:g}; expected 100 to 15000 m")
    if not 8 <= request.members <= 4096:
        faults.append(f"--members: found {request.members}; expected 8 to 4096")
    points = None
    if request.point is not None:
        place = _place(request.point)
        if place is None:
            faults.append(
                f"--point: found {request.point!r}; expected LAT,LON in degrees, -90 to 90 and "
                "-180 to 360"
            )
        else:
            points = [("{:g}, {:g}".format(*place), *place)]
    if faults:
        raise SettingsError("command line", faults)
    settings = Settings(
        title="Soundings",
        output=request.output,
        sites=(),
        members=request.members,
        chart_top=request.top,
        timezone=request.timezone,
    )
    return settings, points


def _place(text: str) -> tuple[float, float] | None:
    try:
        latitude, longitude = (float(part) for part in text.split(","))
    except ValueError:
        return None
    known = abs(latitude) <= 90.0 and -180.0 <= longitude <= 360.0
    return (latitude, longitude) if known else None


def choose_stations(profiles: xr.Dataset, wanted: Sequence[str] = ()) -> xr.Dataset:
    """Profiles of the stations asked for; few enough for a chart each.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles.
    wanted : sequence of str
        Names; all stations if there are none.

    Returns
    -------
    xarray.Dataset

    Raises
    ------
    SettingsError
        If a station is not there, or too many are left.
    """
    stations = profiles["station"].values.astype(str)
    known = list(dict.fromkeys(stations))
    missing = [name for name in wanted if name not in known]
    if missing:
        shown = ", ".join(printable(name, 40) for name in known[:6])
        more = f" and {len(known) - 6} more" if len(known) > 6 else ""
        raise SettingsError(
            "--station", [f"found {name!r}; the files hold {shown}{more}" for name in missing]
        )
    left = len(set(wanted) or known)
    if left > MOST_CHARTS:
        raise SettingsError(
            "command line",
            [
                f"there are {left} stations or columns; at most {MOST_CHARTS} are charted at "
                "once: choose with --station, or with --point where to take columns"
            ],
        )
    return profiles.isel(profile=[name in wanted for name in stations]) if wanted else profiles


def chart_files(
    profiles: xr.Dataset, settings: Settings, output: Path, tell: Progress
) -> list[Path]:
    """Chart and outlook of some profiles without settings, every station a site of its own.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles.
    settings : forecast.settings.Settings
        Members, chart top; its sites are ignored.
    output : Path
        Folder; ``outlook.nc`` and a PNG and SVG per station go there.
    tell : callable
        Progress.

    Returns
    -------
    list of Path
        Files written.

    Raises
    ------
    OutputError
        If the folder cannot be written.
    """
    from forecast.outlook import find_windows, make_outlook
    from forecast.output.netcdf import write_outlook

    outlook = make_outlook(profiles, settings, tell)
    windows = find_windows(outlook, settings)
    sites = []
    for name in dict.fromkeys(outlook["site"].values.astype(str)):
        row = int((outlook["site"].values.astype(str) == name).argmax())
        latitude, longitude = (float(outlook[n].values[row]) for n in ("latitude", "longitude"))
        sites.append(Site(str(name), latitude, longitude, timezone=settings.timezone))
    with writing(output), staging_folder(output) as staging:
        write_outlook(outlook, staging / "outlook.nc", time_stamp())
        make_charts(outlook, windows, settings, sites, staging, tell)
        return publish(staging, output)
