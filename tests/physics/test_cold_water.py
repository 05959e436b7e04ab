"""Warm air over cold water opens low sightlines, and cold air over warm water shuts them.

What must happen is derived here from the ray invariant alone. With μ = m² − 1 of
``m = n (1 + z/a)`` (M in other words: μ ≈ 2e-6 M) a ray of launch energy
``e = (1 + μ_eye) sin²θ`` obeys ``w² C² = μ(Z) − μ_eye + e``: it exists only where that is
positive, turns where it is nought, and covers ``∫ C dZ / √(μ − μ_eye + e)`` along the sea.

Over cold water μ falls from the surface to a least value at the layer's top. From an eye below
that top all rays launched upwards with less than ``e_c = μ_eye − μ_top`` stay in the layer and
come down to the sea; from an eye above it only rays with more than e_c do.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from forecast.physics.curvature import modified_refractivity
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.rays import Medium, build_medium, trace_rays
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import standard_medium, trace_sightlines
from forecast.physics.stability import STABLE_FUNCTIONS
from forecast.physics.surface_join import join_surface_layer, trusted_level
from forecast.physics.surface_layer import solve_sea
from forecast.schema import SIGHTLINE_STATES
from tests.strategies import EARTH_RADIUS

_LOWEST = 20.0  # m, lowest level of the invented profile
_EYES = (0.5, 1.5, 3.0, 4.5, 7.0, 12.0, 20.0, 35.0, 60.0, 100.0)  # m


class Air(NamedTuple):
    """A column over water: the medium to be traced, and M (M-units) on its heights (m)."""

    medium: Medium
    z: np.ndarray
    m: np.ndarray
    index: np.ndarray

    def mu(self, height: float) -> float:
        """μ at a height: linear in Z = a ln(1 + z/a), as the air is defined to be."""
        z = EARTH_RADIUS * np.log1p(self.z / EARTH_RADIUS)
        mu = self.index * (1.0 + self.z / EARTH_RADIUS)
        return float(np.interp(EARTH_RADIUS * np.log1p(height / EARTH_RADIUS), z, mu * mu - 1.0))


def _over_water(
    warmer: float, wind: float, function: str = "beljaars_holtslag_1991", rh: float = 0.75
) -> Air:
    """Invented air, `warmer` K above the water at 20 m, over water; the lowest metres modelled."""
    z = np.r_[_LOWEST, np.arange(30.0, 200.0, 10.0), np.geomspace(210.0, 3000.0, 24)]
    t = 286.15 + 0.5 * (1.0 - np.exp(-(z - _LOWEST) / 40.0)) - 0.0065 * (z - _LOWEST)
    p = 101800.0 * np.exp(-0.0341632 / 286.15 * z)
    q = specific_humidity_from_relative_humidity(np.full(z.size, rh), t, p)
    layer = solve_sea(
        wind, t[0], q[0], p[0], 286.15 - warmer, air_height=_LOWEST, stable_function=function
    )
    assert layer.converged.all()
    state = [a[None, :] for a in (z, p, t, q)]
    joined = join_surface_layer(*state, trusted_level(state[0]), layer)
    height, p, t, q = (a[0][np.isfinite(joined.height[0])] for a in joined[:4])
    n = optical_refractivity(p, t, q)
    # The surface itself, as the tracer continues the air: along the lowest modelled gradient it
    # would be steeper still, so the check takes the tracer's own.
    medium = build_medium(height, n, EARTH_RADIUS, "optical")
    surface = n[0] + 26.7e-3 * height[0]
    height, n = np.r_[0.0, height], np.r_[surface, n]
    return Air(medium, height, modified_refractivity(n, height, EARTH_RADIUS), 1.0 + 1e-6 * n)


def _standard() -> Air:
    z = np.r_[np.arange(0.0, 500.0, 10.0), np.geomspace(500.0, 10e3, 80)]
    n = 277.84 * (1.0 - 0.0065 * z / 288.15) ** (0.0341632 / 0.0065 - 1.0)
    medium = standard_medium("optical", EARTH_RADIUS)
    return Air(medium, z, modified_refractivity(n, z, EARTH_RADIUS), 1.0 + 1e-6 * n)


# --- What the invariant says ---------------------------------------------------------------------


class Leg(NamedTuple):
    """Nodes on one ray's way, in its order, and f = μ − μ_eye + e at each."""

    z: np.ndarray
    f: np.ndarray

    def reach(self, c: float) -> np.ndarray:
        """Distance along the sea at each node: ∫ C dZ/√f, elementary for linear f."""
        root = np.sqrt(np.maximum(self.f, 0.0))
        step = 2.0 * c * np.abs(np.diff(self.z)) / (root[1:] + root[:-1])
        return np.r_[0.0, np.cumsum(step)]


def _conformal(air: Air) -> tuple[np.ndarray, np.ndarray]:
    mu = (air.index * (1.0 + air.z / EARTH_RADIUS)) ** 2 - 1.0
    return EARTH_RADIUS * np.log1p(air.z / EARTH_RADIUS), mu


