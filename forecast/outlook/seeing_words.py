"""Whether a target could be seen, in a sentence that is no surer than the numbers behind it."""

from __future__ import annotations

import numpy as np
import xarray as xr

from forecast.outlook.seeing import bounded
from forecast.physics.sun import CIVIL_TWILIGHT, SUNRISE
from forecast.schema import TWILIGHT_CLASSES, VISUAL_RANGE_SOURCES, WEATHER_ON_PATH

__all__ = ["SUN_WARNING", "seeing_words"]

#: Angle (degrees) between target and Sun under which the words warn; ours, no source.
SUN_WARNING = 10.0

_LIGHT_WORDS = {code: name.replace("_", " ") for name, code in TWILIGHT_CLASSES.items()}
_SOURCE_WORDS = {
    VISUAL_RANGE_SOURCES["settings"]: "by the visibility of the settings",
    VISUAL_RANGE_SOURCES["profile"]: "by the visibility of the data",
    VISUAL_RANGE_SOURCES["humidity"]: "through haze guessed from humidity alone",
}
_BOTH = ("profile", "sightline")


def seeing_words(outlook: xr.Dataset, row: int, item: int) -> str:
    """Say what Sun, haze and fog leave to be seen; never more surely than it is known.

    Parameters
    ----------
    outlook : xarray.Dataset
        With the variables of `seeing_conditions`, ``azimuth``, ``distance``, ``sightline_wave``.
    row, item : int
        Position along ``profile`` and ``sightline``.

    Returns
    -------
    str
        One sentence, and a second one if the Sun stands near the target; empty for radio.
    """
    if str(outlook["sightline_wave"].values[item]) != "optical":
        return ""
    value = {
        str(name): float(a.values[row, item] if a.ndim == 2 else a.values[row])
        for name, a in outlook.data_vars.items()
        if a.dims in (_BOTH, ("profile",)) and a.dtype.kind in "fiu"
    }
    value["azimuth"] = float(outlook["azimuth"].values[item])
    value["distance"] = float(outlook["distance"].values[item])
    said = [_sun_words(value), _range_words(value), _weather_words(value)]
    words = "; ".join(said) + "."
    up = value["sun_altitude"] >= SUNRISE
    if up and value["sun_separation"] < SUN_WARNING:
        words += (
            f" The Sun stands {value['sun_separation']:.0f}° from the target: never point optics "
            "near the Sun."
        )
    elif up and not np.isfinite(value["azimuth"]):
        words += " Without an azimuth nothing warns of a Sun near the target."
    return words


def _sun_words(value: dict[str, float]) -> str:
    altitude = value["sun_altitude"]
    light = _LIGHT_WORDS.get(int(value["twilight_class"]))
    if light is None:
        return "Where the Sun stands is not known"
    side = "above" if altitude >= 0.0 else "below"
    where = f"Sun {abs(altitude):.0f}° {side} the horizon"
    head = where if light == "day" else f"{light.capitalize()}, {where}"
    if light in ("night", "astronomical twilight") or not np.isfinite(value["azimuth"]):
        return head
    turn = (value["sun_azimuth"] - value["azimuth"] + 180.0) % 360.0 - 180.0
    if abs(turn) > 150.0:
        return f"{head}, behind the observer"
    hand = "right" if turn >= 0.0 else "left"
    return f"{head}, {abs(turn):.0f}° {hand} of the target"


def _range_words(value: dict[str, float]) -> str:
    """How far one sees against how far the target is."""
    source = _SOURCE_WORDS.get(int(value["visual_range_source"]))
    if source is None:
        return "how far haze lets one see is not known"
    dark = value["sun_altitude"] < CIVIL_TWILIGHT
    lamp = value["lamp_range"] > (0.0 if dark else value["target_range"])
    if dark and not lamp:
        return "too dark to tell an unlit target from the sky"
    what, name = ("its lamp", "lamp_range") if lamp else ("this target", "target_range")
    if not np.isfinite(value["sun_altitude"]):
        what += " by day"
    best, low, high = (value[bound] for bound in bounded((name,)))
    far = value["distance"]
    if far > high:
        verdict = "too far"
    elif value["weather_on_path"] == WEATHER_ON_PATH["saturated_level"]:
        verdict = "perhaps near enough, and only without fog"
    else:
        verdict = "near enough" if far <= low else "perhaps near enough"
    words = (
        f"{source}, {what} shows out to some {_about(best)} ({_about(low)} to {_about(high)}), "
        f"and is {_about(far, 3)} away: {verdict}"
    )
    if not lamp and far > value["visual_range_limit"]:
        words += f" (even clean air ends sight at {_about(value['visual_range_limit'])})"
    return words


def _weather_words(value: dict[str, float]) -> str:
    humidity = f"{100.0 * value['path_relative_humidity']:.0f} %"
    code = int(value["weather_on_path"])
    if code == WEATHER_ON_PATH["saturated_level"]:
        words = f"the ray crosses saturated air ({humidity}), fog or low cloud is likely"
    elif code == WEATHER_ON_PATH["near_saturation"]:
        words = f"the ray crosses air near saturation ({humidity}), fog or low cloud is possible"
    elif code == WEATHER_ON_PATH["no_saturated_level"]:
        words = f"no saturated air at the heights of the ray (at most {humidity})"
    else:
        words = "fog and low cloud are not known (no level near the heights of the ray)"
    counted = (VISUAL_RANGE_SOURCES["settings"], VISUAL_RANGE_SOURCES["profile"])
    known = value["visual_range_source"] in counted
    return words if known else f"{words}, rain and snow are not known"


def _about(length: float, digits: int = 2) -> str:
    """A length, rounded: ranges are not known better than to two digits."""
    if length >= 1e4:
        return f"{float(f'{1e-3 * length:.{digits}g}'):.0f} km"
    return f"{1e-3 * length:.1f} km" if length >= 1e3 else f"{float(f'{length:.2g}'):.0f} m"
