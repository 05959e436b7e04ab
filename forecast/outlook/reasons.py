"""Why something is likely, in sentences made of the numbers of one valid time."""

from __future__ import annotations

import numpy as np
import xarray as xr

from forecast.outlook.seeing_words import seeing_words
from forecast.physics.appearance import class_words
from forecast.physics.moisture import CELSIUS_OFFSET
from forecast.schema import (
    DUCT_KINDS,
    SIGHTLINE_STATES,
    SURFACE_REASONS,
    SURFACE_SOURCES,
    SURFACE_STATES,
)

__all__ = ["duct_reason", "limits", "sightline_reason", "view_sentence"]

_KIND_WORDS = {code: name.replace("_", " ") for name, code in DUCT_KINDS.items()}
_UNKNOWN_WORDS = {
    SURFACE_REASONS["none"]: "no reason is recorded",
    SURFACE_REASONS["no_surface_temperature"]: "no temperature of water or ground",
    SURFACE_REASONS["no_wind"]: "no wind",
    SURFACE_REASONS["no_level_near_surface"]: "no level between 8 and 60 m",
    SURFACE_REASONS["too_stable"]: "air too stable for any published function",
    SURFACE_REASONS["not_converged"]: "their equations did not settle",
}
_SOURCE_WORDS = {
    SURFACE_SOURCES["none"]: "source not recorded",
    SURFACE_SOURCES["settings"]: "temperature from the settings",
    SURFACE_SOURCES["series"]: "temperature from the series",
    SURFACE_SOURCES["profile"]: "temperature from the data",
}
_LOW_LAYER = 65.0  # m, the lowest layer for which Rec. ITU-R P.453 gives gradient statistics


def sightline_reason(outlook: xr.Dataset, row: int, item: int) -> str:
    """Why a sightline is likely open: hidden height now and usually, then the bending."""
    hidden = float(outlook["hidden_height"].values[row, item])
    low = float(outlook["hidden_height_lower"].values[row, item])
    high = float(outlook["hidden_height_upper"].values[row, item])
    standard = float(outlook["hidden_height_standard"].values[item])
    straight = float(outlook["hidden_height_straight"].values[item])
    top = float(outlook["target_height"].values[item])
    shown = f"the lowest {hidden:.0f} m are hidden" if hidden >= 0.5 else "nothing is hidden"
    parts = [
        f"{shown.capitalize()} (90 % of members {low:.0f} to {high:.0f} m) against "
        f"{standard:.0f} m in standard air and {straight:.0f} m with straight rays; "
        f"the target reaches {top:.0f} m."
    ]
    if top > straight:
        parts.append("It stands above the horizon even without refraction.")
    elif top > standard:
        parts.append("It is open in standard air too.")
    if str(outlook["sightline_wave"].values[item]) == "optical":
        inverted = int(outlook["inverted_images"].values[row, item])
        if inverted:
            images = inverted + int(outlook["upright_images"].values[row, item])
            parts.append(f"It appears in {images} images, {inverted} of them upside down.")
        parts.append(_warming(outlook, row))
        parts.append(seeing_words(outlook, row, item))
    parts.append(_surface(outlook, row))
    parts.append(_lowest_layer(outlook, row))
    # Only a duct that the path can enter explains anything.
    reach = max(top, float(outlook["observer_height"].values[item]))
    parts.append(_duct_sentence(outlook, row, base_under=reach))
    parts.append(limits(outlook, row))
    return " ".join(part for part in parts if part)


def view_sentence(outlook: xr.Dataset, row: int, item: int) -> str:
    """What shows of a target, where it appears and what it looks like."""
    state = int(outlook["sightline_state"].values[row, item])
    base = float(outlook["target_base_height"].values[item])
    top = float(outlook["target_height"].values[item])
    if state < 0:
        return "The air of that time says nothing about the sightline."
    if state == SIGHTLINE_STATES["shut"]:
        hidden = float(outlook["hidden_height"].values[row, item])
        lowest = f"all under {hidden:.0f} m is hidden there" if np.isfinite(hidden) else "no ray"
        return (
            f"Nothing shows of the target, which reaches {top:.0f} m: {lowest}."
            f"{_blocked(outlook, row, item)}"
        )
    blocked = _blocked(outlook, row, item)
    extent = float(outlook["visible_extent"].values[row, item])
    what = (
        f"{extent:.0f} of {top - base:.0f} m show"
        if top > base
        else f"the point at {top:.0f} m shows"
    )
    minutes = np.degrees(float(outlook["apparent_elevation"].values[row, item])) * 60.0
    side = "above" if minutes >= 0.0 else "below"
    parts = [f"{what}, the highest part {abs(minutes):.1f}′ {side} the horizontal"]
    lift = np.degrees(float(outlook["lift"].values[row, item])) * 60.0
    if np.isfinite(lift) and abs(lift) >= 0.05:
        parts.append(f"{abs(lift):.1f}′ {'higher' if lift > 0 else 'lower'} than in standard air")
    stretch = float(outlook["magnification"].values[row, item])
    if np.isfinite(stretch):
        parts.append(f"{stretch:.2f} times as high as in straight rays")
    clear = float(outlook["clear_height"].values[row, item])
    if np.isfinite(clear) and clear >= 0.5:
        parts.append(f"clear of the horizon (10″) from {clear:.0f} m up")
    change = 1e6 * float(outlook["arrival_change"].values[row, item])
    if np.isfinite(change) and abs(change) >= 1.0:
        parts.append(
            f"{abs(change):.0f} µrad {'above' if change > 0 else 'below'} the day's median"
        )
    words = class_words(int(outlook["appearance"].values[row, item]))
    told = f" ({', '.join(words)})" if words else ""
    sentence = f"{', '.join(parts)}{told}."
    if state == SIGHTLINE_STATES["grazing"]:
        return f"Barely: {sentence}{blocked}"
    return f"{sentence[0].upper()}{sentence[1:]}{blocked}"


