"""Check values from outside the program, each record with its source and how it was obtained.

Record fields: ``id``, ``quantity``, ``inputs``, ``expected``, ``unit``, ``tolerance``,
``tolerance_reason``, ``source``, ``how``, ``note``. A source marked "from memory" or "not seen"
says so in its own words: such a value confirms, it does not decide.
"""

from __future__ import annotations

import copy
import json
from functools import cache
from pathlib import Path
from typing import Any

__all__ = ["record", "records"]


@cache
def _table() -> dict[str, dict[str, Any]]:
    path = Path(__file__).with_name("check_values.json")
    rows = json.loads(path.read_text(encoding="utf-8"))["records"]
    table = {row["id"]: row for row in rows}
    if len(table) != len(rows):
        raise ValueError(f"{path.name}: a record id occurs twice")
    return table


def record(identifier: str) -> dict[str, Any]:
    """One record by its id; a fresh copy, so that no test can change another's."""
    try:
        return copy.deepcopy(_table()[identifier])
    except KeyError:
        raise KeyError(f"no check value with id {identifier!r}") from None


def records(prefix: str) -> list[dict[str, Any]]:
    """Every record whose id starts with `prefix`, in file order; never an empty list.

    A prefix that matches nothing would make a parametrised test pass by running no case.
    """
    found = [copy.deepcopy(row) for name, row in _table().items() if name.startswith(prefix)]
    if not found:
        raise KeyError(f"no check value whose id starts with {prefix!r}")
    return found
