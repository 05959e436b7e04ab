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
from forecast.physics.bands import PHOTOMETRIC_BANDS

if TYPE_CHECKING:
    from forecast.settings_file import SettingsFile, SightlineTable

__all__ = ["STAND_HEIGHTS", "Place", "Settings", "Sightline", "Site", "load_settings"]

#: Observer heights (m) tried for "where to stand".
STAND_HEIGHTS = (0.5, 1.0, 2.0, 3.0, 5.0, 7.0, 10.0, 15.0, 20.0, 30.0, 40.0, 50.0, 70.0, 100.0)

_LARGEST_FILE = 1_000_000  # bytes


@dataclass(frozen=True)
class Site:
    """Where profiles are taken. Lengths in m, angles in degrees, temperatures in K, wind in m/s.

    ``surface`` is what lies under the paths: water or land under a modelled surface layer, from
    the fixed values or the water series given here, or from what the profiles bring.
    """

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
    surface_temperature: float | None = None
    wind_speed: float | None = None
    roughness: float = 0.03
    water_series: Path | None = None


@dataclass(frozen=True)
class Place:
    """A candidate place to look from: its ground's height (m), distance to the target (m)."""

    name: str
    ground_height: float
    distance: float


@dataclass(frozen=True)
class Sightline:
    """An observer–target pair. Lengths in m, positions (latitude, longitude) in degrees.

    Heights are above mean sea level, or above the ground of a site inland; water stands
    ``sea_level_offset`` higher. ``silhouette``: the target's outline as (offset, height), from
    left to right. ``along``: sites whose profiles stand for the air on the way; ``site`` alone if
    empty. ``contrast`` is the target's own against the sky behind it; ``lamp_intensity`` in cd.
    """

    name: str
    site: str
    observer_height: float
    target_height: float
    distance: float
    target_base_height: float = 0.0
    azimuth: float = math.nan
    wave: str = "optical"
    wavelength: float = 550e-9
    observer: tuple[float, float] | None = None
    target: tuple[float, float] | None = None
    along: tuple[str, ...] = ()
    terrain: Path | None = None
    sea_level_offset: float = 0.0
    silhouette: tuple[tuple[float, float], ...] = ()
    visibility: float | None = None
    contrast: float = -0.9
    lamp_intensity: float | None = None
    stand_heights: tuple[float, ...] = STAND_HEIGHTS
    places: tuple[Place, ...] = ()


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
            sea_surface_temperature=_kelvin(s.sea_surface_temperature_c),
            surface_temperature=_kelvin(s.surface_temperature_c),
            wind_speed=s.wind_speed_m_s,
            roughness=s.roughness_m,
            water_series=_path(s.water_series, base),
        )
        for s in checked.site
    )
    return Settings(
        title=run.title,
        output=(base / os.path.expanduser(run.output)).resolve(),
        sites=sites,
        sightlines=tuple(_sightline(line, base) for line in checked.sightline),
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


def _kelvin(celsius: float | None) -> float | None:
    return None if celsius is None else celsius + 273.15


def _path(text: str | None, base: Path) -> Path | None:
    return None if text is None else (base / os.path.expanduser(text)).resolve()


def _geodesic(start: tuple[float, float], end: tuple[float, float]) -> tuple[float, float]:
    """Azimuth (degrees) and length (m) of the geodesic on WGS-84."""
    from pyproj import Geod

    forward, _, distance = Geod(ellps="WGS84").inv(start[1], start[0], end[1], end[0])
    return float(forward % 360.0), float(distance)


def _sightline(line: SightlineTable, base: Path) -> Sightline:
    azimuth = math.nan if line.azimuth_deg is None else line.azimuth_deg
    if line.distance_km is not None:
        distance = 1e3 * line.distance_km
    else:
        assert line.observer is not None and line.target is not None  # the cross-check has seen it
        forward, distance = _geodesic(line.observer, line.target)
        azimuth = forward if line.azimuth_deg is None else azimuth
    height = line.target_height_m
    if height is None:
        assert line.silhouette is not None  # the cross-check has seen it
        height = max(top for _, top in line.silhouette)
    places = []
    for place in line.place:
        away = distance
        if place.distance_km is not None:
            away = 1e3 * place.distance_km
        elif place.position is not None:
            assert line.target is not None  # the cross-check has seen it
            away = _geodesic(place.position, line.target)[1]
        places.append(Place(place.name, place.ground_height_m, away))
    return Sightline(
        name=line.name,
        site=line.site,
        observer_height=line.observer_height_m,
        target_height=height,
        target_base_height=line.target_base_height_m,
        distance=distance,
        azimuth=azimuth,
        wave=line.wave,
        wavelength=1e-9 * line.wavelength_nm if line.band is None else PHOTOMETRIC_BANDS[line.band],
        observer=line.observer,
        target=line.target,
        along=tuple(line.along),
        terrain=_path(line.terrain, base),
        sea_level_offset=line.sea_level_offset_m,
        silhouette=tuple(line.silhouette or ()),
        visibility=None if line.visibility_km is None else 1e3 * line.visibility_km,
        contrast=line.contrast,
        lamp_intensity=line.lamp_intensity_cd,
        stand_heights=tuple(sorted(set(line.stand_heights_m or STAND_HEIGHTS))),
        places=tuple(places),
    )
