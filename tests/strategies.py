"""What "any plausible profile" means to the tests: hypothesis strategies and seeded generators."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from hypothesis import strategies as st

__all__ = [
    "EARTH_RADIUS",
    "AirState",
    "air_states",
    "duct_columns",
    "height_columns",
    "random_duct_columns",
    "random_refractivity_column",
    "refractivity_columns",
]

EARTH_RADIUS = 6371e3  # m


class AirState(NamedTuple):
    """One parcel of air: Pa, K, and relative humidity over water (1)."""

    pressure: float
    temperature: float
    relative_humidity: float


def air_states() -> st.SearchStrategy[AirState]:
    """Air as it occurs below some 16 km, −40…+45 °C, bone dry to saturated."""
    return st.builds(
        AirState,
        st.floats(1e4, 1.08e5),
        st.floats(233.15, 318.15),
        st.floats(0.0, 1.0),
    )


@st.composite
def height_columns(draw: st.DrawFn, min_levels: int = 2, max_levels: int = 25) -> np.ndarray:
    """Heights (m) from the surface, rising by 0.5…300 m."""
    steps = draw(st.lists(st.floats(0.5, 300.0), min_size=min_levels - 1, max_size=max_levels - 1))
    return np.concatenate([[0.0], np.cumsum(steps)])


@st.composite
def refractivity_columns(
    draw: st.DrawFn, min_levels: int = 2, max_levels: int = 25
) -> tuple[np.ndarray, np.ndarray]:
    """Height (m) and N of one column: any mixture of sub-refraction, normal air and ducts."""
    z = draw(height_columns(min_levels, max_levels))
    gradients = draw(st.lists(st.floats(-0.6, 0.2), min_size=z.size - 1, max_size=z.size - 1))
    surface = draw(st.floats(250.0, 400.0))
    return z, surface + np.concatenate([[0.0], np.cumsum(np.array(gradients) * np.diff(z))])


@st.composite
def duct_columns(draw: st.DrawFn) -> tuple[np.ndarray, np.ndarray]:
    """Height (m) and M of one column on whole numbers, so that plateaus and ties do occur."""
    steps = draw(st.lists(st.integers(1, 80), min_size=1, max_size=20))
    changes = draw(
        st.lists(st.integers(-6, 6), min_size=len(steps), max_size=len(steps)).filter(
            lambda values: min(values) < 0
        )
    )
    z = np.concatenate([[0.0], np.cumsum(steps)]).astype(float)
    return z, 330.0 + np.concatenate([[0.0], np.cumsum(changes)])


def random_duct_columns(
    rng: np.random.Generator, columns: int, levels: int = 24
) -> tuple[np.ndarray, np.ndarray]:
    """Many columns (column, level) of height and M with every awkward shape a sounding can have.

    A quarter each: whole-number M (plateaus, ties, equal tops and bases), smooth random walks,
    ducts planted in standard air (nested and single-segment layers), ducts touching the ground.
    On top of that: columns cut short (NaN tops), NaN gaps, levels that stall or step back, and
    columns with one or no usable level.
    """
    z = np.cumsum(rng.uniform(0.5, 120.0, (columns, levels)), axis=1)
    whole = rng.random(columns) < 0.5
    z[whole] = np.cumsum(rng.integers(1, 100, (whole.sum(), levels)), axis=1)
    z -= np.where(rng.random((columns, 1)) < 0.7, z[:, :1], 0.0)

    shape = rng.integers(0, 4, columns)[:, None]
    rise = np.diff(z, axis=1)
    change = np.where(
        shape == 0,
        rng.integers(-3, 4, rise.shape).astype(float),
        np.where(shape == 1, rng.normal(0.5, 6.0, rise.shape), 0.117 * rise),
    )
    planted = (shape >= 2) & (rng.random(rise.shape) < 0.15)
    change[planted] = -rng.uniform(0.5, 60.0, planted.sum())
    grounded = shape[:, 0] == 3
    change[grounded, 0] = -rng.uniform(1.0, 20.0, grounded.sum())
    start = rng.integers(300, 360, (columns, 1)).astype(float)
    m = start + np.concatenate([np.zeros((columns, 1)), np.cumsum(change, axis=1)], axis=1)

    level = np.arange(levels)
    short = rng.random(columns) < 0.4
    cut = level >= rng.integers(0, levels, columns)[:, None]
    m[short[:, None] & cut] = np.nan
    z[short[:, None] & cut & (rng.random((columns, 1)) < 0.5)] = np.nan
    m[rng.random(m.shape) < 0.02] = np.nan
    z[rng.random(z.shape) < 0.01] = np.nan
    stalled = rng.random(columns) < 0.1
    at = rng.integers(1, levels, columns)[stalled]
    rows = np.flatnonzero(stalled)
    z[rows, at] = z[rows, at - 1] - rng.choice([0.0, 5.0], rows.size)
    return z, m


def random_refractivity_column(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Height (m) and N to 1.5 km with one to three ducts, some at the ground, some nested."""
    z = np.sort(np.r_[0.0, rng.uniform(1.0, 1500.0, rng.integers(8, 40))])
    z = z[np.r_[True, np.diff(z) > 0.5]]
    gradient = rng.normal(0.117, 0.05, z.size - 1)
    for _ in range(rng.integers(1, 4)):
        k = rng.integers(0, max(1, z.size // 2))
        gradient[k : k + rng.integers(1, 3)] = -rng.uniform(0.02, 0.6)
    m = 330.0 + np.r_[0.0, np.cumsum(gradient * np.diff(z))]
    return z, m - 1e6 * z / EARTH_RADIUS
