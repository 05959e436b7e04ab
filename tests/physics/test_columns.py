"""The labelled face gives what the kernels give, with names and units from the schema."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

import forecast
from forecast.errors import InputError
from forecast.physics.column_batch import analyse_columns
from forecast.physics.curvature import classify_layers, ray_curvature
from forecast.physics.earth import euler_radius
from forecast.physics.rays import build_medium
from forecast.physics.refractive_index import optical_refractivity
from forecast.physics.sightline import trace_sightlines as trace_kernel
from forecast.schema import VARIABLES

PROFILES, LEVELS = 3, 12


@pytest.fixture
def profiles() -> xr.Dataset:
    """Three invented profiles with an inversion; the last is cut short, one level is missing."""
    z = np.tile(np.array([0, 30, 80, 150, 250, 400, 430, 480, 700, 1000, 1500, 2000.0]), (3, 1))
    t = 290.0 - 0.0065 * z + 5.0 * np.clip((z - 400.0) / 80.0, 0.0, 1.0)
    p = 1.013e5 * np.exp(-z / 8300.0)
    q = 0.009 * np.exp(-z / 2500.0) - 0.004 * np.clip((z - 400.0) / 80.0, 0.0, 1.0)
    for a in (z, t, p, q):
        a[2, 8:] = np.nan
    q[1, 3] = np.nan
    dims = ("profile", "level")
    return xr.Dataset(
        {
            "height": (dims, z),
            "air_pressure": (dims, p),
            "air_temperature": (dims, t),
            "specific_humidity": (dims, q),
        },
        coords={
            "latitude": ("profile", [10.0, 50.0, 70.0]),
            "longitude": ("profile", [0.0, 1.0, 2.0]),
            "station": ("profile", ["a", "b", "c"]),
        },
    )


def _state(profiles: xr.Dataset) -> list[np.ndarray]:
    names = ("air_pressure", "air_temperature", "specific_humidity", "height")
    return [profiles[name].values for name in names]


def test_refract_gives_what_the_kernel_gives(profiles):
    radius = euler_radius(profiles.latitude.values)
    batch = analyse_columns(*_state(profiles), radius)
    found = forecast.refract(profiles)
    same = np.testing.assert_array_equal
    same(found.refractivity, batch.refractivity)
    same(found.modified_refractivity, batch.modified_refractivity)
    same(found.refractivity_gradient, batch.refractivity_gradient)
    same(found.effective_earth_radius_factor, batch.effective_earth_radius_factor)
    same(found.layer_class, classify_layers(batch.refractivity_gradient, radius[:, None]))
    same(found.ray_curvature, ray_curvature(batch.refractivity_gradient, batch.refractivity))
    same(found.earth_radius, radius)
    assert found.sizes == {"profile": PROFILES, "level": LEVELS}
    assert found.attrs["wave"] == "radio"
    assert set(found.coords) == {"latitude", "longitude", "station"}


def test_missing_levels_stay_missing(profiles):
    found = forecast.refract(profiles)
    usable = np.isfinite(profiles.specific_humidity.values)
    np.testing.assert_array_equal(np.isfinite(found.refractivity), usable)
    np.testing.assert_array_equal(found.layer_class.values == -1, np.isnan(found.ray_curvature))


def test_optical_refraction_uses_the_wavelength(profiles):
    p, t, q, _ = _state(profiles)
    for wavelength in (400e-9, 900e-9):
        found = forecast.refract(profiles, wave="optical", wavelength=wavelength)
        np.testing.assert_array_equal(found.refractivity, optical_refractivity(p, t, q, wavelength))
        assert found.attrs == {**found.attrs, "wave": "optical", "wavelength": wavelength}
    # Light sees little of the humidity that makes the radio duct.
    assert forecast.find_ducts(forecast.refract(profiles)).duct_count.values.min() >= 1
    assert forecast.find_ducts(found).duct_count.values.max() == 0


def test_order_of_dimensions_does_not_matter(profiles):
    xr.testing.assert_identical(
        forecast.refract(profiles), forecast.refract(profiles.transpose("level", "profile"))
    )


def test_ducts_are_labelled(profiles):
    refraction = forecast.refract(profiles)
    found = forecast.find_ducts(refraction)
    batch = analyse_columns(*_state(profiles), euler_radius(profiles.latitude.values))
    for name, field in (
        ("duct_count", "count"),
        ("duct_kind", "kind"),
        ("duct_base", "base"),
        ("duct_top", "top"),
        ("duct_thickness", "thickness"),
        ("duct_strength", "strength"),
        ("trapping_base", "trapping_base"),
        ("height_of_maximum", "height_of_maximum"),
        ("grazing_angle", "grazing_angle"),
        ("longest_trapped_wavelength", "longest_trapped_wavelength"),
        ("enclosed", "enclosed"),
    ):
        np.testing.assert_array_equal(found[name], getattr(batch.ducts, field), err_msg=name)
    assert found.station.values.tolist() == ["a", "b", "c"]


def test_sightlines_are_labelled(profiles):
    refraction = forecast.refract(profiles)
    tops, far = np.array([30.0, 60.0]), np.array([25e3, 60e3])
    found = forecast.trace_sightlines(
        refraction, observer_height=10.0, target_height=tops, distance=far
    )
    medium = build_medium(
        profiles.height.values, refraction.refractivity.values, refraction.earth_radius.values
    )
    table = trace_kernel(medium, 10.0, tops, far)
    np.testing.assert_array_equal(found.sightline_state, table.state)
    np.testing.assert_array_equal(found.hidden_height, table.hidden_height)
    np.testing.assert_array_equal(found.visible_extent, table.visible_extent)
    np.testing.assert_array_equal(found.apparent_elevation, table.apparent_elevation)
    assert (found.sizes["profile"], found.sizes["sightline"]) == (PROFILES, 2)
    np.testing.assert_array_equal(found.distance, far)
    # Air always hides less than none, and k = 4/3 stands between straight and ducted rays.
    assert np.all(found.hidden_height_standard < found.hidden_height_straight)
    assert np.all(found.apparent_elevation_straight.values[:1] != 0.0)


def test_azimuth_sets_the_radius_of_the_path(profiles):
    # At 10° latitude the meridian curves more than the parallel: the target hides more.
    refraction = forecast.refract(profiles).isel(profile=[0])
    north, east = (
        forecast.trace_sightlines(refraction, 5.0, 50.0, 40e3, azimuth=azimuth).hidden_height.item()
        for azimuth in (0.0, 90.0)
    )
    assert north > east > 0.0


def test_wave_decides_the_standard_air(profiles):
    radio = forecast.trace_sightlines(forecast.refract(profiles), 10.0, 100.0, 40e3)
    light = forecast.trace_sightlines(forecast.refract(profiles, wave="optical"), 10.0, 100.0, 40e3)
    # Light bends by 0.17 of the Earth's curvature, radio by 0.25: light hides more.
    assert float(light.hidden_height_standard[0]) > float(radio.hidden_height_standard[0]) + 1.0
    assert float(light.hidden_height_straight[0]) == float(radio.hidden_height_straight[0])


@pytest.mark.parametrize("make", ["refract", "find_ducts", "trace_sightlines"])
def test_every_variable_is_described_by_the_schema(profiles, make):
    found = forecast.refract(profiles)
    if make == "find_ducts":
        found = forecast.find_ducts(found)
    elif make == "trace_sightlines":
        found = forecast.trace_sightlines(found, 10.0, 50.0, 30e3)
    for name, variable in found.data_vars.items():
        assert name in VARIABLES, name
        assert variable.attrs.get("units") == VARIABLES[name].units
        assert variable.attrs["long_name"] == VARIABLES[name].long_name
        assert variable.dims == VARIABLES[name].dims


def test_missing_variables_are_named(profiles):
    with pytest.raises(InputError, match="missing specific_humidity"):
        forecast.refract(profiles.drop_vars("specific_humidity"))


def test_unknown_wave_is_refused(profiles):
    with pytest.raises(ValueError, match="wave 'sound'; choose from radio, optical"):
        forecast.refract(profiles, wave="sound")
    with pytest.raises(ValueError, match="300 to 1700 nm"):
        forecast.refract(profiles, wave="optical", wavelength=5e-6)
