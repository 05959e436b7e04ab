"""Values in the unit a file declares, turned into SI: spellings, conversion, refusals.

Conversion is pint's. Before pint sees a unit the text is checked against a small grammar (names,
small whole powers, products and quotients), since it comes from outside; spellings of CF,
UDUNITS and weather services that pint does not know, or means something else by ("mb" is a
millibarn, "C" a coulomb), are translated by what the quantity is.
"""

from __future__ import annotations

import re
from functools import lru_cache
from typing import Any

import numpy as np

from forecast.errors import InputError, printable

__all__ = ["convert", "is_dimensionless", "normal_spelling"]

#: Spellings that mean one thing whatever the quantity (compared without case).
_SPELLINGS = {
    "1": "dimensionless",
    "unitless": "dimensionless",
    "dimensionless": "dimensionless",
    "fraction": "dimensionless",
    "~": "dimensionless",
    "numeric": "dimensionless",
    "percent": "percent",
    "%": "percent",
    "kelvin": "kelvin",
    "kelvins": "kelvin",
    "degrees_kelvin": "kelvin",
    "celsius": "degC",
    "deg_c": "degC",
    "degc": "degC",
    "deg c": "degC",
    "degree_c": "degC",
    "degrees_c": "degC",
    "degrees c": "degC",
    "degree_celsius": "degC",
    "degrees_celsius": "degC",
    "degree celsius": "degC",
    "degrees celsius": "degC",
    "°c": "degC",
    "fahrenheit": "degF",
    "degree_fahrenheit": "degF",
    "degrees_fahrenheit": "degF",
    "pascal": "pascal",
    "pascals": "pascal",
    "hectopascal": "hectopascal",
    "hectopascals": "hectopascal",
    "hpa": "hectopascal",
    "pa": "pascal",
    "kpa": "kilopascal",
    "meters above mean sea level": "meter",
    "metres above mean sea level": "meter",
    "m above mean sea level": "meter",
    "m above sea level": "meter",
    "m asl": "meter",
    "m amsl": "meter",
    "m msl": "meter",
    "m agl": "meter",
    "m above ground": "meter",
    "m above ground level": "meter",
    "meters/second": "meter/second",
    "meter/sec": "meter/second",
    "m/sec": "meter/second",
    "knots": "knot",
    "knot": "knot",
    "kts": "knot",
    "kt": "knot",
    "degrees true": "degree",
    "degree_true": "degree",
    "degrees_true": "degree",
    "deg true": "degree",
    **dict.fromkeys(
        (
            f"{word}{gap}{side}"
            for word in ("degree", "degrees", "deg")
            for gap in ("_", "")
            for side in ("n", "e", "north", "east")
        ),
        "degree",
    ),
}

#: Spellings whose meaning follows from the quantity: target unit → spelling → unit for pint.
_SPELLINGS_BY_TARGET = {
    "K": {"c": "degC", "k": "kelvin", "f": "degF"},
    "Pa": {
        **dict.fromkeys(("mb", "mbar", "mbars", "mbs", "millibar", "millibars"), "hectopascal"),
    },
    "m": {
        **dict.fromkeys(("gpm", "geopotential meter", "geopotential meters", "m gpm"), "meter"),
    },
    "kg kg-1": {"(kg/kg)": "dimensionless", "(g/kg)": "g/kg"},
}

_FACTOR = re.compile(r"(?:(?P<name>[A-Za-zµ°%_]+)|(?P<one>1))(?P<power>(?:\*\*|\^)?[+-]?[1-9])?")
_SEPARATOR = re.compile(r"\s*/\s*|\s*\*\s*|\s*\.\s*|\s+")


#: Units that nearly every file uses, in pint's own words: reading its whole table takes half a
#: second, which is only spent on a unit that is not here.
_COMMON = (
    "kilo- = 1000 = k-",
    "hecto- = 100 = h-",
    "centi- = 1e-2 = c-",
    "milli- = 1e-3 = m-",
    "micro- = 1e-6 = µ-",
    "meter = [length] = m = metre",
    "gram = [mass] = g",
    "second = [time] = s = sec",
    "kelvin = [temperature]; offset: 0 = K",
    "degC = kelvin; offset: 273.15",
    "radian = [] = rad",
    "degree = 0.017453292519943295 * radian = deg",
    "percent = 0.01 = %",
    "pascal = kilogram / meter / second ** 2 = Pa",
    "bar = 1e5 * pascal",
    "joule = kilogram * meter ** 2 / second ** 2 = J",
    "minute = 60 * second = min",
    "hour = 3600 * second = h = hr",
    "day = 86400 * second = d",
    "knot = 1852 / 3600 * meter / second = kt",
    "foot = 0.3048 * meter = ft = feet",
)


