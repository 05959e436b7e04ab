"""The surface layer must be COARE's over sea, close on its inputs, and say where it fails."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from forecast.physics.evaporation_duct import evaporation_duct
from forecast.physics.moisture import (
    specific_humidity_from_relative_humidity,
    vapour_pressure_from_specific_humidity,
)
from forecast.physics.refractive_index import radio_refractivity
from forecast.physics.stability import STABLE_FUNCTIONS, psi_heat, psi_momentum
from forecast.physics.surface_layer import solve_land, solve_sea, surface_profile
from tests.reference import records


def solve(row, **changes):
    i = {**row["inputs"], **changes}
    t = i["T_air_C"] + 273.15
    p = 100.0 * i["p_hPa"]
    q = specific_humidity_from_relative_humidity(i["RH_percent"] / 100.0, t, p)
    layer = solve_sea(i["U_m_s"], t, q, p, i["SST_skin_C"] + 273.15, i["z_m"], i["z_m"], i["zi_m"])
    return layer, t, q, p


@pytest.mark.parametrize("row", records("psi_"), ids=lambda r: r["id"])
def test_stability_functions(row):
    # Source and how each value was come by: see the record.
    zeta, expected = row["inputs"]["zeta"], row["expected"]
    pairs = {
        "psi_m_coare": psi_momentum(zeta, 0),
        "psi_m_grachev2007": psi_momentum(zeta, 2),
        "psi_h_grachev2007": psi_heat(zeta, 2),
        "psi_h_beljaars_holtslag": psi_heat(zeta, 0),
    }
    if zeta < 0.0:
        pairs["psi_h_coare"] = psi_heat(zeta, 0)
    else:
        # Dyer 1974: −5 ζ; the record's Businger–Dyer column.
        pairs["psi_m_businger_dyer_16_5"] = psi_momentum(zeta, 1)
        pairs["psi_h_businger_dyer_16_5"] = psi_heat(zeta, 1)
    for name, value in pairs.items():
        if name in expected:
            assert value == pytest.approx(expected[name], abs=2e-6), name


@pytest.mark.parametrize("row", records("coare3.5"), ids=lambda r: r["id"])
def test_scales_are_those_of_coare(row):
    # Reference: pycoare 0.4.3, COARE 3.5. Its q* is in kg/kg, its T0 273.16 K (see the record).
    layer, _, _, _ = solve(row)
    expected = row["expected"]
    assert layer.converged.all()
    assert layer.friction_velocity[0] == pytest.approx(expected["ustar"], rel=0.005)
    assert layer.temperature_scale[0] == pytest.approx(expected["Tstar_K"], rel=0.005)
    assert layer.humidity_scale[0] == pytest.approx(expected["qstar_kg_kg"], rel=0.005)


@pytest.mark.parametrize("row", records("evapduct"), ids=lambda r: r["id"])
def test_evaporation_ducts(row):
    layer, _, _, p = solve(row)
    duct = evaporation_duct(layer, p)
    expected = row["expected"]["evaporation_duct_height_m"]
    if expected is None:
        assert np.isnan(duct.height[0])
    else:
        assert duct.height[0] == pytest.approx(expected, rel=0.01)
        assert duct.strength[0] == pytest.approx(row["expected"]["M_deficit_from_z0q"], rel=0.005)


def test_a_thousand_drawn_cases_against_the_reference_library():
    # Reference: pycoare 0.4.3 (test only). It changes its arguments in place: hand it copies.
    import pycoare

    rng = np.random.default_rng(3)
    n = 1000
    u, z = rng.uniform(1.0, 18.0, n), rng.uniform(5.0, 20.0, n)
    t, rh = rng.uniform(2.0, 32.0, n), rng.uniform(45.0, 95.0, n)
    sst, p = t + rng.uniform(-0.5, 8.0, n), rng.uniform(990.0, 1030.0, n)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        reference = pycoare.coare_35(
            u.copy(), t=t.copy(), rh=rh.copy(), zu=z.copy(), zt=z.copy(), zq=z.copy(),
            ts=sst.copy(), p=p.copy(), lat=45, zi=600, rs=0, rl=370, jcool=0, nits=10,
        )  # fmt: skip
        expected = [
            np.asarray(a) for a in (reference.ustar(), reference.tstar(), reference.qstar())
        ]
    q = specific_humidity_from_relative_humidity(rh / 100.0, t + 273.15, 100.0 * p)
    layer = solve_sea(u, t + 273.15, q, 100.0 * p, sst + 273.15, z, z, 600.0)
    assert layer.converged.all()
    for ours, theirs in zip(layer[:3], expected, strict=True):
        assert np.max(np.abs(ours / theirs - 1.0)) < 0.02
    # Duct heights from the reference's own scales, by a search written here.
    height = evaporation_duct(layer, 100.0 * p).height
    swap = layer._replace(
        friction_velocity=expected[0], temperature_scale=expected[1], humidity_scale=expected[2]
    )
    grid = np.geomspace(0.1, 60.0, 4000)
    air_t, air_q = surface_profile(swap, grid)
    pressure = 100.0 * p[:, None] * np.exp(-9.80665 * grid / (287.05 * air_t * (1 + 0.61 * air_q)))
    m = (
        radio_refractivity(pressure, air_t, vapour_pressure_from_specific_humidity(air_q, pressure))
        + 1e6 * grid / 6371e3
    )
    lowest = grid[np.argmin(m, axis=1)]
    inside = (lowest < 50.0) & (height > 0.0) & np.isfinite(height)
    assert inside.sum() > 900
    assert np.max(np.abs(height[inside] / lowest[inside] - 1.0)) < 0.05


@pytest.mark.parametrize("name", STABLE_FUNCTIONS)
def test_the_profile_closes_on_the_air_it_was_made_from(name):
    rng = np.random.default_rng(7)
    n = 300
    u, t = rng.uniform(0.0, 20.0, n), rng.uniform(275.0, 303.0, n)
    sst, p = t + rng.uniform(-6.0, 6.0, n), np.full(n, 101325.0)
    q = specific_humidity_from_relative_humidity(rng.uniform(0.5, 0.95, n), t, p)
    layer = solve_sea(u, t, q, p, sst, 10.0, 12.0, stable_function=name)
    ok = layer.converged
    assert ok.mean() > 0.95
    air_t, air_q = surface_profile(layer, np.array([12.0]))
    # Closing is what joins the profile without a jump; the iteration stops at 1e-5.
    assert np.abs(air_t[ok, 0] - t[ok]).max() < 2e-3
    assert np.abs(air_q[ok, 0] - q[ok]).max() < 2e-6


def test_stable_functions_spread_as_published():
    # The scheme choice is a real uncertainty: Grachev lies above, Dyer and Beljaars–Holtslag
    # nearly together at ζ = 0.1 and apart at 2 (record psi_2).
    air = {"wind": 4.0, "t": 293.15, "q": 0.010, "p": 101300.0, "sst": 289.15}
    t5 = {}
    for name in STABLE_FUNCTIONS:
        layer = solve_sea(air["wind"], air["t"], air["q"], air["p"], air["sst"], 10.0, 10.0,
                          stable_function=name)  # fmt: skip
        assert layer.converged.all()
        t5[name] = surface_profile(layer, np.array([3.0]))[0][0, 0]
    spread = max(t5.values()) - min(t5.values())
    assert 0.05 < spread < 1.0


def test_cold_water_warms_upward_and_warm_water_cools():
    t, q, p = 293.15, 0.009, 101300.0
    for difference, sign in ((-5.0, 1.0), (5.0, -1.0)):
        layer = solve_sea(4.0, t, q, p, t + difference, 10.0, 10.0)
        heights = np.array([0.5, 1.0, 2.0, 5.0, 10.0])
        profile = surface_profile(layer, heights)[0][0] + 0.0098 * heights
        assert (sign * np.diff(profile) > 0.0).all()


def test_no_wind_is_free_convection_over_warm_water_and_still_converges():
    layer = solve_sea(0.0, 290.0, 0.008, 101300.0, 296.0, 10.0, 10.0)
    assert layer.converged.all()
    assert layer.friction_velocity[0] > 0.02


def test_missing_input_is_missing_output_and_leaves_the_others_alone():
    layer = solve_sea(
        [5.0, np.nan, 5.0], 290.0, 0.008, 101300.0, [292.0, 292.0, np.nan], 10.0, 10.0
    )
    assert layer.converged.tolist() == [True, False, False]
    assert np.isnan(layer.friction_velocity[1:]).all()


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"sst": 18.0}, "is it in °C"),
        ({"wind": -1.0}, "wind_speed"),
        ({"t": 20.0}, "is it in °C"),
        ({"name": "best"}, "choose from"),
    ],
)
def test_wrong_input_is_a_clear_error(changes, words):
    values = {"wind": 5.0, "t": 290.0, "sst": 291.0, "name": "dyer_1974", **changes}
    with pytest.raises(ValueError, match=words):
        solve_sea(
            values["wind"], values["t"], 0.008, 101300.0, values["sst"],
            stable_function=values["name"],
        )  # fmt: skip


def test_land_follows_the_logarithm_when_neutral():
    # Closed form: u* = κ U / ln(z/z0), θ uniform.
    t_surface, height = 290.0, 2.0
    t = t_surface - 0.0098 * height
    layer = solve_land(6.0, t, 0.008, 101300.0, t_surface, 0.008, 0.1, wind_height=10.0)
    assert layer.friction_velocity[0] == pytest.approx(0.4 * 6.0 / np.log(10.0 / 0.1), rel=0.005)
    with pytest.raises(ValueError, match="roughness"):
        solve_land(6.0, t, 0.008, 101300.0, t_surface, 0.008, 50.0)


def test_ship_records_go_through_with_failures_counted():
    # Open data: 3,222 ship records in airseafluxcode 1.3.4 (PyPI), stable cases included.
    import csv

    from tests.open_data import open_data

    (path,) = open_data("airseafluxcode").rglob("data_all.csv")
    with path.open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == 3222

    def column(name):
        return np.array([float(row[name]) if row[name].strip() else np.nan for row in rows])

    wind, t, sst = column("Wind speed"), column("Air temperature") + 273.15, column("SST") + 273.15
    p = 100.0 * column("P")
    stable = t - sst > 0.5
    assert stable.sum() > 300
    q = specific_humidity_from_relative_humidity(column("RH") / 100.0, t, p)
    layer = solve_sea(wind, t, q, p, sst, column("zu"), column("zt"))
    complete = np.isfinite(wind + q + sst)
    failed = complete & ~layer.converged
    assert failed.sum() <= 0.01 * complete.sum()
    assert not layer.converged[~complete].any()
