"""Settings of a run: typed values, SI inside, read from a TOML file.

What the file may hold is told in `forecast.settings_file`, which is only imported to read one.
"""

from __future__ import annotations

import hashlib
import math
import os
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from forecast.errors import SettingsError

if TYPE_CHECKING:
    from forecast.settings_file import SettingsFile, SightlineTable

__all__ = ["Settings", "Sightline", "Site", "load_settings"]

_LARGEST_FILE = 1_000_000  # bytes


@dataclass(frozen=True)
class Site:
    """Where profiles are taken. Altitude and match radius in m, angles in degrees, water in K."""

    name: str
    latitude: float
    longitude: float
    altitude: float = 0.0
    timezone: str = "UTC"
    inputs: tuple[str, ...] = ()
    match_radius: float = 50e3
    point_method: str = "bilinear"
    surface: str = "none"
    sea_surface_temperature: float | None = None


@dataclass(frozen=True)
class Sightline:
    """An observer–target pair. Heights above the surface, distance and wavelength in m."""

    name: str
    site: str
    observer_height: float
    target_height: float
    distance: float
    target_base_height: float = 0.0
    azimuth: float = math.nan
    wave: str = "optical"
    wavelength: float = 550e-9


@dataclass(frozen=True)
class Settings:
    """Settings of a run, SI inside."""

    title: str
    output: Path
    sites: tuple[Site, ...]
    sightlines: tuple[Sightline, ...] = ()
    members: int = 64
    seed: int = 1
    window_threshold: float = 0.5
    minimum_duct_strength: float = 2.0
    chart_top: float = 3000.0
    chart_stretch_low: bool = False
    timezone: str = "UTC"
    names: dict[str, str] = field(default_factory=dict)
    base: Path = Path()
    digest: str = ""


def load_settings(path: str | Path) -> Settings:
    """Read and validate a settings file.

    Parameters
    ----------
    path : str or Path
        TOML file, at most 1 MB.

    Returns
    -------
    Settings
        Typed values, SI inside.

    Raises
    ------
    SettingsError
        Listing every fault, each with its key, line, what was found and what is allowed.
    """
    path = Path(path)
    try:
        with path.open("rb") as stream:
            raw = stream.read(_LARGEST_FILE + 1)
    except OSError as error:
        raise SettingsError(path.name, [f"cannot be read: {error.strerror}"]) from None
    if len(raw) > _LARGEST_FILE:
        raise SettingsError(path.name, [f"is larger than {_LARGEST_FILE} bytes"])
    try:
        text = raw.decode("utf-8-sig")  # some editors put a byte order mark first
        table = tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        raise SettingsError(path.name, [f"is not valid TOML: {_not_toml(error)}"]) from None
    from forecast.settings_file import check_table

    base = path.resolve().parent
    checked, faults = check_table(table, text, base)
    if checked is None:
        raise SettingsError(path.name, faults)
    return _settings(checked, base, hashlib.sha256(raw).hexdigest())


def _not_toml(error: Exception) -> str:
    if isinstance(error, UnicodeDecodeError):
        return f"not UTF-8 text (at byte {error.start})"
    if isinstance(error, tomllib.TOMLDecodeError):
        return str(error)  # it names line and column
    return "nested too deep" if isinstance(error, RecursionError) else "a number is too long"


def _settings(checked: SettingsFile, base: Path, digest: str) -> Settings:
    run = checked.run
    sites = tuple(
        Site(
            name=s.name,
            latitude=s.latitude,
            longitude=s.longitude,
            altitude=s.altitude_m,
            timezone=s.timezone,
            inputs=tuple(s.inputs),
            match_radius=1e3 * s.match_radius_km,
            point_method=s.point_method,
            surface=s.surface,
            sea_surface_temperature=None
            if s.sea_surface_temperature_c is None
            else s.sea_surface_temperature_c + 273.15,
        )
        for s in checked.site
    )
    return Settings(
        title=run.title,
        output=(base / os.path.expanduser(run.output)).resolve(),
        sites=sites,
        sightlines=tuple(_sightline(line) for line in checked.sightline),
        members=run.members,
        seed=run.seed,
        window_threshold=run.window_threshold,
        minimum_duct_strength=run.minimum_duct_strength,
        chart_top=run.chart_top_m,
        chart_stretch_low=run.chart_stretch_low,
        names=dict(checked.ingest.names),
        base=base,
        digest=digest,
    )


def _sightline(line: SightlineTable) -> Sightline:
    azimuth = math.nan if line.azimuth_deg is None else line.azimuth_deg
    if line.distance_km is not None:
        distance = 1e3 * line.distance_km
    else:
        from pyproj import Geod

        assert line.observer is not None and line.target is not None  # the cross-check has seen it
        forward, _, distance = Geod(ellps="WGS84").inv(
            line.observer[1], line.observer[0], line.target[1], line.target[0]
        )
        azimuth = forward % 360.0 if line.azimuth_deg is None else azimuth
    return Sightline(
        name=line.name,
        site=line.site,
        observer_height=line.observer_height_m,
        target_height=line.target_height_m,
        target_base_height=line.target_base_height_m,
        distance=float(distance),
        azimuth=float(azimuth),
        wave=line.wave,
        wavelength=1e-9 * line.wavelength_nm,
    )