@lru_cache(maxsize=2)
def _registry(whole: bool = False) -> Any:
    import pint

    if whole:
        return pint.UnitRegistry()
    registry: Any = pint.UnitRegistry(None)
    registry.load_definitions(list(_COMMON))
    return registry


def _convert(numbers: np.ndarray, spelled: str, wanted: str | None) -> np.ndarray:
    import pint

    try:
        return np.asarray(_registry().convert(numbers, spelled, wanted), dtype=np.float64)
    except pint.UndefinedUnitError:
        return np.asarray(_registry(whole=True).convert(numbers, spelled, wanted), dtype=np.float64)


@lru_cache(maxsize=512)
def normal_spelling(units: str, target: str) -> str | None:
    """A unit as pint spells it, None when it does not follow the grammar.

    Parameters
    ----------
    units : str
        Declared unit.
    target : str
        SI unit of the quantity, as in `forecast.schema`.

    Returns
    -------
    str or None
    """
    text = " ".join(units.split())
    if len(text) > 60:
        return None
    key = text.lower()
    known = _SPELLINGS_BY_TARGET.get(target, {}).get(key) or _SPELLINGS.get(key)
    if known:
        return known
    parts, at, operator = [], 0, ""
    while True:
        factor = _FACTOR.match(text, at)
        if not factor:
            return None
        power = (factor["power"] or "1").lstrip("*^")
        name = factor["name"] or "dimensionless"
        name = "percent" if name == "%" else _SPELLINGS.get(name.lower(), name)
        parts.append(f"{operator}({name})**({int(power)})")
        at = factor.end()
        if at == len(text):
            return "".join(parts)
        separator = _SEPARATOR.match(text, at)
        if not separator:
            return None
        operator = "/" if "/" in separator.group() else "*"
        at = separator.end()


def is_dimensionless(units: str | None) -> bool:
    """Whether a declared unit is a pure number ("1", "unitless", "kg kg-1", "%")."""
    if units is None:
        return False
    spelled = normal_spelling(units, "1")
    if spelled is None:
        return False
    for whole in (False, True):
        try:
            return bool(_registry(whole).Unit(spelled).dimensionless)
        except Exception:  # of many kinds; the whole table may know the unit
            continue
    return False


def convert(
    values: Any, units: str, target: str, *, source: str = "", variable: str = ""
) -> np.ndarray:
    """Values in `target`, converted from the declared unit.

    Parameters
    ----------
    values : array_like
        Numbers in `units`.
    units : str
        Declared unit, in any spelling of CF, UDUNITS or pint.
    target : str
        SI unit, as in `forecast.schema`.
    source, variable : str
        Named in the error.

    Returns
    -------
    ndarray of float64

    Raises
    ------
    InputError
        If the unit is not known or measures another quantity.
    """
    numbers = np.asarray(values, dtype=np.float64)
    if units == target:
        return numbers
    wanted = normal_spelling(target, target)
    spelled = normal_spelling(units, target)
    where = {
        "source": source,
        "variable": variable,
        "remedy": f'set the unit in names, for example "{variable} [{target}]"',
    }
    if spelled is None:
        raise InputError(
            f"unit {printable(units, 60)!r} is not known; expected one that converts to {target!r}",
            **where,
        )
    if spelled == wanted:
        return numbers
    import pint

    try:
        return _convert(numbers, spelled, wanted)
    except pint.DimensionalityError as error:
        raise InputError(
            f"unit {printable(units, 60)!r} does not convert to {target!r}", **where
        ) from error
    except Exception as error:
        # Pint raises many kinds (undefined unit, tokens, recursion) on text it cannot follow.
        raise InputError(
            f"unit {printable(units, 60)!r} is not known; expected one that converts to {target!r}",
            **where,
        ) from error