def _leg(air: Air, eye: float, energy: float, upward: bool) -> Leg:
    """The way of a ray to the sea, or out of the air, by the sign of f alone; one turn at most."""
    z, mu = _conformal(air)
    start, f = EARTH_RADIUS * np.log1p(eye / EARTH_RADIUS), mu - air.mu(eye) + energy
    above, below = z > start, z < start
    climb, fall = (z[above], f[above]), (z[below][::-1], f[below][::-1])
    first, then = (climb, fall) if upward else (fall, climb)
    stop = np.flatnonzero(first[1] <= 0.0)
    way_z, way_f = np.r_[start, first[0]], np.r_[energy, first[1]]
    if stop.size == 0:
        return Leg(way_z, way_f)
    i = stop[0] + 1  # turns between i − 1 and i, where f is nought
    share = way_f[i - 1] / (way_f[i - 1] - way_f[i])
    turn = way_z[i - 1] + share * (way_z[i] - way_z[i - 1])
    back_z, back_f = way_z[:i][::-1], way_f[:i][::-1]
    return Leg(np.r_[way_z[:i], turn, back_z, then[0]], np.r_[way_f[:i], 0.0, back_f, then[1]])


def _height_at(air: Air, eye: float, energy: float, upward: bool, distance: float) -> float:
    """Height at which the ray passes the distance; −1 if the sea stops it before."""
    leg = _leg(air, eye, energy, upward)
    c = np.sqrt(1.0 + air.mu(eye) - energy)
    reach = leg.reach(c)
    if reach[-1] < distance:
        return -1.0 if leg.z[-1] == 0.0 else np.inf
    i = max(int(np.searchsorted(reach, distance)) - 1, 0)
    # √f changes evenly along the sea: d√f/dx = (dμ/dZ) / 2C for rays that climb.
    rise = np.sign(leg.z[i + 1] - leg.z[i])
    root, slope = np.sqrt(max(leg.f[i], 0.0)), 0.0
    if leg.z[i + 1] != leg.z[i]:
        slope = (leg.f[i + 1] - leg.f[i]) / (leg.z[i + 1] - leg.z[i])
    x = distance - reach[i]
    end = leg.z[i] + rise * x * root / c + 0.25 * slope * (x / c) ** 2
    return float(EARTH_RADIUS * np.expm1(end / EARTH_RADIUS))


def _layer_top(air: Air) -> float:
    """Height at which M is least in the lowest hundred metres; 0 if that is the surface."""
    low = air.z <= 100.0
    return float(air.z[low][np.argmin(air.m[low])])


def _critical(air: Air, eye: float) -> float:
    """e_c = μ_eye − μ_top; with the surface for the top where M is least there."""
    return air.mu(eye) - air.mu(_layer_top(air))


def _hidden(air: Air, eye: float, distance: float) -> float:
    """Lowest visible height by the invariant.

    Nought if the layer's own rays, or those that break through it, come down to the sea beyond
    the target; else the lowest that rays which never come down reach there.
    """
    critical, inside = max(_critical(air, eye), 1e-20), eye <= _layer_top(air)
    c = np.sqrt(1.0 + air.mu(eye))
    for share, upward in ((1.0 - 1e-9, True), (1.0 + 1e-9, False)):
        falls = _leg(air, eye, critical * share, upward)
        if falls.z[-1] == 0.0 and falls.reach(c)[-1] >= distance:
            return 0.0

    def height(t: float) -> float:
        if inside:  # more than critical, upwards
            energy = critical * (1.0 + 1e-9) + 1e-4 * t**4
        else:  # less, downwards
            energy = critical * (1.0 - 1e-9) * np.sin(0.5 * np.pi * max(t, 1e-6)) ** 2
        return _height_at(air, eye, energy, inside, distance)

    # Kinks of M make several dips of the height over the energy: the four lowest are looked into.
    t = np.linspace(0.0, 1.0, 241)
    rough = np.array([height(v) for v in t])
    dips = 1 + np.flatnonzero((rough[1:-1] <= rough[:-2]) & (rough[1:-1] <= rough[2:]))
    lowest = float(rough.min())
    for i in dips[np.argsort(rough[dips])][:4]:
        finer = minimize_scalar(height, bounds=(t[i - 1], t[i + 1]), method="bounded")
        lowest = min(lowest, float(finer.fun))
    return lowest


# --- What the program finds ----------------------------------------------------------------------


def _found(air: Air, eye: float, distance: float) -> float:
    return float(trace_sightlines(air.medium, eye, 50.0, distance).hidden_height[0, 0])


_COLD = [(4.0, 4.0), (4.0, 6.0), (5.0, 3.5), (5.0, 5.0), (6.0, 4.0), (6.0, 6.0)]


