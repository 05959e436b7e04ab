"""The fused kernel equals its formulas, whatever the memory order, and keeps the storage type."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.physics.column_batch import analyse_columns, analyse_refractivity
from forecast.physics.curvature import effective_earth_radius_factor, modified_refractivity
from forecast.physics.ducts import find_ducts
from forecast.physics.refractive_index import refractivity_from_state

COLUMNS, LEVELS = 300, 40  # more than four blocks, and a part of one
RADIUS = 6.37e6 + np.linspace(-2e4, 2e4, COLUMNS)


def _grid(seed: int, gaps: bool = False) -> list[np.ndarray]:
    """Pressure, temperature, specific humidity, height: (column, level), with inversions."""
    rng = np.random.default_rng(seed)
    z = np.cumsum(rng.uniform(5.0, 120.0, (COLUMNS, LEVELS)), axis=1)
    t = 290.0 - 0.0065 * z + rng.normal(0.0, 1.0, z.shape)
    p = 1.01e5 * np.exp(-z / 8400.0)
    q = 0.008 * np.exp(-z / 2000.0) * rng.uniform(0.3, 1.2, z.shape)
    if gaps:
        for a in (p, t, q, z):
            a[rng.random(a.shape) < 0.03] = np.nan
        z[5, 7] = z[5, 6]
        z[6, 7] = z[6, 6] - 3.0
        p[7, 25:] = np.nan
        t[8] = np.nan
    return [p, t, q, z]


def test_kernel_equals_the_formulas():
    p, t, q, z = _grid(1)
    batch = analyse_columns(p, t, q, z, RADIUS)
    n = refractivity_from_state(p, t, q)
    m = modified_refractivity(n, z, RADIUS[:, None])
    np.testing.assert_allclose(batch.refractivity, n, rtol=1e-14)
    np.testing.assert_allclose(batch.modified_refractivity, m, rtol=1e-14)
    gradient = 1e3 * np.diff(n, axis=1) / np.diff(z, axis=1)
    np.testing.assert_allclose(batch.refractivity_gradient[:, :-1], gradient, rtol=1e-10)
    k = effective_earth_radius_factor(gradient, RADIUS[:, None])
    # 1/k is what is exact to rounding: k itself magnifies it without bound near −157 N/km.
    np.testing.assert_allclose(
        1.0 / batch.effective_earth_radius_factor[:, :-1], 1.0 / k, rtol=1e-10, atol=1e-11
    )
    assert np.all(np.isnan(batch.refractivity_gradient[:, -1]))
    assert np.all(np.isnan(batch.effective_earth_radius_factor[:, -1]))
    ducts = find_ducts(z, batch.modified_refractivity)
    assert ducts.count.sum() > COLUMNS
    for first, second in zip(batch.ducts, ducts, strict=True):
        np.testing.assert_array_equal(first, second)


@pytest.mark.parametrize("gaps", [False, True])
@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_memory_order_does_not_matter(gaps, kind):
    arrays = [a.astype(kind) for a in _grid(2, gaps)]
    by_column = analyse_columns(*arrays, RADIUS)
    by_level = analyse_columns(*(np.asfortranarray(a) for a in arrays), RADIUS)
    for first, second in zip(by_column[:4], by_level[:4], strict=True):
        np.testing.assert_array_equal(first, second)
        assert first.dtype == second.dtype == kind
        assert second.flags.f_contiguous
    for first, second in zip(by_column.ducts, by_level.ducts, strict=True):
        np.testing.assert_array_equal(first, second)


def test_single_precision_moves_results_by_its_rounding_only():
    """float32 holds N ≈ 300 to 1.5e-5 and M ≈ 1000 to 3e-5; arithmetic inside is float64.

    Same float32 inputs through float64: outputs equal after rounding to float32, and strengths,
    which come from stored M, differ by at most two roundings of M.
    """
    single = [a.astype(np.float32) for a in _grid(3)]
    double = [a.astype(np.float64) for a in single]
    low, high = analyse_columns(*single, RADIUS), analyse_columns(*double, RADIUS)
    for first, second in zip(low[:4], high[:4], strict=True):
        np.testing.assert_array_equal(first, second.astype(np.float32))
    same = low.ducts.count == high.ducts.count
    assert np.mean(same) > 0.98
    both = low.ducts.count[same].max()
    np.testing.assert_allclose(
        low.ducts.strength[same, :both], high.ducts.strength[same, :both], atol=2 * 6.2e-5
    )
    np.testing.assert_array_equal(low.ducts.top[same, :both], high.ducts.top[same, :both])


def test_levels_that_cannot_be_used_are_skipped_not_filled():
    p, t, q, z = _grid(4, gaps=True)
    batch = analyse_columns(p, t, q, z, RADIUS)
    for c in range(COLUMNS):
        usable = np.isfinite(p[c]) & np.isfinite(t[c]) & np.isfinite(q[c]) & np.isfinite(z[c])
        highest = -np.inf
        for i in np.flatnonzero(usable):
            usable[i] = z[c, i] > highest
            highest = max(highest, z[c, i])
        at = np.flatnonzero(usable)
        assert np.array_equal(np.isfinite(batch.refractivity[c]), usable)
        assert np.array_equal(np.isfinite(batch.modified_refractivity[c]), usable)
        # The segment goes to the next usable level, and is told at its lower end.
        lower = np.zeros(LEVELS, dtype=bool)
        lower[at[:-1]] = True
        assert np.array_equal(np.isfinite(batch.refractivity_gradient[c]), lower)
        expected = np.diff(batch.refractivity[c, at]) / np.diff(z[c, at])
        np.testing.assert_allclose(
            batch.refractivity_gradient[c, at[:-1]], 1e3 * expected, rtol=1e-9, atol=1e-9
        )
    assert not np.any(np.isfinite(batch.refractivity[8]))
    assert batch.ducts.count[8] == 0


def test_given_refractivity_goes_the_same_way():
    p, t, q, z = _grid(5, gaps=True)
    whole = analyse_columns(p, t, q, z, RADIUS)
    again = analyse_refractivity(whole.refractivity, z, RADIUS)
    for first, second in zip(whole[:4], again[:4], strict=True):
        np.testing.assert_array_equal(first, second)
    for first, second in zip(whole.ducts, again.ducts, strict=True):
        np.testing.assert_array_equal(first, second)


def test_k_is_infinite_where_rays_follow_the_earth():
    # A radius and gradient whose product is exactly −1e6 in binary: 2^-4 N/m on 1.6e7 m.
    z = np.array([[0.0, 16.0, 32.0, 48.0]])
    n = np.array([[300.0, 299.0, 297.0, 297.0]])
    k = analyse_refractivity(n, z, 1.6e7).effective_earth_radius_factor[0]
    assert np.isinf(k[0])
    assert k[1] == pytest.approx(-1.0, rel=1e-12)
    assert k[2] == 1.0


def test_one_radius_serves_all_columns():
    arrays = _grid(6)
    one = analyse_columns(*arrays, 6371e3)
    each = analyse_columns(*arrays, np.full(COLUMNS, 6371e3))
    np.testing.assert_array_equal(one.modified_refractivity, each.modified_refractivity)


def test_wrong_arrays_are_refused():
    p, t, q, z = _grid(7)
    with pytest.raises(ValueError, match="four"):
        analyse_columns(p, t, q, z[:, 1:], RADIUS)
    with pytest.raises(ValueError, match="of one type"):
        analyse_columns(p, t, q.astype(np.float32), z, RADIUS)
    with pytest.raises(ValueError, match="column, level"):
        analyse_columns(p[0], t[0], q[0], z[0], 6371e3)
    with pytest.raises(ValueError, match="of one type"):
        analyse_refractivity(p, z.astype(np.float32), RADIUS)
    with pytest.raises(ValueError, match="column, level"):
        analyse_refractivity(p, z[:, 1:], RADIUS)
