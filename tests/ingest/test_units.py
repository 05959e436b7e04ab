"""Units in all the spellings files use, and nothing that is not a unit."""

from __future__ import annotations

import time

import numpy as np
import pytest

from forecast.errors import InputError
from forecast.ingest.units import convert, is_dimensionless


@pytest.mark.parametrize(
    ("units", "target", "value", "expected"),
    [
        # Definitions: 0 degC = 273.15 K, 1 hPa = 1 mb = 100 Pa, 1 kt = 1852 m/h, 1 ft = 0.3048 m.
        *[
            (spelling, "K", 20.0, 293.15)
            for spelling in (
                "degC", "C", "Celsius", "degree_Celsius", "degrees_Celsius", "degrees C", "°C",
                "deg_C", "celsius",
            )
        ],
        *[(spelling, "K", 280.0, 280.0) for spelling in ("K", "Kelvin", "degrees_kelvin")],
        ("degF", "K", 32.0, 273.15),
        *[
            (spelling, "Pa", 1013.25, 101325.0)
            for spelling in ("hPa", "mb", "mbar", "millibar", "millibars", "hectopascals", "HPA")
        ],
        ("kPa", "Pa", 101.325, 101325.0),
        ("Pa", "Pa", 5.0, 5.0),
        *[(spelling, "1", 50.0, 0.5) for spelling in ("%", "percent")],
        *[(spelling, "1", 0.5, 0.5) for spelling in ("1", "unitless", "fraction")],
        *[(spelling, "kg kg-1", 10.0, 0.01) for spelling in ("g/kg", "g kg-1", "g.kg-1")],
        *[
            (spelling, "kg kg-1", 0.01, 0.01)
            for spelling in ("kg/kg", "kg kg-1", "kg kg**-1", "kg kg^-1", "1")
        ],
        *[(spelling, "m s-1", 3.0, 3.0) for spelling in ("m/s", "m s-1", "m s**-1", "meter/sec")],
        *[(spelling, "m s-1", 3600.0, 1852.0) for spelling in ("kt", "knots", "knot", "kts")],
        *[(spelling, "m", 7.0, 7.0) for spelling in ("m", "meter", "metres", "gpm")],
        ("meters above Mean Sea Level", "m", 30.0, 30.0),
        ("ft", "m", 10.0, 3.048),
        ("km", "m", 1.5, 1500.0),
        *[
            (spelling, "m2 s-2", 98.0665, 98.0665)
            for spelling in ("m2 s-2", "m**2 s**-2", "m^2/s^2", "m2/s2", "J kg-1")
        ],
        *[
            (spelling, "degree", -12.5, -12.5)
            for spelling in ("degrees_north", "degree_N", "degrees", "deg", "degreeE")
        ],
    ],
)  # fmt: skip
def test_spellings(units, target, value, expected):
    np.testing.assert_allclose(convert(value, units, target), expected, rtol=1e-13)


@pytest.mark.parametrize(
    ("units", "target", "said"),
    [
        ("bananas", "K", "is not known"),
        ("", "K", "is not known"),
        ("m", "K", "does not convert"),
        ("K", "Pa", "does not convert"),
        # Of lengths only; a coulomb or a millibarn never makes sense here.
        ("mb", "m", "does not convert"),
        ("(0 - 1)", "1", "is not known"),
        ("K; import os", "K", "is not known"),
        ("x" * 5000, "K", "is not known"),
    ],
)
def test_what_is_no_unit_of_the_quantity(units, target, said):
    with pytest.raises(InputError) as caught:
        convert([1.0], units, target, source="a.nc", variable="tdry")
    text = str(caught.value)
    assert said in text and text.startswith("a.nc: tdry: ")
    assert f"tdry [{target}]" in text, "it says what to set"
    assert len(text) < 400


def test_a_tower_of_powers_is_not_computed():
    start = time.perf_counter()
    with pytest.raises(InputError):
        convert(1.0, "9**9**9**9 K", "K")
    assert time.perf_counter() - start < 2.0


def test_pure_numbers():
    assert is_dimensionless("1") and is_dimensionless("kg kg-1") and is_dimensionless("unitless")
    assert not is_dimensionless("Pa") and not is_dimensionless(None) and not is_dimensionless("xx")


def test_the_common_units_are_those_of_pints_own_table():
    # The short table saves half a second; it must say what pint's says. Reference: pint.
    import pint

    from forecast.ingest.units import _registry

    own, whole = _registry(), pint.UnitRegistry()
    for unit, base in [
        ("hectopascal", "pascal"),
        ("millibar", "pascal"),
        ("kilopascal", "pascal"),
        ("degC", "kelvin"),
        ("g/kg", "dimensionless"),
        ("percent", "dimensionless"),
        ("knot", "meter/second"),
        ("foot", "meter"),
        ("kilometer", "meter"),
        ("degree", "radian"),
        ("joule/kilogram", "meter**2/second**2"),
        ("minute", "second"),
        ("hour", "second"),
        ("day", "second"),
    ]:
        assert own.convert(3.7, unit, base) == pytest.approx(
            whole.convert(3.7, unit, base), rel=1e-14
        )
