"""The outlook as one CF-1.11 netCDF file, the same bytes for the same content and stamp."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from forecast import __version__
from forecast.output.files import atomic_path
from forecast.schema import VARIABLES

__all__ = ["write_outlook"]

_EPOCH = "seconds since 1970-01-01 00:00:00"
_INTEGER_FILL = -1
_DIFFERENCES = {"near_ground_warming", "air_sea_temperature_difference"}  # in K, of temperatures


def write_outlook(outlook: xr.Dataset, path: str | Path, stamp: str) -> None:
    """Write an outlook, whole or not at all.

    Parameters
    ----------
    outlook : xarray.Dataset
        From `forecast.make_outlook`.
    path : str or Path
        File to write.
    stamp : str
        Time of the run, ISO 8601 UTC; goes into ``history`` and ``date_created`` and nowhere else.
    """
    data = outlook.copy()
    # `profile` is an index without values of its own: time, site and position are auxiliary
    # coordinates on it (CF-1.11 section 5), so that several sites share one file.
    for name in data.coords:
        data[name].encoding = {}
    located = [n for n in ("time", "latitude", "longitude", "site", "station") if n in data.coords]
    for name, variable in data.data_vars.items():
        dims = variable.dims
        extra = [n for n in located if dims[:1] == ("profile",)]
        if "sightline" in dims:
            extra.append("sightline_name")
        if "level" in dims and name != "height":
            extra.append("height")
        if extra:
            data[name].attrs["coordinates"] = " ".join(extra)
    encoding = {str(name): _encoding(data[name]) for name in data.variables}
    data = data.reset_coords([n for n in data.coords if n not in data.dims])
    for name in data.variables:
        attrs = data[name].attrs
        for flags in {"flag_values", "flag_masks"} & set(attrs):  # CF section 3.5: of its own type
            attrs[flags] = np.array(attrs[flags], dtype=data[name].dtype)
        if attrs.get("standard_name") == "height":
            attrs["positive"] = "up"
        if attrs.get("units") == "K":
            meant = "difference" if name in _DIFFERENCES else "on_scale"
            attrs["units_metadata"] = f"temperature: {meant}"
        if name == "time":
            attrs["units_metadata"] = "leap_seconds: none"
    data.attrs = {
        "Conventions": "CF-1.11",
        **outlook.attrs,
        "institution": "not stated; see source",
        "history": f"{stamp} made by bendcast {__version__}",
        "date_created": stamp,
        "references": "Rec. ITU-R P.453-14; Ciddor 1996, Appl. Opt. 35, 1566",
    }
    with atomic_path(path) as part:
        data.to_netcdf(part, engine="netcdf4", format="NETCDF4", encoding=encoding)


def _encoding(variable: xr.DataArray) -> dict[str, Any]:
    """Storage of one variable: compressed, packed no further than its own accuracy."""
    name = str(variable.name)
    if name == "time":
        return {"units": _EPOCH, "calendar": "standard", "dtype": "int64", "_FillValue": None}
    if name == "lead_time":
        return {"units": "seconds", "dtype": "int64", "_FillValue": None}
    if variable.dtype.kind in "US" or variable.dtype == object:
        return {"dtype": "S1"}
    if variable.size == 0:
        return {"_FillValue": None}
    store: dict[str, Any] = {"zlib": True, "complevel": 4, "shuffle": True}
    if variable.dtype.kind in "iu":
        coded = VARIABLES.get(name)
        flagged = coded is not None and "flag_values" in coded.extra
        store["_FillValue"] = np.array(_INTEGER_FILL, variable.dtype) if flagged else None
        return store
    if name in variable.coords and name not in ("height",):
        store["_FillValue"] = None
    else:
        store["_FillValue"] = np.nan
    return store
