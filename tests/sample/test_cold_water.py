"""Light over the demo's cold water does what the ray invariant says of each hour's own air."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from forecast.ingest import read_files
from forecast.inputs import share_out
from forecast.outlook import make_outlook
from forecast.outlook.speaking import speaking_profiles
from forecast.physics.curvature import modified_refractivity
from forecast.physics.earth import euler_radius
from forecast.physics.refractive_index import optical_refractivity
from forecast.schema import SIGHTLINE_STATES, SURFACE_STATES
from forecast.settings import load_settings

SAMPLE = Path(__file__).resolve().parents[2] / "sample_soundings"


@pytest.fixture(scope="module")
def spell():
    """The model's hours in which the water is 4 to 6 K colder than the air, and their settings."""
    settings = replace(load_settings(SAMPLE / "outlook.toml"), members=8)
    lamp = next(line for line in settings.sightlines if line.lamp_intensity is not None)
    settings = replace(settings, sightlines=(replace(lamp, places=()),))
    site = settings.sites[0]
    reading = read_files(
        sorted((SAMPLE / "model").glob("*.nc")), points=[(site.name, site.latitude, site.longitude)]
    )
    profiles = share_out(reading.profiles, settings.sites)[0][0]
    outlook = make_outlook(profiles, settings)
    colder = outlook["air_sea_temperature_difference"].values
    wind = np.hypot(
        profiles["eastward_wind_10m"].values, profiles["northward_wind_10m"].values
    )  # fmt: skip
    rows = np.flatnonzero((colder >= 4.0) & (colder <= 6.0) & (wind < 5.0))
    return profiles.isel(profile=rows), settings


@pytest.fixture(scope="module")
def seen(spell):
    profiles, settings = spell
    return make_outlook(profiles, settings)


def test_the_spell_is_there_and_modelled(seen):
    assert seen.sizes["profile"] >= 24
    assert set(seen["surface_layer_state"].values) == {SURFACE_STATES["modelled"]}


def test_the_hidden_height_falls_and_the_sightline_opens(seen):
    hidden = seen["hidden_height"].values[:, 0]
    standard = float(seen["hidden_height_standard"].values[0])
    # In standard air the lamp is hidden; from the rocks it shows for hours on end.
    assert standard > 60.0 > float(seen["target_height"].values[0])
    assert np.all(hidden < standard)
    assert np.mean(seen["sightline_state"].values[:, 0] == SIGHTLINE_STATES["open"]) > 0.3


def test_the_horizon_stands_where_the_invariant_puts_it(spell, seen):
    """The highest ray that meets the water ever, from M of light alone.

    θ² = 2e-6 (M at the eye − M where the ray is level) for small angles (Bouguer's invariant, Born
    & Wolf, 7th ed., sect. 3.2). A layer above the eye whose M is lower turns rays back down to the
    water, if it turns back more than what the air under the eye takes to reach the water.
    """
    profiles, settings = spell
    line = settings.sightlines[0]
    told = speaking_profiles(profiles, settings)
    air = told.air
    n = optical_refractivity(
        air["air_pressure"], air["air_temperature"], air["specific_humidity"], line.wavelength
    )
    radius = euler_radius(told.latitude, line.azimuth)
    m = modified_refractivity(n, air["height"], radius[:, None])
    risen = 0
    for row in range(m.shape[0]):
        good = np.isfinite(m[row])
        z, column = air["height"][row, good], m[row, good]
        eye = np.interp(line.observer_height, z, column)
        below = max(0.0, eye - column[z < line.observer_height].min())
        above = max(0.0, eye - column[z > line.observer_height].min())
        expected = np.sqrt(2e-6 * above) if above > below else -np.sqrt(2e-6 * below)
        found = float(seen["horizon_elevation"].values[row, 0])
        assert found == pytest.approx(expected, abs=2e-6), row
        risen += expected > 0.0
    assert risen >= 5  # at its coldest the water raises the horizon above the level


def test_water_as_much_warmer_hides_more_than_standard_air(spell):
    # An ascent of a breezy day, with no inversion of its own aloft, over water 5 K warmer.
    _, settings = spell
    site = settings.sites[0]
    profiles = share_out(
        read_files(sorted((SAMPLE / "ascents").glob("*.nc"))[:1]).profiles, settings.sites
    )[0][0]
    low = profiles["height"].values[0] < 40.0
    air = float(np.nanmean(profiles["air_temperature"].values[0, low]))
    warm = replace(site, sea_surface_temperature=air + 5.0, wind_speed=4.0)
    found = make_outlook(profiles, replace(settings, sites=(warm,)))
    assert found["air_sea_temperature_difference"].values[0] == pytest.approx(-5.0, abs=0.5)
    standard = float(found["hidden_height_standard"].values[0])
    assert found["hidden_height"].values[0, 0] > standard + 10.0
    assert found["sightline_state"].values[0, 0] == SIGHTLINE_STATES["shut"]
