"""Real model files: read as an independent reading of them says, or refused with the right reason.

The files are described in the packages that carry them: a limited-area model on 65 hybrid levels
at a point, its surface file, a global analysis on pressure levels at a point, and a reanalysis of
surface fields on a global grid.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from earthkit.meteo.vertical import array as earthkit

from forecast.ingest import inspect_files, read_files
from forecast.schema import QUALITY_FLAGS
from tests.open_data import open_data


def one_file(package: str, ending: str) -> Path:
    """The only file of a package whose name ends so."""
    found = sorted(open_data(package).rglob(f"*{ending}"))
    assert len(found) == 1, f"{package} holds {len(found)} files *{ending}"
    return found[0]


def profile(path: Path, index: int = 0) -> xr.Dataset:
    reading = read_files([path])
    assert reading.set_aside == [] and reading.profiles is not None
    return reading.profiles.isel(profile=index).dropna("level", subset=["air_pressure"])


# --- 65 hybrid levels, ap and b of full levels, no height -----------------------------------------


@pytest.fixture(scope="module")
def hybrid() -> tuple[xr.Dataset, xr.Dataset]:
    """The column as read, and the file as xarray reads it, bottom first."""
    path = one_file("model_munger", "meps_ml.nc")
    with xr.open_dataset(path) as raw:
        return profile(path), raw.isel(hybrid=slice(None, None, -1)).squeeze().load()


def test_hybrid_levels_have_the_pressure_of_the_formula_terms(hybrid):
    column, raw = hybrid
    assert raw.sizes["hybrid"] == 65
    pressure = raw["ap"] + raw["b"] * raw["surface_air_pressure"]
    n = column.sizes["level"]
    np.testing.assert_allclose(column["air_pressure"], pressure[:n], rtol=1e-7)
    np.testing.assert_allclose(column["air_temperature"], raw["air_temperature_ml"][:n], rtol=1e-7)
    np.testing.assert_allclose(
        column["specific_humidity"], raw["specific_humidity_ml"][:n], rtol=1e-6
    )
    # Fewer than 65 because levels above 15 km are left out; the lowest is some 12 m up.
    assert 50 < n < 65
    assert 10.0 < float(column["height"][0]) < 15.0
    assert float(column["height"][-1]) > 13.5e3


def test_hybrid_levels_have_hydrostatic_heights(hybrid):
    """Against earthkit-meteo, which needs the interfaces: each level is the middle of two.

    The interfaces follow upwards from the ground (a = 0, b = 1); they must come out falling.
    """
    column, raw = hybrid
    surface = float(raw["surface_air_pressure"])
    halves = {}
    for name, ground in (("ap", 0.0), ("b", 1.0)):
        values = [ground]
        for middle in raw[name].values:
            values.append(2.0 * middle - values[-1])
        halves[name] = np.array(values)
    p_half = halves["ap"] + halves["b"] * surface
    assert (np.diff(p_half) < 0.0).all()
    geopotential = earthkit.geopotential_on_hybrid_levels(
        raw["air_temperature_ml"].values[::-1],
        raw["specific_humidity_ml"].values[::-1],
        np.array(0.0),
        np.array(surface),
        halves["ap"][::-1],
        halves["b"][::-1],
    )[::-1]
    # Normal gravity at 60.2 N is 9.8193 m/s2 (WGS 84), falling with height as 1/r2.
    h = geopotential / 9.8193
    expected = h * 6.37e6 / (6.37e6 - h)
    n = column.sizes["level"]
    difference = column["height"].values - expected[:n]
    low = expected[:n] < 1000.0
    assert np.abs(difference[low]).max() < 0.2
    assert np.abs(difference / expected[:n]).max() < 1e-3


def test_hybrid_file_has_time_place_and_marks(hybrid):
    column, raw = hybrid
    assert column["time"].values == raw["time"].values
    assert column["lead_time"].values == raw["time"].values - raw["forecast_reference_time"].values
    assert float(column["latitude"]) == pytest.approx(60.195464231829284)
    assert str(column["source_kind"].values) == "model"
    flag = QUALITY_FLAGS["height_from_hypsometry"]
    assert ((column["quality"].values & flag) != 0).all()
    # Winds along the axes of the projection are not eastward and northward winds.
    assert np.isnan(column["eastward_wind"]).all()
    assert float(column["surface_air_pressure"]) == pytest.approx(
        float(raw["surface_air_pressure"])
    )


def test_hybrid_file_serves_a_place_nearby_and_none_far_away():
    path = one_file("model_munger", "meps_ml.nc")
    near = read_files([path], points=[("Harrow Point", 60.3, 25.1)]).profiles
    assert near is not None and near["station"].values.tolist() == ["Harrow Point"]
    far = read_files([path], points=[("Far Skerry", 54.2, -3.1)])
    assert far.profiles is None
    assert "km from Far Skerry" in far.set_aside[0].reason


# --- pressure levels with geopotential metres, relative humidity, levels under ground -------------


def test_pressure_levels_above_ground():
    path = one_file("model_munger", "gdas1.nc")
    profiles = read_files([path]).profiles
    assert profiles is not None
    with xr.open_dataset(path) as raw:
        raw = raw.load()
    assert profiles.sizes["profile"] == raw.sizes["time"] == 8
    under = 0
    for i in range(8):
        column = profiles.isel(profile=i).dropna("level", subset=["air_pressure"])
        surface = 100.0 * float(raw["PRSS"][i])
        p = raw["pressure"].values
        under += int((p > surface).sum())
        keep = (p <= surface) & (raw["HGTS"][i].values > float(raw["SHGT"][i]))
        keep &= raw["HGTS"][i].values < 14.9e3
        n = int(keep.sum())
        order = np.argsort(-p[keep])
        np.testing.assert_array_equal(column["air_pressure"][:n], p[keep][order])
        # A geopotential metre at 60 N is 0.13 % shorter than a metre below 20 km.
        np.testing.assert_allclose(
            column["altitude"][:n], raw["HGTS"][i].values[keep][order], rtol=3e-3, atol=0.1
        )
        np.testing.assert_allclose(
            column["air_temperature"][:n], raw["TEMP"][i].values[keep][order], rtol=1e-6
        )
        # Humidity as vapour pressure over water by another formula (Bolton 1980): within 2 %.
        t_c = raw["TEMP"][i].values[keep][order] - 273.15
        e = raw["RELH"][i].values[keep][order] * 6.112 * np.exp(17.67 * t_c / (t_c + 243.5))
        q = 0.622 * e / (column["air_pressure"][:n].values - 0.378 * e)
        warm = t_c > -30.0
        np.testing.assert_allclose(column["specific_humidity"][:n][warm], q[warm], rtol=0.02)
        np.testing.assert_allclose(column["surface_air_pressure"], surface, rtol=1e-6)
        np.testing.assert_allclose(column["air_temperature_2m"], raw["T02M"][i], rtol=1e-6)
        period = np.timedelta64(round(float(raw["forecast_time"][i]) * 3600), "s")
        assert column["lead_time"].values == period
    assert under > 0, "the file no longer has levels under ground: the mask is not tested"


# --- no profiles: refused with the reason ---------------------------------------------------------


@pytest.mark.parametrize(
    ("package", "ending"),
    [("model_munger", "meps_sfc.nc"), ("airseafluxcode", "era5_r360x180.nc")],
)
def test_surface_files_are_refused_for_lack_of_a_vertical_dimension(package, ending):
    path = one_file(package, ending)
    for points in (None, [("Harrow Point", 54.2, -3.1)]):
        reading = read_files([path], points=points)
        assert reading.profiles is None
        [item] = reading.set_aside
        assert item.file == path.name
        assert item.reason.startswith("no vertical dimension")
    [report] = inspect_files([path])
    assert any("no vertical dimension" in reason for reason in report.refused)
