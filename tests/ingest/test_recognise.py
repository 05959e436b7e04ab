"""What is taken for what: CF attributes, layouts, the user's word; and what is refused."""

from __future__ import annotations

import netCDF4
import numpy as np
import pytest

from forecast.errors import InputError
from forecast.ingest import open_profiles, read_files
from forecast.ingest.recognise import parse_names, read_role, recognise
from forecast.ingest.source import open_source

from .make_files import EPOCH, make_air, write_ascent


def look(path, names=None):
    with open_source(path) as source:
        return recognise(source, names)


def reason(path, names=None) -> str:
    """Why the file is set aside: the one and only message."""
    reading = read_files([path], names=names)
    assert reading.profiles is None
    (aside,) = reading.set_aside
    return aside.reason


def test_cf_names_say_what_is_what(tmp_path):
    found = look(write_ascent(tmp_path / "a.nc", make_air()))
    assert found.get("air_temperature").variable == "temp"
    assert found.get("air_temperature").how == "CF standard_name air_temperature"
    assert (found.get("air_temperature").units, found.get("air_temperature").target) == (
        "degC",
        "K",
    )
    assert found.vertical_dim == "time"


def test_coordinates_are_known_by_their_units_alone(tmp_path):
    """CF 4.1, 4.2 and 4.4: degrees_north, degrees_east and 'since' suffice."""
    none = {"standard_name": None}
    path = write_ascent(
        tmp_path / "a.nc", make_air(), attrs={"time": none, "lat": none, "lon": none}
    )
    found = look(path)
    assert [found.get(r).how for r in ("time", "latitude", "longitude")] == ["CF units"] * 3


def test_the_users_word_wins(tmp_path):
    """A named variable is taken though another carries the standard name."""
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air)
    with netCDF4.Dataset(path, "a") as data:
        second = data.createVariable("thermistor", "f8", ("time",))
        second[:] = air.t - 273.15 + 1.0
        second.units = "degC"
    names = {"air_temperature": "thermistor"}
    assert look(path, names).get("air_temperature").how == "user"
    read = open_profiles([path], names)
    np.testing.assert_allclose(read.air_temperature.values[0], air.t + 1.0, atol=1e-9)
    plain = open_profiles(path)
    np.testing.assert_allclose(plain.air_temperature.values[0], air.t, atol=1e-9)


def test_the_users_unit_replaces_the_declared_one(tmp_path):
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air, attrs={"temp": {"units": "K"}})
    text = reason(path)
    assert "temp: declared unit 'K' contradicts the values" in text
    assert 'names.air_temperature = "temp [<unit>]"' in text
    read = open_profiles(path, {"air_temperature": "temp [degC]"})
    np.testing.assert_allclose(read.air_temperature.values[0], air.t, atol=1e-9)


def test_a_named_variable_that_the_file_lacks_is_told_and_passed_over(tmp_path):
    """One mapping serves files of several kinds."""
    path = write_ascent(tmp_path / "a.nc", make_air())
    found = look(path, {"air_temperature": "tdry"})
    assert found.get("air_temperature").variable == "temp"
    assert ("air_temperature", "tdry", "named in names, not in this file") in [
        (r.role, r.variable, r.reason) for r in found.rejected
    ]


@pytest.mark.parametrize(
    ("names", "said"),
    [
        ({"temperature": "t"}, "'temperature' is no role (did you mean air_temperature or"),
        ({"wind": "t"}, "allowed are time, forecast_reference_time"),
        ({"air_temperature": ""}, "expected 'variable' or 'variable [unit]'"),
        ({"air_temperature": "t []"}, "expected 'variable' or 'variable [unit]'"),
        ({"air_temperature": "t [K"}, "expected 'variable' or 'variable [unit]'"),
        ({"air_temperature": 5}, "expected 'variable' or 'variable [unit]'"),
    ],
)
def test_faults_in_the_mapping_are_raised(names, said, tmp_path):
    with pytest.raises(InputError) as caught:
        read_files([tmp_path / "none.nc"], names=names)
    assert said in str(caught.value)


def test_mapping_entries():
    assert parse_names({"air_temperature": " my var [deg C] ", "altitude": "z"}) == {
        "air_temperature": ("my var", "deg C"),
        "altitude": ("z", None),
    }


def test_two_that_could_be_meant_are_an_error(tmp_path):
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air)
    with netCDF4.Dataset(path, "a") as data:
        second = data.createVariable("temp2", "f8", ("time",))
        second[:] = air.t
        second.setncatts({"standard_name": "air_temperature", "units": "K"})
    text = reason(path)
    assert "2 variables could be air temperature: temp, temp2" in text
    assert 'names.air_temperature = "temp"' in text
    read = open_profiles(path, {"air_temperature": "temp2"})
    np.testing.assert_allclose(read.air_temperature.values[0], air.t)


