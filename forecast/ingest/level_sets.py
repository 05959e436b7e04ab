"""Variables that belong together along the vertical: hybrid coefficients, sets of levels."""

from __future__ import annotations

from typing import TYPE_CHECKING

from forecast.errors import InputError
from forecast.ingest.recognition import Taken
from forecast.ingest.roles import LEVEL_ROLES

if TYPE_CHECKING:
    from forecast.ingest.candidates import Recogniser

__all__ = ["HYBRID_COORDINATE", "fill_from_formula_terms", "find_groups"]

HYBRID_COORDINATE = "atmosphere_hybrid_sigma_pressure_coordinate"

#: Terms of the two forms of the hybrid coordinate (CF appendix D), and the roles they fill.
_TERMS = {
    "ap": "hybrid_a",
    "a": "hybrid_a",
    "b": "hybrid_b",
    "ps": "surface_air_pressure",
    "p0": "reference_pressure",
}


def fill_from_formula_terms(recogniser: Recogniser) -> None:
    """Hybrid coefficients and surface pressure that ``formula_terms`` names."""
    held, result = recogniser.source.variables, recogniser.result
    for info in held.values():
        if info.standard_name != HYBRID_COORDINATE or result.vertical_dim not in info.dims:
            continue
        words = str(info.attrs.get("formula_terms", "")).replace(":", " : ").split()
        colons = [i for i, word in enumerate(words) if word == ":" and 0 < i < len(words) - 1]
        terms = {words[i - 1]: words[i + 1] for i in colons}
        for term, role in _TERMS.items():
            named = role in recogniser.names and role in result.taken
            if terms.get(term) not in held or named:
                continue
            try:
                how = f"CF formula_terms of {info.name}"
                result.taken[role] = recogniser.take(role, held[terms[term]], how)
                result.problems.pop(role, None)
            except InputError as error:
                result.problems[role] = error


def find_groups(recogniser: Recogniser) -> None:
    """Sets of levels in separate arrays (mandatory and significant levels)."""
    _layout_groups(recogniser)
    if not recogniser.result.groups:
        _cf_groups(recogniser)


def _layout_groups(recogniser: Recogniser) -> None:
    """Sets that a layout lists."""
    held, result = recogniser.source.variables, recogniser.result
    for row in recogniser.layouts:
        for group in row.get("groups", ()):
            how = f"layout {row['name']!r}, {group['name']} levels"
            chosen = {
                role: held[name]
                for role, name in group["roles"].items()
                if name in held and not held[name].is_text
            }
            if "air_pressure" not in chosen or not chosen["air_pressure"].dims:
                continue
            _add_group(recogniser, group["name"], chosen["air_pressure"].dims[-1], chosen, how)
            if group.get("count") in held:
                result.group_counts[group["name"]] = group["count"]


def _cf_groups(recogniser: Recogniser) -> None:
    """Sets that CF names tell: each dimension has its own air temperature and pressure."""
    across = {
        info.name for info, _ in recogniser.proposals("latitude") if info.dims == (info.name,)
    }
    chosen: dict[str, dict] = {}
    for role in LEVEL_ROLES:
        for info, how in recogniser.proposals(role):
            dims = recogniser.extra_dims(info)
            if how != "CF" or len(dims) != 1 or across & set(info.dims) or info.is_text:
                continue
            if role in chosen.setdefault(dims[0], {}):
                return  # two for one role: for the user to decide
            chosen[dims[0]][role] = info
    needed = {"air_temperature", "air_pressure"}
    sets = {dim: roles for dim, roles in chosen.items() if needed <= set(roles)}
    if len(sets) < 2:
        return
    heights = {"altitude", "height", "geopotential_height", "geopotential"}
    for dim in sorted(sets, key=lambda d: (not heights & set(sets[d]), d)):
        _add_group(recogniser, dim, dim, sets[dim], f"CF standard names, levels along {dim}")


def _add_group(recogniser: Recogniser, name: str, vertical: str, chosen: dict, how: str) -> None:
    """Fill a set's roles; a missing unit is kept as a problem and told when the set is read."""
    members: dict[str, Taken] = {}
    for role, info in chosen.items():
        try:
            members[role] = recogniser.take(role, info, how)
        except InputError as error:
            recogniser.result.problems[role] = error
    recogniser.result.groups[name] = members
    recogniser.result.group_dims[name] = vertical
