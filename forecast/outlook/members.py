"""What the air might really have been: Monte Carlo members of a profile within its stated errors.

Errors of temperature and relative humidity are Gaussian and correlated in height (Matérn, ν =
3/2: rough like real soundings, yet with gradients that stay finite); layers are displaced up or
down as a whole. Sizes and their sources stand in ``error_model.toml``. Members come in antithetic
pairs (Hammersley & Morton 1956), so that their mean is that of the profile to first order. The
random numbers of a profile depend on the seed and on the profile's identity alone: reruns, other
inputs beside it and the order of files change nothing.
"""

from __future__ import annotations

import hashlib
import tomllib
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any

import numpy as np

from forecast.physics.moisture import relative_humidity, specific_humidity_from_relative_humidity

__all__ = [
    "ErrorSizes",
    "MemberProfiles",
    "error_model",
    "error_sizes",
    "generator",
    "perturb",
]

_GRID_STEPS = 6  # points of the noise grid per correlation height
_LARGEST_TILT = 0.5  # a displacement may stretch or squeeze the lowest layer by half at most


@dataclass(frozen=True)
class ErrorSizes:
    """Standard deviations for one profile, SI."""

    temperature: float
    relative_humidity: float
    correlation_height: float
    displacement: float


@dataclass(frozen=True)
class MemberProfiles:
    """Members of a batch of profiles: arrays (profile, member, level)."""

    height: np.ndarray
    air_pressure: np.ndarray
    air_temperature: np.ndarray
    specific_humidity: np.ndarray


@cache
def error_model() -> dict[str, Any]:
    """Read the table of error sizes that the package carries."""
    text = files("forecast.outlook").joinpath("error_model.toml").read_text(encoding="utf-8")
    return tomllib.loads(text)


def error_sizes(source_kind: str, lead_days: float) -> ErrorSizes:
    """Error sizes of a profile.

    Parameters
    ----------
    source_kind : {"ascent", "model"}
        Where the profile comes from.
    lead_days : float
        Lead time, days; only models grow with it.

    Returns
    -------
    ErrorSizes
        Standard deviations; instrument or model error and representativeness in quadrature.
    """
    row = error_model()["ascent" if source_kind == "ascent" else "model"]
    grow = 1.0 + row.get("growth_per_day", 0.0) * max(lead_days, 0.0)
    return ErrorSizes(
        grow * float(np.hypot(row["temperature"], row["temperature_elsewhere"])),
        grow * float(np.hypot(row["relative_humidity"], row["relative_humidity_elsewhere"])),
        row["correlation_height"],
        grow * row["displacement"],
    )


def perturb(
    height: np.ndarray,
    air_pressure: np.ndarray,
    air_temperature: np.ndarray,
    specific_humidity: np.ndarray,
    sizes: list[ErrorSizes],
    identities: list[str],
    members: int,
    seed: int,
) -> MemberProfiles:
    """Draw members of a batch of profiles.

    Parameters
    ----------
    height, air_pressure, air_temperature, specific_humidity : ndarray
        m, Pa, K, kg/kg; shape (profile, level), NaN where missing.
    sizes : list of ErrorSizes
        One per profile.
    identities : list of str
        What the random numbers of a profile hang on, besides the seed.
    members : int
        How many to draw.
    seed : int
        Seed of the run.

    Returns
    -------
    MemberProfiles
        Arrays (profile, member, level). Pressure is left as it is; humidity stays between dry and
        saturated; heights stay in order.
    """
    layer = error_model()["layer"]
    out_t = np.empty((height.shape[0], members, height.shape[1]))
    out_rh = np.empty_like(out_t)
    out_z = np.empty_like(out_t)
    humidity = relative_humidity(specific_humidity, air_temperature, air_pressure)
    for row, (size, identity) in enumerate(zip(sizes, identities, strict=True)):
        rng = generator(seed, identity)
        top = float(np.nanmax(height[row], initial=0.0))
        noise = _correlated(rng, members, 2, height[row], size.correlation_height, top)
        out_t[row] = air_temperature[row] + size.temperature * noise[0]
        out_rh[row] = humidity[row] + size.relative_humidity * noise[1]
        shift = size.displacement * _antithetic(
            rng.standard_normal(((members + 1) // 2, 1)), members
        )
        full_at = layer["displacement_full_at"]
        shift = np.clip(shift, -_LARGEST_TILT * full_at, _LARGEST_TILT * full_at)
        out_z[row] = height[row] + shift * np.clip(height[row] / full_at, 0.0, 1.0)
    out_rh = np.clip(out_rh, 0.0, layer["largest_relative_humidity"])
    pressure = np.broadcast_to(air_pressure[:, None, :], out_t.shape)
    out_q = specific_humidity_from_relative_humidity(out_rh, out_t, pressure)
    return MemberProfiles(out_z, np.array(pressure), out_t, out_q)


def generator(seed: int, identity: str) -> np.random.Generator:
    """Random numbers that hang on the seed and one identity alone."""
    digest = hashlib.sha256(f"{seed}\x00{identity}".encode()).digest()
    return np.random.Generator(np.random.Philox(key=int.from_bytes(digest[:16], "little")))


def _antithetic(half: np.ndarray, members: int) -> np.ndarray:
    """Pair each draw with its mirror image; member first axis."""
    return np.concatenate([half, -half])[:members]


@cache
def _factor(points: int, spacing: float, length: float) -> np.ndarray:
    """Cholesky factor of the Matérn-3/2 covariance on a regular grid of heights."""
    lag = np.abs(np.subtract.outer(np.arange(points), np.arange(points))) * spacing
    r = np.sqrt(3.0) * lag / length
    return np.linalg.cholesky((1.0 + r) * np.exp(-r) + 1e-9 * np.eye(points))


def _correlated(
    rng: np.random.Generator,
    members: int,
    fields: int,
    height: np.ndarray,
    length: float,
    top: float,
) -> np.ndarray:
    """Unit-variance noise (field, member, level), correlated in height."""
    spacing = length / _GRID_STEPS
    points = 2 + int(np.ceil(top / spacing))
    white = rng.standard_normal((fields, (members + 1) // 2, points))
    grid = white @ _factor(points, spacing, length).T
    place = np.nan_to_num(np.clip(height, 0.0, None)) / spacing
    lower = np.minimum(place.astype(int), points - 2)
    share = place - lower
    half = grid[..., lower] * (1.0 - share) + grid[..., lower + 1] * share
    return np.concatenate([half, -half], axis=1)[:, :members]
