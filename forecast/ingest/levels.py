"""Which levels of a model file are read, in what order, and how their pressure is found.

Levels come top first, bottom first or in any order; they are put in the order of falling pressure.
Levels that lie above the height asked for in any weather are not read.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from forecast.errors import InputError
from forecast.ingest.recognise import read_role
from forecast.ingest.recognition import Recognition
from forecast.ingest.source import MAX_LEVELS, Source
from forecast.ingest.vertical import full_level_pressure, hybrid_pressure

__all__ = ["HEIGHT_ROLES", "LevelSet", "find_levels"]

#: Roles that give the height of levels, the one to be used first at the front.
HEIGHT_ROLES = ("height", "altitude", "geopotential_height", "geopotential")

#: Hybrid coefficients of layer interfaces, by which the model's own integration can be repeated,
#: and of levels.
_HYBRID_PAIRS = (("hybrid_a_half", "hybrid_b_half"), ("hybrid_a", "hybrid_b"))

#: Pressure of the standard atmosphere at sea level, Pa; ICAO Doc 7488/3.
_STANDARD_PRESSURE = 101325.0

#: Levels with less pressure lie above 15 km everywhere, Pa; the standard atmosphere has 121 hPa
#: there (ICAO Doc 7488/3), the coldest columns some 100 hPa (common practice, no source).
_TOP_PRESSURE = 9.0e3

#: Highest ground, m: altitudes of levels are read up to this much above the top in height.
_HIGHEST_GROUND = 9e3


@dataclass(frozen=True)
class LevelSet:
    """Levels to read.

    Attributes
    ----------
    read : slice
        In file order.
    order : ndarray of int
        Puts what was read into the order of falling pressure.
    a, b : ndarray or None
        Hybrid coefficients (Pa, 1) in that order: of the levels, or with `half` of their
        interfaces, the lowest first, one more than levels. None for other levels.
    half : bool
    """

    read: slice
    order: np.ndarray
    a: np.ndarray | None = None
    b: np.ndarray | None = None
    half: bool = False

    @property
    def hybrid(self) -> bool:
        """Whether pressure follows from the surface pressure."""
        return self.a is not None

    def pressure(self, surface_pressure: np.ndarray) -> tuple[np.ndarray, np.ndarray | None]:
        """Pressure of hybrid levels and of their interfaces, the latter None where not known.

        Parameters
        ----------
        surface_pressure : ndarray (...)
            Pa.

        Returns
        -------
        ndarray (..., level), ndarray (..., level + 1) or None
            Pa.
        """
        values = hybrid_pressure(self.a, self.b, surface_pressure)
        return (full_level_pressure(values), values) if self.half else (values, None)


def find_levels(source: Source, recognition: Recognition, top: float) -> LevelSet:
    """Levels of a file to read.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file.
    top : float
        Height above ground up to which levels are wanted, m.

    Returns
    -------
    LevelSet

    Raises
    ------
    InputError
        If there are too many levels, coefficients are missing or do not fit the levels, or
        nothing tells where the levels lie.
    """
    dim = recognition.vertical_dim
    if dim is None:
        recognition.require("air_temperature")
        raise InputError("has no vertical dimension", source=source.name)
    if source.dims[dim] > MAX_LEVELS:
        raise InputError(
            f"declares {source.dims[dim]} levels along {dim!r}; at most {MAX_LEVELS} are read",
            source=source.name,
            variable=recognition.require("air_temperature").variable,
        )
    for held in (all, any):
        # A whole pair of coefficients comes before one that is incomplete or has a problem.
        for pair in _HYBRID_PAIRS:
            if held(role in recognition for role in pair):
                return _hybrid(source, recognition, pair)
    for pair in _HYBRID_PAIRS:
        for role in pair:
            if role in recognition.problems:
                raise recognition.problems[role]
    for role in ("air_pressure", *HEIGHT_ROLES):
        taken = recognition.get(role)
        if taken is not None and taken.dims == (dim,):
            return _one_dimensional(source, recognition, role, top)
    for role in ("air_pressure", *HEIGHT_ROLES):
        if role in recognition:
            return _many_dimensional(source, recognition, role)
    for role in ("air_pressure", *HEIGHT_ROLES):
        if role in recognition.problems:
            raise recognition.problems[role]
    raise InputError(
        f"nothing tells where the levels along {dim!r} lie: sought pressure, heights, or hybrid "
        "coefficients (formula_terms with ap, b or a, b, p0; hyai, hybi; hyam, hybm)",
        source=source.name,
        remedy="set names.hybrid_a_half and names.hybrid_b_half, or names.air_pressure",
    )


def _hybrid(source: Source, recognition: Recognition, pair: tuple[str, str]) -> LevelSet:
    """Levels given by coefficients of the levels or of their interfaces."""
    half = pair[0].endswith("_half")
    a, b = (_coefficients(source, recognition, role) for role in pair)
    variables = [recognition.require(role).variable for role in pair]
    if a.size != b.size:
        raise InputError(
            f"{variables[0]} holds {a.size} coefficients, {variables[1]} {b.size}; they must be "
            "as many",
            source=source.name,
        )
    count = source.dims[str(recognition.vertical_dim)]
    number = _level_numbers(source, recognition, a.size - half, count, variables[0], half)
    standard = a + b * _STANDARD_PRESSURE
    if half:
        # The interface with more pressure is the lower one, whichever way the file counts.
        lower, upper = (1, 0) if standard[-1] > standard[0] else (0, 1)
        full = 0.5 * (standard[number] + standard[number + 1])
    else:
        full = standard[number]
    keep, order = _by_pressure(source, full, variables[0])
    picked = number[keep]
    read = slice(int(keep.min()), int(keep.max()) + 1)
    if not half:
        return LevelSet(read, order, a[picked], b[picked])
    if (np.abs(np.diff(picked)) == 1).all():
        chain = np.concatenate([picked[:1] + lower, picked + upper])
        return LevelSet(read, order, a[chain], b[chain], half=True)
    # Layers are left out between those given: only the levels themselves can be used.
    a, b = (0.5 * (x[picked] + x[picked + 1]) for x in (a, b))
    return LevelSet(read, order, a, b)


def _coefficients(source: Source, recognition: Recognition, role: str) -> np.ndarray:
    taken = recognition.require(role)
    values = read_role(source, recognition, role).ravel()
    if len([d for d in taken.dims if source.dims[d] > 1]) > 1 or not np.isfinite(values).all():
        raise InputError(
            f"hybrid coefficients on ({', '.join(taken.dims)}) are not one finite value per level",
            source=source.name,
            variable=taken.variable,
        )
    return values


def _level_numbers(
    source: Source, recognition: Recognition, held: int, count: int, variable: str, half: bool
) -> np.ndarray:
    """Place of each level of the file among the levels that have coefficients, from 0."""
    if held == count:
        return np.arange(count)
    dim = str(recognition.vertical_dim)
    info = source.variables.get(dim)
    if held > count and info is not None and info.dims == (dim,) and not info.is_text:
        numbers = source.read(dim)
        whole = np.isfinite(numbers).all() and (numbers == np.round(numbers)).all()
        if whole and numbers.min() >= 1 and numbers.max() <= held:
            return numbers.astype(np.int64) - 1
    what = "interface coefficients" if half else "coefficients"
    raise InputError(
        f"{held + half} {what} do not fit the {count} levels along {dim!r}: expected "
        f"{count + half}, or level numbers from 1 to {held} as coordinate",
        source=source.name,
        variable=variable,
    )


def _by_pressure(
    source: Source, pressure: np.ndarray, variable: str
) -> tuple[np.ndarray, np.ndarray]:
    """Levels below the top in the order of falling pressure: in the file, and as read."""
    if np.unique(pressure).size < pressure.size:
        raise InputError("two levels have the same pressure", source=source.name, variable=variable)
    order = np.argsort(-pressure)
    keep = order[pressure[order] >= _TOP_PRESSURE]
    if keep.size < 2:
        raise InputError(
            f"only {keep.size} of {pressure.size} levels have more than "
            f"{_TOP_PRESSURE / 100:g} hPa (they span {pressure.min() / 100:.4g} to "
            f"{pressure.max() / 100:.4g} hPa over ground at 1013 hPa); at least 2 are needed",
            source=source.name,
            variable=variable,
            remedy="check the unit",
        )
    return keep, keep - keep.min()


def _one_dimensional(source: Source, recognition: Recognition, role: str, top: float) -> LevelSet:
    """Levels whose pressure or height is the same everywhere."""
    values = read_role(source, recognition, role)
    variable = recognition.require(role).variable
    if not np.isfinite(values).all():
        raise InputError(
            f"{int((~np.isfinite(values)).sum())} of {values.size} levels have no "
            f"{role.replace('_', ' ')}",
            source=source.name,
            variable=variable,
        )
    if role == "air_pressure":
        keep, order = _by_pressure(source, values, variable)
        return LevelSet(slice(int(keep.min()), int(keep.max()) + 1), order)
    if np.unique(values).size < values.size:
        raise InputError("two levels have the same height", source=source.name, variable=variable)
    metres = values / 9.8 if role == "geopotential" else values
    order = np.argsort(metres)
    keep = order[metres[order] <= top + (0.0 if role == "height" else _HIGHEST_GROUND)]
    if keep.size < 2:
        raise InputError(
            f"only {keep.size} of {values.size} levels lie under {top / 1e3:g} km; at least 2 are "
            "needed",
            source=source.name,
            variable=variable,
            remedy="check the unit",
        )
    return LevelSet(slice(int(keep.min()), int(keep.max()) + 1), keep - keep.min())


def _many_dimensional(source: Source, recognition: Recognition, role: str) -> LevelSet:
    """Levels whose pressure or height varies; the first column tells which end is the lower."""
    taken = recognition.require(role)
    dim = str(recognition.vertical_dim)
    index = tuple(slice(None) if d == dim else slice(0, 1) for d in taken.dims)
    column = read_role(source, recognition, role, index, check=False).ravel()
    known = column[np.isfinite(column)]
    rises = known.size < 2 or known[-1] >= known[0]
    order = np.arange(source.dims[dim])
    if rises == (role == "air_pressure"):
        order = order[::-1]
    return LevelSet(slice(None), order)
