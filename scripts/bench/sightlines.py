"""How fast sightlines are: many on one profile, one on many, and against an ODE solver's fan."""

from __future__ import annotations

import math

import numba
import numpy as np
from scipy.ndimage import gaussian_filter1d
from timing import arguments, median_seconds, report

from forecast.physics.rays import build_medium
from forecast.physics.sightline import trace_sightlines

RADIUS = 6371e3
OBSERVER, TARGET, DISTANCE = 10.0, 60.0, 80e3
MEMBERS = 48_000
SIGHTLINES = 20_000
FAN = 30  # rays of the script's fan


def make_members(count: int) -> tuple[np.ndarray, np.ndarray]:
    """Height (level) and N (member, level): a lid of random height and strength, smooth noise."""
    rng = np.random.default_rng(0)
    z = np.r_[0.0, np.geomspace(5.0, 3000.0, 59)]
    lid = rng.uniform(20.0, 800.0, (count, 1))
    fall = rng.uniform(0.0, 40.0, (count, 1))
    width = rng.uniform(10.0, 60.0, (count, 1))
    n = 320.0 - 0.04 * z - fall * 0.5 * (1.0 + np.tanh((z - lid) / width))
    return z, n + gaussian_filter1d(rng.normal(0.0, 1.0, n.shape), 2, axis=1)


def script_sightline(z: np.ndarray, n: np.ndarray) -> float:
    """Lowest height seen at the distance, by a script: a fan of rays with `solve_ivp`."""
    from scipy.integrate import solve_ivp

    gradient = np.diff(n) / np.diff(z)

    def rate(_x: float, y: np.ndarray) -> list[float]:
        r = RADIUS + y[0]
        i = min(max(int(np.searchsorted(z, y[0])) - 1, 0), gradient.size - 1)
        index = 1.0 + 1e-6 * (n[i] + gradient[i] * (y[0] - z[i]))
        return [r / RADIUS * math.tan(y[1]), r / RADIUS * (1e-6 * gradient[i] / index + 1.0 / r)]

    def ground(_x: float, y: np.ndarray) -> float:
        return y[0]

    ground.terminal = True  # type: ignore[attr-defined]
    lowest = math.inf
    for theta in np.linspace(-5e-3, 5e-3, FAN):
        done = solve_ivp(
            rate, (0.0, DISTANCE), [OBSERVER, theta], method="RK45", rtol=1e-6, atol=1e-6,
            events=ground,
        )  # fmt: skip
        if done.status == 0:
            lowest = min(lowest, done.y[0, -1])
    return lowest


def main() -> None:
    options = arguments(__doc__)
    numba.set_num_threads(options.threads)
    members = MEMBERS // 10 if options.quick else MEMBERS
    z, n = make_members(members)
    height = np.broadcast_to(z, n.shape)
    radius = np.full(members, RADIUS)

    def run() -> None:
        trace_sightlines(build_medium(height, n, radius), OBSERVER, TARGET, DISTANCE)

    building = median_seconds(lambda: build_medium(height, n, radius))
    whole = median_seconds(run)

    # Many sightlines at 80 km through the profiles of a week: 20 columns of 40 levels.
    few = np.linspace(0, z.size - 1, 40).astype(int)
    week = build_medium(height[:20, few], n[:20, few], radius[:20])
    lines = SIGHTLINES // 20
    observer = np.linspace(2.0, 60.0, lines)
    rate = 20 * lines / median_seconds(lambda: trace_sightlines(week, observer, TARGET, DISTANCE))

    # Twenty sightlines through each of a thousand profiles, with their visible intervals.
    many = min(1000, members)
    twenty = np.linspace(2.0, 60.0, 20)
    away = np.linspace(20e3, 110e3, 20)

    def night() -> np.ndarray:
        air = build_medium(height[:many], n[:many], radius[:many])
        return trace_sightlines(air, twenty, TARGET, away).visible_bottom

    intervals = median_seconds(night)

    script = median_seconds(lambda: script_sightline(z, n[0]), warm=False, repeats=5)
    state = trace_sightlines(build_medium(height, n, radius), OBSERVER, TARGET, DISTANCE).state
    rows = [
        ("sightlines_per_second", "sightlines/s at 80 km, 40 levels", rate, 40_000),
        ("members_seconds", f"{members:,} member profiles x 1 sightline, s", whole, 2.5),
        ("members_build_seconds", "of which preparing the air, s", building, None),
        ("members_per_second", "member sightlines/s, 60 levels", members / whole, None),
        ("night_seconds", f"{many:,} profiles x 20 sightlines with intervals, s", intervals, 1.5),
        ("night_vs_script", "the same by script / ours", script * 20 * many / intervals, None),
        ("share_open", "share of members open or grazing", float(np.mean(state > 0)), None),
        ("script_seconds", f"solve_ivp fan of {FAN} rays, s per sightline", script, None),
        ("sightlines_vs_script", "script / ours", script / (whole / members), None),
    ]
    title = f"Sightlines at 80 km, {options.threads} threads"
    report(title, rows, options.json)


if __name__ == "__main__":
    main()
