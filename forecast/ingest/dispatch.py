"""Which reader a file is for: soundings, or model columns."""

from __future__ import annotations

from forecast.errors import InputError
from forecast.ingest.ascents import check_profiles, read_soundings
from forecast.ingest.assemble import Column
from forecast.ingest.candidates import HORIZONTAL
from forecast.ingest.level_groups import grouped_soundings
from forecast.ingest.recognition import Recognition
from forecast.ingest.soundings import Sounding, to_column
from forecast.ingest.source import Source

__all__ = ["ColumnOrReason", "is_gridded", "is_model", "read_columns"]

#: A column, or why a profile of the file is set aside.
ColumnOrReason = Column | InputError

_SOUNDING_FEATURES = ("profile", "timeseriesprofile", "trajectoryprofile", "trajectory")


def read_columns(
    source: Source,
    recognition: Recognition,
    points: list[tuple[str, float, float]] | None,
    method: str,
    notes: list[str] | None = None,
) -> list[ColumnOrReason]:
    """Columns of a file, or the reason for each profile that cannot be used.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of that file.
    points : list of (name, latitude, longitude) or None
        Where to take columns from gridded data.
    method : {"bilinear", "nearest"}
    notes : list of str, optional
        What a user may want to know of how the file was read is added to it.

    Returns
    -------
    list of Column or InputError

    Raises
    ------
    InputError
        If the file as a whole cannot be used.
    """
    check_profiles(source, recognition)
    if is_model(source, recognition):
        from forecast.ingest.model_levels import read_model_columns

        return list(read_model_columns(source, recognition, points, method, notes))
    read = grouped_soundings if recognition.groups else read_soundings
    found = _columns(source, read(source, recognition))
    if notes is not None:
        notes += recognition.notes
        notes += [
            f"{error.variable} left out as {role.replace('_', ' ')}: {error.reason}"
            for role, error in recognition.problems.items()
        ]
    return found


def _columns(source: Source, soundings: list[Sounding]) -> list[ColumnOrReason]:
    """Columns of soundings; one that cannot be used gives its reason and number."""
    result: list[ColumnOrReason] = []
    for number, sounding in enumerate(soundings, start=1):
        try:
            result.append(to_column(sounding))
        except InputError as error:
            if len(soundings) > 1:
                error = InputError(
                    f"profile {number} of {len(soundings)}: {error.reason}",
                    source=source.name,
                    variable=error.variable,
                    remedy=error.remedy,
                )
            result.append(error)
    return result


def is_gridded(source: Source, recognition: Recognition) -> bool:
    """Whether air temperature varies along horizontal coordinates."""
    temperature, latitude = recognition.get("air_temperature"), recognition.get("latitude")
    if temperature is None or latitude is None:
        return False
    own = latitude.dims == (latitude.variable,)
    axes = [source.variables[d] for d in latitude.dims if d in source.variables]
    plane = len(axes) == 2 and all(
        axis.standard_name in HORIZONTAL or axis.attrs.get("axis") in ("X", "Y") for axis in axes
    )
    return (own or plane) and set(latitude.dims) <= set(temperature.dims)


def is_model(source: Source, recognition: Recognition) -> bool:
    """Whether a file holds model columns rather than soundings.

    Hybrid levels and grids are models'. So are levels common to all times (a vertical coordinate
    of one dimension beside a time dimension), unless the file says that it holds soundings.
    """
    if recognition.groups:
        return False
    if any(role in recognition for role in ("hybrid_a", "hybrid_a_half")):
        return True
    if str(source.attrs.get("featureType", "")).strip().lower() in _SOUNDING_FEATURES:
        return False
    if is_gridded(source, recognition):
        return True
    temperature, time = recognition.get("air_temperature"), recognition.get("time")
    if temperature is None or time is None:
        return False
    common = any(
        (taken := recognition.get(role)) is not None and taken.dims == (recognition.vertical_dim,)
        for role in ("air_pressure", "altitude", "height")
    )
    beside = time.dims == (time.variable,) and time.variable in temperature.dims
    return common and beside and time.variable != recognition.vertical_dim
