"""Rays against circles, Snell's law, 30-digit arithmetic, an ODE solver, and their invariants."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecast.physics.rays import EXTENSIONS, Medium, build_medium, trace_rays
from tests.physics.ray_references import (
    circle_height,
    exact_trace,
    integrate_ray,
    snell_height,
)
from tests.strategies import EARTH_RADIUS, random_refractivity_column, refractivity_columns

FINE = np.arange(0.0, 4000.5, 2.5)


def _linear(gradient_per_km: float, at: float = 1500.0, n_at: float = 320.0) -> Medium:
    return build_medium(FINE, n_at + 1e-3 * gradient_per_km * (FINE - at), EARTH_RADIUS)


# --- A level ray bends ---------------------------------------------------------------------------


@pytest.mark.parametrize("gradient", [-200.0, -157.0, -100.0, -40.0, -10.0, 20.0, 40.0])
@pytest.mark.parametrize("distance", [1e3, 10e3, 25e3, 50e3])
def test_level_ray_in_a_constant_gradient_follows_a_circle(gradient, distance):
    """Radius n/|dn/dz|, tangent at the launch: 1 mm over 50 km.

    In a strictly constant gradient the curvature itself changes with n and cos θ by some 1e-5
    (0.6 mm at −200 N/km); the next test takes air in which the circle is exact.
    """
    medium = _linear(gradient)
    bend = -1e-9 * gradient / (1.0 + 320e-6)
    found = trace_rays(medium, 1500.0, 0.0, distance).height[0, 0]
    assert found == pytest.approx(circle_height(EARTH_RADIUS, 1500.0, bend, distance), abs=1e-3)


@pytest.mark.parametrize("bend", [6e-7, 3e-7, 1.57e-7, 4e-8, -5e-8, -1.5e-7])
@pytest.mark.parametrize("distance", [20e3, 50e3])
def test_level_ray_where_the_circle_is_exact(bend, distance):
    """1/n = (1/n0)(1 + κ (r² − r0²)/(2 r0)) has C n'/(n² r), the curvature, the same everywhere.

    (From κ = −(1/n)(dn/dr) cos θ and n r cos θ = C: the relative of Maxwell's fish-eye.)
    """
    r0, r = EARTH_RADIUS + 1500.0, EARTH_RADIUS + FINE
    inverse = (1.0 + bend * (FINE - 1500.0) * (r + r0) / (2.0 * r0)) / (1.0 + 320e-6)
    medium = build_medium(FINE, 1e6 * (1.0 / inverse - 1.0), EARTH_RADIUS)
    found = trace_rays(medium, 1500.0, 0.0, distance).height[0, 0]
    assert found == pytest.approx(circle_height(EARTH_RADIUS, 1500.0, bend, distance), abs=1e-3)


@pytest.mark.parametrize("gradient", [-400.0, -250.0, -100.0, -40.0, 40.0])
def test_snells_law_through_ever_thinner_shells_tends_to_the_same_path(gradient):
    """A level ray never goes straight along its layer.

    The stair of shells misses the start of the bend, so its error goes as the square root of
    the shell's thickness: it halves for shells four times thinner. Extrapolated on that law the
    stair meets our path within 5 cm.
    """

    def n(height):
        return 320.0 + 1e-3 * gradient * (height - 1500.0)

    ours = trace_rays(_linear(gradient), 1500.0, 0.0, 50e3).height[0, 0]
    heights = [snell_height(EARTH_RADIUS, 1500.0, n, 50e3, 0.25 / 4**k, 600.0) for k in range(4)]
    errors = np.array(heights) - ours
    assert np.all((errors[:-1] / errors[1:] > 1.9) & (errors[:-1] / errors[1:] < 2.1))
    assert 2.0 * heights[-1] - heights[-2] == pytest.approx(ours, abs=0.05)
    assert abs(ours - 1500.0) > 20.0


@pytest.mark.parametrize("launch", [1500.0, 1500.7])
def test_tiny_elevations_join_the_level_ray_smoothly(launch):
    medium = _linear(-300.0)
    level = trace_rays(medium, launch, 0.0, 50e3).height[0, 0]
    for theta in (1e-16, 1e-13, 1e-10, -1e-16, -1e-13, -1e-10):
        found = trace_rays(medium, launch, theta, 50e3).height[0, 0]
        assert found == pytest.approx(level + 50e3 * theta, abs=1e-7 + 50e3 * abs(theta) * 0.05)


# --- Independent arithmetic and integration ------------------------------------------------------


def _duct_over_water() -> tuple[np.ndarray, np.ndarray]:
    """Surface duct of 18 M over 40 m, standard air, an elevated duct at 500 to 560 m."""
    z = np.array([0.0, 10.0, 25.0, 40.0, 150.0, 300.0, 500.0, 530.0, 560.0, 800.0, 1200.0, 2000.0])
    m = 340.0 + np.array([0, -6, -14, -18, -5, 13, 36.6, 26, 17, 45, 92, 187.0])
    return z, m - 1e6 * z / EARTH_RADIUS


# Launch height (m), elevation (rad): level, up and down, trapped at the surface and aloft,
# skimming, on a node, on the surface, escaping.
RAYS = [
    (12.0, 0.0),
    (12.0, 2e-3),
    (12.0, -3e-3),
    (35.0, -5e-3),
    (0.0, 1e-3),
    (0.0, 8e-3),
    (25.0, 0.0),
    (25.0, 1e-4),
    (510.0, 0.0),
    (530.0, -2e-3),
    (545.0, 2.5e-3),
    (300.0, -9e-3),
    (100.0, -7.9e-3),
    (900.0, -0.012),
    (60.0, 0.01),
    (12.0, 0.2),
]


@pytest.mark.parametrize(("launch", "elevation"), RAYS)
def test_rays_agree_with_thirty_digit_arithmetic(launch, elevation):
    """1e-6 m after 100 km, and the same count of turning points and reflections."""
    medium = build_medium(*_duct_over_water(), EARTH_RADIUS)
    height, turns, bounces = exact_trace(medium, launch, elevation, 100e3)
    found = trace_rays(medium, launch, elevation, 100e3)
    assert found.height[0, 0] == pytest.approx(height, abs=1e-6)
    assert found.turns[0, 0] == turns
    assert found.reflections[0, 0] == bounces


def test_the_rays_above_turn_and_reflect():
    """Guards the test above: it must not pass because its rays became tame."""
    found = trace_rays(
        build_medium(*_duct_over_water(), EARTH_RADIUS), *np.array(RAYS).T[:, None, :], 100e3
    )
    assert np.count_nonzero(found.turns[0] > 3) >= 4
    assert np.count_nonzero(found.reflections[0] > 3) >= 3
    assert np.count_nonzero(found.turns[0] + found.reflections[0] == 0) >= 1


def test_random_rays_agree_with_thirty_digit_arithmetic():
    rng = np.random.default_rng(12)
    for _ in range(12):
        medium = build_medium(*random_refractivity_column(rng), EARTH_RADIUS)
        launch, elevation = rng.uniform(0.0, 200.0), rng.normal(0.0, 3e-3)
        height, turns, bounces = exact_trace(medium, launch, elevation, 100e3)
        found = trace_rays(medium, launch, elevation, 100e3)
        assert found.height[0, 0] == pytest.approx(height, abs=1e-6)
        assert (found.turns[0, 0], found.reflections[0, 0]) == (turns, bounces)


@pytest.mark.parametrize(("launch", "elevation"), [r for r in RAYS if r != (12.0, 0.2)])
def test_rays_agree_with_an_ode_solver(launch, elevation):
    """0.02 m after 100 km through N linear in height: `solve_ivp` DOP853, rtol 1e-11.

    Left out: the steep ray, which ends above the given levels.
    """
    z, n = _duct_over_water()
    height, theta, turns, bounces = integrate_ray(z, n, EARTH_RADIUS, launch, elevation, 100e3)
    found = trace_rays(build_medium(z, n, EARTH_RADIUS), launch, elevation, 100e3)
    assert found.height[0, 0] == pytest.approx(height, abs=0.02)
    assert found.elevation[0, 0] == pytest.approx(theta, abs=1e-5)
    assert found.reflections[0, 0] == bounces
    if abs(elevation) > 0.0:
        assert found.turns[0, 0] == turns


# --- Invariants ----------------------------------------------------------------------------------

heights = st.floats(0.0, 500.0)
angles = st.floats(-0.02, 0.02)
distances = st.floats(1e3, 100e3)


@given(refractivity_columns(), heights, angles, distances)
def test_the_invariant_is_conserved(column, launch, elevation, distance):
    """n r cos θ (Bouguer), with n r = a √(1 + μ) and μ linear in Z between nodes."""
    medium = build_medium(*column, EARTH_RADIUS)
    end = trace_rays(medium, launch, elevation, distance)

    def square(height, theta):
        z = EARTH_RADIUS * math.log1p(height / EARTH_RADIUS)
        mu = np.interp(z, medium.z[0, : medium.count[0]], medium.mu[0, : medium.count[0]])
        return (1.0 + mu) * math.cos(theta) ** 2

    before = square(launch, elevation)
    assert square(end.height[0, 0], end.elevation[0, 0]) == pytest.approx(before, rel=1e-13)
    assert end.height[0, 0] >= 0.0


@settings(max_examples=200)
@given(refractivity_columns(), heights, angles, distances)
def test_rays_can_be_reversed(column, launch, elevation, distance):
    """From the end, turned round, a ray comes back to its start.

    Where a ray skims a node its end depends on its start without bound, so the allowance is what
    a start off by 1e-9 m or 1e-12 rad does to the end.
    """
    medium = build_medium(*column, EARTH_RADIUS)
    out = trace_rays(medium, launch, elevation, distance)
    end, theta = out.height[0, 0], out.elevation[0, 0]
    near = trace_rays(
        medium,
        np.maximum(end + np.array([[0.0, 1e-9, -1e-9, 0.0, 0.0]]), 0.0),
        -theta + np.array([[0.0, 0.0, 0.0, 1e-12, -1e-12]]),
        distance,
    )
    allowed = 1e-6 + 10.0 * np.ptp(near.height)
    assert near.height[0, 0] == pytest.approx(launch, abs=allowed)
    if allowed < 1e-5 and elevation != 0.0 and launch > 1e-3:
        assert near.elevation[0, 0] == pytest.approx(-elevation, abs=1e-6)


@given(refractivity_columns(min_levels=3), heights, angles, st.floats(5e3, 60e3), st.data())
def test_a_ray_can_be_cut_in_two(column, launch, elevation, distance, data):
    """Tracing on from a way-point gives the same end as tracing in one go."""
    medium = build_medium(*column, EARTH_RADIUS)
    share = data.draw(st.floats(0.1, 0.9))
    way = trace_rays(medium, launch, elevation, share * distance)
    h, theta = way.height[0, 0], way.elevation[0, 0]
    near = trace_rays(
        medium,
        np.maximum(h + np.array([[0.0, 1e-9, -1e-9, 0.0, 0.0]]), 0.0),
        theta + np.array([[0.0, 0.0, 0.0, 1e-12, -1e-12]]),
        (1.0 - share) * distance,
    )
    whole = trace_rays(medium, launch, elevation, distance).height[0, 0]
    assert near.height[0, 0] == pytest.approx(whole, abs=1e-6 + 10.0 * np.ptp(near.height))


def test_straight_rays_without_air():
    # A tangent line from r0: r = r0 / cos φ. (1 + z/a)² is curved in Z: 2.5 m layers leave 14 µm.
    medium = build_medium(FINE, np.zeros_like(FINE), EARTH_RADIUS)
    found = trace_rays(medium, 10.0, 0.0, np.array([[10e3, 100e3]])).height[0]
    expected = (EARTH_RADIUS + 10.0) / np.cos(np.array([10e3, 100e3]) / EARTH_RADIUS) - EARTH_RADIUS
    assert found == pytest.approx(expected, abs=3e-5)


# --- Edges ---------------------------------------------------------------------------------------


def test_level_ray_on_the_kink_of_largest_n_r_stays_there():
    """Just above it air bends down more than the Earth, just below less: nothing pulls away."""
    z, n = _duct_over_water()
    medium = build_medium(z, n, EARTH_RADIUS)
    kink = z[6]
    end = trace_rays(medium, kink, 0.0, 200e3)
    assert end.height[0, 0] == pytest.approx(kink, abs=1e-6)
    # And rays near it swing about it, however small the swing.
    for theta in (1e-12, 1e-9, 1e-6, -1e-12):
        end = trace_rays(medium, kink, theta, 200e3)
        assert end.height[0, 0] == pytest.approx(kink, abs=1e-6 + 200.0 * abs(theta) ** 0.5)
        assert end.turns[0, 0] > 0


def test_level_ray_on_the_kink_of_smallest_n_r_leaves_it():
    z, n = _duct_over_water()
    end = trace_rays(build_medium(z, n, EARTH_RADIUS), z[3], 0.0, 50e3)
    assert abs(end.height[0, 0] - z[3]) > 5.0


@pytest.mark.parametrize("theta", [0.0, -0.0, 1e-300, 1e-18, 1e-12, 1e-9, -1e-18, -1e-9])
@pytest.mark.parametrize("launch", [0.0, 1e-12, 1e-6, 10.0, 40.0, 500.0])
@pytest.mark.parametrize("reflect", [True, False])
def test_tiny_angles_end(theta, launch, reflect):
    """Rays that skip along the surface or swing about a node in steps of nanometres still end."""
    medium = build_medium(*_duct_over_water(), EARTH_RADIUS)
    end = trace_rays(medium, launch, theta, 1e6, reflect=reflect)
    if np.isnan(end.blocked_at[0, 0]):
        assert 0.0 <= end.height[0, 0] < 1e6
    else:
        assert not reflect
        assert end.height[0, 0] == pytest.approx(0.0, abs=1e-9)


def test_rays_blocked_at_the_surface_say_where():
    # Straight rays: a line at angle −α from height h meets the sphere where cos φ-geometry says.
    medium = build_medium(FINE, np.zeros_like(FINE), EARTH_RADIUS)
    h, alpha = 100.0, 0.02
    end = trace_rays(medium, h, -alpha, 50e3, reflect=False)
    r0 = EARTH_RADIUS + h
    phi = math.acos(r0 * math.cos(alpha) / EARTH_RADIUS)
    assert end.blocked_at[0, 0] == pytest.approx(EARTH_RADIUS * (alpha - phi), abs=1e-6)
    assert end.elevation[0, 0] == pytest.approx(-phi, abs=1e-10)
    assert end.height[0, 0] == pytest.approx(0.0, abs=1e-9)
    mirrored = trace_rays(medium, h, -alpha, 50e3)
    assert mirrored.reflections[0, 0] == 1
    assert np.isnan(mirrored.blocked_at[0, 0])


def test_reflected_ray_mirrors_its_way_down():
    medium = build_medium(*_duct_over_water(), EARTH_RADIUS)
    meets = trace_rays(medium, 300.0, -0.02, 1e5, reflect=False).blocked_at[0, 0]
    end = trace_rays(medium, 300.0, -0.02, 2.0 * meets)
    assert end.height[0, 0] == pytest.approx(300.0, abs=1e-6)
    assert end.elevation[0, 0] == pytest.approx(0.02, abs=1e-9)


def test_rays_leave_through_the_top():
    """Far above the given levels the ray is nearly straight, and no distance stops it.

    Launched at 0.5 rad it loses N cot θ 1e-6, some 0.6 mrad, to refraction in all.
    """
    medium = build_medium(*_duct_over_water(), EARTH_RADIUS)
    far = np.array([100e3, 150e3])
    straight = (EARTH_RADIUS + 10.0) * np.cos(0.5) / np.cos(0.5 + far / EARTH_RADIUS) - EARTH_RADIUS
    height = trace_rays(medium, 10.0, 0.5, far[None, :]).height[0]
    bound = 1.5 * 350e-6 / math.tan(0.5) * far / math.cos(0.5) ** 2
    assert np.all((height < straight) & (height > straight - bound))
    assert trace_rays(medium, 10.0, 0.5, 1e6).height[0, 0] > 5e5


def test_grazing_angle_is_the_limit_of_trapping():
    """From the height of largest M, elevations under √(2e-6 ΔM) stay below the top for good."""
    from forecast.physics.curvature import modified_refractivity
    from forecast.physics.ducts import find_ducts

    z, n = _duct_over_water()
    table = find_ducts(z[None], modified_refractivity(n, z, EARTH_RADIUS)[None])
    assert table.count[0] == 2
    medium = build_medium(z, n, EARTH_RADIUS)
    for i in range(2):
        angle, top = table.grazing_angle[0, i], table.top[0, i]
        x = np.linspace(1e3, 300e3, 300)[None, :]
        inside = trace_rays(medium, table.height_of_maximum[0, i], 0.998 * angle, x).height
        beyond = trace_rays(medium, table.height_of_maximum[0, i], 1.002 * angle, x).height
        assert inside.max() < top
        assert beyond.max() > top + 10.0
        assert inside.min() >= table.base[0, i] - 0.05 * table.thickness[0, i]


# --- Preparing the air ---------------------------------------------------------------------------


@given(refractivity_columns(), st.data())
def test_a_level_on_the_line_moves_the_air_by_thousandths_of_an_n_unit(column, data):
    """N linear in z against μ linear in Z: the chord of (1 + z/a)² and of g z²/a.

    Interpolation error h²/8 · d²μ/dZ² with d²μ/dZ² = 4/a² + 10 n'/a + 2 n'²: at most 7e-3 N for
    1 km at 0…−157 N/km, growing as the square of layer and gradient.
    """
    z, n = column
    i = data.draw(st.integers(0, z.size - 2))
    z_new = np.insert(z, i + 1, 0.5 * (z[i] + z[i + 1]))
    n_new = np.insert(n, i + 1, 0.5 * (n[i] + n[i + 1]))
    first = build_medium(z, n, EARTH_RADIUS)
    second = build_medium(z_new, n_new, EARTH_RADIUS)
    at = second.z[0, : second.count[0]]
    on_first = np.interp(at, first.z[0, : first.count[0]], first.mu[0, : first.count[0]])
    layer = z[i + 1] - z[i]
    slope = 1e-6 * (n[i + 1] - n[i]) / layer
    second_derivative = 4 / EARTH_RADIUS**2 + 10 * slope / EARTH_RADIUS + 2 * slope**2
    expected = np.zeros_like(at)
    expected[i + 1] = layer**2 / 8.0 * second_derivative
    difference = on_first - second.mu[0, : second.count[0]]
    # The three terms cancel near -68 N/km: the tolerance is a share of their sizes, not of the sum.
    sizes = 4 / EARTH_RADIUS**2 + 10 * abs(slope) / EARTH_RADIUS + 2 * slope**2
    tolerance = 0.02 * layer**2 / 8.0 * sizes + 5e-14
    assert np.abs(difference - expected).max() < tolerance
    if -157e-9 <= slope <= 0.0:
        assert abs(0.5e6 * difference[i + 1]) < 7e-3 * (layer / 1e3) ** 2 + 1e-9


def test_levels_that_cannot_be_used_are_skipped():
    z = np.array([0.0, 50.0, np.nan, 40.0, 100.0, 100.0, 200.0, np.inf])
    n = np.array([320.0, 318.0, 317.0, 300.0, np.nan, 314.0, 310.0, 309.0])
    first = build_medium(z, n, EARTH_RADIUS)
    second = build_medium([0.0, 50.0, 100.0, 200.0], [320.0, 318.0, 314.0, 310.0], EARTH_RADIUS)
    k = int(first.count[0])
    assert k == second.count[0]
    np.testing.assert_array_equal(first.mu[0, :k], second.mu[0, :k])


@pytest.mark.parametrize("wave", EXTENSIONS)
def test_air_below_the_lowest_level_continues_at_the_stated_gradient(wave):
    gradient, scale = EXTENSIONS[wave]
    medium = build_medium([20.0, 220.0], [300.0, 280.0], EARTH_RADIUS, wave)
    z = EARTH_RADIUS * np.expm1(medium.z[0, : medium.count[0]] / EARTH_RADIUS)
    n = 1e6 * (np.sqrt(1.0 + medium.mu[0, : medium.count[0]]) / (1.0 + z / EARTH_RADIUS) - 1.0)
    assert z[:3] == pytest.approx([0.0, 20.0, 220.0], abs=1e-8)
    assert n[0] == pytest.approx(300.0 - 0.020 * gradient, abs=1e-6)
    assert n[3:] == pytest.approx(280.0 * np.exp(-(z[3:] - 220.0) / scale), abs=1e-6)
    assert z[-1] > 100e3


def test_columns_without_air_give_nothing():
    medium = build_medium([[0.0, 10.0], [0.0, 10.0]], [[300.0, np.nan], [300.0, 299.0]], 6.37e6)
    end = trace_rays(medium, 5.0, np.zeros((2, 3)), 1e4)
    assert end.height.shape == (2, 3)
    assert np.all(np.isnan(end.height[0]))
    assert np.all(np.isfinite(end.height[1]))


@pytest.mark.parametrize(
    ("launch", "elevation", "distance"),
    [
        (np.nan, 0.0, 1e4),
        (-1.0, 0.0, 1e4),
        (np.inf, 0.0, 1e4),
        (10.0, np.nan, 1e4),
        (10.0, 1.5707963267948966, 1e4),
        (10.0, 3.0, 1e4),
        (10.0, 0.0, np.nan),
        (10.0, 0.0, np.inf),
        (10.0, 0.0, -1.0),
    ],
)
def test_rays_that_cannot_be_give_nothing_and_do_not_hang(launch, elevation, distance):
    medium = build_medium(*_duct_over_water(), EARTH_RADIUS)
    end = trace_rays(medium, launch, np.array([[elevation, 1e-3]]), distance)
    assert np.isnan(end.height[0, 0])
    assert np.isnan(end.blocked_at[0, 0])


@pytest.mark.parametrize("radius", [np.nan, 0.0, -6.4e6, np.inf])
def test_columns_without_a_radius_have_no_air(radius):
    """A profile without a latitude has none: it must not stop the others, or never end."""
    z, n = _duct_over_water()
    medium = build_medium(np.stack([z, z]), np.stack([n, n]), np.array([radius, EARTH_RADIUS]))
    assert medium.count.tolist() == [0, medium.count[1]]
    end = trace_rays(medium, 10.0, np.zeros((2, 1)), 1e4)
    assert np.isnan(end.height[:, 0]).tolist() == [True, False]


def test_columns_are_independent():
    rng = np.random.default_rng(3)
    columns = [random_refractivity_column(rng) for _ in range(4)]
    widest = max(z.size for z, _ in columns)
    z, n = (
        np.array([np.pad(c[k], (0, widest - c[k].size), constant_values=np.nan) for c in columns])
        for k in range(2)
    )
    together = trace_rays(build_medium(z, n, EARTH_RADIUS), 20.0, np.full((4, 1), 1e-3), 80e3)
    alone = [trace_rays(build_medium(*c, EARTH_RADIUS), 20.0, 1e-3, 80e3) for c in columns]
    assert together.height[:, 0].tolist() == [end.height[0, 0] for end in alone]


def test_finer_levels_converge_as_stated():
    """The docstring's warning: 60, 240, 960 layers of a smooth profile leave 12, 0.5, 0.03 m."""

    def end(layers):
        z = np.linspace(0.0, 3000.0, layers + 1)
        n = 320.0 * np.exp(-z / 7350.0) - 15.0 * (1.0 + np.tanh((z - 300.0) / 100.0))
        return trace_rays(build_medium(z, n, EARTH_RADIUS), 50.0, 1e-3, 200e3).height[0, 0]

    best = end(15360)
    errors = [abs(end(layers) - best) for layers in (60, 240, 960)]
    assert errors[0] > errors[1] > errors[2]
    assert errors[0] < 60.0
    assert errors[2] < 0.1


def test_wrong_arguments_are_refused():
    with pytest.raises(ValueError, match="wave 'sound'"):
        build_medium([0.0, 1.0], [300.0, 299.0], 6.37e6, "sound")
    with pytest.raises(ValueError, match="differ"):
        build_medium([0.0, 1.0], [300.0, 299.0, 298.0], 6.37e6)
