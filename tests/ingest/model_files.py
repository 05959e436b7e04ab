"""Small model files in many layouts, all of one invented atmosphere that is linear in place.

Temperature, surface pressure and sea temperature are linear in latitude and longitude, so that
bilinear mixing must give them exactly.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import netCDF4
import numpy as np

from forecast.ingest.model_levels import read_model_columns
from forecast.ingest.recognise import recognise
from forecast.ingest.source import open_source

PLACE = [("Harrow Point", 54.2, -3.1)]
LATITUDES = np.array([55.0, 54.5, 54.0, 53.5])
LONGITUDES = np.array([-4.0, -3.5, -3.0])
LEVELS = 40


def coefficients(levels: int = LEVELS) -> tuple[np.ndarray, np.ndarray]:
    """Interface coefficients a (Pa) and b (1) from the top (20 hPa) to the ground."""
    sigma = np.linspace(0.0, 1.0, levels + 1) ** 0.6
    b = sigma**2
    return 2000.0 * (1.0 - sigma) + 1.0e5 * (sigma - b), b


def surface_pressure(hour: Any, latitude: Any, longitude: Any) -> Any:
    """Pa."""
    return 1.0e5 + 100.0 * (latitude - 54.0) + 80.0 * longitude + 10.0 * hour


def temperature(hour: Any, share: Any, latitude: Any, longitude: Any) -> Any:
    """K; `share` is 0 at the model's top and 1 at the ground."""
    return 215.0 + 70.0 * share - 0.8 * (latitude - 54.0) + 0.3 * longitude + 0.1 * hour


def humidity(share: Any) -> Any:
    """Specific humidity, kg/kg."""
    return 1.0e-4 + 0.005 * share**4


def put(
    file: netCDF4.Dataset,
    name: str,
    dims: tuple[str, ...],
    values: Any,
    kind: str = "f8",
    **attrs: Any,
) -> None:
    """One variable; ``scale`` and ``offset`` pack it as int32."""
    packing = {"scale_factor": attrs.pop("scale", None), "add_offset": attrs.pop("offset", None)}
    fill = attrs.pop("fill", None)
    variable = file.createVariable(name, kind, dims, fill_value=fill)
    variable.setncatts({**attrs, **{k: v for k, v in packing.items() if v is not None}})
    variable[...] = values


