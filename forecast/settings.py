"""Settings: a TOML file made into validated, typed values, every fault listed at once.

Keys carry their units (``distance_km``); values inside are SI. Nothing is guessed: an unknown key
is a fault, with the nearest known one named.
"""

from __future__ import annotations

import difflib
import hashlib
import math
import re
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    ValidationError,
)

from forecast.errors import SettingsError, printable

__all__ = ["Settings", "Sightline", "Site", "load_settings"]

_LARGEST_FILE = 1_000_000  # bytes


@dataclass(frozen=True)
class Site:
    """Where profiles are taken. Altitude and match radius in m, angles in degrees."""

    name: str
    latitude: float
    longitude: float
    altitude: float = 0.0
    timezone: str = "UTC"
    inputs: tuple[str, ...] = ()
    match_radius: float = 50e3
    point_method: str = "bilinear"


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
    timezone: str = "UTC"
    names: dict[str, str] = field(default_factory=dict)
    base: Path = Path()
    digest: str = ""


def _plain(text: str) -> str:
    if not text.strip():
        raise ValueError("must not be blank")
    if not text.isprintable():
        raise ValueError("must not hold control characters or line breaks")
    return text


def _zone(text: str) -> str:
    try:
        ZoneInfo(text)
    except (KeyError, ValueError, OSError):
        raise ValueError("is not a time zone of the IANA list, such as Atlantic/Azores") from None
    return text


Name = Annotated[str, Field(min_length=1, max_length=80), AfterValidator(_plain)]
Latitude = Annotated[float, Field(ge=-90.0, le=90.0)]
Longitude = Annotated[float, Field(ge=-180.0, le=360.0)]
Height = Annotated[float, Field(ge=0.0, le=9000.0)]


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, strict=False)


class _RunTable(_Table):
    title: Name = "Outlook"
    output: Annotated[str, Field(min_length=1, max_length=1000), AfterValidator(_plain)] = "outlook"
    members: Annotated[int, Field(ge=8, le=4096, strict=True)] = 64
    seed: Annotated[int, Field(ge=0, le=2**63 - 1, strict=True)] = 1
    window_threshold: Annotated[float, Field(gt=0.0, le=1.0)] = 0.5
    minimum_duct_strength: Annotated[float, Field(ge=0.0, le=100.0)] = 2.0
    chart_top_m: Annotated[float, Field(ge=100.0, le=15000.0)] = 3000.0


class _SiteTable(_Table):
    name: Name
    latitude: Latitude
    longitude: Longitude
    altitude_m: Annotated[float, Field(ge=-430.0, le=9000.0)] = 0.0
    timezone: Annotated[str, Field(max_length=80), AfterValidator(_zone)] = "UTC"
    inputs: Annotated[
        list[Annotated[str, Field(min_length=1, max_length=500), AfterValidator(_plain)]],
        Field(min_length=1, max_length=100),
    ]
    match_radius_km: Annotated[float, Field(gt=0.0, le=1000.0)] = 50.0
    point_method: Literal["nearest", "bilinear"] = "bilinear"


class _SightlineTable(_Table):
    name: Name
    site: Name
    observer_height_m: Height
    target_height_m: Height
    target_base_height_m: Height = 0.0
    distance_km: Annotated[float, Field(gt=0.0, le=1500.0)] | None = None
    azimuth_deg: Annotated[float, Field(ge=0.0, le=360.0)] | None = None
    observer: tuple[Latitude, Longitude] | None = None
    target: tuple[Latitude, Longitude] | None = None
    wave: Literal["optical", "radio"] = "optical"
    wavelength_nm: Annotated[float, Field(ge=300.0, le=1700.0)] = 550.0


class _Ingest(_Table):
    names: dict[str, Annotated[str, Field(min_length=1, max_length=200)]] = {}


class _File(_Table):
    run: _RunTable = _RunTable()
    site: Annotated[list[_SiteTable], Field(min_length=1, max_length=64)]
    sightline: Annotated[list[_SightlineTable], Field(max_length=256)] = []
    ingest: _Ingest = _Ingest()


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
        raw = path.read_bytes()[: _LARGEST_FILE + 1]
    except OSError as error:
        raise SettingsError(path.name, [f"cannot be read: {error.strerror}"]) from None
    if len(raw) > _LARGEST_FILE:
        raise SettingsError(path.name, [f"is larger than {_LARGEST_FILE} bytes"])
    try:
        text = raw.decode("utf-8")
        table = tomllib.loads(text)
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise SettingsError(path.name, [f"is not valid TOML: {error}"]) from None
    faults = []
    checked = None
    try:
        checked = _File.model_validate(table)
    except ValidationError as error:
        faults = _faults(error, table, text)
    faults += _cross_faults(table, text)
    if faults or checked is None:
        raise SettingsError(path.name, faults)
    return _settings(checked, path, hashlib.sha256(raw).hexdigest())


