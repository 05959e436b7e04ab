"""Shared by the benchmarks: median times, and figures printed for people or as JSON."""

from __future__ import annotations

import argparse
import json
import os
import statistics
import time
from collections.abc import Callable
from typing import Any

__all__ = ["REPEATS", "arguments", "median_seconds", "report"]

#: Repeats behind every median.
REPEATS = 5


def arguments(description: str | None) -> argparse.Namespace:
    """Command line of every benchmark: ``--json``, ``--quick``, ``--threads``."""
    parser = argparse.ArgumentParser(description=description)
    parser.add_argument("--json", action="store_true", help="print one JSON object of figures")
    parser.add_argument("--quick", action="store_true", help="a tenth of the data")
    parser.add_argument(
        "--threads", type=int, default=2, help="threads of the compiled kernels (default 2)"
    )
    return parser.parse_args()


def median_seconds(call: Callable[[], Any], repeats: int = REPEATS, warm: bool = True) -> float:
    """Median wall time (s) of a call, after one call that is not counted."""
    if warm:
        call()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return statistics.median(times)


def report(title: str, rows: list[tuple[str, str, float, float | None]], as_json: bool) -> None:
    """Print figures; each row: name, meaning, value, and the aim if there is one."""
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
    if as_json:
        figures = {name: float(f"{value:.4g}") for name, _, value, _ in rows}
        print(json.dumps({**figures, "cpu_count": os.cpu_count(), "load_average": load}))
        return
    print(f"{title} ({os.cpu_count()} CPUs, load average {load:.1f})")
    width = max(len(meaning) for _, meaning, _, _ in rows)
    for _, meaning, value, aim in rows:
        text = f"{value:,.0f}" if value >= 1000 else f"{value:.3g}"
        print(f"  {meaning:{width}}  {text:>12}" + (f"   (aim {aim:,g})" if aim else ""))
