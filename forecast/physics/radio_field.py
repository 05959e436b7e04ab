"""How strong a radio wave is behind a path through given air: split-step Fourier solution.

Method: the outgoing half of the wave equation over a flattened Earth,
``∂u/∂x = i [√(k² + ∂²/∂z²) − k] u + i k (m − 1) u`` (Feit & Fleck, Appl. Opt. 17 (1978)
3990–3998, for the split of the root; Levy, Parabolic Equation Methods for Electromagnetic Wave
Propagation (2000), chapters 2 and 3, for radio; both from memory), stepped in range by halves of
the second term around the first. Time factor e^{−iωt}: waves to greater range go as e^{+ikx}.

Heights inside are conformal, so the wave sees the sphere exactly (`forecast.physics.field_air`);
k is that of the air at the antenna. The source is a line of sources with the mirror image that
the surface asks for, its plane waves weighted by ``(1 − p²/k²)^{−1/4}``, with which the far field
is that of a point source at every angle.
"""

from __future__ import annotations

import os
from typing import Any, NamedTuple

import numpy as np

from forecast.physics.curvature import reference_refractivity
from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.field_march import Beam, March, Source
from forecast.physics.field_steps import (
    FREQUENCIES,
    LIGHT_SPEED,
    FieldSteps,
    check_steps,
    choose_steps,
    duct_scales,
    find_needs,
)
from forecast.physics.field_surface import (
    Surface,
    effective_impedance,
    grazing_angles,
    sea_permittivity,
)
from forecast.physics.field_terrain import Terrain, check_terrain, follow_ground, ground_scales
from forecast.physics.rays import Medium, build_medium

__all__ = ["Beam", "FieldSteps", "RadioField", "Surface", "Terrain", "propagate"]

_FLOOR = 1e-15  # −300 dB, far below what the arithmetic can tell


class RadioField(NamedTuple):
    """Field of a batch of cases.

    ``range`` (range,) and ``height`` (height,), m. ``propagation_factor``: field over that in free
    space at the same distance, dB, ``path_loss`` between isotropic antennas, dB, and
    ``excess``: by how much the field is stronger than in the reference atmosphere, dB (None unless
    asked for), each (case, range, height); NaN below the ground and at angles steeper than the
    grid holds. ``energy`` (case, range): share of the launched energy still on the grid.
    """

    range: np.ndarray
    height: np.ndarray
    propagation_factor: np.ndarray
    path_loss: np.ndarray
    excess: np.ndarray | None
    energy: np.ndarray
    steps: FieldSteps


