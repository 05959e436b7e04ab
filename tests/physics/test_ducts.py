"""Ducts against the written rule by brute force, closed forms of trapping, and their properties."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecast.physics.ducts import DuctTable, find_ducts
from forecast.schema import DUCT_KINDS
from tests.physics.brute_force import ducts_by_the_rule, usable_levels
from tests.reference import records
from tests.strategies import duct_columns, random_duct_columns

COLUMNS = 10_000


def _one(z, m) -> DuctTable:
    return find_ducts(np.asarray(z, dtype=float)[None, :], np.asarray(m, dtype=float)[None, :])


def _assert_is_the_rule(table: DuctTable, row: int, z, m) -> None:
    expected = ducts_by_the_rule(z, m)
    assert table.count[row] == len(expected)
    for i, duct in enumerate(expected):
        assert table.kind[row, i] == DUCT_KINDS[duct.kind]
        assert table.base[row, i] == duct.base
        assert table.top[row, i] == duct.top
        assert table.thickness[row, i] == duct.top - duct.base
        assert table.strength[row, i] == duct.strength
        assert table.trapping_base[row, i] == duct.trapping_base
        assert table.height_of_maximum[row, i] == duct.height_of_maximum
        assert table.enclosed[row, i] == duct.enclosed
        assert table.grazing_angle[row, i] == pytest.approx(math.sqrt(2e-6 * duct.strength))
    assert np.all(np.isnan(table.base[row, len(expected) :]))
    assert np.all(table.kind[row, len(expected) :] == -1)
    assert not np.any(table.enclosed[row, len(expected) :])


def test_ducts_equal_the_brute_force_on_ten_thousand_columns():
    z, m = random_duct_columns(np.random.default_rng(20), COLUMNS)
    table = find_ducts(z, m)
    for row in range(COLUMNS):
        _assert_is_the_rule(table, row, z[row], m[row])


def test_the_ten_thousand_columns_hold_every_awkward_shape():
    """Guards the test above: it must not pass because its columns became tame."""
    z, m = random_duct_columns(np.random.default_rng(20), COLUMNS)
    table = find_ducts(z, m)
    kinds = np.bincount(table.kind[table.kind > 0], minlength=4)[1:]
    assert np.all(kinds > 1000)
    assert np.count_nonzero(table.enclosed) > 1000
    with np.errstate(invalid="ignore"):
        flat_inside = (m[:, 1:-2] > m[:, 2:-1]) & (m[:, 2:-1] == m[:, 3:])
    assert np.count_nonzero(flat_inside) > 1000
    assert np.count_nonzero(np.isnan(m[:, -1])) > 1000
    assert np.count_nonzero(table.count == 0) > 100
    assert min(len(usable_levels(a, b)) for a, b in zip(z[:2000], m[:2000], strict=True)) < 2
    assert table.count.max() > 5


@given(duct_columns())
def test_ducts_equal_the_brute_force_on_whole_numbers(column):
    z, m = column
    _assert_is_the_rule(_one(z, m), 0, z, m)


# Worked by hand from the rule; ground at 0 m.
WORKED = {
    "surface duct": (
        ([0, 50, 200], [330, 320, 340]),
        [("surface_duct", 0.0, 50.0, 10.0, 0.0, 0.0)],
    ),
    "elevated surface duct: M at the top below M at the ground": (
        ([0, 100, 150, 300], [330, 340, 325, 345]),
        [("elevated_surface_duct", 0.0, 150.0, 15.0, 100.0, 100.0)],
    ),
    "elevated duct: base half-way up the first segment": (
        ([0, 100, 150, 300], [330, 340, 335, 355]),
        [("elevated_duct", 50.0, 150.0, 5.0, 100.0, 100.0)],
    ),
    "flat inside the layer belongs to it": (
        ([0, 10, 20, 30, 40], [330, 325, 325, 320, 330]),
        [("surface_duct", 0.0, 30.0, 10.0, 0.0, 0.0)],
    ),
    "flat at either end does not": (
        ([0, 10, 20, 30, 40], [330, 330, 325, 325, 335]),
        [("elevated_surface_duct", 0.0, 20.0, 5.0, 10.0, 0.0)],
    ),
    "flat at the ends of the column": (([0, 10, 20], [330, 330, 330]), []),
    "M at the top equal to M at the ground reaches the ground": (
        ([0, 100, 150, 300], [330, 340, 330, 350]),
        [("elevated_surface_duct", 0.0, 150.0, 10.0, 100.0, 100.0)],
    ),
    "a duct inside another": (
        ([0, 100, 120, 200, 260], [330, 350, 345, 355, 325]),
        [
            ("elevated_duct", 75.0, 120.0, 5.0, 100.0, 100.0),
            ("elevated_surface_duct", 0.0, 260.0, 30.0, 200.0, 200.0),
        ],
    ),
}


@pytest.mark.parametrize("name", WORKED)
def test_worked_examples(name):
    (z, m), expected = WORKED[name]
    table = _one(z, m)
    assert table.count[0] == len(expected)
    for i, (kind, base, top, strength, trapping_base, at_max) in enumerate(expected):
        assert table.kind[0, i] == DUCT_KINDS[kind]
        found = (table.base, table.top, table.strength, table.trapping_base)
        assert [a[0, i] for a in found] == pytest.approx([base, top, strength, trapping_base])
        assert table.height_of_maximum[0, i] == at_max
    if name == "a duct inside another":
        assert table.enclosed[0].tolist() == [1, 0]


@pytest.mark.parametrize("row", records("trap_surface_"), ids=lambda r: r["id"])
def test_longest_trapped_wavelength_of_a_linear_surface_duct(row):
    """Phase integral, first mode: λ = (8/3) ∫ √(2e-6 ΔM(z)) dz = (16√2/9)e-3 d √ΔM.

    The record's second figure is the constant of Turton, Bennetts & Farmer (1988), 0.04 % away.
    """
    d, strength = row["inputs"]["d_m"], row["inputs"]["dM"]
    table = _one([0.0, d, d + 1000.0], [350.0, 350.0 - strength, 500.0])
    wavelength = table.longest_trapped_wavelength[0, 0]
    assert wavelength == pytest.approx(row["expected"]["lambda_max_m"], rel=1e-9)
    assert wavelength == pytest.approx(
        16.0 * math.sqrt(2.0) / 9.0 * 1e-3 * d * math.sqrt(strength), rel=1e-12
    )
    assert wavelength == pytest.approx(row["expected"]["turton_lambda_m"], rel=row["tolerance"])
    assert 1e3 * table.grazing_angle[0, 0] == pytest.approx(row["expected"]["theta_c_mrad"])


def test_an_elevated_duct_traps_half_as_long_again_over_the_same_integral():
    """(m − 1/2)π in place of (m − 1/4)π: 4 for 8/3, hence 1.5 (Turton et al. 1988: 5.66/3.77).

    The elevated duct is the surface duct's M lifted, with a steep foot whose own share is known:
    a segment that rises by ΔM over h holds the same integral as one falling over h.
    """
    d, strength = 60.0, 20.0
    surface = _one([0, d, 500], [350, 350 - strength, 450])
    elevated = _one([0, 100, 200, 200 + d, 900], [300, 330, 350, 350 - strength, 450])
    assert elevated.kind[0, 0] == DUCT_KINDS["elevated_duct"]
    ratio = elevated.longest_trapped_wavelength[0, 0] / surface.longest_trapped_wavelength[0, 0]
    assert ratio == pytest.approx(1.5 * (d + 100.0) / d, rel=1e-12)


def test_phase_integral_agrees_with_quadrature():
    z, m = random_duct_columns(np.random.default_rng(4), 60)
    table = find_ducts(z, m)
    checked = 0
    for row in range(len(z)):
        levels = np.array(usable_levels(z[row], m[row]))
        for i in range(table.count[row]):
            base, top = table.base[row, i], table.top[row, i]
            # Between nodes √ has an endpoint of square-root kind: u³ spacing tames it.
            nodes = np.unique(np.r_[base, levels[(levels[:, 0] > base) & (levels[:, 0] < top), 0]])
            m_top = np.interp(top, *levels.T)
            total = 0.0
            x, weight = np.polynomial.legendre.leggauss(60)
            u = 0.5 * (x + 1.0)
            for low, high in zip(nodes, np.r_[nodes[1:], top], strict=True):
                at = low + (high - low) * u * u * (3.0 - 2.0 * u)
                excess = np.maximum(np.interp(at, *levels.T) - m_top, 0.0)
                total += np.sum(
                    0.5 * weight * np.sqrt(2e-6 * excess) * (high - low) * 6.0 * u * (1.0 - u)
                )
            constant = 4.0 if table.kind[row, i] == DUCT_KINDS["elevated_duct"] else 8.0 / 3.0
            expected = constant * total
            assert table.longest_trapped_wavelength[row, i] == pytest.approx(expected, rel=1e-5)
            checked += 1
    assert checked > 50


@given(duct_columns(), st.integers(-200, 200))
def test_adding_a_constant_to_m_changes_nothing(column, constant):
    z, m = column
    for name, first, second in zip(
        DuctTable._fields, _one(z, m), _one(z, m + constant), strict=True
    ):
        np.testing.assert_allclose(first, second, rtol=1e-12, err_msg=name)


@given(duct_columns(), st.integers(0, 500))
def test_lifting_the_column_lifts_its_ducts(column, lift):
    z, m = column
    first, second = _one(z, m), _one(z + lift, m)
    for name in ("base", "top", "trapping_base", "height_of_maximum"):
        np.testing.assert_allclose(
            getattr(first, name) + lift, getattr(second, name), atol=1e-9, err_msg=name
        )
    for name in ("kind", "strength", "grazing_angle", "enclosed"):
        np.testing.assert_array_equal(getattr(first, name), getattr(second, name))
    for name in ("thickness", "longest_trapped_wavelength"):
        np.testing.assert_allclose(getattr(first, name), getattr(second, name), rtol=1e-9)


@given(duct_columns(), st.data())
def test_a_level_on_the_line_between_two_changes_nothing(column, data):
    z, m = column
    i = data.draw(st.integers(0, z.size - 2))
    share = data.draw(st.sampled_from([0.25, 0.5, 0.75]))
    # Quarters of whole numbers are exact in binary, so the new level is on the line exactly.
    z_new = np.insert(z, i + 1, z[i] + share * (z[i + 1] - z[i]))
    m_new = np.insert(m, i + 1, m[i] + share * (m[i + 1] - m[i]))
    for name, first, second in zip(DuctTable._fields, _one(z, m), _one(z_new, m_new), strict=True):
        np.testing.assert_allclose(first, second, rtol=1e-9, atol=1e-9, err_msg=name)


@given(duct_columns())
def test_every_duct_has_extent_and_strength(column):
    table = _one(*column)
    n = table.count[0]
    assert n >= 1
    for i in range(n):
        assert table.base[0, i] < table.top[0, i]
        assert table.base[0, i] <= table.trapping_base[0, i] < table.top[0, i]
        assert table.base[0, i] <= table.height_of_maximum[0, i] < table.top[0, i]
        assert table.strength[0, i] > 0.0
        assert table.longest_trapped_wavelength[0, i] > 0.0
    assert np.all(np.diff(table.top[0, :n]) > 0.0)


def test_columns_without_a_duct_or_without_air():
    table = find_ducts(
        np.array([[0.0, 10.0, 20.0], [0.0, np.nan, np.nan], [np.nan] * 3]),
        np.array([[330.0, 331.0, 333.0], [330.0, 320.0, 310.0], [1.0, 2.0, 0.0]]),
    )
    assert table.count.tolist() == [0, 0, 0]
    assert table.base.shape == (3, 1)
    assert np.all(np.isnan(table.strength))
    assert find_ducts(np.empty((0, 5)), np.empty((0, 5))).base.shape == (0, 1)


def test_single_precision_input_is_worked_on_in_double():
    z, m = (a.astype(np.float32) for a in random_duct_columns(np.random.default_rng(7), 500))
    for first, second in zip(
        find_ducts(z, m), find_ducts(z.astype(float), m.astype(float)), strict=True
    ):
        np.testing.assert_array_equal(first, second)


@pytest.mark.parametrize(
    ("z", "m"), [(np.zeros(3), np.zeros(3)), (np.zeros((2, 3)), np.zeros((2, 4)))]
)
def test_wrong_shapes_are_refused(z, m):
    with pytest.raises(ValueError, match=r"must be \(column, level\)"):
        find_ducts(z, m)
