"""Builders of small netCDF files for the tests: plausible invented air, every way to store it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np

LAUNCH = np.datetime64("2031-03-04T05:30:00", "ns")
EPOCH = "seconds since 2031-03-01 00:00:00"


@dataclass
class Air:
    """One invented profile in SI: levels ascending, dry hydrostatic, moist below."""

    z: np.ndarray
    p: np.ndarray
    t: np.ndarray
    rh: np.ndarray
    time: np.datetime64 = LAUNCH
    latitude: float = 48.25
    longitude: float = -30.5
    station: str = "Port Ander"
    ground: float = 12.0
    u: np.ndarray = field(default_factory=lambda: np.zeros(0))
    v: np.ndarray = field(default_factory=lambda: np.zeros(0))

    @property
    def seconds(self) -> float:
        """Launch time as a number of `EPOCH`."""
        return float((self.time - np.datetime64("2031-03-01")) / np.timedelta64(1, "s"))


def make_air(levels: int = 60, top: float = 3000.0, seed: int = 0, **changes: Any) -> Air:
    """A profile whose pressures follow from its temperatures (dry air, g = 9.80665 m/s²)."""
    rng = np.random.default_rng(seed)
    ground = float(changes.get("ground", 12.0))
    z = ground + top * np.linspace(0.0, 1.0, levels) ** 1.3
    t = 288.0 - 6.0e-3 * (z - ground) + 0.3 * rng.standard_normal(levels)
    mean = 0.5 * (t[1:] + t[:-1])
    p = 1.0e5 * np.exp(-np.concatenate([[0.0], np.cumsum(np.diff(z) / mean)]) / 29.2717)
    rh = np.clip(0.75 - 0.2 * (z - ground) / top + 0.03 * rng.standard_normal(levels), 0.05, 0.98)
    air = Air(z, p, t, rh, u=5.0 + 1e-3 * z, v=-3.0 + 2e-3 * z)
    for name, value in changes.items():
        setattr(air, name, value)
    return air


#: Level variables: name in the file, attribute of Air, standard name, unit, scale to that unit.
LEVELS = (
    ("alt", "z", "altitude", "m", lambda x: x),
    ("pres", "p", "air_pressure", "hPa", lambda x: x / 100.0),
    ("temp", "t", "air_temperature", "degC", lambda x: x - 273.15),
    ("rh", "rh", "relative_humidity", "%", lambda x: 100.0 * x),
    ("ua", "u", "eastward_wind", "m s-1", lambda x: x),
    ("va", "v", "northward_wind", "m s-1", lambda x: x),
)


def write_ascent(
    path: Path,
    air: Air,
    *,
    leave_out: Sequence[str] = (),
    attrs: dict[str, dict[str, Any]] | None = None,
    file_attrs: dict[str, Any] | None = None,
    values: dict[str, np.ndarray] | None = None,
    fmt: str = "NETCDF4",
) -> Path:
    """One ascent with time as the way up.

    ``attrs`` changes attributes (None removes one), ``values`` replaces stored numbers.
    """
    attrs, values = attrs or {}, values or {}
    with netCDF4.Dataset(path, "w", format=fmt) as data:
        data.setncatts({"Conventions": "CF-1.11", **(file_attrs or {})})
        data.createDimension("time", air.z.size)
        _put(data, "time", "f8", ("time",), air.seconds + 2.0 * np.arange(air.z.size),
             {"standard_name": "time", "units": EPOCH}, attrs, values)  # fmt: skip
        drift = np.linspace(0.0, 0.05, air.z.size)
        _put(data, "lat", "f8", ("time",), air.latitude + drift,
             {"standard_name": "latitude", "units": "degrees_north"}, attrs, values)  # fmt: skip
        _put(data, "lon", "f8", ("time",), air.longitude + drift,
             {"standard_name": "longitude", "units": "degrees_east"}, attrs, values)  # fmt: skip
        for name, part, standard, units, scale in LEVELS:
            if name not in leave_out:
                _put(data, name, "f8", ("time",), scale(getattr(air, part)),
                     {"standard_name": standard, "units": units}, attrs, values)  # fmt: skip
        if "station_name" not in leave_out:
            text = data.createVariable("station_name", str, ())
            text[...] = air.station
            text.standard_name = "platform_name"
        if "surface_altitude" not in leave_out:
            _put(data, "surface_altitude", "f8", (), air.ground,
                 {"standard_name": "surface_altitude", "units": "m"}, attrs, values)  # fmt: skip
    return path


def _put(
    data: netCDF4.Dataset,
    name: str,
    kind: str,
    dims: tuple[str, ...],
    numbers: Any,
    attributes: dict[str, Any],
    attrs: dict[str, dict[str, Any]],
    values: dict[str, np.ndarray],
) -> None:
    variable = data.createVariable(name, kind, dims, fill_value=-9999.0 if kind == "f8" else None)
    merged = {**attributes, **attrs.get(name, {})}
    variable.setncatts({k: v for k, v in merged.items() if v is not None})
    stored = np.asarray(values.get(name, numbers))
    variable[...] = np.where(np.isfinite(stored), stored, -9999.0) if kind == "f8" else stored


# --- discrete sampling geometries -----------------------------------------------------------------


def write_profiles(path: Path, airs: list[Air], form: str, feature: str) -> Path:
    """The same profiles in one of the forms of CF-1.11 appendix H.

    ``form`` is ``orthogonal``, ``incomplete``, ``contiguous`` or ``indexed``; ``feature`` is
    ``profile``, ``timeSeriesProfile`` or ``trajectoryProfile``. For the last two the profiles
    are of two stations (trajectories): the first half and the second half. Orthogonal needs
    levels at the same altitudes.
    """
    with netCDF4.Dataset(path, "w") as data:
        data.setncatts({"Conventions": "CF-1.11", "featureType": feature})
        ragged = form in ("contiguous", "indexed")
        (_write_ragged if ragged else _write_grid)(data, airs, form, feature)
    return path


def _write_grid(data: netCDF4.Dataset, airs: list[Air], form: str, feature: str) -> None:
    size = max(air.z.size for air in airs)
    data.createDimension("z", size)
    outer = feature != "profile"
    shape = (2, len(airs) // 2) if outer else (len(airs),)
    names = ("station", "profile") if outer else ("profile",)
    for name, length in zip(names, shape, strict=True):
        data.createDimension(name, length)
    if outer:
        _name_stations(data, "station", [airs[0].station, airs[-1].station], feature)
    else:
        identity = data.createVariable("profile", "i4", ("profile",))
        identity.cf_role = "profile_id"
        identity[:] = np.arange(len(airs))
        text = data.createVariable("station_name", str, ("profile",))
        text.standard_name = "platform_name"
        text[:] = np.array([air.station for air in airs], dtype=object)

    def per_profile(name: str, numbers: list[float], attributes: dict[str, str]) -> None:
        _put(data, name, "f8", names, np.reshape(numbers, shape), attributes, {}, {})

    per_profile("time", [a.seconds for a in airs], {"standard_name": "time", "units": EPOCH})
    if feature == "timeSeriesProfile":
        pair = airs[0], airs[-1]
        _put(data, "lat", "f8", ("station",), [a.latitude for a in pair],
             {"standard_name": "latitude", "units": "degrees_north"}, {}, {})  # fmt: skip
        _put(data, "lon", "f8", ("station",), [a.longitude for a in pair],
             {"standard_name": "longitude", "units": "degrees_east"}, {}, {})  # fmt: skip
        _put(data, "ground", "f8", ("station",), [a.ground for a in pair],
             {"standard_name": "surface_altitude", "units": "m"}, {}, {})  # fmt: skip
    else:
        per_profile("lat", [a.latitude for a in airs],
                    {"standard_name": "latitude", "units": "degrees_north"})  # fmt: skip
        per_profile("lon", [a.longitude for a in airs],
                    {"standard_name": "longitude", "units": "degrees_east"})  # fmt: skip
        per_profile("ground", [a.ground for a in airs],
                    {"standard_name": "surface_altitude", "units": "m"})  # fmt: skip
    for name, part, standard, units, scale in LEVELS:
        described = {"standard_name": standard, "units": units}
        if name == "alt" and form == "orthogonal":
            _put(data, name, "f8", ("z",), airs[0].z, described, {}, {})
            continue
        padded = np.full((len(airs), size), np.nan)
        for row, air in zip(padded, airs, strict=True):
            row[: air.z.size] = scale(getattr(air, part))
        _put(data, name, "f8", (*names, "z"), padded.reshape(*shape, size), described, {}, {})


def _write_ragged(data: netCDF4.Dataset, airs: list[Air], form: str, feature: str) -> None:
    outer = feature != "profile"
    data.createDimension("profile", len(airs))
    data.createDimension("obs", sum(air.z.size for air in airs))
    if outer:
        data.createDimension("station", 2)
        _name_stations(data, "station", [airs[0].station, airs[-1].station], feature)
        index = data.createVariable("station_index", "i4", ("profile",))
        index.instance_dimension = "station"
        index[:] = [0] * (len(airs) // 2) + [1] * (len(airs) - len(airs) // 2)
    else:
        text = data.createVariable("station_name", str, ("profile",))
        text.cf_role = "profile_id"
        text.standard_name = "platform_name"
        text[:] = np.array([air.station for air in airs], dtype=object)
    for name, numbers, described in (
        ("time", [a.seconds for a in airs], {"standard_name": "time", "units": EPOCH}),
        ("lat", [a.latitude for a in airs],
         {"standard_name": "latitude", "units": "degrees_north"}),
        ("lon", [a.longitude for a in airs],
         {"standard_name": "longitude", "units": "degrees_east"}),
        ("ground", [a.ground for a in airs], {"standard_name": "surface_altitude", "units": "m"}),
    ):  # fmt: skip
        _put(data, name, "f8", ("profile",), numbers, described, {}, {})
    owner = np.repeat(np.arange(len(airs)), [air.z.size for air in airs])
    order = np.arange(owner.size)
    if form == "contiguous":
        sizes = data.createVariable("row_size", "i4", ("profile",))
        sizes.sample_dimension = "obs"
        sizes[:] = [air.z.size for air in airs]
    else:
        # Mixed, each profile's own levels in order: as values arrive from several stations.
        place = np.concatenate([np.linspace(0.0, 1.0, air.z.size) for air in airs])
        order = np.lexsort((owner, place))
        index = data.createVariable("profile_index", "i4", ("obs",))
        index.instance_dimension = "profile"
        index[:] = owner[order]
    for name, part, standard, units, scale in LEVELS:
        numbers = np.concatenate([scale(getattr(air, part)) for air in airs])[order]
        _put(data, name, "f8", ("obs",), numbers,
             {"standard_name": standard, "units": units}, {}, {})  # fmt: skip


def _name_stations(data: netCDF4.Dataset, dim: str, names: list[str], feature: str) -> None:
    """Station names as a character array, the form that classic netCDF has."""
    data.createDimension("name_length", 24)
    text = data.createVariable("station_name", "S1", (dim, "name_length"))
    text.cf_role = "timeseries_id" if feature == "timeSeriesProfile" else "trajectory_id"
    text.standard_name = "platform_name"
    text[:] = netCDF4.stringtochar(np.array(names, dtype="S24"))


# --- mandatory and significant levels -------------------------------------------------------------


def write_level_groups(path: Path, airs: list[Air], mandatory: np.ndarray) -> Path:
    """Launches with mandatory levels (``mandatory``: indices into Air) and all others apart."""
    others = np.setdiff1d(np.arange(airs[0].z.size), mandatory)
    with netCDF4.Dataset(path, "w", format="NETCDF3_CLASSIC") as data:
        data.createDimension("recNum", len(airs))
        data.createDimension("manLevel", mandatory.size + 2)
        data.createDimension("sigTLevel", others.size + 3)
        data.createDimension("staNameLen", 20)
        name = data.createVariable("staName", "S1", ("recNum", "staNameLen"))
        name[:] = netCDF4.stringtochar(np.array([a.station for a in airs], dtype="S20"))
        for variable, numbers, units in (
            ("staLat", [a.latitude for a in airs], "degrees_north"),
            ("staLon", [a.longitude for a in airs], "degrees_east"),
            ("staElev", [a.ground for a in airs], "meter"),
            ("relTime", [a.seconds for a in airs], EPOCH),
        ):
            _put(data, variable, "f8", ("recNum",), numbers, {"units": units}, {}, {})
        for variable, number in (("numMand", mandatory.size), ("numSigT", others.size)):
            counts = data.createVariable(variable, "i4", ("recNum",))
            counts[:] = number
        dew_points = [dew_point(a.t, a.rh, a.p) for a in airs]
        for suffix, dim, at in (("Man", "manLevel", mandatory), ("SigT", "sigTLevel", others)):
            for prefix, rows, units in (
                ("pr", [a.p / 100.0 for a in airs], "hectopascals"),
                ("tp", [a.t for a in airs], "kelvin"),
                ("td", [a.t - d for a, d in zip(airs, dew_points, strict=True)], "kelvin"),
                ("ht", [a.z for a in airs], "gpm"),
            ):
                if prefix == "ht" and suffix == "SigT":
                    continue
                # Unused places hold a number that would pass for a value: the count tells.
                padded = np.full((len(airs), data.dimensions[dim].size), 500.0)
                for target, row in zip(padded, rows, strict=True):
                    target[: at.size] = row[at]
                _put(data, prefix + suffix, "f8", ("recNum", dim), padded,
                     {"units": units}, {}, {})  # fmt: skip
    return path


def dew_point(t: np.ndarray, rh: np.ndarray, p: np.ndarray) -> np.ndarray:
    """Dew point by bisection of the project's own saturation law (an inverse, not a new law)."""
    from forecast.physics.moisture import saturation_vapour_pressure

    wanted = rh * saturation_vapour_pressure(t, p)
    low, high = np.full_like(t, 180.0), t.copy()
    for _ in range(60):
        middle = 0.5 * (low + high)
        over = saturation_vapour_pressure(middle, p) > wanted
        low, high = np.where(over, low, middle), np.where(over, middle, high)
    return 0.5 * (low + high)
