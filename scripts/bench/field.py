"""How fast radio fields are, against the bare transforms they must do, timed in the same run."""

from __future__ import annotations

import numpy as np
from scipy.fft import dst
from timing import REPEATS, arguments, median_seconds, report

from forecast.physics.radio_field import RadioField, propagate

CASES, FREQUENCY, DISTANCE = 240, 3e9, 100e3
BLOCK = 16  # cases that share a core's cache


def make_air(cases: int) -> tuple[np.ndarray, np.ndarray]:
    """Height (level) and M (case, level): evaporation ducts of 2 to 25 m in all strengths."""
    rng = np.random.default_rng(0)
    height = np.r_[0.0, np.geomspace(0.1, 60.0, 40), 100.0, np.geomspace(200.0, 12e3, 20)]
    depth = rng.uniform(2.0, 25.0, (cases, 1))
    lapse = rng.uniform(0.10, 0.13, (cases, 1))
    shape = np.log1p(np.minimum(height, 60.0) / 1.5e-4)
    return height, 330.0 + lapse * (height - 0.5 * depth * shape)


def main() -> None:
    options = arguments(__doc__)
    cases = CASES // 10 if options.quick else CASES
    height, modified = make_air(cases)

    def run(threads: int, some: int = cases, polarisation: str = "horizontal") -> RadioField:
        return propagate(
            height,
            modified[:some],
            FREQUENCY,
            20.0,
            distance=DISTANCE,
            receiver_heights=20.0,
            polarisation=polarisation,
            threads=threads,
        )

    field = run(options.threads)
    steps = round(DISTANCE / field.steps.range_step)

    def transforms(some: int) -> None:
        # As the march holds them: in place, a block at a time.
        for start in range(0, some, BLOCK):
            size = min(BLOCK, some - start)
            wave = np.ones((size, field.steps.points), dtype=complex)
            for _ in range(2 * steps):
                wave = dst(wave, type=1, norm="ortho", overwrite_x=True)

    part = min(cases, 2 * BLOCK)
    bare = median_seconds(lambda: transforms(part), REPEATS, warm=False)
    one_part = median_seconds(lambda: run(1, part), REPEATS, warm=False)
    vertical = median_seconds(lambda: run(1, part, "vertical"), REPEATS)
    seconds = {
        threads: median_seconds(lambda threads=threads: run(threads), REPEATS, warm=False)
        for threads in sorted({1, options.threads})
    }
    most = max(seconds)
    rows = [
        ("points", "heights", float(field.steps.points), None),
        ("steps", "range steps", float(steps), None),
        ("bare_seconds", f"bare transforms, {part} cases, 1 thread, s", bare, None),
        ("field_seconds_part", f"fields, {part} cases, 1 thread, s", one_part, None),
        ("field_vs_bare", "fields / bare transforms, 1 thread", one_part / bare, 1.9),
        ("vertical_vs_bare", "the same, vertical polarisation on its finer grid", vertical / bare,
         None),
        ("field_seconds_1", f"{cases} cases, 1 thread, s", seconds[1], None),
        ("field_seconds", f"{cases} cases, {most} threads, s", seconds[most], 20.0),
        ("threads_gain", f"{most} threads / 1", seconds[1] / seconds[most], 1.5),
        ("share_above_free_space", "cases stronger than in free space",
         float(np.mean(field.propagation_factor > 0.0)), None),
    ]  # fmt: skip
    title = f"{FREQUENCY / 1e9:g} GHz over {DISTANCE / 1e3:g} km of sea"
    report(title, rows, options.json)


if __name__ == "__main__":
    main()