def test_an_ambiguity_that_is_not_needed_is_no_error(tmp_path):
    """Two wind speeds beside u and v stop nothing."""
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air)
    with netCDF4.Dataset(path, "a") as data:
        for name in ("ff", "ff2"):
            speed = data.createVariable(name, "f8", ("time",))
            speed[:] = 5.0
            speed.setncatts({"standard_name": "wind_speed", "units": "m s-1"})
    assert "wind_speed" in look(path).problems
    np.testing.assert_allclose(open_profiles(path).eastward_wind.values[0], air.u)


def test_statistics_are_not_the_quantity(tmp_path):
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air)
    with netCDF4.Dataset(path, "a") as data:
        extreme = data.createVariable("tmax", "f8", ("time",))
        extreme[:] = air.t + 9.0
        extreme.setncatts(
            {"standard_name": "air_temperature", "units": "K", "cell_methods": "time: maximum"}
        )
    found = look(path)
    assert found.get("air_temperature").variable == "temp"
    assert "is a statistic (time: maximum)" in [r.reason for r in found.rejected]


@pytest.mark.parametrize(
    ("variable", "role", "target"),
    [
        ("temp", "air_temperature", "K"),
        ("pres", "air_pressure", "Pa"),
        ("rh", "relative_humidity", "1"),
        ("alt", "altitude", "m"),
    ],
)
def test_a_missing_unit_is_an_error_that_says_what_to_set(tmp_path, variable, role, target):
    path = write_ascent(tmp_path / "a.nc", make_air(), attrs={variable: {"units": None}})
    text = reason(path)
    assert text.startswith(f"{variable}: has no unit")
    assert f'names.{role} = "{variable} [{target}]"' in text


@pytest.mark.parametrize(
    ("variable", "units", "said"),
    [
        ("temp", "K", "as air temperature they reach"),  # holds degC
        ("temp", "degF", "as air temperature they reach"),
        ("pres", "Pa", "as air pressure they reach"),  # holds hPa
        ("pres", "kPa", "as air pressure they reach"),
        ("rh", "1", "as relative humidity they reach"),  # holds %
        ("alt", "km", "as altitude they reach"),
        ("alt", "gpm", "is that of geopotential height, not of altitude"),
        ("temp", "bananas", "unit 'bananas' is not known"),
        ("pres", "K", "unit 'K' does not convert to 'Pa'"),
        ("rh", "g/kg", "is a ratio of masses, not of relative_humidity"),
        ("time", "hours", "unit 'hours' is no time since a date"),
    ],
)
def test_units_that_the_values_contradict(tmp_path, variable, units, said):
    # 15 degC as degF is 264 K, which could be air; so the profile there is a hot one in K.
    values = {"temp": np.full(60, 288.0)} if units == "degF" else {}
    if units == "degF":
        values = {"temp": np.linspace(300.0, 280.0, 60)}
    path = write_ascent(
        tmp_path / "a.nc", make_air(), attrs={variable: {"units": units}}, values=values
    )
    assert said in reason(path)


def test_fractions_declared_as_percent(tmp_path):
    """All values at most 1 % from the ground up is drier than any air."""
    path = write_ascent(tmp_path / "a.nc", make_air(), values={"rh": np.linspace(0.9, 0.3, 60)})
    assert "rh: declared unit '%' contradicts the values" in reason(path)
    read = open_profiles(path, {"relative_humidity": "rh [1]"})
    assert read.specific_humidity.values[0, 0] > 5e-3


def test_heights_and_pressures_that_contradict_each_other(tmp_path):
    """Metres declared for kilometres pass as numbers; the pressures tell."""
    air = make_air()
    path = write_ascent(
        tmp_path / "a.nc", air, leave_out=["surface_altitude"], values={"alt": 10.0 * air.z}
    )
    text = reason(path)
    assert "heights and pressures contradict each other" in text
    assert "set them in names" in text


def test_values_near_the_surface_are_told_from_those_aloft(tmp_path):
    """A scalar height coordinate of 2 m makes the second air_temperature a 2 m value (CF 4.3)."""
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air)
    with netCDF4.Dataset(path, "a") as data:
        for name, height in (("two", 2.0), ("ten", 10.0)):
            coordinate = data.createVariable(name, "f8", ())
            coordinate[...] = height
            coordinate.setncatts({"standard_name": "height", "units": "m"})
        for name, standard, units, at, value in (
            ("ta_low", "air_temperature", "degC", "two", 11.5),
            ("ua_low", "eastward_wind", "m s-1", "ten", 4.25),
            ("ta_mast", "air_temperature", "degC", "ten", 10.5),
        ):
            variable = data.createVariable(name, "f8", ())
            variable[...] = value
            variable.setncatts({"standard_name": standard, "units": units, "coordinates": at})
    found = look(path)
    assert found.get("air_temperature").variable == "temp"
    assert found.get("air_temperature_2m").variable == "ta_low"
    assert ("ta_mast", "holds at 10 m, not 2 m") in [(r.variable, r.reason) for r in found.rejected]
    read = open_profiles(path)
    np.testing.assert_allclose(read.air_temperature_2m.values, 284.65)
    np.testing.assert_allclose(read.eastward_wind_10m.values, 4.25)