def _faults(error: ValidationError, table: dict[str, Any], text: str) -> list[str]:
    """One line per fault, in our words: key, line, found, allowed."""
    faults = []
    for item in error.errors(include_url=False, include_context=True):
        path = item["loc"]
        key = ".".join(f"[{p}]" if isinstance(p, int) else str(p) for p in path).replace(".[", "[")
        message = item["msg"].removeprefix("Value error, ")
        if item["type"] == "extra_forbidden":
            known = _known_keys(path)
            near = difflib.get_close_matches(str(path[-1]), known, n=1)
            hint = f"; did you mean {near[0]}?" if near else f"; known keys: {', '.join(known)}"
            message = f"unknown key{hint}"
        elif item["type"] == "missing":
            message = "is missing"
        else:
            message = f"found {printable(repr(item['input']), 80)}: {message}"
        line = _line_of(path, text)
        faults.append(f"{key or 'file'}{f' (line {line})' if line else ''}: {message}")
    return faults


def _known_keys(path: tuple[Any, ...]) -> list[str]:
    model: Any = {
        "run": _RunTable,
        "site": _SiteTable,
        "sightline": _SightlineTable,
        "ingest": _Ingest,
    }.get(str(path[0]) if len(path) > 1 else "", _File)
    return list(model.model_fields)


def _line_of(path: tuple[Any, ...], text: str) -> int | None:
    """Line of a key: count the table headers of its name, then look for the key below."""
    lines = text.splitlines()
    start = 0
    if len(path) > 1:
        wanted = path[1] if isinstance(path[1], int) else 0
        header = re.compile(rf"\s*\[+\s*{re.escape(str(path[0]))}\s*\]+")
        seen = [i for i, line in enumerate(lines) if header.match(line)]
        if wanted >= len(seen):
            return None
        start = seen[wanted]
    name = next((p for p in reversed(path) if isinstance(p, str)), "")
    for i in range(start, len(lines)):
        if i > start and len(path) > 1 and lines[i].lstrip().startswith("["):
            break
        if re.match(rf"\s*{re.escape(name)}\s*=", lines[i]):
            return i + 1
    return start + 1 if len(path) > 1 else None


def _cross_faults(table: dict[str, Any], text: str) -> list[str]:
    """Faults that only show between keys, looked for even where single keys are wrong."""
    faults = []

    def rows(label: str) -> list[tuple[int, dict[str, Any]]]:
        found = table.get(label)
        return [
            (i, row)
            for i, row in enumerate(found if isinstance(found, list) else [])
            if isinstance(row, dict)
        ]

    def fault(label: str, i: int, key: str, message: str) -> None:
        line = _line_of((label, i, key), text)
        faults.append(f"{label}[{i}].{key}{f' (line {line})' if line else ''}: {message}")

    for label in ("site", "sightline"):
        seen: set[str] = set()
        for i, row in rows(label):
            name = row.get("name")
            if isinstance(name, str) and name in seen:
                fault(label, i, "name", f"found {name!r} a second time; names must differ")
            seen.add(str(name))
    names = [str(row.get("name")) for _, row in rows("site")]
    for i, row in rows("sightline"):
        site = row.get("site")
        if isinstance(site, str) and site not in names:
            near = difflib.get_close_matches(site, names, n=1)
            hint = f"did you mean {near[0]!r}?" if near else f"sites are: {', '.join(names)}"
            fault("sightline", i, "site", f"found {site!r}, which is no site; {hint}")
        base, top = row.get("target_base_height_m", 0.0), row.get("target_height_m")
        if isinstance(base, int | float) and isinstance(top, int | float) and base > top:
            fault(
                "sightline",
                i,
                "target_base_height_m",
                f"found {base:g}; must not exceed target_height_m, {top:g}",
            )
        positions = [key for key in ("observer", "target") if key in row]
        if "distance_km" in row and positions:
            fault("sightline", i, "distance_km", "give a distance or positions, not both")
        elif "distance_km" not in row and len(positions) != 2:
            fault(
                "sightline",
                i,
                "distance_km",
                "is missing; give it, or both observer and target as [latitude, longitude]",
            )
    return faults


def _settings(checked: _File, path: Path, digest: str) -> Settings:
    base = path.resolve().parent
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
        )
        for s in checked.site
    )
    return Settings(
        title=run.title,
        output=(base / run.output).resolve(),
        sites=sites,
        sightlines=tuple(_sightline(line) for line in checked.sightline),
        members=run.members,
        seed=run.seed,
        window_threshold=run.window_threshold,
        minimum_duct_strength=run.minimum_duct_strength,
        chart_top=run.chart_top_m,
        names=dict(checked.ingest.names),
        base=base,
        digest=digest,
    )


def _sightline(line: _SightlineTable) -> Sightline:
    azimuth = math.nan if line.azimuth_deg is None else line.azimuth_deg
    if line.distance_km is not None:
        distance = 1e3 * line.distance_km
    else:
        from pyproj import Geod

        assert line.observer is not None and line.target is not None  # the model has checked
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
