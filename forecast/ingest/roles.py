"""Which quantities a sounding or model file may hold, and in what unit and range they are used.

A role is what bendcast wants a variable for. The table gives for each role the CF standard names
that mean it, the SI unit it is converted to, and the range its large values must lie in after
conversion: a pressure of 1013 "Pa" shows that the declared unit is wrong.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from forecast.errors import InputError

__all__ = ["HUMIDITY_ROLES", "LEVEL_ROLES", "ROLES", "Role", "check_plausible"]


@dataclass(frozen=True)
class Role:
    """One row of the table.

    Attributes
    ----------
    kind : {"coordinate", "level", "surface", "hybrid", "label"}
        ``level``: varies along the vertical; ``surface``: one value per profile.
    low, high : float
        Range that the 95 % quantile of the values must lie in, in `units`; common practice, no
        source. Wide enough for any real air, narrow enough to catch a wrong power of ten or a
        Celsius taken for a kelvin.
    unit_optional : bool
        Whether CF lets a missing unit mean a pure number (section 3.1) and no other unit is in
        use for the quantity.
    difference : bool
        A temperature difference: 1 degC is 1 K.
    """

    name: str
    kind: str
    units: str
    standard_names: tuple[str, ...] = ()
    low: float = -np.inf
    high: float = np.inf
    unit_optional: bool = False
    difference: bool = False


_ROWS = [
    Role("time", "coordinate", "", ("time",)),
    Role("forecast_reference_time", "coordinate", "", ("forecast_reference_time",)),
    Role("forecast_period", "coordinate", "s", ("forecast_period",)),
    Role("latitude", "coordinate", "degree", ("latitude",), -90.0, 90.0),
    Role("longitude", "coordinate", "degree", ("longitude",), -180.0, 360.0),
    Role("member", "coordinate", "1", ("realization",), unit_optional=True),
    Role("station", "label", "", ("platform_name", "platform_id", "station_name", "station_id")),
    # --- one value per level ------------------------------------------------------------------
    Role("air_pressure", "level", "Pa", ("air_pressure",), 2.0e4, 1.15e5),
    Role("altitude", "level", "m", ("altitude", "geometric_altitude"), -500.0, 1.0e5),
    Role("height", "level", "m", ("height", "height_above_surface"), -50.0, 1.0e5),
    Role("geopotential", "level", "m2 s-2", ("geopotential",), -5.0e3, 1.0e6),
    Role("geopotential_height", "level", "m", ("geopotential_height",), -500.0, 1.0e5),
    Role("air_temperature", "level", "K", ("air_temperature",), 170.0, 340.0),
    Role("relative_humidity", "level", "1", ("relative_humidity",), 0.0101, 1.5),
    Role(
        "dew_point_temperature",
        "level",
        "K",
        ("dew_point_temperature", "dew_point_temperature_in_air"),
        150.0,
        320.0,
    ),
    Role(
        "dew_point_depression", "level", "K", ("dew_point_depression",), 0.0, 80.0, difference=True
    ),
    Role("specific_humidity", "level", "kg kg-1", ("specific_humidity",), 2.5e-5, 0.06),
    Role("humidity_mixing_ratio", "level", "kg kg-1", ("humidity_mixing_ratio",), 2.5e-5, 0.06),
    Role(
        "vapour_pressure",
        "level",
        "Pa",
        ("water_vapor_partial_pressure_in_air",),
        1.0,
        1.5e4,
    ),
    Role("eastward_wind", "level", "m s-1", ("eastward_wind",), -200.0, 200.0),
    Role("northward_wind", "level", "m s-1", ("northward_wind",), -200.0, 200.0),
    Role("wind_speed", "level", "m s-1", ("wind_speed",), 0.0, 200.0),
    Role("wind_from_direction", "level", "degree", ("wind_from_direction",), -180.0, 360.5),
    # --- one value per profile ----------------------------------------------------------------
    Role("surface_altitude", "surface", "m", ("surface_altitude",), -500.0, 9000.0),
    Role("surface_geopotential", "surface", "m2 s-2", ("surface_geopotential",), -5e3, 9e4),
    Role("surface_air_pressure", "surface", "Pa", ("surface_air_pressure",), 4.0e4, 1.15e5),
    Role("log_surface_pressure", "surface", "1", (), 10.5, 11.7, unit_optional=True),
    Role(
        "sea_surface_temperature",
        "surface",
        "K",
        ("sea_surface_temperature", "sea_surface_skin_temperature"),
        260.0,
        320.0,
    ),
    Role("surface_temperature", "surface", "K", ("surface_temperature",), 170.0, 360.0),
    Role("air_temperature_2m", "surface", "K", (), 170.0, 340.0),
    Role("dew_point_temperature_2m", "surface", "K", (), 150.0, 320.0),
    Role("relative_humidity_2m", "surface", "1", (), 0.0101, 1.5),
    Role("specific_humidity_2m", "surface", "kg kg-1", (), 0.0, 0.06),
    Role("eastward_wind_10m", "surface", "m s-1", (), -200.0, 200.0),
    Role("northward_wind_10m", "surface", "m s-1", (), -200.0, 200.0),
    Role(
        "boundary_layer_height",
        "surface",
        "m",
        ("atmosphere_boundary_layer_thickness",),
        0.0,
        1.0e4,
    ),
    Role("visibility", "surface", "m", ("visibility_in_air",), 0.0, 1.0e6),
    # --- hybrid levels ------------------------------------------------------------------------
    Role("hybrid_a", "hybrid", "Pa"),
    Role("hybrid_b", "hybrid", "1", unit_optional=True),
    Role("hybrid_a_half", "hybrid", "Pa"),
    Role("hybrid_b_half", "hybrid", "1", unit_optional=True),
    Role("reference_pressure", "hybrid", "Pa"),
]

#: The table by name; these are the keys that ``names`` may have.
ROLES: dict[str, Role] = {row.name: row for row in _ROWS}

#: Roles that vary along the vertical.
LEVEL_ROLES = tuple(row.name for row in _ROWS if row.kind == "level")

#: Measures of humidity, the one to be used first at the front: what the file measures or carries
#: as a prognostic value before what is commonly derived from it.
HUMIDITY_ROLES = (
    "specific_humidity",
    "relative_humidity",
    "dew_point_temperature",
    "dew_point_depression",
    "humidity_mixing_ratio",
    "vapour_pressure",
)

#: Level roles that also come as values near the surface: role → (role there, height in m).
NEAR_SURFACE = {
    "air_temperature": ("air_temperature_2m", 2.0),
    "dew_point_temperature": ("dew_point_temperature_2m", 2.0),
    "relative_humidity": ("relative_humidity_2m", 2.0),
    "specific_humidity": ("specific_humidity_2m", 2.0),
    "eastward_wind": ("eastward_wind_10m", 10.0),
    "northward_wind": ("northward_wind_10m", 10.0),
}


def check_plausible(
    role: str, values: Any, units: str, *, source: str = "", variable: str = ""
) -> None:
    """Raise if the converted values show that the declared unit is wrong.

    Parameters
    ----------
    role : str
        A name in `ROLES`.
    values : array_like
        Values in the role's SI unit; missing ones NaN.
    units : str
        Unit they were converted from.
    source, variable : str
        Named in the error.

    Raises
    ------
    InputError
        If the 95 % quantile lies outside the role's range.
    """
    row = ROLES[role]
    finite = np.asarray(values, dtype=np.float64)
    finite = finite[np.isfinite(finite)]
    if finite.size == 0 or not np.isfinite(row.low + row.high):
        return
    # A lone value or a column of zeros says nothing of the unit.
    if (finite.size < 3 and role in HUMIDITY_ROLES) or not finite.any():
        return
    typical = float(np.partition(finite, k := int(0.95 * (finite.size - 1)))[k])
    if not row.low <= typical <= row.high:
        raise InputError(
            f"declared unit {units!r} contradicts the values: as {role.replace('_', ' ')} they "
            f"reach {typical:.4g} {row.units}, expected {row.low:g} to {row.high:g} {row.units}",
            source=source,
            variable=variable,
            remedy=f'set the unit, for example names.{role} = "{variable} [<unit>]"',
        )
