"""The references for radio fields against check records and against one another.

Record values (ids in the comments) are own calculations with mpmath and scipy.special, made apart
from this code; where two methods of this code are compared they share no formula but the wave
equation.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.physics.field_references import (
    LIGHT_SPEED,
    STANDARD_RADIUS,
    earth_modes,
    knife_edge,
    knife_edge_on_ground,
    reflection_coefficient,
    residue_series,
    surface_impedance,
    two_ray_flat,
    two_ray_slope,
    two_ray_sphere,
    upward_airy,
)
from tests.physics.mode_references import (
    Air,
    find_modes,
    linear_air,
    mode_attenuation,
    mode_sum,
    spectral_field,
)

#: Sea water near 3 GHz and average sea at 100 MHz (Rec. ITU-R P.527, order of size from memory).
SEA_3GHZ = 70.0 + 40.0j
SEA_100MHZ = 70.0 + 900.0j

# id p526_*: frequency, heights, distance km, residue series of 60 modes by mpmath 1.4.1.
SMOOTH_SPHERE = [
    (3.0e9, 25.0, 25.0, 60.0, -38.60829079),
    (1.0e9, 30.0, 30.0, 80.0, -46.97015263),
    (0.3e9, 50.0, 100.0, 120.0, -45.5159278),
    (9.4e9, 10.0, 5.0, 40.0, -49.21710433),
]

# id bilinear_mode1_*: d m, dM, f_min GHz; then multiples of f_min: dB/km and 1e6 E (mpmath Airy
# functions and Muller's root finder; one confirmed by complex-scaled finite differences).
BILINEAR = [
    (
        20.0,
        5.0,
        2.666325917,
        {
            4.0: (0.0, 6.000958165),
            2.0: (0.0003293446708, 3.664376007),
            1.5: (0.01463763644, 2.425738978),
            1.0: (0.1684532176, 0.6084750126),
            0.5: (0.7339494593, -1.396421963),
        },
    ),
    (
        50.0,
        15.0,
        0.6157615943,
        {
            4.0: (0.0, 18.00287406),
            2.0: (9.409719327e-05, 10.98938401),
            1.5: (0.007080372614, 7.259543252),
            1.0: (0.1046114849, 1.925101602),
            0.5: (0.4719953393, -3.168562106),
        },
    ),
    (
        200.0,
        30.0,
        0.1088522997,
        {
            4.0: (0.0, 36.00575272),
            2.0: (0.0004782688657, 22.01317269),
            1.5: (0.007612584871, 14.59393814),
            1.0: (0.05345233626, 2.815472316),
            0.5: (0.215521312, -15.62224905),
        },
    ),
]

# id tworay_*: frequency, h1, distance; exact heights of lobe 1, null 1, lobe 2, null 2 (analytic).
TWO_RAY = [
    (10e9, 25.0, 5000.0, (1.498981094, 2.997962593, 4.496944899, 5.995928419)),
    (3e9, 20.0, 10000.0, (12.49138714, 24.98283276, 37.47439533, 49.96613331)),
    (1e9, 30.0, 20000.0, (49.9656218, 99.93217918, 149.9006078, 199.8718435)),
]

# id knife_edge_*: ν, exact loss dB (scipy.special.fresnel), Rec. P.526 approximation.
KNIFE = [
    (-0.78, -0.01113794508),
    (0.0, 6.020599913),
    (0.5, 10.23383047),
    (1.0, 13.86410541),
    (3.0, 22.52181309),
]


@pytest.mark.parametrize(("f", "h1", "h2", "km", "expected"), SMOOTH_SPHERE)
def test_residue_series_and_the_whole_spectrum_agree_with_the_records(f, h1, h2, km, expected):
    # Two ways to the same field: poles summed, and the integral that has none.
    assert residue_series(f, h1, h2, 1e3 * km) == pytest.approx(expected, abs=1e-7)
    spectrum = spectral_field(f, linear_air(), h1, h2, 1e3 * km)
    assert spectrum[0] == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(
    ("f", "permittivity", "polarisation", "km"),
    [
        (3e9, SEA_3GHZ, "vertical", 60.0),
        (3e9, SEA_3GHZ, "horizontal", 60.0),
        (100e6, SEA_100MHZ, "vertical", 100.0),
        (30e6, 15.0 + 18.0j, "vertical", 200.0),
    ],
)
def test_residue_series_over_a_surface_that_conducts_imperfectly(f, permittivity, polarisation, km):
    # The impedance enters the series through its roots and weights, the spectrum through the
    # starting slope at the surface.
    delta = surface_impedance(permittivity, polarisation)
    series = residue_series(f, 20.0, np.array([5.0, 40.0]), 1e3 * km, impedance=delta)
    spectrum = spectral_field(f, linear_air(), 20.0, [5.0, 40.0], 1e3 * km, delta)
    assert series == pytest.approx(spectrum, abs=1e-6)


@pytest.mark.parametrize("q", [None, 0.3j, 2.0 + 1.0j, 40.0j, 0.9 + 0.9j])
def test_earth_modes_meet_the_surface_and_are_all_different(q):
    tau = earth_modes(40, q)
    value, slope = upward_airy(tau)
    mismatch = value / slope if q is None else (slope - q * value) / (abs(slope) + abs(q * value))
    assert np.max(np.abs(mismatch)) < 1e-11
    gaps = np.abs(np.subtract.outer(tau, tau)) + 9.0 * np.eye(40)
    assert np.min(gaps) > 0.2  # spacing of the 40th: π / √|τ| = 0.5


def test_reciprocity_and_slower_decay_at_lower_frequency():
    # Swapping the antennas changes nothing; per km a longer wave creeps farther round the Earth.
    there = residue_series(1e9, 10.0, 80.0, 90e3)
    back = residue_series(1e9, 80.0, 10.0, 90e3)
    assert there == pytest.approx(back, abs=1e-9)
    rates = [np.diff(residue_series(f, 20.0, 20.0, np.array([150e3, 160e3]))) for f in (1e8, 1e9)]
    assert rates[1] < rates[0] < 0.0


@pytest.mark.parametrize(("d", "strength", "f_min", "rows"), BILINEAR)
def test_first_mode_of_a_bilinear_duct(d, strength, f_min, rows):
    air = Air(np.array([0.0, d]), np.array([strength, 0.0]), 0.118)
    for multiple, (loss, energy) in rows.items():
        f = multiple * f_min * 1e9
        modes = find_modes(f, air, 1)
        k = 2.0 * np.pi * f / LIGHT_SPEED
        assert modes.eigenvalue[0].real / k**2 * 1e6 == pytest.approx(energy, rel=1e-6)
        # Records below 1e-6 dB/km are set to 0.
        assert mode_attenuation(f, modes)[0] == pytest.approx(loss, rel=1e-6, abs=1e-6)


@pytest.mark.parametrize(
    ("d", "strength", "f"), [(20.0, 5.0, 5.3e9), (50.0, 15.0, 0.62e9), (50.0, 15.0, 2.5e9)]
)
def test_modes_of_a_duct_sum_to_the_whole_spectrum(d, strength, f):
    air = Air(np.array([0.0, d]), np.array([strength, 0.0]), 0.118)
    z = np.array([5.0, 0.9 * d, 1.5 * d])
    modes = find_modes(f, air, 10)
    total = mode_sum(f, air, modes, 0.4 * d, z, 100e3)
    assert total == pytest.approx(spectral_field(f, air, 0.4 * d, z, 100e3), abs=1e-5)


def test_a_profile_of_several_layers_and_the_sea():
    # An elevated surface duct over a vertical-polarisation sea: both methods again, and cutting a
    # straight piece of the profile in two must change nothing.
    air = Air(np.array([0.0, 60.0, 100.0]), np.array([0.0, 7.0, -8.0]), 0.118)
    cut = Air(np.array([0.0, 30.0, 60.0, 100.0]), np.array([0.0, 3.5, 7.0, -8.0]), 0.118)
    delta = surface_impedance(SEA_3GHZ, "vertical")
    z = np.array([10.0, 70.0, 120.0])
    modes = find_modes(0.9e9, air, 10, delta)
    total = mode_sum(0.9e9, air, modes, 20.0, z, 100e3)
    assert total == pytest.approx(spectral_field(0.9e9, air, 20.0, z, 100e3, delta), abs=1e-5)
    assert total == pytest.approx(
        mode_sum(0.9e9, cut, find_modes(0.9e9, cut, 10, delta), 20.0, z, 100e3), abs=1e-5
    )


@pytest.mark.parametrize(("f", "h1", "d", "heights"), TWO_RAY)
def test_lobes_and_nulls_over_a_flat_conductor(f, h1, d, heights):
    lobe1, null1, lobe2, null2 = heights
    # At a lobe the two rays add to twice the field, less what the longer way has spread.
    assert two_ray_flat(f, h1, np.array([lobe1, lobe2]), d) == pytest.approx(6.0206, abs=1e-3)
    assert np.all(two_ray_flat(f, h1, np.array([null1, null2]), d) < -60.0)
    assert two_ray_flat(f, h1, 0.5 * lobe1, d) == pytest.approx(3.0103, abs=1e-2)


@pytest.mark.parametrize("polarisation", ["horizontal", "vertical"])
def test_two_rays_over_a_sphere_agree_with_the_whole_spectrum(polarisation):
    # Well within sight, over sea: geometrical optics is good to some (λ/2πaψ³), here below 0.1 dB
    # rms outside the nulls.
    delta = surface_impedance(SEA_3GHZ, polarisation)
    heights = np.linspace(60.0, 120.0, 9)
    rays = [
        two_ray_sphere(3e9, 60.0, z, 15e3, STANDARD_RADIUS, SEA_3GHZ, polarisation) for z in heights
    ]
    factor, grazing = np.array(rays).T
    assert grazing.min() > 3.0 * (LIGHT_SPEED / 3e9 / 2 / np.pi / STANDARD_RADIUS) ** (1 / 3)
    spectrum = spectral_field(3e9, linear_air(), 60.0, heights, 15e3, delta)
    lit = spectrum > -6.0
    assert lit.sum() > 4
    assert np.sqrt(np.mean((factor - spectrum)[lit] ** 2)) < 0.1


def test_sphere_becomes_flat_when_it_is_large():
    flat = two_ray_flat(3e9, 20.0, 12.0, 10e3)
    assert two_ray_sphere(3e9, 20.0, 12.0, 10e3, 1e12)[0] == pytest.approx(flat, abs=1e-4)


def test_reflection_coefficients():
    # Grazing: both polarisations turn over. Brewster's angle of a dielectric: vertical vanishes.
    # Straight down both are Fresnel's (1 − √ε)/(1 + √ε) in size.
    for polarisation in ("horizontal", "vertical"):
        assert reflection_coefficient(9.0, 1e-9, polarisation) == pytest.approx(-1.0, abs=1e-6)
        straight = reflection_coefficient(9.0, np.pi / 2, polarisation)
        assert abs(straight) == pytest.approx(0.5)
    assert abs(reflection_coefficient(9.0, np.arctan(1 / 3.0), "vertical")) < 1e-12


def test_slope_is_flat_ground_seen_askew():
    assert two_ray_slope(1e9, 10.0, 15.0, 5e3, 0.0) == pytest.approx(two_ray_flat(1e9, 10, 15, 5e3))
    # By images in the plane itself: mirror the source in the slope and measure.
    slope, d, h1, h2 = 0.03, 5e3, 10.0, 15.0
    normal = np.array([-slope, 1.0]) / np.hypot(slope, 1.0)
    a, b = np.array([0.0, h1]), np.array([d, slope * d + h2])
    image = a - 2.0 * (a @ normal) * normal
    direct, mirrored = np.hypot(*(b - a)), np.hypot(*(b - image))
    k = 2.0 * np.pi * 1e9 / LIGHT_SPEED
    field = abs(1.0 - direct / mirrored * np.exp(1j * k * (mirrored - direct)))
    assert two_ray_slope(1e9, h1, h2, d, slope) == pytest.approx(20 * np.log10(field), abs=1e-6)


@pytest.mark.parametrize(("nu", "loss"), KNIFE)
def test_knife_edge(nu, loss):
    assert knife_edge(nu) == pytest.approx(loss, abs=1e-8)


def test_knife_edge_on_ground_by_quadrature():
    # The same field by summing over the open half of the screen, a Gaussian cut far above it.
    f, h1, h2, edge, x1, d = 1e9, 30.0, 20.0, 40.0, 4e3, 10e3
    k = 2.0 * np.pi * f / LIGHT_SPEED
    z = np.linspace(edge, 4000.0, 800_001)
    fade = np.exp(-((z / 1500.0) ** 8))

    def kernel(a, b, x):
        return np.sqrt(k / (2j * np.pi * x)) * (
            np.exp(0.5j * k * (a - b) ** 2 / x) - np.exp(0.5j * k * (a + b) ** 2 / x)
        )

    field = np.trapezoid(kernel(z, h1, x1) * kernel(z, h2, d - x1) * fade, z)
    expected = 20.0 * np.log10(abs(field) / np.sqrt(k / (2.0 * np.pi * d)))
    assert knife_edge_on_ground(f, h1, h2, edge, x1, d) == pytest.approx(expected, abs=1e-3)
    # No edge at all: two rays.
    open_ground = knife_edge_on_ground(f, h1, h2, 0.0, x1, d)
    assert open_ground == pytest.approx(two_ray_flat(f, h1, h2, d), abs=1e-3)
