"""Settings shared by all tests."""

from __future__ import annotations

import os

from hypothesis import HealthCheck, settings

# A window system must not be needed, and the first call of a compiled kernel is slow.
os.environ.setdefault("MPLBACKEND", "Agg")
# Workers side by side share the processors: threads of their own would only wait on each other.
if "PYTEST_XDIST_WORKER" in os.environ:
    os.environ.setdefault("NUMBA_NUM_THREADS", "1")
settings.register_profile(
    "bendcast",
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.load_profile("bendcast")
