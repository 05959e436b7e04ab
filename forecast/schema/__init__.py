"""Every variable bendcast makes: name, CF standard name, units, long name, dimensions.

One table used by every stage, so that a quantity is named and described once. Names follow the
CF standard name table where it has one (https://cfconventions.org, version 90 and later); the
others are the trade's own words.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

from forecast.schema.air import AIR_ROWS
from forecast.schema.chances import OUTLOOK_ROWS
from forecast.schema.codes import (
    APPEARANCES,
    CAUTION,
    CEILINGS_M,
    DUCT_KINDS,
    LAYER_CLASSES,
    LEVEL_ORIGINS,
    QUALITY_FLAGS,
    SIGHTLINE_STATES,
    SURFACE_AIR_SOURCES,
    SURFACE_REASONS,
    SURFACE_SOURCES,
    SURFACE_STATES,
    SURFACE_WIND_SOURCES,
    TWILIGHT_CLASSES,
    VISUAL_RANGE_SOURCES,
    WEATHER_ON_PATH,
)
from forecast.schema.sightlines import SIGHTLINE_ROWS
from forecast.schema.variable import Variable

if TYPE_CHECKING:
    import xarray as xr

__all__ = [
    "APPEARANCES",
    "CAUTION",
    "CEILINGS_M",
    "DUCT_KINDS",
    "LAYER_CLASSES",
    "LEVEL_ORIGINS",
    "QUALITY_FLAGS",
    "SIGHTLINE_STATES",
    "SURFACE_AIR_SOURCES",
    "SURFACE_REASONS",
    "SURFACE_SOURCES",
    "SURFACE_STATES",
    "SURFACE_WIND_SOURCES",
    "TWILIGHT_CLASSES",
    "VARIABLES",
    "VISUAL_RANGE_SOURCES",
    "WEATHER_ON_PATH",
    "Variable",
    "attributes",
    "describe",
]

#: The table by name.
VARIABLES: dict[str, Variable] = {
    row.name: row for row in (*AIR_ROWS, *SIGHTLINE_ROWS, *OUTLOOK_ROWS)
}


def attributes(name: str) -> dict[str, Any]:
    """CF attributes of a variable of the table.

    Parameters
    ----------
    name : str
        A name in `VARIABLES`.

    Returns
    -------
    dict
        ``long_name`` and, where they apply, ``standard_name``, ``units``, flag attributes.
    """
    row = VARIABLES[name]
    attrs: dict[str, Any] = {"long_name": row.long_name}
    if row.standard_name:
        attrs["standard_name"] = row.standard_name
    if row.units is not None:
        attrs["units"] = row.units
    attrs.update(row.extra)
    return attrs


def describe(dataset: xr.Dataset, names: Iterable[str] | None = None) -> xr.Dataset:
    """Write the table's attributes onto a dataset's variables, in place.

    Parameters
    ----------
    dataset : xarray.Dataset
        Any stage's dataset.
    names : iterable of str, optional
        Variables to describe; by default all that the table knows.

    Returns
    -------
    xarray.Dataset
        The same dataset.
    """
    for name in names if names is not None else list(dataset.variables):
        if name in VARIABLES and name in dataset.variables:
            dataset[name].attrs = attributes(str(name))
    return dataset
