"""Which variables of a file might play a role, and which one does: CF, layouts, the user's mapping.

The rules that `forecast.ingest.recognise` explains are carried out here.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator
from functools import lru_cache
from importlib.resources import files
from typing import Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest.level_sets import HYBRID_COORDINATE, fill_from_formula_terms, find_groups
from forecast.ingest.recognition import Recognition, Rejected, Taken, leading_number
from forecast.ingest.roles import LEVEL_ROLES, NEAR_SURFACE, ROLES
from forecast.ingest.source import Source, VariableInfo
from forecast.ingest.units import convert, normal_spelling

__all__ = ["HORIZONTAL", "Recogniser"]

_LATITUDE_UNITS = {f"degree{s}{t}" for s in ("", "s") for t in ("_north", "_N", "N")}
_LONGITUDE_UNITS = {f"degree{s}{t}" for s in ("", "s") for t in ("_east", "_E", "E")}

#: Standard names of horizontal coordinates that are neither latitude nor longitude.
HORIZONTAL = (
    "projection_x_coordinate",
    "projection_y_coordinate",
    "grid_latitude",
    "grid_longitude",
)

#: Roles near the surface → the role aloft that shares the standard name.
_ALOFT = {there: aloft for aloft, (there, _) in NEAR_SURFACE.items()}

#: Statistics over time or space that are not the quantity itself.
_STATISTICS = re.compile(r"\b(maximum|minimum|standard_deviation|variance|range|sum)\b")


@lru_cache(maxsize=1)
def _table() -> dict[str, Any]:
    text = files("forecast.ingest").joinpath("layouts.toml").read_text(encoding="utf-8")
    return tomllib.loads(text)


class Recogniser:
    """One pass over one file."""

    def __init__(self, source: Source, names: dict[str, tuple[str, str | None]]):
        self.source = source
        self.names = names
        self.result = Recognition(source.name)
        held = source.variables
        self.layouts = [
            row
            for row in _table()["layout"]
            if all(name in held for name in row.get("requires", ()))
            and any(name in held for name in row.get("requires_any", held))
        ]
        self.flat_dims = self._flat_dims()

    def run(self) -> Recognition:
        """Fill every role that can be filled."""
        result = self.result
        result.layouts = tuple(row["name"] for row in self.layouts)
        named = [name for row in self.layouts for name in row.get("station", ())]
        usual = [name for name in _table()["station"] if name in self.source.attrs]
        result.station_attributes = tuple(named or usual[:1])
        result.vertical_dim = self._vertical_dim()
        self.flat_dims |= self._across() - {result.vertical_dim}
        find_groups(self)
        for role in ROLES:
            if not (result.groups and role in LEVEL_ROLES):
                self._fill(role)
            self._from_attribute(role)
        fill_from_formula_terms(self)
        return result

    # --- dimensions ---------------------------------------------------------------------------

    def _flat_dims(self) -> set[str]:
        """Dimensions along time, the horizontal, members or instances: never the vertical."""
        dims = set()
        for info in self.source.variables.values():
            own = info.dims == (info.name,)
            if info.attrs.get("cf_role") and info.dims:
                dims.add(info.dims[0])
            if own and (
                info.standard_name in ("time", "latitude", "longitude", "realization")
                or info.standard_name in ("forecast_reference_time", "forecast_period")
                or info.standard_name in HORIZONTAL
                or info.attrs.get("axis") in ("X", "Y", "T", "E")
                or " since " in (info.units or "")
                or info.units in _LATITUDE_UNITS | _LONGITUDE_UNITS
            ):
                dims.add(info.name)
        for role in ("time", "latitude", "longitude", "member"):
            for info, _ in self.proposals(role):
                if info.dims == (info.name,):
                    dims.add(info.name)
        return dims

    def extra_dims(self, info: VariableInfo) -> tuple[str, ...]:
        """Dimensions of a variable that may be the vertical."""
        return tuple(
            d for d in info.dims if d not in self.flat_dims and self.source.dims.get(d, 1) > 1
        )

    def _vertical_dim(self) -> str | None:
        """The dimension along which air temperature varies with height."""
        proposals = [info for info, _ in self.proposals("air_temperature") if not info.is_text]
        found = {dims[-1] for info in proposals if len(dims := self.extra_dims(info)) == 1}
        if len(found) > 1 and "air_temperature" in self.names:
            wanted = self.names["air_temperature"][0]
            found = {d for i in proposals if i.name == wanted for d in self.extra_dims(i)} or found
        if len(found) > 1:
            # More than one: the one that a vertical coordinate names.
            named = found & {d for r in ("air_pressure",) for i, _ in self.proposals(r)
                             for d in self.extra_dims(i)}  # fmt: skip
            found = named or found
        if len(found) == 1:
            return found.pop()
        if not found:
            wide = {d for info in proposals for d in self.extra_dims(info)}
            if wide:
                return self._vertical_among(wide)
            # An ascent in which time is the way up: temperature and pressure on time alone.
            along = {info.dims for info in proposals if len(info.dims) == 1}
            along &= {
                info.dims
                for role in ("air_pressure", "altitude", "geopotential_height", "height")
                for info, _ in self.proposals(role)
            }
            if len(along) == 1 and self.source.dims.get((dims := along.pop())[0], 0) > 1:
                return dims[0]
        return None

    def _vertical_among(self, dims: set[str]) -> str | None:
        """The vertical among several dimensions of air temperature, None if it is not clear.

        It has a vertical coordinate of its own, or is the one that neither time nor position
        varies along.
        """
        own = {i.name for i in self.source.variables.values() if _is_vertical_coordinate(i)}
        for role in ("air_pressure", "altitude", "height", "geopotential_height"):
            own |= {i.dims[0] for i, _ in self.proposals(role) if len(i.dims) == 1}
        if len(dims & own) == 1:
            return (dims & own).pop()
        left = dims - self._across()
        return left.pop() if len(left) == 1 else None

    def _across(self) -> set[str]:
        """Dimensions that time or position varies along."""
        return {
            d
            for role in ("time", "latitude", "longitude")
            for info, _ in self.proposals(role)
            for d in info.dims
        }

    # --- candidates ---------------------------------------------------------------------------

    def proposals(self, role: str) -> Iterator[tuple[VariableInfo, str]]:
        """Variables that might play a role, the strongest claim first, each once."""
        held = self.source.variables
        seen = set()
        if role in self.names and self.names[role][0] in held:
            name = self.names[role][0]
            yield held[name], "user"
            seen.add(name)
        for info in held.values():
            if info.name not in seen and self._cf_says(role, info, _ALOFT.get(role)):
                seen.add(info.name)
                yield info, "CF"
        for row in self.layouts:
            name = row.get("roles", {}).get(role)
            if name in held and name not in seen:
                seen.add(name)
                yield held[name], f"layout {row['name']!r}"

    def _cf_says(self, role: str, info: VariableInfo, near: str | None) -> bool:
        standard, units = info.standard_name, info.units or ""
        if near is not None:
            return standard in ROLES[near].standard_names
        if role == "surface_altitude" and standard == "altitude":
            # An altitude that does not vary along the vertical is that of the station.
            return self.result.vertical_dim not in info.dims
        if standard is not None:
            return standard in ROLES[role].standard_names
        if role == "time":
            return " since " in units
        if role == "latitude":
            return units in _LATITUDE_UNITS
        if role == "longitude":
            return units in _LONGITUDE_UNITS
        if role == "air_pressure":
            return info.dims == (info.name,) and _is_pressure_unit(units)
        return False

    def _fill(self, role: str) -> None:
        result = self.result
        if role in self.names and self.names[role][0] not in self.source.variables:
            self._reject(role, self.names[role][0], "named in names, not in this file")
        usable = []
        near = any(role == there for there, _ in NEAR_SURFACE.values())
        for info, how in self.proposals(role):
            if near and how == "CF" and self.result.vertical_dim in info.dims:
                continue
            reason = None if how == "user" else self._unfit(role, info)
            if reason:
                self._reject(role, info.name, reason)
            else:
                usable.append((info, how))
        if not usable:
            return
        strong = [pair for pair in usable if pair[1] == usable[0][1]]
        if len(strong) > 1:
            strong = self._narrow(role, strong)
        if len(strong) > 1:
            listed = ", ".join(info.name for info, _ in strong[:6])
            result.problems[role] = InputError(
                f"{len(strong)} variables could be {role.replace('_', ' ')}: {listed}",
                source=self.source.name,
                remedy=f'choose one, for example names.{role} = "{strong[0][0].name}"',
            )
            return
        chosen, how = strong[0]
        for info, other in usable:
            if info is not chosen:
                self._reject(
                    role,
                    info.name,
                    f"{chosen.name} was chosen ({how} before {other})"
                    if how != other
                    else f"{chosen.name} was chosen",
                )
        try:
            result.taken[role] = self.take(role, chosen, how)
        except InputError as error:
            result.problems[role] = error

    def _unfit(self, role: str, info: VariableInfo) -> str | None:
        """Why a variable cannot play a role, None if it can."""
        kind, vertical = ROLES[role].kind, self.result.vertical_dim
        if info.is_text and kind != "label":
            return "holds text"
        if _STATISTICS.search(str(info.attrs.get("cell_methods", ""))):
            return f"is a statistic ({printable(info.attrs['cell_methods'], 60)})"
        if kind == "level":
            if vertical is None or vertical not in info.dims:
                return "does not vary along the vertical"
            odd = [d for d in self.extra_dims(info) if d != vertical]
            if odd and vertical not in self.flat_dims:
                return f"has a further dimension {odd[0]}"
        if kind == "surface" and vertical in info.dims and vertical not in self.flat_dims:
            return "varies along the vertical"
        near = dict(NEAR_SURFACE.values()).get(role)
        if near is not None and info.standard_name and not self._named_by_layout(role, info):
            height = self._coordinate_height(info)
            if height is None:
                return "near the surface, with no coordinate that gives its height"
            if not 0.6 * near <= height <= 1.4 * near:
                return f"holds at {height:g} m, not {near:g} m"
        if role == "time" and " since " not in (info.units or ""):
            return f"unit {printable(info.units, 40)!r} is no time since a date"
        if role == "time" and not re.search(r" since\s+[-+]?\d", info.units or ""):
            return f"unit {printable(info.units, 40)!r} names no date"
        return None

    def _named_by_layout(self, role: str, info: VariableInfo) -> bool:
        return any(row.get("roles", {}).get(role) == info.name for row in self.layouts)

    def _coordinate_height(self, info: VariableInfo) -> float | None:
        """Height (m) at which a near-surface variable holds, from a single-valued coordinate."""
        names = [*str(info.attrs.get("coordinates", "")).split(), *info.dims]
        for name in names:
            other = self.source.variables.get(name)
            if other is None or other.is_text or int(np.prod(other.shape)) != 1:
                continue
            is_height = other.standard_name == "height" or (
                other.standard_name is None
                and name.lower().startswith("height")
                and "msl" not in name.lower()
            )
            if is_height and other.units:
                return float(
                    convert(self.source.read(name), other.units, "m", variable=name).ravel()[0]
                )
        return None

    def _narrow(
        self, role: str, pairs: list[tuple[VariableInfo, str]]
    ) -> list[tuple[VariableInfo, str]]:
        """Among equal claims keep those that a further sign supports; never an arbitrary one."""
        kind = ROLES[role].kind
        tests: list[Any] = [
            lambda info: self._named_by_layout(role, info),
            lambda info: info.standard_name == role,
        ]
        if kind == "coordinate":
            listed = {
                name
                for info, _ in self.proposals("air_temperature")
                for name in str(info.attrs.get("coordinates", "")).split()
            }
            tests += [
                lambda info: info.standard_name is not None,
                lambda info: info.dims == (info.name,),
                lambda info: info.name in listed,
                lambda info: info.name == role,
            ]
        for test in tests:
            kept = [pair for pair in pairs if test(pair[0])]
            if len(kept) == 1:
                return kept
            pairs = kept or pairs
        return pairs

    def take(self, role: str, info: VariableInfo, how: str) -> Taken:
        """The variable as taken for the role; InputError if its unit cannot be known."""
        row = ROLES[role]
        units, method = info.units, how
        if how == "CF":
            method = f"CF standard_name {info.standard_name}" if info.standard_name else "CF units"
        if role in self.names and how == "user" and self.names[role][1]:
            units, method = self.names[role][1], "user, unit set by the user"
        elif units is None:
            fixed = [r["units"][role] for r in self.layouts if role in r.get("units", {})]
            units = fixed[0] if fixed else None
        if units is None and row.unit_optional:
            units = "1"
        if units is None and row.units:
            raise InputError(
                f"has no unit; {row.units!r} or one that converts to it is expected",
                source=self.source.name,
                variable=info.name,
                remedy=f'set it, for example names.{role} = "{info.name} [{row.units}]"',
            )
        if row.units == "1" and units and re.search(r"\(k?g\)", normal_spelling(units, "1") or ""):
            raise InputError(
                f"unit {printable(units, 40)!r} is a ratio of masses, not of {role}",
                source=self.source.name,
                variable=info.name,
                remedy=f'set names.humidity_mixing_ratio = "{info.name}", or the unit with '
                f'names.{role} = "{info.name} [%]"',
            )
        if (units or "").strip().lower() == "gpm" and role in ("altitude", "height"):
            raise InputError(
                f"unit 'gpm' is that of geopotential height, not of {role}",
                source=self.source.name,
                variable=info.name,
                remedy=f'set names.geopotential_height = "{info.name}"',
            )
        return Taken(role, info.name, method, units or "", info.units, info.dims)

    def _from_attribute(self, role: str) -> None:
        """A role whose value a layout finds in a global attribute."""
        for row in self.layouts:
            entry = row.get("attributes", {}).get(role)
            if not entry or entry["name"] not in self.source.attrs:
                continue
            value = self.source.attrs[entry["name"]]
            units = entry.get("units") or _unit_after_number(value)
            if units and np.isfinite(leading_number(value)):
                how = f"layout {row['name']!r}, global attribute"
                taken = Taken(role, entry["name"], how, units, None, (), True)
                self.result.attributes[role] = taken
                self.result.taken.setdefault(role, taken)
                return

    def _reject(self, role: str, variable: str, reason: str) -> None:
        self.result.rejected.append(Rejected(role, printable(variable, 80), reason))


def _is_vertical_coordinate(info: VariableInfo) -> bool:
    return info.dims == (info.name,) and (
        info.attrs.get("axis") == "Z"
        or info.attrs.get("positive") in ("up", "down")
        or info.standard_name
        in ("air_pressure", "altitude", "height", "model_level_number", HYBRID_COORDINATE)
        or _is_pressure_unit(info.units or "")
    )


@lru_cache(maxsize=256)
def _is_pressure_unit(units: str) -> bool:
    if not units or normal_spelling(units, "Pa") is None:
        return False
    try:
        convert(1.0, units, "Pa")
    except InputError:
        return False
    return True


def _unit_after_number(value: Any) -> str | None:
    match = (
        re.fullmatch(r"\s*[-+]?[\d.]+\s*([A-Za-z]+)\s*", value) if isinstance(value, str) else None
    )
    return match.group(1) if match else None
