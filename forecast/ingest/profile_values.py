"""What a sounding file says once per profile: time, place, station, lead time, surface values."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from forecast.errors import InputError, printable
from forecast.ingest.assemble import EXTRAS
from forecast.ingest.recognise import read_role
from forecast.ingest.recognition import Recognition, leading_number
from forecast.ingest.sampling_geometries import Geometry
from forecast.ingest.source import Source
from forecast.ingest.times import decode_times
from forecast.physics import moisture

__all__ = ["per_profile"]


def per_profile(source: Source, recognition: Recognition, geometry: Geometry) -> dict[str, Any]:
    """Time, position, station and optional values, one entry per profile.

    An optional value that cannot be used is left out, with a note in ``recognition.notes``.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file.
    geometry : Geometry
        How its values are dealt out to profiles.

    Returns
    -------
    dict
        ``time`` (datetime64[ns]), ``latitude``, ``longitude`` (degrees), ``surface_altitude`` (m)
        as arrays; ``station``, ``lead_time``, ``member``, ``extras`` as lists; ``source_kind``.

    Raises
    ------
    InputError
        If time, latitude or longitude cannot be used.
    """
    count = geometry.count

    def scalars(role: str, *, needed: bool = False) -> np.ndarray:
        taken = recognition.require(role) if needed else recognition.get(role)
        if taken is None:
            return np.full(count, np.nan)
        try:
            values = read_role(source, recognition, role)
            if taken.attribute:
                return np.repeat(values.ravel(), count)
            return geometry.scalars(values, taken.dims)
        except InputError as error:
            if needed:
                raise
            recognition.notes.append(
                f"{role.replace('_', ' ')} left out: {taken.variable}: {error.reason}"
            )
            return np.full(count, np.nan)

    result: dict[str, Any] = {
        "time": _times(source, recognition, geometry),
        "latitude": scalars("latitude", needed=True),
        "longitude": scalars("longitude", needed=True),
        "surface_altitude": scalars("surface_altitude"),
    }
    result["station"] = _stations(source, recognition, geometry, result)
    result["lead_time"], result["source_kind"] = _lead_times(
        source, recognition, geometry, result["time"]
    )
    members = scalars("member")
    result["member"] = [int(m) if np.isfinite(m) else None for m in members]
    extras = {name: scalars(name) for name in EXTRAS if name in recognition}
    _near_surface_humidity(recognition, scalars, extras)
    result["extras"] = [
        {name: float(values[i]) for name, values in extras.items() if np.isfinite(values[i])}
        for i in range(count)
    ]
    return result


def _near_surface_humidity(
    recognition: Recognition, scalars: Callable[..., np.ndarray], extras: dict[str, np.ndarray]
) -> None:
    pressure = extras.get("surface_air_pressure")
    if "specific_humidity_2m" in extras or pressure is None:
        return
    with np.errstate(all="ignore"):
        if "dew_point_temperature_2m" in recognition:
            extras["specific_humidity_2m"] = moisture.specific_humidity_from_dew_point(
                scalars("dew_point_temperature_2m"), pressure
            )
        elif "relative_humidity_2m" in recognition and "air_temperature_2m" in extras:
            extras["specific_humidity_2m"] = moisture.specific_humidity_from_relative_humidity(
                scalars("relative_humidity_2m"), extras["air_temperature_2m"], pressure
            )


def _times(source: Source, recognition: Recognition, geometry: Geometry) -> np.ndarray:
    taken = recognition.require("time")
    times = np.full(geometry.count, np.datetime64("NaT", "ns"))
    if not taken.attribute:
        values = source.read_times(taken.variable, units=taken.units)
        times = geometry.scalars(values, taken.dims)
    attribute = recognition.attributes.get("time")
    if attribute is not None and geometry.count == 1 and np.isnat(times).any():
        number = leading_number(source.attrs[attribute.variable])
        where = {"source": source.name, "variable": attribute.variable}
        times = decode_times([number], attribute.units, None, **where)
    return times


def _lead_times(
    source: Source, recognition: Recognition, geometry: Geometry, time: np.ndarray
) -> tuple[list[np.timedelta64 | None], str]:
    """Lead times and kind: a reference time or forecast period makes the profiles a model's."""
    reference, period = (
        recognition.get("forecast_reference_time"),
        recognition.get("forecast_period"),
    )
    if reference is not None:
        start = source.read_times(reference.variable, units=reference.units)
        lead = time - geometry.scalars(start, reference.dims)
        return list(lead.astype("timedelta64[ns]")), "model"
    if period is not None:
        seconds = geometry.scalars(read_role(source, recognition, "forecast_period"), period.dims)
        lead = (np.nan_to_num(seconds) * 1e9).astype("timedelta64[ns]")
        return list(lead), "model"
    return [None] * geometry.count, "ascent"


def _stations(
    source: Source, recognition: Recognition, geometry: Geometry, position: dict[str, Any]
) -> list[str]:
    """Names of the stations: by variable, else by global attributes, else by position."""
    taken = recognition.get("station")
    if taken is not None:
        info = source.variables[taken.variable]
        texts = np.array(source.read_text(taken.variable), dtype=str)
        characters = (
            info.is_text
            and info.dtype is not str
            and info.shape
            and texts.size != int(np.prod(info.shape))
        )
        dims = info.dims[:-1] if characters else info.dims
        shape = info.shape[: len(dims)]
        try:
            names = [str(n) for n in geometry.scalars(texts.reshape(shape), dims)]
        except InputError as error:
            recognition.notes.append(f"station names left out: {error.reason}")
        else:
            if all(names):
                return names
    words = [
        printable(source.attrs[name], 60)
        for name in recognition.station_attributes
        if str(source.attrs.get(name, "")).strip()
    ]
    if words:
        return [" ".join(words)] * geometry.count
    return [
        f"lat {lat:.1f} lon {lon:.1f}"
        for lat, lon in zip(
            position["latitude"], (position["longitude"] + 180.0) % 360.0 - 180.0, strict=True
        )
    ]
