"""The whole job on open radiosondes: ARM, Darwin, January 2006 (act_atmos 0.7.0 on PyPI, BSD-3)."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from forecast.cli import main
from tests.open_data import open_data


@pytest.fixture(scope="module")
def week(tmp_path_factory):
    files = sorted((open_data("act_atmos") / "act/tests/data").glob("twpsondewnpn*.cdf"))
    assert len(files) == 24
    out = tmp_path_factory.mktemp("week")
    code = main(["chart", *map(str, files), "-o", str(out), "--members", "16", "-q"])
    return out, code


def brute_force(z, m):
    """Ducts of one column, straight from the written rule, in plain Python."""
    good = np.isfinite(z) & np.isfinite(m)
    z, m = list(z[good]), list(m[good])
    ducts, i = [], 0
    while i < len(m) - 1:
        if m[i + 1] >= m[i]:
            i += 1
            continue
        bottom = i
        while i < len(m) - 1 and m[i + 1] <= m[i]:
            i += 1
        top = i
        while m[top - 1] == m[top]:
            top -= 1
        base = z[0]
        for j in range(bottom, 0, -1):
            if m[j - 1] < m[top]:
                share = (m[top] - m[j - 1]) / (m[j] - m[j - 1])
                base = z[j - 1] + share * (z[j] - z[j - 1])
                break
        ducts.append((base, z[top], max(m[k] for k in range(bottom, top)) - m[top], z[bottom]))
    return ducts


def test_every_usable_ascent_is_there_and_the_four_without_data_are_set_aside(week):
    out, code = week
    assert code == 3
    with xr.open_dataset(out / "outlook.nc") as outlook:
        assert outlook.sizes["profile"] == 20
    assert len(list(out.glob("*.png"))) == 1


def test_ducts_of_every_ascent_equal_the_brute_force(week):
    out, _ = week
    checked = 0
    with xr.open_dataset(out / "outlook.nc") as outlook:
        ceiling = 3000.0
        for row in range(outlook.sizes["profile"]):
            z = outlook["height"].values[row]
            m = outlook["modified_refractivity"].values[row]
            expected = [d for d in brute_force(z, m) if d[1] < ceiling]
            top = outlook["duct_top"].values[row]
            found = np.flatnonzero(top < ceiling)
            assert found.size == len(expected)
            for d, (base, end, _, bottom) in zip(found, expected, strict=True):
                assert outlook["duct_base"].values[row, d] == pytest.approx(base, abs=1e-9)
                assert top[d] == end
                assert outlook["trapping_base"].values[row, d] == bottom
                checked += 1
    assert checked > 50


def test_the_strongest_layers_are_where_others_found_them(week):
    # Found by an independent quick count with N = 77.6/T (p + 4810 e/T): best layers 8.5 M at
    # 30–46 m and 6.9 M at 408–446 m; a hint, not a check value.
    out, _ = week
    with xr.open_dataset(out / "outlook.nc") as outlook:
        strength = outlook["duct_strength"].values
        base = outlook["trapping_base"].values
        top = outlook["duct_top"].values
    low = top < 3000.0
    best = np.argsort(np.where(low, strength, -1.0), axis=None)[::-1][:6]
    layers = [(base.flat[i], top.flat[i], strength.flat[i]) for i in best]
    assert any(abs(s - 8.5) < 1.0 and t < 80.0 for _, t, s in layers), layers
