"""What a settings file may hold: its tables and keys, with what is allowed for each.

Keys carry their units (``distance_km``). Nothing is guessed: an unknown key is a fault, with the
nearest known one named. How faults are worded: `forecast.settings_faults`.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError
from pydantic.fields import FieldInfo

from forecast.physics.bands import PHOTOMETRIC_BANDS
from forecast.settings_faults import MAX_DISTANCE_KM, MAX_HEIGHT_M, faults_of

__all__ = ["SettingsFile", "SightlineTable", "check_table"]


def _plain(text: str) -> str:
    if not text.strip():
        raise ValueError("must not be blank")
    if not text.isprintable():
        raise ValueError("must not hold control characters, line breaks or invisible characters")
    return text


def _zone(text: str) -> str:
    try:
        ZoneInfo(text)
    except (KeyError, ValueError, OSError):
        raise ValueError("must be a time zone of the IANA list, such as Atlantic/Azores") from None
    return text


def _number(low: float, high: float, unit: str) -> FieldInfo:
    """Bounds of a number, and the same in words for the fault that names them."""
    words = f"a number from {low:g} to {high:g}{f' {unit}' if unit else ''}"
    return Field(ge=low, le=high, strict=True, description=words)


def _whole(low: int, high: int) -> FieldInfo:
    return Field(ge=low, le=high, strict=True, description=f"a whole number from {low} to {high}")


def _text(longest: int) -> FieldInfo:
    words = f"text of 1 to {longest} characters"
    return Field(min_length=1, max_length=longest, description=words)


# The description of each field is what a fault says is allowed.
Name = Annotated[str, _text(80), AfterValidator(_plain)]
Latitude = Annotated[float, _number(-90.0, 90.0, "degrees")]
Longitude = Annotated[float, _number(-180.0, 360.0, "degrees")]
Height = Annotated[float, _number(0.0, MAX_HEIGHT_M, "m")]
Band = Literal["U", "B", "V", "R", "I", "J", "H", "photopic", "scotopic"]
Position = Annotated[
    tuple[Latitude, Longitude] | None,
    Field(description="[latitude, longitude] in degrees, -90 to 90 and -180 to 360"),
]
FilePath = Annotated[
    Annotated[str, _text(1000), AfterValidator(_plain)] | None,
    Field(description="path of a file, from the settings file's folder"),
]
Outline = Annotated[
    list[tuple[float, Height]] | None,
    Field(
        min_length=2,
        max_length=400,
        description="2 to 400 points [offset, height] in m, from left to right",
    ),
]


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class _RunTable(_Table):
    title: Name = "Outlook"
    output: Annotated[str, _text(1000), AfterValidator(_plain)] = "outlook"
    members: Annotated[int, _whole(8, 4096)] = 64
    seed: Annotated[int, _whole(0, 2**63 - 1)] = 1
    window_threshold: Annotated[float, _number(0.01, 1.0, "")] = 0.5
    minimum_duct_strength: Annotated[float, _number(0.0, 100.0, "M-units")] = 2.0
    chart_top_m: Annotated[float, _number(100.0, 15000.0, "m")] = 3000.0
    chart_stretch_low: Annotated[bool, Field(strict=True, description="true or false")] = False


class _SiteTable(_Table):
    name: Name
    latitude: Latitude
    longitude: Longitude
    altitude_m: Annotated[float, _number(-430.0, 9000.0, "m")] = 0.0
    timezone: Annotated[str, _text(80), AfterValidator(_zone)] = "UTC"
    inputs: Annotated[
        list[Annotated[str, Field(min_length=1, max_length=500), AfterValidator(_plain)]],
        Field(
            min_length=1,
            max_length=100,
            description="a list of 1 to 100 file patterns of at most 500 characters, "
            'such as ["ascents/*.nc"]',
        ),
    ]
    match_radius_km: Annotated[float, _number(0.1, 1000.0, "km")] = 50.0
    point_method: Annotated[
        Literal["nearest", "bilinear"], Field(description='"nearest" or "bilinear"')
    ] = "bilinear"
    surface: Annotated[
        Literal["none", "sea", "land"], Field(description='"none", "sea" or "land"')
    ] = "none"
    sea_surface_temperature_c: Annotated[float | None, _number(-3.0, 40.0, "°C")] = None
    surface_temperature_c: Annotated[float | None, _number(-60.0, 80.0, "°C")] = None
    wind_speed_m_s: Annotated[float | None, _number(0.0, 60.0, "m/s")] = None
    roughness_m: Annotated[float, _number(1e-6, 5.0, "m")] = 0.03
    water_series: FilePath = None


class _PlaceTable(_Table):
    name: Name
    ground_height_m: Height = 0.0
    position: Position = None
    distance_km: Annotated[float | None, _number(0.01, MAX_DISTANCE_KM, "km")] = None


class SightlineTable(_Table):
    """A ``[[sightline]]`` table."""

    name: Name
    site: Name
    observer_height_m: Height
    target_height_m: Annotated[float | None, _number(0.0, MAX_HEIGHT_M, "m")] = None
    target_base_height_m: Height = 0.0
    distance_km: Annotated[float | None, _number(0.01, MAX_DISTANCE_KM, "km")] = None
    azimuth_deg: Annotated[float | None, _number(0.0, 360.0, "degrees")] = None
    observer: Position = None
    target: Position = None
    wave: Annotated[Literal["optical", "radio"], Field(description='"optical" or "radio"')] = (
        "optical"
    )
    wavelength_nm: Annotated[float, _number(300.0, 1700.0, "nm")] = 550.0
    band: Annotated[Band | None, Field(description=" or ".join(PHOTOMETRIC_BANDS))] = None
    along: Annotated[
        list[Name], Field(max_length=32, description="a list of at most 32 names of sites")
    ] = []
    terrain: FilePath = None
    sea_level_offset_m: Annotated[float, _number(-20.0, 20.0, "m")] = 0.0
    silhouette: Outline = None
    visibility_km: Annotated[float | None, _number(0.01, 400.0, "km")] = None
    contrast: Annotated[float, _number(-1.0, 100.0, "")] = -0.9
    lamp_intensity_cd: Annotated[float | None, _number(1.0, 1e9, "cd")] = None
    stand_heights_m: Annotated[
        list[Annotated[float, _number(0.0, 1000.0, "m")]] | None,
        Field(min_length=1, max_length=40, description="a list of 1 to 40 heights of 0 to 1000 m"),
    ] = None
    place: Annotated[
        list[_PlaceTable],
        Field(max_length=64, description="at most 64 tables, each [[sightline.place]]"),
    ] = []


class _Ingest(_Table):
    names: Annotated[
        dict[str, Annotated[str, Field(min_length=1, max_length=200)]],
        Field(max_length=100, description="'variable' or 'variable [unit]' for each role"),
    ] = {}


class SettingsFile(_Table):
    """The whole file."""

    run: _RunTable = _RunTable()
    site: Annotated[
        list[_SiteTable],
        Field(min_length=1, max_length=64, description="1 to 64 tables, each [[site]]"),
    ]
    sightline: Annotated[
        list[SightlineTable],
        Field(max_length=256, description="at most 256 tables, each [[sightline]]"),
    ] = []
    ingest: _Ingest = _Ingest()


_TABLES: dict[str, type[BaseModel]] = {
    "": SettingsFile,
    "run": _RunTable,
    "site": _SiteTable,
    "sightline": SightlineTable,
    "place": _PlaceTable,
    "ingest": _Ingest,
}


def check_table(
    table: dict[str, Any], text: str, base: Path
) -> tuple[SettingsFile | None, list[str]]:
    """Validate a settings table.

    Parameters
    ----------
    table : dict
        The parsed TOML.
    text : str
        The file's text, for line numbers.
    base : Path
        Folder that relative paths start from.

    Returns
    -------
    tables : SettingsFile or None
        Validated tables; None if there is a fault.
    faults : list of str
        One line per fault: key, line, what was found, what is allowed.
    """
    checked = None
    single: list[Any] = []
    try:
        checked = SettingsFile.model_validate(table)
    except ValidationError as error:
        single = list(error.errors(include_url=False))
    faults = faults_of(single, table, text, _TABLES, base)
    return (None if faults else checked), faults