def propagate(
    height: Any,
    modified: Any,
    frequency: float,
    antenna_height: float,
    *,
    distance: Any,
    receiver_heights: Any,
    polarisation: str = "horizontal",
    surface: Surface | None = None,
    beam: Beam | None = None,
    terrain: Terrain | None = None,
    profile_ranges: Any = None,
    earth_radius: float = MEAN_EARTH_RADIUS,
    steps: FieldSteps | None = None,
    reference: bool = False,
    threads: int | None = None,
) -> RadioField:
    """Propagation factor and path loss through a batch of profiles.

    Parameters
    ----------
    height : array_like
        Height above the sea, m, shape (level,) or that of `modified`. Levels whose height is NaN
        are padding.
    modified : array_like
        M, M-units: (level,), (case, level) or, with `profile_ranges`, (profile, level) or
        (case, profile, level). Continued below its lowest level with −39.24 N/km and above its
        highest with a scale height of 7.35 km.
    frequency : float
        Hz, 30e6…40e9.
    antenna_height : float
        Of the transmitter, m.
    distance : array_like
        Ranges at which the field is wanted, along the surface, m, rising; the last is the end.
    receiver_heights : array_like
        m.
    polarisation : {"horizontal", "vertical"}
        Horizontally polarised waves meet a smooth surface as a mirror, whatever it is made of:
        true to ``2 sin ψ / √(ε − 1)`` of the image at a grazing angle ψ.
    surface : Surface, optional
        Default: smooth sea water of 15 °C and 35 g/kg.
    beam : Beam, optional
        Default: even in all directions.
    terrain : Terrain, optional
        Ground and knife edges; heights of all antennas count from its datum, that of M.
    profile_ranges : array_like, optional
        Ranges of the profiles, m, rising; M is linear in range between them and constant outside.
    earth_radius : float
        m.
    steps : FieldSteps, optional
        Default: chosen from the error limits of `forecast.physics.field_steps`.
    reference : bool
        Compute the ITU mean reference atmosphere along, for ``excess``.
    threads : int, optional
        Threads over blocks of cases; default all.

    Returns
    -------
    RadioField

    Raises
    ------
    ValueError
        If an argument is out of range, M is missing at a level, an antenna is above the domain, or
        the steps are too coarse: told with the value needed.
    """
    ranges = np.atleast_1d(np.asarray(distance, dtype=float))
    receivers = np.atleast_1d(np.asarray(receiver_heights, dtype=float))
    _check(frequency, antenna_height, ranges, receivers, earth_radius, beam)
    if polarisation not in ("horizontal", "vertical"):
        raise ValueError(f"propagate: polarisation {polarisation!r}; horizontal or vertical")
    if surface is not None and not (
        np.isfinite(surface.permittivity) and abs(surface.permittivity) > 1.0
        and complex(surface.permittivity).imag >= 0.0 and 0.0 <= surface.roughness < 100.0
    ):  # fmt: skip
        raise ValueError(f"propagate: {surface}; losses are positive imaginary, roughness in m")
    surface = surface or Surface(complex(sea_permittivity(frequency)))
    air = _read_air(height, modified, profile_ranges, earth_radius, reference)
    lowest, slope, spacing, edges = 0.0, 0.0, np.inf, False
    if terrain is not None:
        check_terrain(terrain, ranges[-1], antenna_height)
        lowest, slope, spacing, edges = ground_scales(terrain)
    mirror = polarisation == "horizontal" and surface.roughness == 0.0
    duct_top, duct_angle = duct_scales(air.medium, frequency)
    needs = find_needs(
        frequency, antenna_height - lowest, receivers - lowest, ranges, duct_top, duct_angle,
        slope, spacing, not mirror, edges,
    )  # fmt: skip
    steps = choose_steps(needs, ranges[-1]) if steps is None else steps
    check_steps(steps, needs, max(antenna_height, float(receivers.max())) - lowest)
    count = round(ranges[-1] / steps.range_step) or 1
    relief = follow_ground(terrain, count, ranges[-1] / count)
    impedances = None
    if not mirror:
        nodes = ranges[-1] / count * np.arange(count + 1)
        grazing = grazing_angles(frequency, antenna_height - relief.ground[0], nodes, duct_angle)
        impedances = effective_impedance(surface, frequency, polarisation, grazing)
    source = Source(frequency, antenna_height, beam or Beam())
    march = March(air.medium, air.stations, source, ranges, receivers, steps, relief, impedances)
    value, energy = march.run(threads or os.cpu_count() or 1)
    turn = 4.0 * (earth_radius + antenna_height) * (earth_radius + receivers)
    arc = np.sin(0.5 * ranges[:, None] / earth_radius) ** 2
    slant = np.sqrt((receivers - antenna_height) ** 2 + turn * arc)
    ground = np.interp(ranges, ranges[-1] / count * np.arange(count + 1), relief.true_ground)
    climb = antenna_height + receivers - 2.0 * lowest
    dark = np.arctan2(climb, ranges[:, None]) > steps.max_angle * (1.0 + 1e-9)
    dark |= receivers < ground[:, None]
    factor = np.abs(value) * slant / np.sqrt(ranges[:, None])
    factor = np.where(dark, np.nan, 20.0 * np.log10(np.maximum(factor, _FLOOR)))
    excess = None
    if reference:
        excess = factor[:-1] - factor[-1]
        factor, energy = factor[:-1], energy[:-1]
    free = 20.0 * np.log10(4.0 * np.pi * frequency / LIGHT_SPEED * slant)
    return RadioField(ranges, receivers, factor, free - factor, excess, energy, steps)