@pytest.mark.parametrize(("warmer", "wind"), _COLD)
def test_cold_water_holds_the_rays_that_the_invariant_says(warmer, wind):
    """Water 4-6 K colder than the air, 3.5-6 m/s: M falls upwards from the surface.

    Launched upwards from below the layer's top with 0.99 of the critical elevation a ray is held
    and comes down to the sea; with 1.01 it leaves for good.
    """
    air = _over_water(warmer, wind)
    top = _layer_top(air)
    assert 3.0 < top <= _LOWEST
    m_top = air.m[air.z == top][0]
    assert air.m[0] - m_top > 0.8
    for eye in (0.5, 0.3 * top, 0.8 * top):
        critical = np.arcsin(np.sqrt(_critical(air, eye) / (1.0 + air.mu(eye))))
        # The same in M-units: √(2e-6 ΔM) of any account of ducts.
        m_eye = np.interp(eye, air.z, air.m)
        assert critical == pytest.approx(np.sqrt(2e-6 * (m_eye - m_top)), rel=0.01)
        shares = critical * np.array([0.0, 0.5, 0.99, 1.01, 1.5])
        rays = trace_rays(air.medium, eye, shares, 300e3, reflect=False)
        assert np.isfinite(rays.blocked_at[0]).tolist() == [True, True, True, False, False]
        assert np.all(rays.height[0, 3:] > 1000.0)
        # All that come down to the sea do so beyond where the level ray does.
        assert np.all(np.diff(rays.blocked_at[0, :3]) > 0.0)


@pytest.mark.parametrize(("warmer", "wind"), [*_COLD, (-4.0, 3.0), (-5.0, 4.0), (-6.0, 6.0)])
def test_hidden_height_is_what_the_invariant_predicts(warmer, wind):
    """Within 0.1 m, from eyes of 0.5 to 100 m over 25 and 60 km, cold water and warm."""
    air = _over_water(warmer, wind)
    for distance in (25e3, 60e3):
        for eye in _EYES:
            assert _found(air, eye, distance) == pytest.approx(
                _hidden(air, eye, distance), abs=0.1
            ), (eye, distance)


@pytest.mark.parametrize(("warmer", "wind"), _COLD)
def test_cold_water_opens_the_sightline_of_a_low_observer(warmer, wind):
    """A light at 10 m, 25 km off, eye at 3 m: shut in standard air, open over the cold water.

    Derived: standard air hides what a ray that grazes the sea leaves hidden, some 21 m; over the
    cold water rays of the layer come down beyond the light, so that nothing is hidden.
    """
    cold, standard = _over_water(warmer, wind), _standard()
    assert _hidden(cold, 3.0, 25e3) == 0.0
    assert _hidden(standard, 3.0, 25e3) == pytest.approx(21.6, abs=0.1)
    light = [
        trace_sightlines(air.medium, 3.0, 10.0, 25e3, 10.0).state[0, 0] for air in (standard, cold)
    ]
    assert light == [SIGHTLINE_STATES["shut"], SIGHTLINE_STATES["open"]]
    for eye in _EYES[:4]:
        for distance in (15e3, 25e3, 40e3):
            assert _found(cold, eye, distance) < _hidden(standard, eye, distance)


@pytest.mark.parametrize("wind", [3.0, 6.0])
@pytest.mark.parametrize("colder", [4.0, 5.0, 6.0])
def test_warm_water_hides_more_than_standard_air(colder, wind):
    """The sign of the difference swapped: M rises steeply at the surface, rays bend up.

    An eye looks down on the sea by μ_eye − μ_surface, which is more than in standard air: the
    horizon is nearer and lower, and from every height more is hidden than in standard air.
    """
    warm, standard = _over_water(-colder, wind), _standard()
    assert _layer_top(warm) == 0.0
    for eye in _EYES:
        assert _critical(warm, eye) > _critical(standard, eye) > 0.0
        dip = [
            trace_sightlines(air.medium, eye, 1.0, 1e3).horizon_elevation[0, 0]
            for air in (warm, standard)
        ]
        assert dip[0] < dip[1] < 0.0
        for distance in (15e3, 40e3):
            expected = _hidden(standard, eye, distance)
            assert _found(warm, eye, distance) >= expected - 0.01
            if expected > 0.2:
                assert _found(warm, eye, distance) > expected + 1.0


@pytest.mark.parametrize("function", STABLE_FUNCTIONS)
def test_no_stable_function_makes_it_otherwise(function):
    # 5 K, 8 m/s: all three hold there. They part in how much, at longer distances.
    cold = _over_water(5.0, 8.0, function)
    assert 3.0 < _layer_top(cold) <= _LOWEST
    assert _found(cold, 3.0, 25e3) == _hidden(cold, 3.0, 25e3) == 0.0
    far = _hidden(cold, 3.0, 40e3)
    assert _found(cold, 3.0, 40e3) == pytest.approx(far, abs=0.1)
    assert far < 0.25 * _hidden(_standard(), 3.0, 40e3)


def test_humidity_does_not_decide_for_light():
    # Dry and moist air: the layer's top, in nodes, and what is hidden stay.
    moist, dry = _over_water(5.0, 5.0, rh=0.9), _over_water(5.0, 5.0, rh=0.5)
    for air in (moist, dry):
        assert _found(air, 3.0, 25e3) == 0.0
        assert air.m[0] - air.m.min() > 0.8
