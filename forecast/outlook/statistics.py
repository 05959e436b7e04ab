"""Shares of members in which things happen, with intervals: the probabilities of the outlook."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from forecast.outlook import members as draws
from forecast.outlook.along import Stations, member_stations
from forecast.outlook.duct_events import duct_cover, duct_under
from forecast.outlook.intervals import probability_interval
from forecast.outlook.sightlines import trace_paths
from forecast.outlook.speaking import Row, Speaking
from forecast.outlook.stand import StandShares, join_shares, stand_geometry, stand_shares
from forecast.outlook.stand_choice import known_from, stand_statistics
from forecast.outlook.surface import STATE_NAMES, draw_errors, lay_surface
from forecast.outlook.surroundings import NOTHING_AROUND, Surroundings
from forecast.physics.column_batch import analyse_columns
from forecast.physics.earth import euler_radius
from forecast.schema import CEILINGS_M, SIGHTLINE_STATES, SURFACE_REASONS, SURFACE_STATES

if TYPE_CHECKING:
    from forecast.settings import Settings, Sightline

__all__ = ["Progress", "height_bins", "member_statistics"]

_CHUNK_VALUES = 3_000_000  # member values worked on at once; bounds memory to some 300 MB

#: Called with (done, total, label).
Progress = Callable[[int, int, str], None]


def height_bins(chart_top: float) -> np.ndarray:
    """Heights at which the likelihood of being inside a duct is told, m: finer near the ground."""
    low = np.arange(0.0, min(300.0, chart_top), 10.0)
    return np.concatenate([low, np.arange(low[-1] + 10.0, chart_top + 1.0, 25.0)])


def member_statistics(
    told: Speaking,
    lines: list[Sightline],
    data: dict[str, Any],
    settings: Settings,
    progress: Progress | None,
    around: Surroundings = NOTHING_AROUND,
) -> dict[str, Any]:
    """Shares of members in which ducts lie under the ceilings and sightlines are open."""
    profiles, state, water, rows = told.profiles, told.state, told.water, told.rows
    site = profiles["site"].values.astype(str)
    latitude = profiles["latitude"].values.astype(float)
    bins = height_bins(settings.chart_top)
    ceilings = np.array(CEILINGS_M)
    n_rows = len(rows)
    duct_hits = np.full((n_rows, ceilings.size), np.nan)
    cover = np.full((n_rows, bins.size), np.nan)
    open_hits = np.full((n_rows, len(lines)), np.nan)
    reasons = np.zeros((n_rows, len(SURFACE_REASONS)), dtype=np.int32)
    hidden_low = np.full((n_rows, len(lines)), np.nan)
    hidden_high = np.full((n_rows, len(lines)), np.nan)
    count = np.array([len(r.ensemble) or settings.members for r in rows])
    levels = state["height"].shape[1]
    step = max(1, _CHUNK_VALUES // (int(count.max()) * levels))
    stands: list[StandShares] = []
    done = 0
    while done < n_rows:
        part = rows[done : done + step]
        # Rows of other sites come along where they stand for the air on the way.
        index = np.arange(done, min(done + step, n_rows))
        beside = np.setdiff1d(_on_the_way(told.stations, index), index)
        index = np.concatenate([index, beside])
        with_beside = [rows[i] for i in index]
        batch, owner, errors = _member_columns(profiles, state, with_beside, settings)
        row_site = site[[r.index for r in with_beside]][owner]
        row_latitude = latitude[[r.index for r in with_beside]][owner]
        row_site[owner >= len(part)] = ""
        stations = member_stations(told.stations, index, owner)
        columns = analyse_columns(
            batch["air_pressure"], batch["air_temperature"], batch["specific_humidity"],
            batch["height"], euler_radius(row_latitude),
        )  # fmt: skip
        found = duct_under(columns.ducts, ceilings, settings.minimum_duct_strength)
        inside = duct_cover(columns.ducts, bins, settings.minimum_duct_strength)
        below = water.take([r.index for r in with_beside]).take(owner)
        laid = lay_surface(batch, below, errors)
        traced = trace_paths(lines, laid.air, row_latitude, row_site, stations, around)
        if lines:
            stands.append(
                stand_shares(
                    lines, laid.air, row_latitude, row_site, owner, len(part), stations, around
                )
            )
        is_open = traced["sightline_state"][1] == SIGHTLINE_STATES["open"]
        hidden = traced["hidden_height"][1]
        for k in range(len(part)):
            mine = owner == k
            duct_hits[done + k] = found[mine].sum(axis=0)
            cover[done + k] = inside[mine].mean(axis=0)
            reasons[done + k] = np.bincount(laid.reason[mine], minlength=reasons.shape[1])
            for i, line in enumerate(lines):
                if row_site[mine][0] == line.site and line.name not in around.blind:
                    open_hits[done + k, i] = is_open[mine, i].sum()
                    hidden_low[done + k, i], hidden_high[done + k, i] = np.quantile(
                        hidden[mine, i], (0.05, 0.95)
                    )
        done += len(part)
        if progress is not None:
            progress(done, n_rows, "members")
    # A profile cut short cannot tell of ducts it does not reach.
    duct_hits[told.tops[:, None] < ceilings] = np.nan
    cover[told.tops[:, None] < bins] = np.nan
    rule = draws.error_model()["interval"]
    share = np.minimum(1.0, rule["spacing"] / np.maximum(data["near_ground_resolution"][1], 1e-3))
    fewest = np.minimum(rule["fewest"], count)
    sure = np.maximum(fewest, count * share)
    # A path over water whose lowest metres are not known is as unsure as can be.
    blind = data["surface_layer_state"][1] == SURFACE_STATES["unknown"]
    # Members without a surface layer, and stable functions that do not hold, are no evidence.
    known = reasons[:, SURFACE_REASONS["none"]] / count * data["surface_function_share"][1]
    surest = {"duct": sure, "sightline": np.where(blind, fewest, np.maximum(fewest, sure * known))}
    out: dict[str, Any] = {"member_count": ("profile", count.astype(np.int32))}
    for name, hits, dim in (("duct", duct_hits, "ceiling"), ("sightline", open_hits, "sightline")):
        sure = surest[name]
        chance = hits / count[:, None]
        lower, upper = probability_interval(chance * sure[:, None], sure[:, None])
        out[f"{name}_probability"] = (("profile", dim), chance)
        out[f"{name}_probability_lower"] = (("profile", dim), np.minimum(lower, chance))
        out[f"{name}_probability_upper"] = (("profile", dim), np.maximum(upper, chance))
    if lines:
        judged = known_from(data["surface_layer_state"][1], data["lowest_level"][1])
        out.update(stand_geometry(lines))
        out.update(stand_statistics(lines, join_shares(stands), surest["sightline"], judged))
    for label, why in (("unconverged", "not_converged"), ("too_stable", "too_stable")):
        out[f"surface_layer_{label}"] = ("profile", reasons[:, SURFACE_REASONS[why]])
    out["duct_likelihood"] = (("profile", "height_bin"), cover)
    out["hidden_height_lower"] = (("profile", "sightline"), hidden_low)
    out["hidden_height_upper"] = (("profile", "sightline"), hidden_high)
    return out


def _on_the_way(stations: Mapping[int, Stations], index: np.ndarray) -> np.ndarray:
    """Rows that stand for the air on the way of these."""
    parts = [at.column[index].ravel() for at in stations.values()]
    rows = np.unique(np.concatenate([*parts, np.zeros(0, dtype=int)]))
    return rows[rows >= 0]


def _member_columns(
    profiles: xr.Dataset, state: dict[str, np.ndarray], rows: list[Row], settings: Settings
) -> tuple[dict[str, np.ndarray], np.ndarray, np.ndarray]:
    """Members of some rows as one batch of columns, which row each belongs to, surface errors."""
    parts: dict[str, list[np.ndarray]] = {name: [] for name in STATE_NAMES}
    owner: list[np.ndarray] = []
    some = profiles.isel(profile=[row.index for row in rows])
    lead = some["lead_time"].values.astype("timedelta64[s]").astype(float) / 86400.0
    kind = some["source_kind"].values.astype(str)
    identity = [
        f"{st}|{np.datetime_as_string(tm, 's')}|{kd}|{ld}"
        for st, tm, kd, ld in zip(
            some["station"].values, some["time"].values, kind, lead, strict=True
        )
    ]
    drawn = [k for k, row in enumerate(rows) if not row.ensemble]
    if drawn:
        index = [rows[k].index for k in drawn]
        batch = draws.perturb(
            state["height"][index],
            state["air_pressure"][index],
            state["air_temperature"][index],
            state["specific_humidity"][index],
            [draws.error_sizes(kind[k], lead[k]) for k in drawn],
            [identity[k] for k in drawn],
            settings.members,
            settings.seed,
        )
        for name in STATE_NAMES:
            a = getattr(batch, name)
            parts[name].append(a.reshape(-1, a.shape[-1]))
        owner.append(np.repeat(drawn, settings.members))
    for k, row in enumerate(rows):
        if row.ensemble:
            for name in STATE_NAMES:
                parts[name].append(state[name][list(row.ensemble)])
            owner.append(np.full(len(row.ensemble), k))
    of_row = np.concatenate(owner)
    errors = np.empty((3, of_row.size))
    for k in range(len(rows)):
        mine = of_row == k
        errors[:, mine] = draw_errors(identity[k], int(mine.sum()), settings.seed)
    return {name: np.concatenate(a) for name, a in parts.items()}, of_row, errors
