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
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from typing import Any, NamedTuple

import numpy as np

from forecast.physics.earth import MEAN_EARTH_RADIUS
from forecast.physics.field_air import apply_screen, average_index
from forecast.physics.field_steps import (
    FREQUENCIES,
    LIGHT_SPEED,
    FieldSteps,
    check_steps,
    choose_steps,
    duct_scales,
    find_needs,
)
from forecast.physics.rays import Medium, build_medium

__all__ = ["Beam", "FieldSteps", "RadioField", "propagate"]

_TAPS = 12  # points of the interpolation between heights
_BLOCK_BYTES = 600e3  # of one block's field: two of them fit a core's own cache
_SINC_HALF = 1.3915574  # sin(x)/x = √½
_LOG_FLOOR = 1e-30


class Beam(NamedTuple):
    """Antenna pattern in the vertical: ``kind`` omni, gaussian or sinc (uniform aperture).

    ``width`` is the full width between half-power points and ``tilt`` the elevation of the axis,
    rad. The field is measured against that on the axis in free space.
    """

    kind: str = "omni"
    width: float = np.pi
    tilt: float = 0.0


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
    beam: Beam | None = None,
    profile_ranges: Any = None,
    earth_radius: float = MEAN_EARTH_RADIUS,
    steps: FieldSteps | None = None,
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
    beam : Beam, optional
        Default: even in all directions.
    profile_ranges : array_like, optional
        Ranges of the profiles, m, rising; M is linear in range between them and constant outside.
    earth_radius : float
        m.
    steps : FieldSteps, optional
        Default: chosen from the error limits of `forecast.physics.field_steps`.
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
    medium, cases, stations = _read_air(height, modified, profile_ranges, earth_radius)
    ducts = duct_scales(medium, frequency)
    needs = find_needs(frequency, antenna_height, receivers, ranges, *ducts)
    steps = choose_steps(needs, ranges[-1]) if steps is None else steps
    check_steps(steps, needs, max(antenna_height, float(receivers.max())))
    path = _Path(
        medium, cases, stations, frequency, antenna_height, ranges, receivers, beam or Beam(),
        earth_radius, steps,
    )  # fmt: skip
    factor, energy = path.run(threads or os.cpu_count() or 1)
    slant = path.slant
    free = 20.0 * np.log10(4.0 * np.pi * frequency / LIGHT_SPEED * slant)
    return RadioField(ranges, receivers, factor, free - factor, None, energy, steps)


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


def _read_air(
    height: Any, modified: Any, profile_ranges: Any, radius: float
) -> tuple[Medium, int, np.ndarray]:
    """Air as one batch of columns (case × profile), number of cases, ranges of the profiles."""
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
    medium = build_medium(flat, refractivity, radius)
    if np.any(medium.count == 0):
        raise ValueError("propagate: a profile has fewer than two levels of rising height")
    return medium, m.shape[0], stations


