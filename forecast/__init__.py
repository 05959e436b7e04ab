"""bendcast: when the low atmosphere bends light or radio waves past the horizon.

The public face is small and lazy: ``import forecast`` loads nothing heavy; the scientific stack
is imported by the function that needs it.
"""

from __future__ import annotations

__version__ = "0.1.0"

_FACE = {
    "open_profiles": "forecast.ingest",
    "refract": "forecast.physics.columns",
    "find_ducts": "forecast.physics.columns",
    "trace_sightlines": "forecast.physics.columns",
    "make_outlook": "forecast.outlook",
    "InputError": "forecast.errors",
    "SettingsError": "forecast.errors",
}

__all__ = ["__version__", *_FACE]


def __getattr__(name: str) -> object:
    """Import a public name on first use (PEP 562)."""
    if name in _FACE:
        from importlib import import_module

        value = getattr(import_module(_FACE[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'forecast' has no attribute {name!r}")


def __dir__() -> list[str]:
    """Names offered to completion."""
    return sorted(__all__)
