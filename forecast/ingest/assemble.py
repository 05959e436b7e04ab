"""Columns of any origin, padded into the one Profiles dataset.

Readers deliver `Column` records with plain arrays; here they are sorted, duplicates set aside and
the rest padded with NaN at the top to a common number of levels.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from forecast import schema

if TYPE_CHECKING:
    import xarray as xr

__all__ = [
    "EXTRAS",
    "LEVEL_NAMES",
    "Column",
    "assemble",
    "set_aside_duplicates",
    "set_aside_oversize",
]

#: Level arrays of a `Column`: attribute → name in the Profiles dataset.
LEVEL_NAMES = {
    "height": "height",
    "altitude": "altitude",
    "pressure": "air_pressure",
    "temperature": "air_temperature",
    "specific_humidity": "specific_humidity",
    "u": "eastward_wind",
    "v": "northward_wind",
}

#: Optional values per profile that `Column.extras` may hold.
EXTRAS = (
    "sea_surface_temperature",
    "surface_temperature",
    "surface_air_pressure",
    "air_temperature_2m",
    "specific_humidity_2m",
    "eastward_wind_10m",
    "northward_wind_10m",
    "boundary_layer_height",
    "visibility",
)

#: Most values per level variable of a Profiles dataset (400 MB each); common sense, no source.
MAX_PADDED_VALUES = 50_000_000


#: Lead time of an ascent.
NO_LEAD_TIME = np.timedelta64(0, "ns")


@dataclass
class Column:
    """One vertical profile in SI units, levels ascending in height.

    Attributes
    ----------
    time : numpy.datetime64
        Valid time, UTC; the launch time of an ascent.
    latitude, longitude : float
        Degrees north and east of the lowest level.
    station : str
        Station or grid point, printable.
    source_file : str
        Base name of the file.
    height, altitude, pressure, temperature, specific_humidity, u, v : ndarray of float64 (level,)
        m above ground, m above mean sea level, Pa, K, kg/kg, m/s; NaN where missing.
    quality : ndarray of int32 (level,)
        Bits of `forecast.schema.QUALITY_FLAGS`.
    surface_altitude : float
        m above mean sea level, NaN when unknown.
    lead_time : numpy.timedelta64
        Time since the model run started; zero for an ascent.
    source_kind : {"ascent", "model"}
    member : int or None
        Ensemble member.
    extras : dict of str to float
        Values of `EXTRAS`.
    """

    time: np.datetime64
    latitude: float
    longitude: float
    station: str
    source_file: str
    height: np.ndarray
    altitude: np.ndarray
    pressure: np.ndarray
    temperature: np.ndarray
    specific_humidity: np.ndarray
    u: np.ndarray
    v: np.ndarray
    quality: np.ndarray
    surface_altitude: float = float("nan")
    lead_time: np.timedelta64 = NO_LEAD_TIME
    source_kind: str = "ascent"
    member: int | None = None
    extras: dict[str, float] = field(default_factory=dict)

    @property
    def usable(self) -> np.ndarray:
        """Levels that physics can use: height, pressure, temperature and humidity are known."""
        return (
            np.isfinite(self.height)
            & np.isfinite(self.pressure)
            & np.isfinite(self.temperature)
            & np.isfinite(self.specific_humidity)
        )


def _order(column: Column) -> tuple[Any, ...]:
    return (
        column.station,
        column.time,
        column.lead_time,
        column.source_file,
        -1 if column.member is None else column.member,
    )


def set_aside_duplicates(columns: list[Column]) -> tuple[list[Column], list[tuple[str, str]]]:
    """Keep one column per station, time, lead time, member and kind: the fullest.

    Parameters
    ----------
    columns : list of Column

    Returns
    -------
    kept : list of Column
        Sorted by station, time, lead time, file, member.
    dropped : list of (str, str)
        File and reason for each column not kept.
    """
    best: dict[tuple[Any, ...], Column] = {}
    dropped = []
    for column in sorted(columns, key=_order):
        key = (column.station, column.time, column.lead_time, column.member, column.source_kind)
        held = best.get(key)
        if held is None:
            best[key] = column
            continue
        winner, loser = held, column
        if column.usable.sum() > held.usable.sum():
            winner, loser = column, held
        best[key] = winner
        where = "" if winner.source_file == loser.source_file else f" in {winner.source_file}"
        dropped.append(
            (
                loser.source_file,
                f"duplicated time {np.datetime_as_string(loser.time, 's')}Z at station "
                f"{loser.station}: the profile{where} with {int(winner.usable.sum())} usable "
                f"levels is kept, one with {int(loser.usable.sum())} is not",
            )
        )
    return sorted(best.values(), key=_order), dropped


def set_aside_oversize(columns: list[Column]) -> tuple[list[Column], list[tuple[str, str]]]:
    """Keep columns that, padded to a common number of levels, fit into memory.

    Parameters
    ----------
    columns : list of Column

    Returns
    -------
    kept : list of Column
        In the order given.
    dropped : list of (str, str)
        File and reason for each column not kept: the longest ones.
    """
    ranked = sorted(columns, key=lambda column: column.height.size)
    dropped = []
    while ranked and len(ranked) * ranked[-1].height.size > MAX_PADDED_VALUES:
        longest = ranked.pop()
        dropped.append(
            (
                longest.source_file,
                f"its {longest.height.size} levels, padded for every profile of the run, would "
                f"exceed {MAX_PADDED_VALUES} values; read it in a run of its own",
            )
        )
    if not dropped:
        return columns, []
    left = {id(column) for column in ranked}
    return [column for column in columns if id(column) in left], dropped


def assemble(columns: list[Column]) -> xr.Dataset:
    """Pad columns into the Profiles dataset.

    Parameters
    ----------
    columns : list of Column
        At least one; order is made the contract's.

    Returns
    -------
    xarray.Dataset
        Dims ``(profile, level)``, attributes of `forecast.schema`.

    Raises
    ------
    ValueError
        If there are no columns.
    """
    import xarray as xr

    if not columns:
        raise ValueError("assemble: no columns")
    columns = sorted(columns, key=_order)
    counts = np.array([column.height.size for column in columns])
    shape = (len(columns), int(counts.max()))
    inside = np.arange(shape[1]) < counts[:, np.newaxis]

    data: dict[str, Any] = {}
    for attribute, name in LEVEL_NAMES.items():
        padded = np.full(shape, np.nan)
        padded[inside] = np.concatenate([getattr(column, attribute) for column in columns])
        data[name] = (("profile", "level"), padded)
    quality = np.zeros(shape, dtype=np.int32)
    quality[inside] = np.concatenate([column.quality for column in columns])
    data["quality"] = (("profile", "level"), quality)
    for name in EXTRAS:
        values = np.array([column.extras.get(name, np.nan) for column in columns], dtype=float)
        if np.isfinite(values).any():
            data[name] = ("profile", values)

    coords: dict[str, Any] = {
        "time": ("profile", np.array([c.time for c in columns], dtype="datetime64[ns]")),
        "latitude": ("profile", np.array([c.latitude for c in columns], dtype=float)),
        "longitude": ("profile", np.array([c.longitude for c in columns], dtype=float)),
        "station": ("profile", np.array([c.station for c in columns], dtype=str)),
        "lead_time": ("profile", np.array([c.lead_time for c in columns], dtype="timedelta64[ns]")),
        "source_kind": ("profile", np.array([c.source_kind for c in columns], dtype=str)),
        "source_file": ("profile", np.array([c.source_file for c in columns], dtype=str)),
        "surface_altitude": (
            "profile",
            np.array([c.surface_altitude for c in columns], dtype=float),
        ),
    }
    if any(column.member is not None for column in columns):
        members = [-1 if column.member is None else column.member for column in columns]
        coords["member"] = ("profile", np.array(members, dtype=np.int32))
    return schema.describe(xr.Dataset(data, coords))
