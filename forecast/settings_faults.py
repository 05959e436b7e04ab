"""What is wrong with a settings file: every fault in words, with key, line, found and allowed."""

from __future__ import annotations

import difflib
import itertools
import os
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, TypeGuard

from forecast.errors import InputError, printable

__all__ = ["MAX_DISTANCE_KM", "MAX_HEIGHT_M", "faults_of"]

#: Longest sightline, km; rays are traced through one profile, which says nothing farther out.
MAX_DISTANCE_KM = 1500.0

#: Highest observer or target, m.
MAX_HEIGHT_M = 9000.0

#: Faults told of one file; more show that it is no settings file at all.
_MOST_FAULTS = 50

Where = tuple[Any, ...]

#: Keys of a site that only some surfaces take.
_SURFACE_KEYS = {
    "sea_surface_temperature_c": (("sea",), '"sea"'),
    "water_series": (("sea",), '"sea"'),
    "surface_temperature_c": (("land",), '"land"'),
    "roughness_m": (("land",), '"land"'),
    "wind_speed_m_s": (("sea", "land"), '"sea" or "land"'),
}

_KEY = r"(?:[A-Za-z0-9_-]+|\"[^\"]*\"|'[^']*')"
_HEADER = re.compile(rf"\s*(\[\[?)\s*({_KEY}(?:\s*\.\s*{_KEY})*)\s*\]\]?\s*(?:#.*)?$")
_ASSIGNMENT = re.compile(rf"\s*({_KEY}(?:\s*\.\s*{_KEY})*)\s*=")


def faults_of(
    single: list[Any],
    table: dict[str, Any],
    text: str,
    tables: Mapping[str, Any],
    base: Path,
) -> list[str]:
    """Put every fault of a settings file into words.

    Parameters
    ----------
    single : list
        Faults of single keys, as pydantic lists them.
    table : dict
        The parsed file.
    text : str
        The file's text, for line numbers.
    tables : mapping of str to pydantic model
        The known tables, the whole file under ``""``.
    base : Path
        Folder that relative paths start from.

    Returns
    -------
    list of str
        One line per fault, in the order of the file.
    """
    lines = _line_numbers(text)
    found = [(tuple(item["loc"]), _words(item, tables)) for item in single[:_MOST_FAULTS]]
    found += _cross_faults(table, base)
    told = [(_line_of(where, lines), where, message) for where, message in found]
    told.sort(key=lambda item: item[0] or 0)
    faults = [
        f"{_key(where)}{f' (line {line})' if line else ''}: {message}"
        for line, where, message in told[:_MOST_FAULTS]
    ]
    rest = len(single) + len(found) - min(len(single), _MOST_FAULTS) - len(faults)
    return [*faults, f"and {rest} more"] if rest else faults


def _key(where: Where) -> str:
    key = ".".join(f"[{p}]" if isinstance(p, int) else printable(p, 60) for p in where)
    return key.replace(".[", "[") or "file"


def _words(item: Any, tables: Mapping[str, Any]) -> str:
    """Say what is wrong with one key."""
    where = tuple(item["loc"])
    if where[2:3] == ("place",) and len(where) > 4:
        where = where[2:]  # a table inside a sightline
    label = str(where[0]) if len(where) > 1 else ""
    fields = tables.get(label, tables[""]).model_fields
    name = next((p for p in where[1 if label else 0 :] if isinstance(p, str)), "")
    allowed = fields[name].description if name in fields else None
    if item["type"] == "extra_forbidden":
        near = difflib.get_close_matches(str(where[-1]), list(fields), n=1)
        hint = f"did you mean {near[0]}?" if near else f"known keys: {', '.join(fields)}"
        return f"unknown key; {hint}"
    if item["type"] == "missing":
        return f"is missing; allowed: {allowed}" if allowed else "is missing"
    message = f"found {_found(item['input'])}"
    if item["type"] == "value_error":
        return f"{message}; {item['ctx']['error']}"
    if allowed is None:
        expected = "a list of tables" if label in ("site", "sightline") else "a table"
        return f"{message}; expected {expected}"
    return f"{message}; allowed: {allowed}"


