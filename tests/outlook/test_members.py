"""Members must be honest draws: right size, right correlation, unbiased, repeatable."""

from __future__ import annotations

import numpy as np
import pytest

from forecast.outlook.members import ErrorSizes, error_model, error_sizes, perturb
from forecast.physics.moisture import relative_humidity
from tests.outlook.build import air

SIZES = ErrorSizes(
    temperature=0.5, relative_humidity=0.02, correlation_height=300.0, displacement=20.0
)
NAMES = ("height", "air_pressure", "air_temperature", "specific_humidity")


def draw(states, members=400, seed=3, identities=None, sizes=SIZES):
    stacked = [np.stack([s[n] for s in states]) for n in NAMES]
    identities = identities or [f"profile {i}" for i in range(len(states))]
    return perturb(*stacked, [sizes] * len(states), identities, members, seed)


def test_size_and_height_correlation_are_those_stated():
    # Matérn 3/2 covariance: (1 + √3 d/ℓ) exp(−√3 d/ℓ); Rasmussen & Williams 2006, eq. 4.17.
    state = air()
    members = draw([state], members=4000)
    error = members.air_temperature[0] - state["air_temperature"]
    assert error.std(axis=0) == pytest.approx(SIZES.temperature, rel=0.06)
    low, high = 20, 35  # 300 m apart on the 20 m grid
    r = np.sqrt(3.0)
    expected = (1.0 + r) * np.exp(-r)
    found = np.corrcoef(error[:, low], error[:, high])[0, 1]
    assert found == pytest.approx(expected, abs=0.05)


def test_members_come_in_mirrored_pairs_so_their_mean_is_the_profile():
    state = air()
    members = draw([state], members=64)
    assert members.air_temperature[0].mean(axis=0) == pytest.approx(
        state["air_temperature"], abs=1e-9
    )
    assert members.height[0].mean(axis=0) == pytest.approx(state["height"], abs=1e-9)


def test_humidity_stays_between_dry_and_saturated_and_heights_in_order():
    state = air(inversion=400.0)
    big = ErrorSizes(1.5, 0.3, 300.0, 200.0)
    members = draw([state], sizes=big)
    rh = relative_humidity(members.specific_humidity, members.air_temperature, members.air_pressure)
    assert rh.min() >= -1e-12
    assert rh.max() <= 1.0 + 1e-12
    assert (np.diff(members.height, axis=-1) > 0.0).all()
    # The ground stays where it is: only layers move.
    assert (members.height[0, :, 0] == state["height"][0]).all()


def test_a_profile_draws_the_same_whatever_stands_beside_it():
    a, b = air(), air(inversion=300.0)
    together = draw([a, b], members=16, identities=["a", "b"])
    alone = draw([b], members=16, identities=["b"])
    np.testing.assert_array_equal(together.air_temperature[1], alone.air_temperature[0])
    other_seed = draw([b], members=16, identities=["b"], seed=4)
    assert (other_seed.air_temperature[0] != alone.air_temperature[0]).any()


def test_missing_levels_stay_missing():
    state = air(top=1500.0)
    members = draw([state], members=8)
    missing = np.isnan(state["height"])
    assert np.isnan(members.air_temperature[0][:, missing]).all()
    assert np.isfinite(members.air_temperature[0][:, ~missing]).all()


def test_error_sizes_add_in_quadrature_and_grow_with_lead_time():
    row = error_model()["model"]
    now, later = error_sizes("model", 0.0), error_sizes("model", 2.0)
    assert now.temperature == pytest.approx(
        (row["temperature"] ** 2 + row["temperature_elsewhere"] ** 2) ** 0.5
    )
    assert later.displacement == pytest.approx(
        now.displacement * (1.0 + 2.0 * row["growth_per_day"])
    )
    assert error_sizes("ascent", 5.0) == error_sizes("ascent", 0.0)