def test_a_2m_value_without_height_needs_a_name(tmp_path):
    path = write_ascent(tmp_path / "a.nc", make_air())
    with netCDF4.Dataset(path, "a") as data:
        variable = data.createVariable("screen", "f8", ())
        variable[...] = 284.0
        variable.setncatts({"standard_name": "air_temperature", "units": "K"})
    assert "air_temperature_2m" not in look(path)
    assert look(path, {"air_temperature_2m": "screen"}).get("air_temperature_2m").how == "user"


def test_hybrid_coefficients_from_formula_terms(tmp_path):
    """Second CF form: a is a fraction of p0 (CF appendix D)."""
    path = tmp_path / "m.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("lev", 4)
        data.createDimension("time", 1)
        for name, dims, values, attributes in (
            ("time", ("time",), [0.0], {"standard_name": "time", "units": EPOCH}),
            ("lev", ("lev",), [0.2, 0.5, 0.8, 0.99],
             {"standard_name": "atmosphere_hybrid_sigma_pressure_coordinate",
              "formula_terms": "a: ha b: hb ps: psurf p0: pref", "positive": "down"}),
            ("ha", ("lev",), [0.1, 0.05, 0.01, 0.0], {"units": "1"}),
            ("hb", ("lev",), [0.1, 0.45, 0.79, 0.99], {}),
            ("psurf", ("time",), [1e5], {"units": "Pa"}),
            ("pref", (), 1000.0, {"units": "hPa"}),
            ("ta", ("time", "lev"), [[230, 260, 280, 290]],
             {"standard_name": "air_temperature", "units": "K"}),
        ):  # fmt: skip
            variable = data.createVariable(name, "f8", dims)
            variable.setncatts(attributes)
            variable[...] = values
    with open_source(path) as source:
        found = recognise(source)
        assert found.vertical_dim == "lev"
        np.testing.assert_allclose(
            read_role(source, found, "hybrid_a"), [1e4, 5e3, 1e3, 0.0], rtol=1e-12
        )
        np.testing.assert_allclose(read_role(source, found, "hybrid_b"), [0.1, 0.45, 0.79, 0.99])
        assert found.get("surface_air_pressure").variable == "psurf"
        assert found.get("hybrid_a").how == "CF formula_terms of lev"


def test_a_pressure_coordinate_is_known_by_its_unit(tmp_path):
    """CF 4.3: a vertical coordinate with a unit of pressure."""
    path = tmp_path / "p.nc"
    with netCDF4.Dataset(path, "w") as data:
        data.createDimension("level", 3)
        for name, values, units in (
            ("level", [1000, 925, 850], "millibars"),
            ("t", [288, 284, 280], "K"),
        ):
            variable = data.createVariable(name, "f8", ("level",))
            variable.units = units
            variable[:] = values
    with open_source(path) as source:
        found = recognise(source)
        assert found.get("air_temperature").how == "layout 'weather model short names'"
        np.testing.assert_allclose(
            read_role(source, found, "air_pressure"), [1e5, 92500.0, 85000.0]
        )


def test_a_layout_may_fix_units(tmp_path, monkeypatch):
    """Only where its documentation does; a unit that the file declares comes first."""
    from forecast.ingest import candidates

    layout = {
        "name": "probe listing",
        "requires": ["TT"],
        "roles": {"air_temperature": "TT"},
        "units": {"air_temperature": "degC"},
    }
    monkeypatch.setattr(candidates, "_table", lambda: {"layout": [layout], "station": []})
    air = make_air()
    path = write_ascent(tmp_path / "a.nc", air, leave_out=["temp"])
    with netCDF4.Dataset(path, "a") as data:
        variable = data.createVariable("TT", "f8", ("time",))
        variable[:] = air.t - 273.15
    np.testing.assert_allclose(open_profiles(path).air_temperature.values[0], air.t, atol=1e-9)
    assert look(path).get("air_temperature").declared is None
    with netCDF4.Dataset(path, "a") as data:
        data["TT"].units = "K"
    assert look(path).get("air_temperature").units == "K"
