"""Launches whose mandatory and significant levels stand in separate arrays, merged by pressure.

Heights are given at mandatory levels only; those of the significant levels between them follow
from the hypsometric equation (`forecast.ingest.soundings`) and are marked so.
"""

from __future__ import annotations

import numpy as np

from forecast.errors import InputError
from forecast.ingest.ascents import altitudes, specific_humidity, wind
from forecast.ingest.profile_values import per_profile
from forecast.ingest.recognise import read_role, read_taken
from forecast.ingest.recognition import Recognition
from forecast.ingest.roles import HUMIDITY_ROLES, check_plausible
from forecast.ingest.sampling_geometries import Multidimensional, check_profile_count
from forecast.ingest.soundings import Sounding
from forecast.ingest.source import MAX_LEVELS, Source
from forecast.schema import QUALITY_FLAGS

__all__ = ["grouped_soundings"]


def grouped_soundings(source: Source, recognition: Recognition) -> list[Sounding]:
    """Launches whose sets of levels stand in separate arrays, merged in order of pressure.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file, with ``groups``.

    Returns
    -------
    list of Sounding
        In file order.

    Raises
    ------
    InputError
        If a unit is missing or contradicted, or more levels are declared than are read.
    """
    for role in ("air_pressure", "air_temperature", *HUMIDITY_ROLES):
        if role in recognition.problems:
            raise recognition.problems[role]
    first, vertical = next(iter(recognition.group_dims.items()))
    longest = max((t.dims for t in recognition.groups[first].values()), key=len)
    profile_dims = tuple(d for d in longest if d != vertical)
    base = Multidimensional(source.name, profile_dims, vertical, source.dims)
    check_profile_count(source, base.count)
    common = per_profile(source, recognition, base)
    parts = [_group(source, recognition, name, profile_dims) for name in recognition.groups]
    result = []
    for i in range(base.count):
        level = {key: np.concatenate([part[key][i] for part in parts]) for key in parts[0]}
        level, flags = _merge(level)
        result.append(
            Sounding(
                time=common["time"][i],
                station=common["station"][i],
                source_file=source.name,
                pressure=level["p"],
                temperature=level["t"],
                specific_humidity=level["q"],
                altitude=level["z"],
                latitude=float(common["latitude"][i]),
                longitude=float(common["longitude"][i]),
                surface_altitude=float(common["surface_altitude"][i]),
                u=level["u"],
                v=level["v"],
                quality=flags,
                extras=common["extras"][i],
            )
        )
    return result


def _group(
    source: Source, recognition: Recognition, name: str, profile_dims: tuple[str, ...]
) -> dict[str, list[np.ndarray]]:
    """One set of levels: p, t, q, z, u, v per profile, NaN where the set has no such value."""
    members = recognition.groups[name]
    vertical = recognition.group_dims[name]
    if source.dims[vertical] > MAX_LEVELS:
        raise InputError(
            f"declares {source.dims[vertical]} levels along {vertical!r}; at most {MAX_LEVELS} "
            "are read",
            source=source.name,
            variable=members["air_pressure"].variable,
        )
    geometry = Multidimensional(source.name, profile_dims, vertical, source.dims)
    inside = np.ones((geometry.count, source.dims[vertical]), dtype=bool)
    if name in recognition.group_counts:
        variable = recognition.group_counts[name]
        sizes = geometry.scalars(source.read(variable), source.variables[variable].dims)
        with np.errstate(invalid="ignore"):
            inside = ~(np.arange(source.dims[vertical]) >= sizes[:, np.newaxis])

    def levels(role: str) -> list[np.ndarray] | None:
        taken = members.get(role)
        if taken is None:
            return None
        values = read_taken(source, recognition, taken, check=False)
        rows = np.where(inside, np.array(geometry.levels(values, taken.dims)), np.nan)
        # Only now: unused places may hold anything.
        check_plausible(role, rows, taken.units, source=source.name, variable=taken.variable)
        return list(rows)

    missing = [np.full(source.dims[vertical], np.nan)] * geometry.count
    pressure, temperature = levels("air_pressure") or missing, levels("air_temperature") or missing
    humidity = next((role for role in HUMIDITY_ROLES if role in members), None)
    given = levels(humidity) if humidity else None
    q = missing
    if humidity and given:
        q = [
            specific_humidity(humidity, row, t, p)
            for row, t, p in zip(given, temperature, pressure, strict=True)
        ]
    subset = Recognition(source.name, taken=members)
    latitude = np.full(geometry.count, 45.0)
    if "latitude" in recognition:
        taken = recognition.taken["latitude"]
        latitude = geometry.scalars(read_role(source, recognition, "latitude"), taken.dims)
    z, _ = altitudes(subset, levels, latitude)
    u, v = wind(levels)
    return {
        "p": pressure,
        "t": temperature,
        "q": q,
        "z": z or missing,
        "u": u or missing,
        "v": v or missing,
    }


def _merge(level: dict[str, np.ndarray]) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Levels in order of falling pressure, each pressure once.

    Where a pressure was given twice, the values of both are united, the first set's before the
    second's, and the level is marked ``duplicate_level``.
    """
    known = np.isfinite(level["p"])
    level = {key: values[known] for key, values in level.items()}
    order = np.argsort(-level["p"], kind="stable")
    level = {key: values[order] for key, values in level.items()}
    repeat = np.concatenate([[False], np.diff(level["p"]) == 0.0])
    while repeat.any():
        # Unite each repeated level with the one before it, until no pressure stands twice.
        at = np.flatnonzero(repeat & ~np.concatenate([[False], repeat[:-1]]))
        for values in level.values():
            values[at - 1] = np.where(np.isfinite(values[at - 1]), values[at - 1], values[at])
        keep = np.ones(repeat.shape, dtype=bool)
        keep[at] = False
        flags = level.setdefault("flags", np.zeros(repeat.shape))
        flags[at - 1] = 1.0
        level = {key: values[keep] for key, values in level.items()}
        repeat = np.concatenate([[False], np.diff(level["p"]) == 0.0])
    flags = level.pop("flags", np.zeros(level["p"].shape))
    return level, np.where(flags > 0, np.int32(QUALITY_FLAGS["duplicate_level"]), np.int32(0))
