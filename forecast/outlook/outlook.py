"""From profiles to probabilities: ducts and sightlines, each with an interval, by valid time.

For each site and valid time one profile speaks: an ascent before a model profile, the shortest
lead time before longer ones. Its members (a model ensemble of eight or more as it is, otherwise
Monte Carlo draws) go through the same physics, and the probability is the share of members in
which the thing happens, with the central 90 % interval of its Beta posterior (Jeffreys' prior;
Brown, Cai & DasGupta 2001, Statistical Science 16, sect. 3.1.3), widened for coarse profiles.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from scipy.special import betaincinv

from forecast.errors import InputError
from forecast.outlook import members as draws
from forecast.outlook.duct_events import duct_cover, duct_under
from forecast.physics.column_batch import analyse_columns
from forecast.physics.columns import duct_dataset
from forecast.physics.curvature import classify_layers, ray_curvature
from forecast.physics.earth import euler_radius
from forecast.physics.rays import build_medium
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import standard_medium, trace_sightlines
from forecast.schema import CAUTION, CEILINGS_M, SIGHTLINE_STATES, describe

if TYPE_CHECKING:
    from forecast.settings import Settings, Sightline

__all__ = ["make_outlook", "probability_interval"]

_SMALLEST_ENSEMBLE = 8
_CHUNK_VALUES = 3_000_000  # member values worked on at once; bounds memory to some 300 MB
_NEAR_GROUND = 300.0  # m
_STATE = ("height", "air_pressure", "air_temperature", "specific_humidity")

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class _Row:
    """One valid time of a site: the profile that speaks, and its ensemble if it has one."""

    index: int
    ensemble: tuple[int, ...]


def probability_interval(hits: Any, trials: Any) -> tuple[np.ndarray, np.ndarray]:
    """Central 90 % interval of a probability from hits in trials (Jeffreys' prior).

    Parameters
    ----------
    hits, trials : array_like
        Counts; trials may be a fractional effective number.

    Returns
    -------
    tuple of ndarray
        5 % and 95 % quantiles of the Beta(hits + ½, trials − hits + ½) posterior; the lower is 0
        without a hit and the upper 1 without a miss.
    """
    k = np.asarray(hits, dtype=float)
    n = np.asarray(trials, dtype=float)
    lower = np.where(k <= 0.0, 0.0, betaincinv(k + 0.5, n - k + 0.5, 0.05))
    upper = np.where(k >= n, 1.0, betaincinv(k + 0.5, n - k + 0.5, 0.95))
    missing = np.isnan(k)
    return np.where(missing, np.nan, lower), np.where(missing, np.nan, upper)


def make_outlook(
    profiles: xr.Dataset, settings: Settings, progress: Progress | None = None
) -> xr.Dataset:
    """Probabilities of ducts and open sightlines for every site and valid time.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles (profile, level) with the coordinate ``site``; without it the station is the
        site.
    settings : forecast.settings.Settings
        Members, seed, thresholds, sightlines.
    progress : callable, optional
        Called with (done, total, label).

    Returns
    -------
    xarray.Dataset
        One row per site and valid time: refraction and ducts of the profile itself, sightlines,
        probabilities with intervals.

    Raises
    ------
    InputError
        If no profile is left.
    """
    if profiles.sizes.get("profile", 0) == 0:
        raise InputError("no profile to work on", source="make_outlook")
    if "site" not in profiles.coords:
        profiles = profiles.assign_coords(site=("profile", profiles["station"].values.astype(str)))
    rows = _speaking_rows(profiles)
    lines = list(settings.sightlines)
    state, valid_top = _usable_levels(profiles, _reach(settings, lines))
    chosen = profiles.isel(profile=[row.index for row in rows])
    guess = {name: a[[row.index for row in rows]] for name, a in state.items()}
    tops = valid_top[[row.index for row in rows]]
    site = chosen["site"].values.astype(str)
    latitude = chosen["latitude"].values.astype(float)
    radius = euler_radius(latitude)

    data = _best_guess(guess, radius, settings.chart_top)
    data.update(_sightline_geometry(lines, latitude, site))
    data.update(_trace(lines, guess, latitude, site))
    data.update(_resolution(guess))
    data.update(_member_statistics(profiles, state, rows, lines, data, tops, settings, progress))

    coords = {name: c for name, c in chosen.coords.items() if c.dims == ("profile",)}
    coords.pop("member", None)
    outlook = xr.Dataset(data, coords=coords)
    outlook = outlook.assign_coords(
        ceiling=("ceiling", np.array(CEILINGS_M)),
        height_bin=("height_bin", _height_bins(settings.chart_top)),
        sightline_name=("sightline", np.array([line.name for line in lines], dtype=str)),
        sightline_site=("sightline", np.array([line.site for line in lines], dtype=str)),
        sightline_wave=("sightline", np.array([line.wave for line in lines], dtype=str)),
    )
    outlook.attrs = {
        "title": settings.title,
        "source": "radiosonde ascents and model profiles; refraction computed by bendcast",
        "calibration": "uncalibrated",
        "error_model": _error_model_text(settings),
        "minimum_duct_strength": settings.minimum_duct_strength,
        "caution": CAUTION,
    }
    return describe(outlook)


def _speaking_rows(profiles: xr.Dataset) -> list[_Row]:
    """One row per (site, time), sorted by both."""
    site = profiles["site"].values.astype(str)
    station = profiles["station"].values.astype(str)
    time = profiles["time"].values
    model = profiles["source_kind"].values.astype(str) != "ascent"
    lead = profiles["lead_time"].values.astype("timedelta64[s]").astype(float)
    groups: dict[tuple[str, Any], list[int]] = {}
    for i in range(time.size):
        groups.setdefault((site[i], time[i]), []).append(i)
    member = profiles["member"].values if "member" in profiles.coords else np.full(time.size, 0)
    rows = []
    for key in sorted(groups):
        best = min(groups[key], key=lambda i: (model[i], lead[i], station[i], i))
        same = [
            i
            for i in groups[key]
            if model[i] and (lead[i], station[i]) == (lead[best], station[best])
        ]
        same.sort(key=lambda i: member[i])
        whole = tuple(same) if model[best] and len(same) >= _SMALLEST_ENSEMBLE else ()
        rows.append(_Row(best, whole))
    return rows


def _reach(settings: Settings, lines: list[Sightline]) -> float:
    """Height up to which rays and charts need the air, m."""
    # A ray that grazes the surface half-way stands d²/2a above it at the far end.
    far = [line.target_height + line.observer_height + line.distance**2 / 12.0e6 for line in lines]
    return max(settings.chart_top, max(CEILINGS_M), *far, 0.0) * 1.05


def _usable_levels(profiles: xr.Dataset, reach: float) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Pack each profile's complete levels to the front and cut them above `reach`.

    Returns the state arrays (profile, level) and the height of each profile's highest usable
    level before the cut.
    """
    arrays = {
        name: profiles[name].transpose("profile", "level").values.astype(float) for name in _STATE
    }
    valid = np.logical_and.reduce([np.isfinite(a) for a in arrays.values()])
    height = np.where(valid, arrays["height"], -np.inf)
    tops = height.max(axis=1)
    # One level beyond the reach stays, so that the layer across it is known.
    beyond = np.cumsum(valid & (height > reach), axis=1)
    valid &= beyond <= 1
    order = np.argsort(~valid, axis=1, kind="stable")[:, : max(2, int(valid.sum(axis=1).max()))]
    packed = np.take_along_axis(valid, order, axis=1)
    return {
        name: np.where(packed, np.take_along_axis(a, order, axis=1), np.nan)
        for name, a in arrays.items()
    }, tops


def _best_guess(
    guess: dict[str, np.ndarray], radius: np.ndarray, chart_top: float
) -> dict[str, Any]:
    """Radio refraction and ducts of the profiles themselves, cut just above the chart."""
    z = guess["height"]
    batch = analyse_columns(
        guess["air_pressure"], guess["air_temperature"], guess["specific_humidity"], z, radius
    )
    top = max(chart_top, max(CEILINGS_M))
    keep = max(2, int(np.max(np.sum(z <= top, axis=1))) + 1)
    gradient = batch.refractivity_gradient
    level = {
        "height": z,
        "air_temperature": guess["air_temperature"],
        "refractivity": batch.refractivity,
        "modified_refractivity": batch.modified_refractivity,
        "refractivity_gradient": gradient,
        "ray_curvature": ray_curvature(gradient, batch.refractivity),
        "effective_earth_radius_factor": batch.effective_earth_radius_factor,
        "layer_class": classify_layers(gradient, radius[:, None]),
    }
    data: dict[str, Any] = {name: (("profile", "level"), a[:, :keep]) for name, a in level.items()}
    data["earth_radius"] = ("profile", radius)
    data.update({str(k): v.variable for k, v in duct_dataset(batch.ducts, {}).data_vars.items()})
    return data


def _resolution(guess: dict[str, np.ndarray]) -> dict[str, Any]:
    """What the profile can resolve near the ground, and how the air warms there."""
    z, t = guess["height"], guess["air_temperature"]
    low = z <= z[:, :1] + _NEAR_GROUND
    low[:, 1] = np.isfinite(z[:, 1])  # the first layer counts, however thick
    count = low.sum(axis=1)
    highest = np.where(low, z, -np.inf).max(axis=1)
    spacing = (highest - z[:, 0]) / np.maximum(count - 1, 1)
    warmest = np.argmax(np.where(low, t, -np.inf), axis=1)
    row = np.arange(z.shape[0])
    return {
        "lowest_level": ("profile", z[:, 0]),
        "near_ground_resolution": ("profile", spacing),
        "near_ground_warming": ("profile", t[row, warmest] - t[:, 0]),
        "near_ground_warming_depth": ("profile", z[row, warmest] - z[:, 0]),
    }


def _sightline_geometry(
    lines: list[Sightline], latitude: np.ndarray, site: np.ndarray
) -> dict[str, Any]:
    """Geometry of the sightlines, and what straight rays and standard air would show."""
    geometry: dict[str, Any] = {
        name: ("sightline", np.array([getattr(line, name) for line in lines], dtype=float))
        for name in (
            "observer_height",
            "target_height",
            "target_base_height",
            "distance",
            "azimuth",
        )
    }
    for label in ("straight", "standard"):
        hidden = np.full(len(lines), np.nan)
        elevation = np.full(len(lines), np.nan)
        for i, line in enumerate(lines):
            here = latitude[site == line.site]
            radius = float(euler_radius(np.mean(here) if here.size else 45.0, line.azimuth))
            air = standard_medium(line.wave if label == "standard" else "straight", radius)
            table = trace_sightlines(
                air, line.observer_height, line.target_height, line.distance,
                line.target_base_height,
            )  # fmt: skip
            hidden[i] = table.hidden_height[0, 0]
            elevation[i] = table.apparent_elevation[0, 0]
        geometry[f"hidden_height_{label}"] = ("sightline", hidden)
        geometry[f"apparent_elevation_{label}"] = ("sightline", elevation)
    return geometry


def _trace(
    lines: list[Sightline], state: dict[str, np.ndarray], latitude: np.ndarray, site: np.ndarray
) -> dict[str, Any]:
    """Every sightline through the columns of its own site; columns may be rows or members."""
    shape = (site.size, len(lines))
    codes = np.full(shape, -1, dtype=np.int8)
    floats = {
        name: np.full(shape, np.nan)
        for name in ("hidden_height", "visible_extent", "apparent_elevation")
    }
    refractivity: dict[tuple[str, str, float], np.ndarray] = {}
    for i, line in enumerate(lines):
        own = np.flatnonzero(site == line.site)
        if own.size == 0:
            continue
        air = {name: a[own] for name, a in state.items()}
        key = (line.site, line.wave, line.wavelength if line.wave == "optical" else 0.0)
        if key not in refractivity:
            refractivity[key] = _refractivity(air, line)
        medium = build_medium(
            air["height"], refractivity[key], euler_radius(latitude[own], line.azimuth), line.wave
        )
        table = trace_sightlines(
            medium, line.observer_height, line.target_height, line.distance,
            line.target_base_height,
        )  # fmt: skip
        codes[own, i] = table.state[:, 0]
        for name, values in floats.items():
            values[own, i] = getattr(table, name)[:, 0]
    both = ("profile", "sightline")
    return {"sightline_state": (both, codes), **{n: (both, a) for n, a in floats.items()}}


def _refractivity(air: dict[str, np.ndarray], line: Sightline) -> np.ndarray:
    p, t, q = (air[name] for name in _STATE[1:])
    if line.wave == "optical":
        return optical_refractivity(p, t, q, line.wavelength)
    return analyse_columns(p, t, q, air["height"], 6371e3).refractivity


def _height_bins(chart_top: float) -> np.ndarray:
    """Heights at which the likelihood of being inside a duct is told, m: finer near the ground."""
    low = np.arange(0.0, min(300.0, chart_top), 10.0)
    return np.concatenate([low, np.arange(low[-1] + 10.0, chart_top + 1.0, 25.0)])


def _member_statistics(
    profiles: xr.Dataset,
    state: dict[str, np.ndarray],
    rows: list[_Row],
    lines: list[Sightline],
    data: dict[str, Any],
    tops: np.ndarray,
    settings: Settings,
    progress: Progress | None,
) -> dict[str, Any]:
    """Shares of members in which ducts lie under the ceilings and sightlines are open."""
    site = profiles["site"].values.astype(str)
    latitude = profiles["latitude"].values.astype(float)
    bins = _height_bins(settings.chart_top)
    ceilings = np.array(CEILINGS_M)
    n_rows = len(rows)
    duct_hits = np.full((n_rows, ceilings.size), np.nan)
    cover = np.full((n_rows, bins.size), np.nan)
    open_hits = np.full((n_rows, len(lines)), np.nan)
    hidden_low = np.full((n_rows, len(lines)), np.nan)
    hidden_high = np.full((n_rows, len(lines)), np.nan)
    count = np.array([len(r.ensemble) or settings.members for r in rows])
    levels = state["height"].shape[1]
    step = max(1, _CHUNK_VALUES // (int(count.max()) * levels))
    done = 0
    while done < n_rows:
        part = rows[done : done + step]
        batch, owner = _member_columns(profiles, state, part, settings)
        row_site = site[[r.index for r in part]][owner]
        row_latitude = latitude[[r.index for r in part]][owner]
        columns = analyse_columns(
            batch["air_pressure"], batch["air_temperature"], batch["specific_humidity"],
            batch["height"], euler_radius(row_latitude),
        )  # fmt: skip
        found = duct_under(columns.ducts, ceilings, settings.minimum_duct_strength)
        inside = duct_cover(columns.ducts, bins, settings.minimum_duct_strength)
        traced = _trace(lines, batch, row_latitude, row_site)
        is_open = traced["sightline_state"][1] == SIGHTLINE_STATES["open"]
        hidden = traced["hidden_height"][1]
        for k in range(len(part)):
            mine = owner == k
            duct_hits[done + k] = found[mine].sum(axis=0)
            cover[done + k] = inside[mine].mean(axis=0)
            for i, line in enumerate(lines):
                if row_site[mine][0] == line.site:
                    open_hits[done + k, i] = is_open[mine, i].sum()
                    hidden_low[done + k, i], hidden_high[done + k, i] = np.quantile(
                        hidden[mine, i], (0.05, 0.95)
                    )
        done += len(part)
        if progress is not None:
            progress(done, n_rows, "members")
    # A profile cut short cannot tell of ducts it does not reach.
    duct_hits[tops[:, None] < ceilings] = np.nan
    cover[tops[:, None] < bins] = np.nan
    rule = draws.error_model()["interval"]
    share = np.minimum(1.0, rule["spacing"] / np.maximum(data["near_ground_resolution"][1], 1e-3))
    sure = np.maximum(np.minimum(rule["fewest"], count), count * share)
    out: dict[str, Any] = {"member_count": ("profile", count.astype(np.int32))}
    for name, hits, dim in (("duct", duct_hits, "ceiling"), ("sightline", open_hits, "sightline")):
        chance = hits / count[:, None]
        lower, upper = probability_interval(chance * sure[:, None], sure[:, None])
        out[f"{name}_probability"] = (("profile", dim), chance)
        out[f"{name}_probability_lower"] = (("profile", dim), np.minimum(lower, chance))
        out[f"{name}_probability_upper"] = (("profile", dim), np.maximum(upper, chance))
    out["duct_likelihood"] = (("profile", "height_bin"), cover)
    out["hidden_height_lower"] = (("profile", "sightline"), hidden_low)
    out["hidden_height_upper"] = (("profile", "sightline"), hidden_high)
    return out


def _member_columns(
    profiles: xr.Dataset, state: dict[str, np.ndarray], rows: list[_Row], settings: Settings
) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Members of some rows as one batch of columns, and which row each belongs to."""
    parts: dict[str, list[np.ndarray]] = {name: [] for name in _STATE}
    owner: list[np.ndarray] = []
    drawn = [k for k, row in enumerate(rows) if not row.ensemble]
    if drawn:
        index = [rows[k].index for k in drawn]
        some = profiles.isel(profile=index)
        lead = some["lead_time"].values.astype("timedelta64[s]").astype(float) / 86400.0
        kind = some["source_kind"].values.astype(str)
        identity = [
            f"{st}|{np.datetime_as_string(tm, 's')}|{kd}|{ld}"
            for st, tm, kd, ld in zip(
                some["station"].values, some["time"].values, kind, lead, strict=True
            )
        ]
        sizes = [draws.error_sizes(k, ld) for k, ld in zip(kind, lead, strict=True)]
        batch = draws.perturb(
            state["height"][index],
            state["air_pressure"][index],
            state["air_temperature"][index],
            state["specific_humidity"][index],
            sizes,
            identity,
            settings.members,
            settings.seed,
        )
        for name in _STATE:
            a = getattr(batch, name)
            parts[name].append(a.reshape(-1, a.shape[-1]))
        owner.append(np.repeat(drawn, settings.members))
    for k, row in enumerate(rows):
        if row.ensemble:
            for name in _STATE:
                parts[name].append(state[name][list(row.ensemble)])
            owner.append(np.full(len(row.ensemble), k))
    return {name: np.concatenate(a) for name, a in parts.items()}, np.concatenate(owner)


def _error_model_text(settings: Settings) -> str:
    ascent = draws.error_sizes("ascent", 0.0)
    model = draws.error_sizes("model", 0.0)
    growth = draws.error_model()["model"]["growth_per_day"]
    return (
        f"{settings.members} Monte Carlo members, seed {settings.seed}; standard deviations: "
        f"ascent {ascent.temperature:.2f} K, {100 * ascent.relative_humidity:.1f} % relative "
        f"humidity, layers displaced by {ascent.displacement:.0f} m; model "
        f"{model.temperature:.2f} K, {100 * model.relative_humidity:.1f} %, "
        f"{model.displacement:.0f} m, growing by {100 * growth:.0f} % a day"
    )
