#!/usr/bin/env python3
"""What a sounding's coarseness costs a sightline near the ground, and what the surface layer mends.

Invented fine profiles of four kinds are thinned out to what a radiosonde and a model keep of them;
hidden heights, states of sightlines and ducts are compared with those of the fine profile, with and
without the surface layer that the outlook puts back. Prints the Markdown tables that the page
about trust near the ground quotes. Nothing is random from run to run.

    python scripts/resolution_experiment.py [--cases N]
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from forecast.outlook.members import error_model
from forecast.outlook.surface import SurfaceInputs, lay_surface
from forecast.physics.curvature import modified_refractivity
from forecast.physics.ducts import find_ducts
from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.rays import Medium, build_medium, trace_rays
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import LARGEST_SQUEEZE, standard_medium, trace_sightlines
from forecast.physics.stability import STABLE_FUNCTIONS
from forecast.physics.surface_join import SURFACE_HEIGHTS
from forecast.physics.surface_layer import SurfaceLayer, solve_land, solve_sea, surface_profile
from forecast.schema import SIGHTLINE_STATES, SURFACE_STATES

Array = NDArray[np.float64]

SEED = 20310501
CASES = 52
KINDS = ("cold water", "warm water", "cold ground", "inversion aloft")
EYES = np.array([4.0, 10.0, 30.0])  # m
DISTANCE = 30e3  # m
#: Heights of the fine profiles, m.
FINE = np.r_[
    np.geomspace(0.02, 0.8, 9), np.arange(1.0, 20.0, 0.5), np.arange(20.0, 60.0, 1.0),
    np.arange(60.0, 400.0, 4.0), np.geomspace(400.0, 3000.0, 40),
]  # fmt: skip
_EVEN = np.arange(1.0, 3000.0)  # m, what instruments and averages are taken from
_MATCHED = 20.0  # m: the surface layer of the fine profiles ends here
_ASCENT = 5.0  # m/s
_STEP = np.array([10.0, 26.0, 36.0, 48.0, 60.0, 75.0, 90.0, 110.0, 135.0, 160.0, 190.0, 220.0,
                  260.0, 300.0, 340.0, 390.0, 450.0])  # fmt: skip  # m, between model levels
_ARCSECOND = np.radians(1.0 / 3600.0)
_STRONG = 0.2  # M-units; weaker ducts are left out of the count


class Column(NamedTuple):
    """Air of one case: heights (m), pressure (Pa), temperature (K), specific humidity (kg/kg)."""

    z: Array
    p: Array
    t: Array
    q: Array


class Case(NamedTuple):
    """A fine profile, and what is known of its surface."""

    kind: str
    air: Column
    skin: float
    wind: float
    roughness: float


# --- Fine profiles -------------------------------------------------------------------------------


def fine_case(kind: str, rng: np.random.Generator) -> Case:
    """Invent a fine profile.

    Up to 20 m the air follows similarity theory with one of the three stable functions, drawn; from
    there potential temperature and humidity run on with the same gradient, which dies out over some
    tens of metres. Over cold surfaces wisps of up to 0.2 K lie above, aloft an inversion.
    """
    while True:
        wind = rng.uniform(3.5, 8.0)
        difference = {
            "cold water": rng.uniform(3.0, 6.0),
            "warm water": -rng.uniform(1.5, 6.0),
            "cold ground": rng.uniform(1.0, 4.0),
            "inversion aloft": rng.uniform(-0.5, 0.3),
        }[kind]
        t_air, rh = rng.uniform(280.0, 293.0), rng.uniform(0.6, 0.9)
        roughness = float(np.exp(rng.uniform(np.log(0.005), np.log(0.1))))
        function = list(STABLE_FUNCTIONS)[rng.integers(3)]
        q_air = float(specific_humidity_from_relative_humidity(rh, t_air, 101300.0))
        skin = t_air + 0.0098 * _MATCHED - difference
        layer = _solve(kind, wind, t_air, q_air, skin, roughness, function)
        if layer.converged[0]:
            break
    z = FINE
    low = z <= _MATCHED
    t, q = (a[0] for a in surface_profile(layer, np.where(low, z, _MATCHED)))
    potential = t + 0.0098 * np.where(low, z, _MATCHED)
    near = surface_profile(layer, np.array([_MATCHED - 0.5, _MATCHED]))
    above = np.maximum(z - _MATCHED, 0.0)
    dies_out = rng.uniform(15.0, 60.0)
    on = dies_out * (1.0 - np.exp(-above / dies_out))
    potential += (np.diff(near[0][0])[0] / 0.5 + 0.0098) * on
    q += np.diff(near[1][0])[0] / 0.5 * on
    if difference > 1.0:
        for _ in range(rng.integers(1, 4)):
            at, thick = rng.uniform(25.0, 150.0), rng.uniform(3.0, 12.0)
            potential += rng.uniform(-0.2, 0.2) * np.exp(-(((z - at) / thick) ** 2))
    base, depth = rng.uniform(60.0, 400.0), rng.uniform(15.0, 80.0)
    if kind != "inversion aloft":
        base += 400.0
    share = np.clip((z - base) / depth, 0.0, 1.0)
    potential += rng.uniform(2.0, 8.0) * share**2 * (3.0 - 2.0 * share)
    potential += 0.004 * np.maximum(z - base - depth, 0.0)
    q *= 1.0 - rng.uniform(0.2, 0.6) * share
    t = potential - 0.0098 * z
    mean = 0.5 * (t[1:] + t[:-1]) * (1.0 + 0.608 * 0.5 * (q[1:] + q[:-1]))
    p = 101325.0 * np.exp(-9.80665 / 287.05287 * np.r_[0.0, np.cumsum(np.diff(z) / mean)])
    return Case(kind, Column(z, p, t, q), skin, wind, roughness)


def _solve(
    kind: str, wind: float, t: float, q: float, skin: float, roughness: float, function: str
) -> SurfaceLayer:
    if kind == "cold ground":
        return solve_land(
            wind, t, q, 101300.0, skin, q, roughness, air_height=_MATCHED, stable_function=function
        )
    return solve_sea(wind, t, q, 101300.0, skin, air_height=_MATCHED, stable_function=function)


# --- What instruments and models keep of it ------------------------------------------------------


def _at(air: Column, z: Array) -> Column:
    return Column(z, *(np.interp(z, air.z, a) for a in air[1:]))


def as_sonde(air: Column, rng: np.random.Generator) -> Column:
    """A radiosonde: the station's 2 m, then every 5 or 10 m from 10-30 m, with lagging sensors.

    5 m/s; first-order lag of 0.5-2 s for temperature, 2-6 s for humidity, from 2 m on. No other
    error of the instrument.
    """
    even = _at(air, _EVEN)
    t, q = even.t.copy(), even.q.copy()
    for values, lag in ((t, rng.uniform(0.5, 2.0)), (q, rng.uniform(2.0, 6.0))):
        keep = np.exp(-1.0 / (_ASCENT * lag))
        values[1:] = lfilter([1.0 - keep], [1.0, -keep], values[1:], zi=[keep * values[1]])[0]
    levels = np.arange(rng.uniform(10.0, 30.0), 2900.0, _ASCENT * rng.integers(1, 3))
    return _at(Column(even.z, even.p, t, q), np.r_[2.0, levels])


def as_model(air: Column, rng: np.random.Generator) -> Column:
    """Model levels at 10 m, 36 m, 72 m and so on, each the mean of its layer."""
    z = np.cumsum(_STEP) * rng.uniform(0.95, 1.05)
    edges = np.r_[0.0, 0.5 * (z[1:] + z[:-1]), z[-1] + 100.0]
    even, layer = _at(air, _EVEN), np.digitize(_EVEN, edges) - 1
    t, q = (np.array([a[layer == k].mean() for k in range(z.size)]) for a in (even.t, even.q))
    return Column(z, np.interp(z, air.z, air.p), t, q)


def _stack(columns: list[Column]) -> dict[str, Array]:
    """Columns of one length or another as arrays (column, level), NaN above their tops."""
    width = max(c.z.size for c in columns)
    names = ("height", "air_pressure", "air_temperature", "specific_humidity")
    return {
        name: np.array(
            [np.pad(c[k], (0, width - c[k].size), constant_values=np.nan) for c in columns]
        )
        for k, name in enumerate(names)
    }


def with_surface(
    cases: list[Case], columns: list[Column], screen: bool, errors: Array
) -> tuple[dict[str, Array], int]:
    """Put the outlook's surface layer under columns.

    Parameters
    ----------
    cases, columns : list
        What is known of the surface, and the thinned air.
    screen : bool
        Whether temperature and humidity at 2 m are known too.
    errors : ndarray
        (2, case): errors of the surface temperature and of the wind, in standard deviations of
        the outlook's error model.

    Returns
    -------
    tuple
        The columns, and in how many nothing could be modelled.
    """
    state = _stack(columns)
    rule = error_model()["surface"]
    land = np.array([c.kind == "cold ground" for c in cases])
    spread = np.where(land, rule["ground_temperature"], rule["sea_surface_temperature"])
    size = len(cases)
    warmer, moister = np.full(size, np.nan), np.full(size, np.nan)
    if screen:
        two = [_at(c.air, np.array([2.0])) for c in cases]
        warmer = np.array([s.t[0] for s in two]) - state["air_temperature"][:, 0]
        moister = np.array([s.q[0] for s in two]) / state["specific_humidity"][:, 0]
    none = np.zeros(size, dtype=np.int8)
    inputs = SurfaceInputs(
        kind=np.where(land, 2, 1).astype(np.int8),
        skin=np.array([c.skin for c in cases]) + spread * errors[0],
        wind=np.abs(np.array([c.wind for c in cases]) + rule["wind"] * errors[1]),
        wind_height=np.full(size, 10.0),
        roughness=np.array([c.roughness for c in cases]),
        warmer=warmer,
        moister=moister,
        skin_source=none,
        wind_source=none,
        air_source=none,
    )
    laid = lay_surface(state, inputs)
    return laid.air, int(np.count_nonzero(laid.state == SURFACE_STATES["unknown"]))


# --- What is measured ----------------------------------------------------------------------------


class Seen(NamedTuple):
    """Hidden heights (case, eye), m; clear heights of the lowest eye (case,), m; ducts.

    ``is_open``: whether targets are open (case, eye, target).
    """

    hidden: Array
    clear: Array
    is_open: NDArray[np.bool_]
    ducts: list[Array]


def clear_heights(medium: Medium, eye: float, distance: float) -> Array:
    """Lowest heights (m) that show 10″ or more above the apparent horizon, (column,).

    Unlike the hidden height it does not hang on pencils of rays that no lens tells apart.
    """
    horizon = trace_sightlines(medium, eye, 50.0, distance).horizon_elevation[:, :1]
    up = np.r_[np.arange(10.0, 60.0, 1.0), np.arange(60.0, 900.0, 10.0)] * _ARCSECOND
    rays = trace_rays(medium, eye, horizon + up, distance, reflect=False)
    return np.where(np.isnan(rays.blocked_at), rays.height, np.inf).min(axis=1)


def _look(medium: Medium, targets: Array) -> tuple[Array, NDArray[np.bool_]]:
    tables = [
        trace_sightlines(medium, EYES, targets[:, k], DISTANCE, largest_squeeze=LARGEST_SQUEEZE)
        for k in range(targets.shape[1])
    ]
    states = np.stack([t.state for t in tables], axis=-1)
    return tables[0].hidden_height, states == SIGHTLINE_STATES["open"]


def _targets() -> Array:
    """Heights of two targets for each eye: one that standard air hides, one that it shows."""
    standard = trace_sightlines(standard_medium("optical"), EYES, 50.0, DISTANCE).hidden_height[0]
    return np.round(standard[:, None] * np.array([0.6, 1.4]), 1)


def see(state: dict[str, Array]) -> Seen:
    """Look through columns."""
    _, p, t, q = state.values()
    n = optical_refractivity(p, t, q)
    medium = build_medium(state["height"], n, MEAN_EARTH_RADIUS, "optical")
    hidden, is_open = _look(medium, _targets())
    table = find_ducts(
        state["height"], modified_refractivity(n, state["height"], MEAN_EARTH_RADIUS)
    )
    extents = np.stack([table.base, table.top], axis=-1)
    ducts = [e[s >= _STRONG] for e, s in zip(extents, table.strength, strict=True)]
    return Seen(hidden, clear_heights(medium, EYES[0], DISTANCE), is_open, ducts)


def _overlap(some: Array, others: Array) -> int:
    """How many of some ducts overlap any of others."""
    if not (some.size and others.size):
        return 0
    meets = (some[:, None, 0] <= others[None, :, 1]) & (others[None, :, 0] <= some[:, None, 1])
    return int(np.count_nonzero(meets.any(axis=1)))


def compare(truth: Seen, found: Seen, unknown: int | None) -> list[str]:
    """Cells of one row: errors by eye, sightlines, ducts, cases without a surface layer."""
    off = np.abs(np.c_[found.hidden - truth.hidden, found.clear - truth.clear])
    cells = [f"{np.median(a):.1f} ({np.quantile(a, 0.9):.0f})" for a in off.T]
    # A hit: the fine air makes of a target what standard air does not.
    usual = np.array([False, True])
    hit, same = truth.is_open != usual, found.is_open == truth.is_open
    kept, lost = np.count_nonzero(hit & same), np.count_nonzero(hit & ~same)
    cells.append(f"{kept} / {lost} / {np.count_nonzero(~hit & ~same)}")
    pairs = list(zip(truth.ducts, found.ducts, strict=True))
    held, gone, invented = (
        sum(_overlap(a, b) for a, b in pairs),
        sum(len(a) - _overlap(a, b) for a, b in pairs),
        sum(len(b) - _overlap(b, a) for a, b in pairs),
    )
    return [*cells, f"{held} / {gone} / {invented}", "" if unknown is None else str(unknown)]


def rows_of(kind: str, count: int) -> list[list[str]]:
    """Rows of the table for one kind of air."""
    rng = np.random.default_rng([SEED, KINDS.index(kind)])
    cases = [fine_case(kind, rng) for _ in range(count)]
    errors, exact = rng.standard_normal((2, count)), np.zeros((2, count))
    sonde = [as_sonde(c.air, rng) for c in cases]
    model = [as_model(c.air, rng) for c in cases]
    heights = np.r_[SURFACE_HEIGHTS[SURFACE_HEIGHTS < _MATCHED], FINE[FINE >= _MATCHED]]
    truth = see(_stack([c.air for c in cases]))

    standard = trace_sightlines(standard_medium("optical"), EYES, 50.0, DISTANCE).hidden_height
    usual = np.broadcast_to(np.array([False, True]), truth.is_open.shape)
    clear = np.full(count, clear_heights(standard_medium("optical"), EYES[0], DISTANCE)[0])
    no_ducts = [np.empty((0, 2))] * count
    nothing = Seen(np.broadcast_to(standard, truth.hidden.shape), clear, usual, no_ducts)
    rows = [["standard air instead", *compare(truth, nothing, None)]]
    fine_on_few = _stack([_at(c.air, heights) for c in cases])
    makers: list[tuple[str, Callable[[], tuple[dict[str, Array], int | None]]]] = [
        ("fine, on the surface layer's own heights", lambda: (fine_on_few, None)),
        ("sonde", lambda: (_stack(sonde), None)),
        ("sonde + surface layer", lambda: with_surface(cases, sonde, False, exact)),
        ("the same, inputs uncertain", lambda: with_surface(cases, sonde, False, errors)),
        ("model", lambda: (_stack(model), None)),
        ("model + surface layer", lambda: with_surface(cases, model, True, exact)),
        ("the same, inputs uncertain", lambda: with_surface(cases, model, True, errors)),
    ]
    for name, make in makers:
        state, unknown = make()
        rows.append([name, *compare(truth, see(state), unknown)])
    return [[kind if i == 0 else "", *row] for i, row in enumerate(rows)]


# --- Tables --------------------------------------------------------------------------------------


def _markdown(head: list[str], rows: list[list[str]]) -> str:
    lines = [head, ["---"] * len(head), *rows]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)


def resolution_table(count: int = CASES // len(KINDS), kinds: tuple[str, ...] = KINDS) -> str:
    """Return the table of what is lost and mended, so many cases of each kind."""
    eyes = [f"hidden, eye {e:.0f} m" for e in EYES]
    head = ["air", "seen as", *eyes, "clear, eye 4 m", "sightlines", "ducts", "none"]
    return _markdown(head, [row for kind in kinds for row in rows_of(kind, count)])


_SWEEP_EYES = np.array([0.5, 1.0, 2.0, 4.0, 7.0, 10.0, 15.0, 20.0, 30.0, 50.0, 70.0, 100.0])
_SWEEP_AIR = (
    ("water 5 K colder, 3.5 m/s", 5.0, 3.5), ("5 K colder, 5 m/s", 5.0, 5.0),
    ("5 K colder, 8 m/s", 5.0, 8.0), ("2 K colder, 5 m/s", 2.0, 5.0),
    ("5 K warmer, 5 m/s", -5.0, 5.0),
)  # fmt: skip


def sweep_table(distance: float = 40e3) -> str:
    """Return clear heights and, in brackets, hidden heights (m) by eye height over water."""
    media = {"standard air": standard_medium("optical")}
    for name, colder, wind in _SWEEP_AIR:
        layer = solve_sea(wind, 287.15, 0.0075, 101300.0, 287.15 + 0.196 - colder, air_height=20.0)
        low = FINE <= _MATCHED
        t, q = (a[0] for a in surface_profile(layer, np.where(low, FINE, _MATCHED)))
        near = surface_profile(layer, np.array([_MATCHED - 0.5, _MATCHED]))[0][0]
        on = 30.0 * (1.0 - np.exp(-np.maximum(FINE - _MATCHED, 0.0) / 30.0))
        t += (np.diff(near)[0] / 0.5 + 0.0065) * on - 0.0065 * np.maximum(FINE - _MATCHED, 0.0)
        p = 101325.0 * np.exp(-9.80665 / 287.05287 / 288.0 * FINE)
        n = optical_refractivity(p, t, q)
        media[name] = build_medium(FINE, n, MEAN_EARTH_RADIUS, "optical")
    cells = []
    for medium in media.values():
        hidden = trace_sightlines(
            medium, _SWEEP_EYES, 50.0, distance, largest_squeeze=LARGEST_SQUEEZE
        ).hidden_height[0]
        clear = [clear_heights(medium, eye, distance)[0] for eye in _SWEEP_EYES]
        cells.append([f"{c:.0f} ({h:.0f})" for c, h in zip(clear, hidden, strict=True)])
    rows = [[f"{eye:g} m", *row] for eye, *row in zip(_SWEEP_EYES, *cells, strict=True)]
    return _markdown(["eye", *media], rows)


def main(arguments: list[str] | None = None) -> int:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=CASES, help="fine profiles in all")
    count = max(1, parser.parse_args(arguments).cases // len(KINDS))
    print(resolution_table(count), sweep_table(), sep="\n\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())
