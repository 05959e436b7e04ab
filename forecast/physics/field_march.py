"""The stepping of a radio field over one path's grid, many cases at once.

Each range step is half the air's phase, the wave's advance between transforms, and the other half;
halves of neighbours are taken together. Blocks of cases small enough for a core's own cache run on
threads: transforms and kernels let go of the interpreter's lock.
"""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from typing import NamedTuple

import numpy as np

from forecast.physics.field_air import apply_screen, average_index
from forecast.physics.field_boundary import Mixed, join, mixed_coefficients, split
from forecast.physics.field_steps import LIGHT_SPEED, FieldSteps
from forecast.physics.field_terrain import Relief
from forecast.physics.rays import Medium

__all__ = ["Beam", "March", "Source"]

_TAPS = 12  # points of the interpolation between heights
_BLOCK_BYTES = 600e3  # of one block's field: two of them fit a core's own cache
_SINC_HALF = 1.3915574  # sin(x)/x = √½


class Beam(NamedTuple):
    """Antenna pattern in the vertical: ``kind`` omni, gaussian or sinc (uniform aperture).

    ``width`` is the full width between half-power points and ``tilt`` the elevation of the axis,
    rad. The field is measured against that on the axis in free space.
    """

    kind: str = "omni"
    width: float = np.pi
    tilt: float = 0.0


class Source(NamedTuple):
    """Frequency (Hz), height above the datum (m) and pattern of the transmitter."""

    frequency: float
    height: float
    beam: Beam