def _blocked(outlook: xr.Dataset, row: int, item: int) -> str:
    """By which ground the lowest ray that might have passed is stopped."""
    at = float(outlook["blocked_by"].values[row, item])
    return "" if np.isnan(at) else f" Ground {at / 1e3:.1f} km from the observer is in the way."


def duct_reason(outlook: xr.Dataset, row: int, ceiling: float) -> str:
    """Why a duct under a ceiling (m) is likely."""
    duct = _duct_sentence(outlook, row, top_under=ceiling)
    if not duct:
        duct = (
            "The profile itself has no duct of the strength asked for here; it lies so near to one "
            "that most members do."
        )
    parts = [duct, _lowest_layer(outlook, row), limits(outlook, row)]
    return " ".join(part for part in parts if part)


def _warming(outlook: xr.Dataset, row: int) -> str:
    warming = float(outlook["near_ground_warming"].values[row])
    depth = float(outlook["near_ground_warming_depth"].values[row])
    if not warming > 0.1 or not depth > 0.0:
        return ""
    lowest = float(outlook["air_temperature"].values[row, 0]) - CELSIUS_OFFSET
    return f"Air warms by {warming:.1f} K in the lowest {depth:.0f} m (from {lowest:.1f} °C)."


def _surface(outlook: xr.Dataset, row: int) -> str:
    """What is known of the lowest metres, where the site says what its paths run over."""
    state = int(outlook["surface_layer_state"].values[row])
    if state == SURFACE_STATES["unknown"]:
        why = _UNKNOWN_WORDS[int(outlook["surface_layer_reason"].values[row])]
        return f"The lowest metres are not known ({why}): less sure."
    if state != SURFACE_STATES["modelled"]:
        return ""
    difference = float(outlook["air_sea_temperature_difference"].values[row])
    side = "colder" if difference >= 0.0 else "warmer"
    source = _SOURCE_WORDS[int(outlook["surface_source"].values[row])]
    return (
        f"The surface under the path is {abs(difference):.1f} K {side} than the air above it "
        f"({source}); the metres between are modelled."
    )


def _lowest_layer(outlook: xr.Dataset, row: int) -> str:
    """Mean radio gradient and k of the lowest 65 m, as P.453 counts them."""
    z = outlook["height"].values[row]
    n = outlook["refractivity"].values[row]
    good = np.isfinite(z) & np.isfinite(n)
    if good.sum() < 2 or z[good][-1] < z[good][0] + _LOW_LAYER:
        return ""
    z, n = z[good], n[good]
    slope = (np.interp(z[0] + _LOW_LAYER, z, n) - n[0]) / _LOW_LAYER  # N per m
    if slope >= 0.0:
        return f"For radio, N rises by {1e3 * slope:.0f} per km in the lowest {_LOW_LAYER:.0f} m."
    bend = 1.0 + 1e-6 * slope * float(outlook["earth_radius"].values[row])
    if bend <= 0.0:
        k = "level rays bend more than the Earth"
    else:
        k = f"k {1.0 / bend:.2f}" if bend > 0.1 else "k above 10"
    fall = f"N falls by {-1e3 * slope:.0f} per km in the lowest {_LOW_LAYER:.0f} m"
    return f"For radio, {fall} ({k})."


def _duct_sentence(
    outlook: xr.Dataset, row: int, *, top_under: float = np.inf, base_under: float = np.inf
) -> str:
    """Name the strongest radio duct of the profile whose top and base lie under the bounds."""
    strength = outlook["duct_strength"].values[row]
    top = outlook["duct_top"].values[row]
    least = float(outlook.attrs["minimum_duct_strength"])
    counts = (strength >= least) & (top <= top_under)
    counts &= outlook["duct_base"].values[row] <= base_under
    if not counts.any():
        return ""
    d = int(np.argmax(np.where(counts, strength, -np.inf)))
    kind = _KIND_WORDS[int(outlook["duct_kind"].values[row, d])]
    base = float(outlook["duct_base"].values[row, d])
    wavelength = float(outlook["longest_trapped_wavelength"].values[row, d])
    frequency = 299792458.0 / wavelength / 1e9
    held = f"{frequency:.1f} GHz" if frequency >= 1.0 else f"{1e3 * frequency:.0f} MHz"
    return (
        f"{kind.capitalize()} from {base:.0f} to {top[d]:.0f} m, {strength[d]:.0f} M-units strong, "
        f"holds radio waves above about {held}."
    )


def limits(outlook: xr.Dataset, row: int) -> str:
    """Say what the data cannot resolve."""
    lowest = float(outlook["lowest_level"].values[row])
    spacing = float(outlook["near_ground_resolution"].values[row])
    kind = "Ascent" if str(outlook["source_kind"].values[row]) == "ascent" else "Model profile"
    lead = outlook["lead_time"].values[row].astype("timedelta64[s]").astype(float) / 3600.0
    ahead = f", {lead:.0f} h ahead" if lead > 0 else ""
    return (
        f"{kind}{ahead}: lowest level at {lowest:.0f} m, then one every {spacing:.0f} m; "
        "thinner layers go unseen."
    )
