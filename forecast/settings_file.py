"""What a settings file may hold, and every fault it has, told at once.

Keys carry their units (``distance_km``). Nothing is guessed: an unknown key is a fault, with the
nearest known one named.
"""

from __future__ import annotations

import difflib
import re
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError

from forecast.errors import printable

__all__ = ["SettingsFile", "SightlineTable", "check_table"]


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


class SightlineTable(_Table):
    """A ``[[sightline]]`` table."""

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


class SettingsFile(_Table):
    """The whole file."""

    run: _RunTable = _RunTable()
    site: Annotated[list[_SiteTable], Field(min_length=1, max_length=64)]
    sightline: Annotated[list[SightlineTable], Field(max_length=256)] = []
    ingest: _Ingest = _Ingest()


def check_table(table: dict[str, Any], text: str) -> tuple[SettingsFile | None, list[str]]:
    """Validate a settings table.

    Parameters
    ----------
    table : dict
        The parsed TOML.
    text : str
        The file's text, for line numbers.

    Returns
    -------
    tables : SettingsFile or None
        Validated tables; None if there is a fault.
    faults : list of str
        One line per fault: key, line, what was found, what is allowed.
    """
    faults = []
    checked = None
    try:
        checked = SettingsFile.model_validate(table)
    except ValidationError as error:
        faults = _faults(error, table, text)
    faults += _cross_faults(table, text)
    return (None if faults else checked), faults


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
        "sightline": SightlineTable,
        "ingest": _Ingest,
    }.get(str(path[0]) if len(path) > 1 else "", SettingsFile)
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