class March:
    """Grid of a path, and the fields of all cases on it.

    Parameters
    ----------
    medium : Medium
        Air, columns (case × profile).
    stations : ndarray
        Ranges of the profiles, m.
    source : Source
    ranges, receivers : ndarray
        Where the field is wanted, m; receivers above the datum.
    steps : FieldSteps
    relief : Relief
        Ground at the nodes.
    impedances : ndarray, optional
        Normalised, at the nodes; None is the mirror of horizontal polarisation.
    """

    def __init__(
        self, medium: Medium, stations: np.ndarray, source: Source, ranges: np.ndarray,
        receivers: np.ndarray, steps: FieldSteps, relief: Relief, impedances: np.ndarray | None,
    ) -> None:  # fmt: skip
        self.steps, self.stations, self.ranges, self.relief = steps, stations, ranges, relief
        self.beam = source.beam
        self.count = relief.sine.size
        self.step = ranges[-1] / self.count
        self.lowest = 1 if impedances is None else 0  # first height kept, in steps
        radius = medium.radius[0]
        self.ground = radius * np.log1p(relief.ground / radius)
        self.receivers = radius * np.log1p(receivers / radius)
        self.source = radius * np.log1p(source.height / radius) - self.ground[0]
        points, dz = steps.points, steps.height_step
        heights = points + 3 + int(np.ceil(max(self.ground.max(), 0.0) / dz))
        index = average_index(medium, dz, heights)
        here = round((self.source + self.ground[0]) / dz)
        reference = float(np.mean(index[:, min(max(here, 0), heights - 1)]))
        self.k = 2.0 * np.pi * source.frequency / LIGHT_SPEED * (1.0 + reference)
        index = (index - reference) / (1.0 + reference)
        self.index = index.reshape(-1, stations.size, heights)
        self.sine = np.pi / steps.top / self.k * np.arange(1, points + 1)
        self.nyquist = np.pi / dz / self.k
        self.fade = np.ones(points)
        self.loss = np.ones(points + 1 - self.lowest)
        if steps.absorber:
            # Near the Nyquist angle the product with the index folds back: no such waves. The
            # filter is smooth, as a sharp one would spread strong fields into shadows.
            self.fade = np.exp(-3e4 * (self.sine / self.nyquist) ** 32)
            height = dz * np.arange(self.lowest, points + 1)
            depth = steps.top - steps.clear_height
            s = np.clip((height - steps.clear_height) / depth, 0.0, 1.0)
            # 240 dB for the steepest wave, up and down again.
            rate = 28.0 * self.nyquist / depth
            self.loss = np.exp(-rate * self.step * s**2 * (3.0 - 2.0 * s))
        self.mixed: list[Mixed] = []
        if impedances is not None:
            known = {d: mixed_coefficients(d, self.k, dz, points) for d in set(impedances.tolist())}
            self.mixed = [known[d] for d in impedances.tolist()]

    def run(self, threads: int) -> tuple[np.ndarray, np.ndarray]:
        """Step all cases.

        Parameters
        ----------
        threads : int

        Returns
        -------
        tuple of ndarray
            Field that is 1 in free space at 1 m, in units of ``1/√x`` (case, range, height);
            energy (case, range) as a share of that launched.
        """
        cases = self.index.shape[0]
        most = max(1, int(_BLOCK_BYTES / (16 * self.steps.points)))
        blocks = max(-(-cases // most), min(threads, cases))
        edges = np.linspace(0, cases, blocks + 1).round().astype(int)
        parts = [self.index[a:b] for a, b in pairwise(edges)]
        if threads == 1 or blocks == 1:
            done = [self._march(part) for part in parts]
        else:
            with ThreadPoolExecutor(min(threads, blocks)) as pool:
                done = list(pool.map(self._march, parts))
        field = np.concatenate([d[0] for d in done]) * np.sqrt(2.0 * np.pi / self.k)
        return field, np.concatenate([d[1] for d in done])

    def _pattern(self, sine: np.ndarray) -> np.ndarray:
        """Amplitude of the plane waves at sines of elevation (signed), faded above max_angle."""
        from scipy.special import erfc

        steep = np.sin(self.steps.max_angle)
        # As smooth as can be: a corner here shines into the deep shadow from far above the source.
        out = np.clip((np.abs(sine) - steep) / max(0.5 * self.nyquist - steep, 1e-12), 0.0, 1.0)
        out = 0.5 * erfc(8.0 * out - 4.0) * np.maximum(1.0 - sine**2, 1e-3) ** -0.25
        # Angles count from the level, the waves' from the ground.
        off = sine + self.relief.sine[0] - np.sin(self.beam.tilt)
        half = np.sin(0.5 * self.beam.width)
        if self.beam.kind == "gaussian":
            out *= np.exp(-0.5 * np.log(2.0) * (off / half) ** 2)
        elif self.beam.kind == "sinc":
            out *= np.sinc(_SINC_HALF / np.pi * off / half)
        return out

    def _launch(self) -> tuple[np.ndarray, complex]:
        """Transform of the source and of its image, (height,), and the sum of the surface wave."""
        turn = np.exp(1j * self.k * self.sine * self.source)
        down, up = self._pattern(-self.sine) * turn, self._pattern(self.sine) / turn
        norm = np.sqrt(0.5 * (self.steps.points + 1))  # sum of sines to orthonormal transform
        if not self.mixed:
            return -1j * norm / self.steps.top * (down - up), 0j
        m = self.mixed[0]
        phase = np.exp(1j * self.k * self.sine * self.steps.height_step)
        wave = down * (m.a / phase + m.b + m.c * phase) - up * (m.a * phase + m.b + m.c / phase)
        clinging = m.small ** (self.source / self.steps.height_step) / self.steps.height_step
        return -1j * norm / self.steps.top * wave, clinging if m.clings else 0j

    def _field(self, wave: np.ndarray, clinging: np.ndarray, node: int) -> np.ndarray:
        """Field over height from its transform, which is used up."""
        from scipy.fft import dst

        wave = dst(wave, type=1, norm="ortho", overwrite_x=True)
        if not self.mixed:
            return wave
        m = self.mixed[node]
        field = np.empty((wave.shape[0], wave.shape[1] + 1), dtype=complex)
        join(wave, clinging, m.a, m.small, m.large, m.end, m.square, field)
        return field

    def _transform(self, field: np.ndarray, clinging: np.ndarray, node: int) -> np.ndarray:
        """Transform of a field, which is used up; fills the sums of the surface wave."""
        from scipy.fft import dst

        if self.mixed:
            m = self.mixed[node]
            wave = np.empty((field.shape[0], field.shape[1] - 1), dtype=complex)
            split(field, m.a, m.b, m.c, m.small, m.end, wave, clinging)
            field = wave
        return dst(field, type=1, norm="ortho", overwrite_x=True)

    def _advance(self, length: float, node: int) -> tuple[np.ndarray, complex]:
        """Factors of the plane waves (height,) and of the surface wave over a length of ground."""
        cosine = self.relief.cosine[node]
        root = np.sqrt(np.maximum(1.0 - (self.sine / cosine) ** 2, 0.0)) - 1.0
        way = 1j * self.k * length / cosine
        clinging = 0j
        if self.mixed and self.mixed[node].clings:
            clinging = complex(np.exp(way * self.mixed[node].advance))
        return np.exp(way * root), clinging

    def _march(self, index: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Field at receivers (case, range, height), and energy (case, range), of a block."""
        cases = index.shape[0]
        launch, sum_start = self._launch()
        clinging = np.full(cases, sum_start)
        field = self._field(np.repeat(launch[None], cases, axis=0), clinging, 0)
        start = np.sum(np.abs(field) ** 2, axis=1)
        out = np.empty((cases, self.ranges.size, self.receivers.size), dtype=complex)
        energy = np.empty((cases, self.ranges.size))
        flat = not np.any(self.relief.sine) and np.ptp(self.relief.ground) == 0.0
        still = None
        if flat and self.stations.size == 1:
            still = np.ones_like(field)
            self._screen(still, index, 1, 1.0)
        self._screen(field, index, 0, 0.5)
        whole = self._advance(self.step, 0)
        done = 0
        events = self._events()
        for j in range(self.count):
            wave = self._transform(field, clinging, j)
            here = j * self.step
            for x, top in events.get(j, ()):
                factor, surface = self._advance(x - here, j)
                there = self._field(wave * factor, clinging * surface, j)
                if np.isnan(top):
                    energy[:, done] = np.sum(np.abs(there) ** 2, axis=1) / start
                    taps, weights = self._taps(x)
                    out[:, done] = np.sum(there[:, taps] * weights, axis=-1)
                    done += 1
                else:
                    self._cut(there, top - self._ground_at(x))
                    wave = self._transform(there, clinging, j)
                    here = x
            if j + 1 == self.count:
                break
            if flat and not self.mixed and here == j * self.step:
                factor = whole[0]
            else:
                factor, surface = self._advance((j + 1) * self.step - here, j)
                clinging *= surface
            wave *= factor
            wave *= self.fade
            field = self._field(wave, clinging, j)
            if still is None:
                self._screen(field, index, j + 1, 1.0)
            else:
                field *= still
        return out, energy

    def _events(self) -> dict[int, list[tuple[float, float]]]:
        """What is done within each step, in order: range and, for an edge, its top (else NaN)."""
        x = np.concatenate([self.relief.edge_range, self.ranges])
        tops = np.concatenate([self.relief.edge_top, np.full(self.ranges.size, np.nan)])
        steps = np.ceil(x / self.step - 1e-9).astype(int) - 1
        events: dict[int, list[tuple[float, float]]] = {}
        for i in np.argsort(x, kind="stable"):
            events.setdefault(int(steps[i]), []).append((float(x[i]), float(tops[i])))
        return events

    def _ground_at(self, x: float) -> float:
        return float(np.interp(x / self.step, np.arange(self.count + 1), self.ground))

    def _screen(self, field: np.ndarray, index: np.ndarray, node: int, share: float) -> None:
        """Multiply by the air's factor of a share of a step at a node, and the change of slope."""
        x = node * self.step
        at = float(np.interp(x, self.stations, np.arange(self.stations.size)))
        profile = min(int(at), self.stations.size - 1)
        before, after = max(node - 1, 0), min(node, self.count - 1)
        sine, cosine = self.relief.sine, self.relief.cosine
        tilt = self.k * self.steps.height_step * (sine[before] - sine[after])
        phase = share * self.k * self.step * 0.5 * (1.0 / cosine[before] + 1.0 / cosine[after])
        first = self.lowest + max(self.ground[node], 0.0) / self.steps.height_step
        apply_screen(
            field, index, profile, at - profile, first, phase, tilt, tilt * self.lowest,
            self.loss**share if share != 1.0 else self.loss,
        )  # fmt: skip

    def _cut(self, field: np.ndarray, top: float) -> None:
        """Take away the field below an edge, the cell that holds its top in proportion."""
        height = np.arange(self.lowest, self.lowest + field.shape[1])
        field *= np.clip(height - top / self.steps.height_step + 0.5, 0.0, 1.0)

    def _taps(self, x: float) -> tuple[np.ndarray, np.ndarray]:
        """Grid points around the receivers at a range, and Lagrange's weights."""
        at = (self.receivers - self._ground_at(x)) / self.steps.height_step
        base = np.floor(at).astype(int) - (_TAPS // 2 - 1)
        if self.mixed:
            base = np.maximum(base, 0)
        near = base[:, None] + np.arange(_TAPS)
        node = np.arange(_TAPS)
        apart = (node[:, None] - node).astype(float) + np.eye(_TAPS)
        gap = (at[:, None] - near)[:, None, :] + np.zeros((_TAPS, 1))
        gap[:, node, node] = 1.0
        weights = np.prod(gap, axis=-1) / np.prod(apart, axis=1)
        if not self.mixed:
            weights = weights * np.sign(near)  # the field is odd in height
        inside = np.abs(near) <= self.steps.points
        place = np.clip(np.abs(near) - self.lowest, 0, self.steps.points - self.lowest)
        return place, weights * inside
