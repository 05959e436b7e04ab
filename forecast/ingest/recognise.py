"""Which variable of a file is which quantity, how that was decided, and what was refused.

Order for each role of `forecast.ingest.roles`:

1. the user's mapping ``names``, which always wins where the file has the variable it names;
2. CF attributes: ``standard_name``; for latitude, longitude, time and a pressure coordinate also
   the unit (CF sections 4.1 to 4.4); ``formula_terms`` for hybrid levels;
3. known layouts, `layouts.toml`.

``names`` maps a role to a variable name, optionally with a unit in brackets that replaces the
declared one: ``{"air_temperature": "tdry [degC]"}``.

Nothing is guessed: two variables that could both be meant, a missing unit or a unit that the
values contradict are errors that say what to set. An error is raised only when its role is needed.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from forecast.ingest.candidates import Recogniser
from forecast.ingest.recognition import (
    Recognition,
    Rejected,
    Taken,
    leading_number,
    parse_names,
)
from forecast.ingest.roles import ROLES, check_plausible
from forecast.ingest.source import Source
from forecast.ingest.units import convert, is_dimensionless

__all__ = [
    "Recognition",
    "Rejected",
    "Taken",
    "parse_names",
    "read_role",
    "read_taken",
    "recognise",
]


def recognise(source: Source, names: Mapping[str, str] | None = None) -> Recognition:
    """Decide which variable plays which role.

    Parameters
    ----------
    source : Source
        Open file.
    names : mapping of str to str, optional
        The user's mapping, role → ``variable`` or ``variable [unit]``.

    Returns
    -------
    Recognition

    Raises
    ------
    InputError
        If `names` itself has faults; everything else is kept in ``problems``.
    """
    return Recogniser(source, parse_names(names)).run()


def read_role(
    source: Source, recognition: Recognition, role: str, index: Any = ..., *, check: bool = True
) -> np.ndarray:
    """Values of a role in its SI unit, NaN where missing.

    Parameters
    ----------
    source : Source
        Open file.
    recognition : Recognition
        Of the same file.
    role : str
        Any role but ``time``, ``forecast_reference_time`` and ``station``.
    index : tuple of int or slice, optional
        Part to read.
    check : bool
        Refuse values that contradict the declared unit.

    Returns
    -------
    ndarray of float64

    Raises
    ------
    InputError
        If the role is not filled, the unit is unknown or contradicted by the values, or the
        file is damaged.
    """
    return read_taken(source, recognition, recognition.require(role), index, check=check)


def read_taken(
    source: Source, recognition: Recognition, taken: Taken, index: Any = ..., *, check: bool = True
) -> np.ndarray:
    """Values of one `Taken` in SI; see `read_role`."""
    where = {"source": source.name, "variable": taken.variable}
    if taken.attribute:
        values = np.asarray(leading_number(source.attrs.get(taken.variable)))
    else:
        values = source.read(taken.variable, index)
    row = ROLES[taken.role]
    if taken.role in ("hybrid_a", "hybrid_a_half") and is_dimensionless(taken.units):
        # Coefficients as a fraction of a reference pressure (CF appendix D, second form).
        result = values * float(read_role(source, recognition, "reference_pressure").ravel()[0])
    else:
        result = convert(values, taken.units, row.units, **where)
    if row.difference:
        result = result - convert(0.0, taken.units, row.units, **where)
    if check:
        check_plausible(taken.role, result, taken.units, **where)
    return result
