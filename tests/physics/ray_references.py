"""Rays once more by other means: 30-digit arithmetic, an ODE solver, Snell's law, circles."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
from scipy.integrate import solve_ivp

from forecast.physics.rays import Medium

__all__ = ["circle_height", "exact_trace", "integrate_ray", "snell_height"]


def circle_height(radius_earth: float, launch: float, bend: float, x: float) -> float:
    """Height over a sphere, at ground distance x, of a circle launched level.

    ``bend`` is the signed curvature (1/m), positive towards the Earth. The circle's centre lies
    below the launch by 1/bend (above it if negative); it is cut by the vertical at x.
    """
    with mp.workdps(40):
        r0 = mp.mpf(radius_earth) + launch
        rho = 1 / abs(mp.mpf(bend))
        sign = 1 if bend > 0 else -1
        centre = r0 - sign * rho
        phi = mp.mpf(x) / radius_earth
        root = mp.sqrt(rho**2 - (centre * mp.sin(phi)) ** 2)
        return float(centre * mp.cos(phi) + sign * root - radius_earth)


def snell_height(
    radius_earth: float, launch: float, refractivity, x: float, shell: float, depth: float
) -> float:
    """Height at ground distance x of a ray launched level, by Snell's law through thin shells.

    Homogeneous shells, each with the index of its lower edge; straight lines inside, Snell's law
    (with the sphere: n r cos θ, Bouguer) at each edge. The launch is on an edge, where Snell's
    law itself says whether the ray leaves upwards or downwards.
    """
    count = int(depth / shell)
    r0 = radius_earth + launch
    step = np.arange(count + 1)

    def index(height):
        return 1.0 + 1e-6 * refractivity(height)

    invariant = index(launch) * r0
    if index(launch + shell) * (r0 + shell) > invariant:  # room above: upwards
        near, far = r0 + step[:-1] * shell, r0 + step[1:] * shell
        n = index(launch + step[:-1] * shell)
    else:
        near, far = r0 - step[:-1] * shell, r0 - step[1:] * shell
        n = index(launch - step[1:] * shell)
    enters = np.arccos(np.minimum(invariant / (n * near), 1.0))
    leaves = np.arccos(invariant / (n * far))
    upwards = far[0] > near[0]
    turned = np.cumsum(leaves - enters if upwards else enters - leaves)
    end = x / radius_earth
    i = int(np.searchsorted(turned, end))
    angle = enters[i] if upwards else -enters[i]
    angle += end - (turned[i - 1] if i else 0.0)
    return invariant / n[i] / math.cos(angle) - radius_earth


def exact_trace(
    medium: Medium, launch: float, elevation: float, distance: float, reflect: bool = True
) -> tuple[float, int, int]:
    """Height at the distance, turning points and reflections, in 30-digit arithmetic.

    Event by event: in each layer the path is a parabola Z(x), and the next event is the smallest
    positive root among its crossings of the two nodes. No formula is shared with the kernel
    beyond the equation of motion.
    """
    count = int(medium.count[0])
    with mp.workdps(30):
        a = mp.mpf(float(medium.radius[0]))
        z = [mp.mpf(float(v)) for v in medium.z[0, :count]]
        mu = [mp.mpf(float(v)) for v in medium.mu[0, :count]]
        slope = [(mu[i + 1] - mu[i]) / (z[i + 1] - z[i]) for i in range(count - 1)]
        here = a * mp.log(1 + mp.mpf(launch) / a)
        layer = max(i for i in range(count - 1) if z[i] <= here)
        start = mu[layer] + slope[layer] * (here - z[layer])
        c2 = (1 + start) * mp.cos(mp.mpf(elevation)) ** 2
        w = mp.tan(mp.mpf(elevation))
        left = mp.mpf(distance)
        turns = bounces = 0
        if here == z[layer] and layer > 0 and (w < 0 or (w == 0 and slope[layer] <= 0)):
            layer -= 1
        while True:
            bend = slope[layer] / (2 * c2)
            first, node = None, None
            for edge in (layer, layer + 1):
                for t in _crossings(here, w, bend, z[edge]):
                    if first is None or t < first:
                        first, node = t, edge
            turn = -w / bend if bend != 0 else mp.mpf(-1)
            reach = left if first is None else min(first, left)
            if 0 < turn < reach:
                turns += 1
            if reach == left:
                here += w * left + bend * left**2 / 2
                return float(a * mp.expm1(here / a)), turns, bounces
            w += bend * first
            left -= first
            here = z[node]
            if node == 0:
                if not reflect:
                    return float("nan"), turns, bounces
                w = -w
                bounces += 1
                layer = 0
            else:
                layer = node if w > 0 else node - 1


def _crossings(here, w, bend, node):
    """Positive distances at which ``here + w t + bend t²/2`` equals the node."""
    if here == node:
        roots = [-2 * w / bend] if bend != 0 else []
    elif bend == 0:
        roots = [(node - here) / w] if w != 0 else []
    else:
        square = w * w - 2 * bend * (here - node)
        if square < 0:
            return []
        root = mp.sqrt(square)
        roots = [(-w + root) / bend, (-w - root) / bend]
    return [t for t in roots if t > 0]


def integrate_ray(
    height: np.ndarray,
    refractivity: np.ndarray,
    radius_earth: float,
    launch: float,
    elevation: float,
    distance: float,
) -> tuple[float, float, int, int]:
    """Height, elevation, turning points, reflections by scipy's `solve_ivp`, rtol 1e-11.

    N is linear in height between levels. Equations along the ground distance x, from
    κ = −(1/n)(dn/dr) cos θ: ``dz/dx = (r/a) tan θ``, ``dθ/dx = (r/a)(n'/n + 1/r)``. Integrated
    layer by layer, so that the kinks of N fall on step ends.
    """
    gradient = np.diff(refractivity) / np.diff(height)
    z, theta, x = launch, elevation, 0.0
    layer = int(np.clip(np.searchsorted(height, z, side="right") - 1, 0, gradient.size - 1))
    if z == height[layer] and elevation < 0.0 and layer > 0:
        layer -= 1
    turns = bounces = 0
    while True:
        low, high, slope = height[layer], height[layer + 1], 1e-6 * gradient[layer]
        n_low = 1.0 + 1e-6 * refractivity[layer]

        def rate(_x, y, low=low, slope=slope, n_low=n_low):
            r = radius_earth + y[0]
            n = n_low + slope * (y[0] - low)
            return [r / radius_earth * math.tan(y[1]), r / radius_earth * (slope / n + 1.0 / r)]

        def leaves_below(_x, y, low=low):
            return y[0] - low

        def leaves_above(_x, y, high=high):
            return y[0] - high

        for event, direction in ((leaves_below, -1.0), (leaves_above, 1.0)):
            event.terminal = True
            event.direction = direction
        # A first step that ends before the ray can have crossed the layer, or come back.
        step = min(400.0, 0.4 * (high - low) / max(abs(theta), 1e-4), 0.5 * (distance - x))
        bend = abs(slope / n_low + 1.0 / (radius_earth + low))
        if 0.0 < abs(theta) < bend * step:
            step = 0.5 * abs(theta) / bend
        solution = solve_ivp(
            rate,
            (x, distance),
            [z, theta],
            method="DOP853",
            rtol=1e-11,
            atol=[1e-9, 1e-14],
            first_step=step,
            max_step=250.0,  # or a glimpse of the next layer goes unnoticed
            events=[leaves_below, leaves_above],
        )
        if np.sign(solution.y[1, -1]) != np.sign(theta) and theta != 0.0:
            turns += 1
        x, z, theta = solution.t[-1], solution.y[0, -1], solution.y[1, -1]
        if solution.status == 0:
            return z, theta, turns, bounces
        if solution.t_events[0].size:
            z = low
            if layer == 0:
                theta = -theta
                bounces += 1
            else:
                layer -= 1
        else:
            z = high
            layer += 1
