"""How fast rays are, against scipy's `solve_ivp` on the same smooth profile."""

from __future__ import annotations

import math

import numba
import numpy as np
from timing import arguments, median_seconds, report

from forecast.physics.rays import build_medium, trace_rays

RADIUS = 6371e3
DISTANCE = 100e3
LAUNCH = 50.0
LAYERS = 120
RAYS = 200_000
ODE_RAYS = 10


def refractivity(height):
    """Smooth profile: exponential decay with a lid at 300 m that makes a duct."""
    return 320.0 * np.exp(-height / 7350.0) - 15.0 * (1.0 + np.tanh((height - 300.0) / 60.0))


def integrate(elevation: float) -> float:
    """One ray by `solve_ivp`, RK45, rtol 1e-6, mirrored at the surface."""
    from scipy.integrate import solve_ivp

    def rate(_x: float, y: np.ndarray) -> list[float]:
        z, theta = y
        r = RADIUS + z
        bend = math.tanh((z - 300.0) / 60.0)
        n = 1.0 + 1e-6 * (320.0 * math.exp(-z / 7350.0) - 15.0 * (1.0 + bend))
        slope = -1e-6 * (320.0 / 7350.0 * math.exp(-z / 7350.0) + 15.0 / 60.0 * (1.0 - bend * bend))
        return [r / RADIUS * math.tan(theta), r / RADIUS * (slope / n + 1.0 / r)]

    def ground(_x: float, y: np.ndarray) -> float:
        return y[0]

    ground.terminal = True  # type: ignore[attr-defined]
    ground.direction = -1.0  # type: ignore[attr-defined]
    x, state = 0.0, [LAUNCH, elevation]
    while True:
        done = solve_ivp(
            rate, (x, DISTANCE), state, method="RK45", rtol=1e-6, atol=1e-9, events=ground
        )
        if done.status == 0:
            return done.y[0, -1]
        x, state = done.t[-1], [0.0, -done.y[1, -1]]


def main() -> None:
    options = arguments(__doc__)
    rays = RAYS // 10 if options.quick else RAYS
    z = np.concatenate([np.linspace(0.0, 600.0, LAYERS // 2), np.linspace(620.0, 3e3, LAYERS // 2)])
    medium = build_medium(z, refractivity(z), RADIUS)
    elevation = np.linspace(-8e-3, 8e-3, rays)[None, :]

    seconds = {}
    for threads in sorted({1, options.threads}):
        numba.set_num_threads(threads)
        seconds[threads] = median_seconds(lambda: trace_rays(medium, LAUNCH, elevation, DISTANCE))

    sample = np.linspace(-8e-3, 8e-3, ODE_RAYS)
    ode = median_seconds(lambda: [integrate(theta) for theta in sample]) / ODE_RAYS
    # Both must do the same job; RK45 at 1e-6 and the layering leave some metres at 100 km.
    ours = trace_rays(medium, LAUNCH, sample[None, :], DISTANCE).height[0]
    apart = float(np.median(np.abs(ours - [integrate(theta) for theta in sample])))

    # Crossings are sampled along a hundred rays here, so that the kernel need not count them.
    few = np.repeat(elevation[0, :: rays // 100], 1000)
    way = np.tile(np.linspace(0.0, DISTANCE, 1001)[1:], few.size // 1000)
    path = trace_rays(medium, LAUNCH, few[None, :], way[None, :]).height.reshape(-1, 1000)
    layer = np.searchsorted(z, path)
    crossings = float(np.mean(np.sum(np.abs(np.diff(layer, axis=1)), axis=1)))

    most = max(seconds)
    per_ray = seconds[1] / rays
    rows = [
        ("ode_seconds_per_ray", "solve_ivp RK45 1e-6, s per ray", ode, None),
        ("ode_median_difference_m", "median difference at 100 km, m", apart, None),
        ("rays_per_second_1", "rays/s, 1 thread", 1.0 / per_ray, None),
        ("rays_per_second", f"rays/s, {most} threads", rays / seconds[most], None),
        ("crossings_per_ray", "layer crossings per ray", crossings, None),
        ("ns_per_crossing", "ns per layer crossing, 1 thread", 1e9 * per_ray / crossings, None),
        ("rays_vs_ode_1", "solve_ivp / ours, 1 thread", ode / per_ray, None),
        ("rays_vs_ode", f"solve_ivp / ours, {most} threads", ode / (seconds[most] / rays), 5000),
    ]
    report(f"{rays:,} rays over 100 km, {z.size} levels", rows, options.json)


if __name__ == "__main__":
    main()
