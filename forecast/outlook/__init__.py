"""How likely and how sure: probabilities by valid time, and windows worth going for."""

from __future__ import annotations

from forecast.outlook.outlook import make_outlook
from forecast.outlook.windows import Window, find_windows

__all__ = ["Window", "find_windows", "make_outlook"]