class _Path:
    """One path's grid and the marching of blocks of cases over it."""

    def __init__(
        self, medium: Medium, cases: int, stations: np.ndarray, frequency: float, antenna: float,
        ranges: np.ndarray, receivers: np.ndarray, beam: Beam, radius: float, steps: FieldSteps,
    ) -> None:  # fmt: skip
        self.steps, self.stations, self.ranges, self.beam = steps, stations, ranges, beam
        self.count = round(ranges[-1] / steps.range_step) or 1
        self.step = ranges[-1] / self.count
        points = steps.points
        index = average_index(medium, steps.height_step, points + 2)
        self.source = radius * np.log1p(antenna / radius)
        here = round(self.source / steps.height_step)
        reference = float(np.mean(index[:, min(here, points)]))
        self.k = 2.0 * np.pi * frequency / LIGHT_SPEED * (1.0 + reference)
        index = (index - reference) / (1.0 + reference)
        self.index = index.reshape(cases, stations.size, points + 2)
        self.receivers = radius * np.log1p(receivers / radius)
        turn = 4.0 * (radius + antenna) * (radius + receivers)
        arc = np.sin(0.5 * ranges[:, None] / radius) ** 2
        self.slant = np.sqrt((receivers - antenna) ** 2 + turn * arc)
        steep = np.arctan2(receivers + antenna, ranges[:, None]) > steps.max_angle * (1.0 + 1e-9)
        self.hidden = steep
        q = np.pi / steps.top / self.k * np.arange(1, points + 1)
        self.sine = q
        nyquist = np.pi / steps.height_step / self.k
        self.root = np.sqrt(np.maximum(1.0 - q**2, 0.0)) - 1.0
        self.fade = np.ones(points)
        self.loss = np.ones(points)
        if steps.absorber:
            # Near the Nyquist angle the product with the index folds back: no such waves. The
            # filter is smooth, as a sharp one would spread strong fields into shadows.
            self.fade = np.exp(-3e4 * (q / nyquist) ** 32)
            height = steps.height_step * np.arange(1, points + 1)
            depth = steps.top - steps.clear_height
            s = np.clip((height - steps.clear_height) / depth, 0.0, 1.0)
            # 240 dB for the steepest wave, up and down again.
            rate = 28.0 * nyquist / depth
            self.loss = np.exp(-rate * self.step * s**2 * (3.0 - 2.0 * s))

    def run(self, threads: int) -> tuple[np.ndarray, np.ndarray]:
        """Propagation factor (case, range, height), dB, and energy (case, range)."""
        cases = self.index.shape[0]
        most = max(1, int(_BLOCK_BYTES / (16 * self.steps.points)))
        blocks = max(-(-cases // most), min(threads, cases))
        edges = np.linspace(0, cases, blocks + 1).round().astype(int)
        parts = [slice(a, b) for a, b in pairwise(edges)]
        if threads == 1 or blocks == 1:
            done = [self._march(self.index[part]) for part in parts]
        else:
            with ThreadPoolExecutor(min(threads, blocks)) as pool:
                done = list(pool.map(lambda part: self._march(self.index[part]), parts))
        value = np.concatenate([d[0] for d in done])
        energy = np.concatenate([d[1] for d in done])
        scale = np.sqrt(2.0 * np.pi / self.k) * self.slant / np.sqrt(self.ranges[:, None])
        factor = 20.0 * np.log10(np.maximum(np.abs(value) * scale, _LOG_FLOOR))
        return np.where(self.hidden, np.nan, factor), energy

    def _pattern(self, sine: np.ndarray) -> np.ndarray:
        """Amplitude of the plane waves at sines of elevation (signed), faded above max_angle."""
        from scipy.special import erfc

        steep = np.sin(self.steps.max_angle)
        nyquist = np.pi / self.steps.height_step / self.k
        out = np.clip((np.abs(sine) - steep) / max(0.5 * nyquist - steep, 1e-12), 0.0, 1.0)
        # As smooth as can be: a corner here shines into the deep shadow from far above the source.
        out = 0.5 * erfc(8.0 * out - 4.0) * np.maximum(1.0 - sine**2, 1e-3) ** -0.25
        off = sine - np.sin(self.beam.tilt)
        half = np.sin(0.5 * self.beam.width)
        if self.beam.kind == "gaussian":
            out *= np.exp(-0.5 * np.log(2.0) * (off / half) ** 2)
        elif self.beam.kind == "sinc":
            out *= np.sinc(_SINC_HALF / np.pi * off / half)
        return out

    def _launch(self) -> np.ndarray:
        """Amplitudes of sin(p z) of the source and its negative image, (height,)."""
        turn = np.exp(1j * self.k * self.sine * self.source)
        down, up = self._pattern(-self.sine), self._pattern(self.sine)
        return -1j / self.steps.top * (down * turn - up / turn)

    def _march(self, index: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Complex field at receivers (case, range, height), and energy (case, range)."""
        from scipy.fft import dst

        cases, points = index.shape[0], self.steps.points
        norm = np.sqrt(0.5 * (points + 1))  # sum of sines to the orthonormal transform
        launch = norm * self._launch()
        field = np.repeat(dst(launch, type=1, norm="ortho")[None], cases, axis=0)
        start = float(np.sum(np.abs(launch) ** 2))
        advance = np.exp(1j * self.k * self.step * self.root) * self.fade
        out = np.empty((cases, self.ranges.size, self.receivers.size), dtype=complex)
        energy = np.empty((cases, self.ranges.size))
        taps, weights = self._taps(self.receivers)
        stop = np.ceil(self.ranges / self.step - 1e-9).astype(int) - 1  # step that holds a range
        still = self._screen(index, 1.0) if self.stations.size == 1 else None
        field *= self._screen(index, 0.5, 0.0)
        done = 0
        for j in range(self.count):
            wave = dst(field, type=1, norm="ortho", overwrite_x=True)
            while done < self.ranges.size and stop[done] == j:
                part = self.ranges[done] - j * self.step
                there = wave * np.exp(1j * self.k * part * self.root)
                energy[:, done] = np.sum(np.abs(there) ** 2, axis=1) / start
                there = dst(there, type=1, norm="ortho", overwrite_x=True)
                out[:, done] = np.sum(there[:, taps] * weights, axis=-1)
                done += 1
            if j + 1 == self.count:
                break
            wave *= advance
            field = dst(wave, type=1, norm="ortho", overwrite_x=True)
            if still is None:
                profile, share = self._station((j + 1) * self.step)
                apply_screen(field, index, profile, share, 1.0, self.k * self.step, 0.0, self.loss)
            else:
                field *= still
        return out, energy

    def _station(self, x: float) -> tuple[int, float]:
        """Profile just behind a range and the share of the way to the next."""
        at = float(np.interp(x, self.stations, np.arange(self.stations.size)))
        profile = int(at)
        return profile, at - profile

    def _screen(self, index: np.ndarray, share: float, x: float = 0.0) -> np.ndarray:
        """Factor of a share of one range step at range x, (case, height)."""
        out = np.ones((index.shape[0], self.steps.points), dtype=complex)
        profile, weight = self._station(x)
        phase = share * self.k * self.step
        apply_screen(out, index, profile, weight, 1.0, phase, 0.0, self.loss**share)
        return out

    def _taps(self, heights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Grid points around heights and Lagrange's weights, the field being odd in height."""
        at = heights / self.steps.height_step
        near = np.floor(at).astype(int)[:, None] - (_TAPS // 2 - 1) + np.arange(_TAPS)
        node = np.arange(_TAPS)
        apart = (node[:, None] - node).astype(float) + np.eye(_TAPS)
        gap = (at[:, None] - near)[:, None, :] + np.zeros((_TAPS, 1))
        gap[:, node, node] = 1.0
        weights = np.prod(gap, axis=-1) / np.prod(apart, axis=1)
        weights = weights * np.sign(near)
        inside = np.abs(near) <= self.steps.points
        return np.clip(np.abs(near) - 1, 0, self.steps.points - 1), weights * inside