def _found(value: Any) -> str:
    """A value as the file spells it, bounded."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int) and value.bit_length() > 128:
        return "a number of more than 38 digits"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        return f"a list of {len(value)}"
    if isinstance(value, str | int | float):
        return printable(repr(value), 80)
    return printable(value, 80)


def _line_numbers(text: str) -> dict[Where, int]:
    """Line of each table and key, by its path; strings over several lines may hide some."""
    lines: dict[Where, int] = {}
    counts: dict[Where, int] = {}
    table: Where = ()
    for number, line in enumerate(text.split("\n"), 1):
        if header := _HEADER.match(line):
            names = _parts(header[2])
            if header[1] == "[[":
                # A list inside the last table of another starts anew with each of those.
                outer = (names[0], counts[names[:1]]) if names[:1] in counts and names[1:] else ()
                whole = (*outer, *names[1:]) if outer else names
                counts[whole] = counts.get(whole, -1) + 1
                table = (*whole, counts[whole])
            elif names[:1] in counts:  # a table inside the last one of a list
                table = (names[0], counts[names[:1]], *names[1:])
            else:
                table = names
            for end in range(1, len(table) + 1):
                lines.setdefault(table[:end], number)
        elif assignment := _ASSIGNMENT.match(line):
            where = (*table, *_parts(assignment[1]))
            for end in range(len(table) + 1, len(where) + 1):
                lines.setdefault(where[:end], number)
    return lines


def _parts(dotted: str) -> Where:
    return tuple(part.strip("\"'") for part in re.findall(_KEY, dotted))


def _line_of(where: Where, lines: dict[Where, int]) -> int | None:
    """Line of a key or, where it is missing, of its table."""
    for end in range(len(where), 0, -1):
        if where[:end] in lines:
            return lines[where[:end]]
    return None


def _cross_faults(table: dict[str, Any], base: Path) -> list[tuple[Where, str]]:
    """Faults that only show between keys or outside, looked for even where single keys are wrong.

    The table is unchecked here: anything may be of any type.
    """
    sites, sightlines = _rows(table, "site"), _rows(table, "sightline")
    faults = [*_output_faults(table, base), *_mapping_faults(table)]
    for label, rows in (("site", sites), ("sightline", sightlines)):
        seen: set[str] = set()
        for i, row in rows:
            name = row.get("name")
            if not isinstance(name, str):
                continue
            if name in seen:
                faults.append(
                    ((label, i, "name"), f"found {_found(name)} a second time; names must differ")
                )
            seen.add(name)
    faults += [
        (("site", i, key), f"is for sites with surface = {words} only; leave it out or set that")
        for i, row in sites
        for key, (kinds, words) in _SURFACE_KEYS.items()
        if key in row and row.get("surface", "none") not in kinds
    ]
    names = [row["name"] for _, row in sites if isinstance(row.get("name"), str)]
    for i, row in sightlines:
        faults += [(("sightline", i, key), words) for key, words in _sightline_faults(row, names)]
    return faults


def _rows(table: dict[str, Any], label: str) -> list[tuple[int, dict[str, Any]]]:
    found = table.get(label)
    rows = found if isinstance(found, list) else []
    # More than a few hundred tables are a fault of their own.
    return [(i, row) for i, row in enumerate(rows[:512]) if isinstance(row, dict)]


def _sightline_faults(row: dict[str, Any], names: list[str]) -> Iterator[tuple[str, str]]:
    site = row.get("site")
    # With no site named at all, each sightline's site is no news.
    if isinstance(site, str) and names and site not in names:
        near = difflib.get_close_matches(site, names, n=1)
        hint = f"did you mean {near[0]!r}?" if near else f"sites are: {', '.join(names)}"
        yield "site", f"found {_found(site)}, which is no site; {hint}"
    for name in row["along"] if isinstance(row.get("along"), list) else []:
        if isinstance(name, str) and names and name not in names:
            yield "along", f"found {_found(name)}, which is no site; sites are: {', '.join(names)}"
    yield from _target_faults(row)
    yield from _place_faults(row)
    for key in ("wavelength_nm", "band", "lamp_intensity_cd"):
        if row.get("wave") == "radio" and key in row:
            yield key, "is for optical sightlines only; leave it out"
    if "band" in row and "wavelength_nm" in row:
        yield "band", "give a band or a wavelength, not both"
    positions = [key for key in ("observer", "target") if key in row]
    if "distance_km" in row and positions:
        yield "distance_km", "give a distance or positions, not both"
    elif "distance_km" not in row and len(positions) != 2:
        yield (
            "distance_km",
            "is missing; give it, or both observer and target as [latitude, longitude]",
        )
    elif len(positions) == 2:
        yield from _position_faults(row)
    elif row.get("along"):
        yield "along", "needs observer and target as [latitude, longitude], to lay the sites along"


def _target_faults(row: dict[str, Any]) -> Iterator[tuple[str, str]]:
    bottom, top = row.get("target_base_height_m", 0.0), row.get("target_height_m")
    outline = row.get("silhouette")
    points = [
        point
        for point in (outline if isinstance(outline, list) else [])
        if isinstance(point, list) and len(point) == 2 and all(_is_number(x) for x in point)
    ]
    if top is None and outline is None:
        yield "target_height_m", "is missing; give it, or a silhouette"
    elif top is not None and outline is not None:
        yield "silhouette", "give target_height_m or a silhouette, not both"
    if any(right[0] < left[0] for left, right in itertools.pairwise(points)):
        yield "silhouette", "offsets must not fall from one point to the next"
    if points and top is None:
        top = max(height for _, height in points)
    tide = row.get("sea_level_offset_m", 0.0)
    for key, height, words in (
        ("observer_height_m", row.get("observer_height_m"), "the observer"),
        ("target_height_m" if outline is None else "silhouette", top, "the target's top"),
    ):
        if _is_number(tide) and _is_number(height) and 0.0 <= height < tide:
            yield (
                key,
                f"found {_found(height)}, {words} under water: sea_level_offset_m is "
                f"{_found(tide)}; heights are above mean sea level",
            )
    both = isinstance(bottom, int | float) and isinstance(top, int | float)
    if both and MAX_HEIGHT_M >= bottom > top:
        yield (
            "target_base_height_m",
            f"found {_found(bottom)}; must not exceed target_height_m, {_found(top)}",
        )


def _place_faults(row: dict[str, Any]) -> Iterator[tuple[str, str]]:
    places = row.get("place")
    for place in places[:64] if isinstance(places, list) else []:
        if not isinstance(place, dict):
            continue
        if "position" in place and "distance_km" in place:
            yield "place", "give a place a distance or a position, not both"
        elif "position" in place and "target" not in row:
            yield "place", "a position needs the target's position too; or give a distance_km"


def _position_faults(row: dict[str, Any]) -> Iterator[tuple[str, str]]:
    pair = [row["observer"], row["target"]]
    if not all(_is_position(place) for place in pair):
        return  # told as a fault of that key
    from pyproj import Geod

    (lat_1, lon_1), (lat_2, lon_2) = pair
    distance_km = Geod(ellps="WGS84").inv(lon_1, lat_1, lon_2, lat_2)[2] / 1e3
    if not 0.01 <= distance_km <= MAX_DISTANCE_KM:
        yield (
            "target",
            f"lies {distance_km:.3g} km from the observer; allowed: 0.01 to {MAX_DISTANCE_KM:g} km",
        )


def _is_number(value: Any) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _is_position(place: Any) -> bool:
    if not isinstance(place, list) or len(place) != 2:
        return False
    if not all(_is_number(p) for p in place):
        return False
    return -90.0 <= place[0] <= 90.0 and -180.0 <= place[1] <= 360.0


def _mapping_faults(table: dict[str, Any]) -> Iterator[tuple[Where, str]]:
    """Roles that ingest does not know, and entries that it cannot take apart."""
    ingest = table.get("ingest")
    names = ingest.get("names") if isinstance(ingest, dict) else None
    if not isinstance(names, dict) or not names:
        return
    from forecast.ingest.recognition import parse_names
    from forecast.ingest.roles import ROLES

    for role, entry in names.items():
        where = ("ingest", "names", role)
        if role not in ROLES:
            near = difflib.get_close_matches(role, list(ROLES), n=1)
            hint = f"did you mean {near[0]}?" if near else f"allowed: {', '.join(ROLES)}"
            yield where, f"is no role; {hint}"
        elif isinstance(entry, str) and entry:
            try:
                parse_names({role: entry})
            except InputError:
                yield where, f"found {_found(entry)}; allowed: 'variable' or 'variable [unit]'"


def _output_faults(table: dict[str, Any], base: Path) -> Iterator[tuple[Where, str]]:
    run = table.get("run")
    output = run.get("output") if isinstance(run, dict) else None
    if not isinstance(output, str) or not output.isprintable():
        return
    if os.path.isfile(base / os.path.expanduser(output)):
        yield ("run", "output"), f"found {_found(output)}, which is a file; expected a folder"
