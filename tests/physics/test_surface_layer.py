"""The surface layer must be COARE's over sea, close on its inputs, and say where it fails."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from forecast.physics.evaporation_duct import evaporation_duct
from forecast.physics.moisture import (
    saturation_vapour_pressure,
    specific_humidity_from_relative_humidity,
    specific_humidity_from_vapour_pressure,
    vapour_pressure_from_specific_humidity,
)
from forecast.physics.refractive_index import radio_refractivity
from forecast.physics.stability import (
    LARGEST_ZETA,
    STABLE_FUNCTIONS,
    psi_heat,
    psi_momentum,
    psi_unstable,
    unstable_table,
)
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
    assert (ok | layer.too_stable).all()
    assert ok.mean() > 0.8
    air_t, air_q = surface_profile(layer, np.array([12.0]))
    # Closing is what joins the profile without a jump: exact but for the table of ψ.
    assert np.abs(air_t[ok, 0] - t[ok]).max() < 1e-6
    assert np.abs(air_q[ok, 0] - q[ok]).max() < 1e-9


def test_stable_functions_spread_as_published():
    # The scheme choice is a real uncertainty: Grachev lies above, Dyer and Beljaars–Holtslag
    # nearly together at ζ = 0.1 and apart at 2 (record psi_2).
    air = {"wind": 6.0, "t": 293.15, "q": 0.010, "p": 101300.0, "sst": 289.15}
    t5 = {}
    for name in STABLE_FUNCTIONS:
        layer = solve_sea(air["wind"], air["t"], air["q"], air["p"], air["sst"], 10.0, 10.0,
                          stable_function=name)  # fmt: skip
        assert layer.converged.all()
        t5[name] = surface_profile(layer, np.array([3.0]))[0][0, 0]
    spread = max(t5.values()) - min(t5.values())
    assert 0.02 < spread < 1.0


def test_stable_air_agrees_with_the_reference_within_the_spread_of_the_functions():
    # Reference: pycoare 0.4.3 (test only), whose stable form is Beljaars–Holtslag's for heat.
    import pycoare

    rng = np.random.default_rng(5)
    n = 1000
    u, z = rng.uniform(2.0, 15.0, n), rng.uniform(5.0, 20.0, n)
    t, rh = rng.uniform(5.0, 28.0, n), rng.uniform(45.0, 98.0, n)
    sst, p = t - rng.uniform(0.5, 6.0, n), rng.uniform(990.0, 1030.0, n)
    reference = pycoare.coare_35(
        u.copy(), t=t.copy(), rh=rh.copy(), zu=z.copy(), zt=z.copy(), zq=z.copy(), ts=sst.copy(),
        p=p.copy(), lat=45, zi=600, rs=0, rl=370, jcool=0, nits=30,
    )  # fmt: skip
    q = specific_humidity_from_relative_humidity(rh / 100.0, t + 273.15, 100.0 * p)
    layers = {
        name: solve_sea(
            u, t + 273.15, q, 100.0 * p, sst + 273.15, z, z, 600.0, stable_function=name
        )
        for name in STABLE_FUNCTIONS
    }
    own = layers["beljaars_holtslag_1991"]
    compared = own.converged
    assert compared.mean() > 0.9
    every = np.all([layer.converged for layer in layers.values()], axis=0)
    assert every.sum() > 300
    for k, theirs in enumerate((reference.ustar(), reference.tstar())):
        theirs = np.asarray(theirs)
        assert np.abs(own[k][compared] / theirs[compared] - 1.0).max() < 0.02
        values = np.stack([layer[k][every] for layer in layers.values()])
        assert (theirs[every] >= 0.98 * values.min(axis=0)).all()
        assert (theirs[every] <= 1.02 * values.max(axis=0)).all()


def drawn(n, seed, difference=(-8.0, 8.0), wind=(0.0, 15.0)):
    """Arguments of `solve_sea`, air and water drawn apart from the strongest winds."""
    rng = np.random.default_rng(seed)
    u, z = rng.uniform(*wind, n), rng.uniform(2.0, 40.0, n)
    t, p = rng.uniform(277.0, 303.0, n), rng.uniform(980e2, 1040e2, n)
    q = specific_humidity_from_relative_humidity(rng.uniform(0.4, 1.0, n), t, p)
    sst = np.clip(t + rng.uniform(*difference, n), 270.0, None)
    return u, t, q, p, sst, z, rng.uniform(2.0, 40.0, n)


def bulk_laws(u, t, q, p, sst, zu, zt, us, inverse_l, code):
    """u* and 1/L that the bulk laws give for a guess of both, written out as Fairall et al. do."""
    saturated = 0.98 * saturation_vapour_pressure(sst, p)
    dq = q - specific_humidity_from_vapour_pressure(saturated, p)
    dt = t + 0.0098 * zt - sst
    c = t - 273.15
    nu = 1.326e-5 * (1.0 + 6.542e-3 * c + 8.301e-6 * c**2 - 4.84e-9 * c**3)
    psi_m = np.array([psi_momentum(a, code) for a in zu * inverse_l])
    psi_h = np.array([psi_heat(a, code) for a in zt * inverse_l])
    charnock = np.full(u.shape, 0.011)
    for _ in range(60):  # roughness and gusts at this stability
        z0 = charnock * us**2 / 9.80665 + 0.11 * nu / us
        z0t = np.minimum(1.6e-4, 5.8e-5 / (z0 * us / nu) ** 0.72)
        heat = 0.4 / (np.log(zt / z0t) - psi_h)
        buoyancy = 9.80665 / t * heat * (dt * (1.0 + 0.61 * q) + 0.61 * t * dq)
        gust = np.maximum(0.2, 1.2 * np.cbrt(np.maximum(0.0, -us * buoyancy * 600.0)))
        ut = np.hypot(u, gust)
        us = 0.4 * ut / (np.log(zu / z0) - psi_m)
        u10 = us / 0.4 * np.log(10.0 / z0) * u / ut
        charnock = np.maximum(0.0017 * np.minimum(u10, 19.0) - 0.005, 0.0)
    return us, 0.4 * buoyancy / us**2


@pytest.mark.parametrize("name", STABLE_FUNCTIONS)
def test_an_answer_obeys_the_bulk_laws_and_no_answer_has_none(name):
    # Very stable air, light winds and free convection included. Where the column is called too
    # stable, the laws want a stronger stability even at the largest that the function is for.
    code = STABLE_FUNCTIONS[name]
    args = drawn(2000, 11)
    layer = solve_sea(*args, stable_function=name)
    assert (layer.converged | layer.too_stable).all()
    ok, largest = layer.converged, LARGEST_ZETA[code] / np.maximum(args[5], args[6])
    inverse_l = 1.0 / layer.obukhov_length
    assert (inverse_l[ok] <= largest[ok] * (1.0 + 1e-9)).all()
    us, wanted = bulk_laws(*(a[ok] for a in args), layer.friction_velocity[ok], inverse_l[ok], code)
    assert np.abs(layer.friction_velocity[ok] / us - 1.0).max() < 0.005
    assert np.abs(inverse_l[ok] - wanted).max() < 0.01 * np.abs(wanted).max()
    assert (np.abs(inverse_l[ok] - wanted) <= 0.01 * np.abs(wanted) + 1e-4).all()
    calm = layer.too_stable
    assert 0.02 < calm.mean() < 0.5
    _, wanted = bulk_laws(*(a[calm] for a in args), np.full(calm.sum(), 0.01), largest[calm], code)
    assert (wanted > 0.99 * largest[calm]).all()
    for scale in layer[:6]:
        assert np.isnan(scale[calm]).all()


def test_light_wind_over_cold_water_is_modelled_to_where_functions_reach():
    # 5 K over 10 m: bulk Richardson number 9.81·10·5.1/(290·U²) = 1.72/U². Beljaars–Holtslag at
    # z/L = 10 takes 0.49 (from ψ_h −29.7, ψ_m −17.6 and ln z/z0 = 11.5), Dyer at 1 only 0.06.
    wind = np.array([1.0, 1.5, 2.2, 3.0, 4.5, 6.5])
    t, sst, p = 292.15, 287.15, 101300.0
    q = specific_humidity_from_relative_humidity(0.75, t, p)
    holds = {
        name: solve_sea(wind, t, q, p, sst, 10.0, 10.0, stable_function=name).converged.tolist()
        for name in STABLE_FUNCTIONS
    }
    assert holds["beljaars_holtslag_1991"] == [False, False, True, True, True, True]
    assert holds["grachev_2007"] == [False, False, True, True, True, True]
    assert holds["dyer_1974"] == [False, False, False, False, False, True]


def test_the_table_of_unstable_functions_is_the_functions():
    table = unstable_table()
    for zeta in -np.concatenate([[0.0], np.geomspace(1e-8, 50.0, 400)]):
        assert psi_unstable(zeta, 0, table) == pytest.approx(psi_momentum(zeta, 0), abs=1e-7)
        assert psi_unstable(zeta, 1, table) == pytest.approx(psi_heat(zeta, 0), abs=1e-7)


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
    # Counted: all that is complete settles or is told to be too stable; 10 are, at z/L > 10.
    assert not layer.unsettled.any()
    assert (layer.converged | layer.too_stable)[complete].all()
    assert 0 < layer.too_stable.sum() <= 0.01 * complete.sum()
    assert (t - sst)[layer.too_stable].min() > 0.0
    assert not layer.converged[~complete].any()


def test_buoy_reports_go_through_with_failures_counted():
    # Open data: the latest reports of 840 buoys, recorded among the tests of siphon 0.11.0 (PyPI);
    # "MM" is missing. Their anemometers and thermometers stand some 4 m up (common practice).
    import base64
    import re

    from tests.open_data import open_data

    text = (open_data("siphon") / "tests/fixtures/ndbc_latest").read_text(encoding="utf-8")
    (body,) = re.findall(r"string: !!binary \|\n((?: {8}\S+\n)+)", text)
    header, _, *rows = (line.split() for line in base64.b64decode(body).decode().splitlines())
    assert len(rows) == 840

    def column(name):
        at = header.index(name)
        return np.array([np.nan if row[at] == "MM" else float(row[at]) for row in rows])

    t, sst, p = column("ATMP") + 273.15, column("WTMP") + 273.15, 100.0 * column("PRES")
    q = specific_humidity_from_relative_humidity(0.8, t, p)
    dew = column("DEWP") + 273.15
    known = np.isfinite(dew)
    q[known] = specific_humidity_from_vapour_pressure(
        saturation_vapour_pressure(dew[known], p[known]), p[known]
    )
    wind = column("WSPD")
    complete = np.isfinite(t + sst + p + wind)
    stable = complete & (t - sst > 0.5)
    assert 280 < complete.sum() < 840 and stable.sum() > 20
    counts = {}
    for name in STABLE_FUNCTIONS:
        layer = solve_sea(wind, t, q, p, sst, 4.0, 4.0, stable_function=name)
        assert not layer.unsettled.any()
        assert not layer.converged[~complete].any()
        assert (layer.converged | layer.too_stable)[complete].all()
        assert stable[layer.too_stable].all()
        counts[name] = int(layer.too_stable.sum())
    # The shorter a function's range, the more it leaves open.
    assert counts["dyer_1974"] > counts["beljaars_holtslag_1991"] >= counts["grachev_2007"] >= 0
    print(f"{complete.sum()} complete, {stable.sum()} stable, too stable: {counts}")