def _check(
    frequency: float, antenna: float, ranges: np.ndarray, receivers: np.ndarray, radius: float,
    beam: Beam | None,
) -> None:  # fmt: skip
    low, high = FREQUENCIES
    if not low <= frequency <= high:
        raise ValueError(f"propagate: frequency {frequency:g} Hz; from {low:g} to {high:g} Hz")
    if not 0.0 < antenna < np.inf:
        raise ValueError(f"propagate: antenna height {antenna} m; must be above the surface")
    if ranges.ndim != 1 or not (np.all(np.isfinite(ranges)) and ranges.size and ranges[0] > 0.0):
        raise ValueError("propagate: distance must hold finite ranges above 0 m")
    if np.any(np.diff(ranges) <= 0.0):
        raise ValueError("propagate: distance must rise")
    if receivers.ndim != 1 or not (np.all(np.isfinite(receivers)) and np.all(receivers >= 0.0)):
        raise ValueError("propagate: receiver heights must be finite and not below 0 m")
    if not 1e5 < radius < np.inf:
        raise ValueError(f"propagate: Earth radius {radius} m")
    if beam is not None:
        if beam.kind not in ("omni", "gaussian", "sinc"):
            raise ValueError(f"propagate: beam {beam.kind!r}; choose omni, gaussian or sinc")
        if not (0.0 < beam.width <= np.pi and abs(beam.tilt) < 0.5 * np.pi):
            raise ValueError(f"propagate: beam width {beam.width}, tilt {beam.tilt} rad")


class _Air(NamedTuple):
    """Columns (case × profile), the reference atmosphere as a last case if asked for."""

    medium: Medium
    stations: np.ndarray


def _read_air(
    height: Any, modified: Any, profile_ranges: Any, radius: float, reference: bool
) -> _Air:
    m = np.asarray(modified, dtype=float)
    stations = np.zeros(1)
    if profile_ranges is None:
        m = m[None, None, :] if m.ndim == 1 else m[:, None, :]
    else:
        stations = np.asarray(profile_ranges, dtype=float)
        m = m[None] if m.ndim == 2 else m
        if (
            stations.ndim != 1
            or not np.all(np.isfinite(stations))
            or np.any(np.diff(stations) <= 0)
        ):
            raise ValueError("propagate: profile ranges must be finite and rise")
    if m.ndim != 3 or m.shape[1] != stations.size or 0 in m.shape:
        raise ValueError(
            f"propagate: modified of shape {np.shape(modified)} for {stations.size} profiles; "
            "expected (case, level), or (case, profile, level) with profile_ranges"
        )
    z = np.asarray(height, dtype=float)
    if z.ndim == 2 and profile_ranges is None:
        z = z[:, None, :]
    z = np.broadcast_to(z, m.shape)
    if np.any(np.isfinite(z) & ~np.isfinite(m)):
        raise ValueError("propagate: M is NaN or infinite at a level whose height is given")
    if np.any(np.abs(m[np.isfinite(z)] - 1e6 * z[np.isfinite(z)] / radius) > 1e5):
        raise ValueError("propagate: M implies a refractivity beyond 100000 N-units")
    flat = z.reshape(-1, m.shape[2])
    refractivity = m.reshape(flat.shape) - 1e6 * flat / radius
    if reference:
        # Straight between 60 levels it would lie a tenth of a dB off at −60 dB.
        levels = np.geomspace(1.0, 60e3, 600) - 1.0
        z_all = np.full((flat.shape[0] + stations.size, max(flat.shape[1], levels.size)), np.nan)
        n_all = z_all.copy()
        z_all[: flat.shape[0], : flat.shape[1]] = flat
        n_all[: flat.shape[0], : flat.shape[1]] = refractivity
        z_all[flat.shape[0] :, : levels.size] = levels
        n_all[flat.shape[0] :, : levels.size] = reference_refractivity(levels)
        flat, refractivity = z_all, n_all
    medium = build_medium(flat, refractivity, radius)
    if np.any(medium.count == 0):
        raise ValueError("propagate: a profile has fewer than two levels of rising height")
    return _Air(medium, stations)