def write_model(
    path: Path,
    *,
    latitudes: np.ndarray = LATITUDES,
    longitudes: np.ndarray = LONGITUDES,
    hours: int = 2,
    top_first: bool = True,
    levels: int = LEVELS,
    kept_levels: slice = slice(None),
    form: str = "half",
    surface: str = "ps",
    packed: bool = False,
    members: int = 0,
    order: tuple[str, ...] = ("member", "time", "level", "lat", "lon"),
    leave_out: tuple[str, ...] = (),
    sea_holes: tuple[tuple[int, int], ...] = (),
    reference: bool = True,
) -> Path:
    """A file on hybrid levels.

    `form` is "half" (interface tables), "full" (``ap``, ``b`` with formula_terms) or "p0" (``a``,
    ``b``, ``p0``); `surface` is "ps" or "lnsp". `kept_levels` cuts the levels (counted from the
    top) but not the tables.
    """
    a, b = coefficients(levels)
    share = ((np.arange(levels) + 0.5) / levels) ** 0.6
    number = np.arange(1, levels + 1)[kept_levels]
    share = share[kept_levels]
    turn = slice(None) if top_first else slice(None, None, -1)
    with netCDF4.Dataset(path, "w") as file:
        sizes = {"member": members, "time": hours, "level": share.size}
        sizes |= {"half": a.size, "lat": latitudes.size, "lon": longitudes.size}
        for name, size in sizes.items():
            if size:
                file.createDimension(name, size)
        since = {"units": "hours since 2031-05-20 06:00:00", "calendar": "standard"}
        put(file, "time", ("time",), np.arange(hours) + 6.0, standard_name="time", **since)
        if reference:
            put(file, "start", (), 3.0, standard_name="forecast_reference_time", **since)
        if members:
            put(file, "member", ("member",), np.arange(members), standard_name="realization")
        put(file, "lat", ("lat",), latitudes, standard_name="latitude", units="degrees_north")
        put(file, "lon", ("lon",), longitudes, standard_name="longitude", units="degrees_east")
        attrs: dict[str, Any] = {"axis": "Z", "positive": "down", "units": "1"}
        hybrid = "atmosphere_hybrid_sigma_pressure_coordinate"
        if form != "half":
            terms = "ap: ap b: b ps: ps" if form == "full" else "a: a b: b p0: p0 ps: ps"
            attrs |= {"standard_name": hybrid, "formula_terms": terms}
        put(file, "level", ("level",), number[turn], "i4", **attrs)
        if form == "half":
            half_turn = turn if share.size == levels else slice(None)
            for name, values, unit in (("hyai", a, "Pa"), ("hybi", b, "1")):
                if name not in leave_out:
                    put(file, name, ("half",), values[half_turn], units=unit)
        else:
            full = [(0.5 * (x[1:] + x[:-1]))[kept_levels][turn] for x in (a, b)]
            if form == "full":
                put(file, "ap", ("level",), full[0], units="Pa")
            else:
                put(file, "a", ("level",), full[0] / 1.0e5, units="1")
                put(file, "p0", (), 1.0e5, units="Pa")
            if "b" not in leave_out:
                put(file, "b", ("level",), full[1], units="1")

        hour = np.arange(hours)[:, None, None]
        lat = latitudes[:, None]
        lon = (longitudes + 180.0) % 360.0 - 180.0
        ps = surface_pressure(hour, lat, lon)
        t = temperature(hour[..., None], share[turn, None, None], lat, lon)
        q = np.broadcast_to(humidity(share[turn])[:, None, None], t.shape)
        if members:
            step = 0.5 * np.arange(members)[:, None, None, None, None]
            t, q = t + step, np.broadcast_to(q, (members, *q.shape))

        def upper(name: str, values: np.ndarray, **more: Any) -> None:
            own = [d for d in ("member", "time", "level", "lat", "lon") if d in file.dimensions]
            wanted = [d for d in order if d in own]
            values = values.transpose([own.index(d) for d in wanted])
            put(file, name, tuple(wanted), values, **more)

        pack = {"kind": "i4", "scale": 1e-7, "offset": 250.0, "fill": -(2**31)} if packed else {}
        upper("t", t, standard_name="air_temperature", units="K", **pack)
        if "q" not in leave_out:
            upper("q", q, standard_name="specific_humidity", units="kg kg-1")
        upper("u", 0.0 * t + 3.0, standard_name="eastward_wind", units="m s-1")
        upper("v", 0.0 * t - 2.0, standard_name="northward_wind", units="m s-1")
        flat = ("time", "lat", "lon")
        if surface == "lnsp":
            put(file, "lnsp", flat, np.log(ps), units="1")
        elif surface == "ps":
            put(file, "ps", flat, ps, standard_name="surface_air_pressure", units="Pa")
        sea = np.ma.masked_invalid(285.0 + 0.5 * (lat - 54.0) - 0.2 * lon + 0.0 * hour)
        for row, column in sea_holes:
            sea[:, row, column] = np.ma.masked
        put(file, "sst", flat, sea, fill=-999.0, units="K", standard_name="sea_surface_temperature")
    return path


def read(
    path: Path,
    points: Any = PLACE,
    method: str = "bilinear",
    names: dict[str, str] | None = None,
    notes: list[str] | None = None,
) -> list[Any]:
    """Columns of a file at places, and reasons for those that cannot be used."""
    with open_source(path) as source:
        return read_model_columns(source, recognise(source, names), points, method, notes)
