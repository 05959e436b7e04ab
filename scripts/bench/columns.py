"""How fast N, M, gradients, k and ducts of a model grid are, against a script and against reading.

The script is what a user writes with MetPy's units, one profile at a time. The file holds the
same four float32 variables, zlib-compressed, and is written in the run.
"""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

import numba
import numpy as np
from scipy.ndimage import gaussian_filter1d
from timing import REPEATS, arguments, median_seconds, report

from forecast.physics.column_batch import analyse_columns

LEVELS, COLUMNS = 137, 57_600
SCRIPT_PROFILES = 20
NAMES = ("air_pressure", "air_temperature", "specific_humidity", "height")


def make_grid(columns: int) -> list[np.ndarray]:
    """Pressure, temperature, humidity, height as float32 (level, column), inversions included."""
    rng = np.random.default_rng(1)
    height = np.geomspace(10.0, 20e3, LEVELS)[:, None] * rng.uniform(0.98, 1.02, columns)
    inversion = rng.uniform(100.0, 2000.0, columns)
    lid = rng.uniform(0.0, 1.0, columns) * 0.5 * (1.0 + np.tanh((height - inversion) / 60.0))
    temperature = np.maximum(288.0 - 0.0065 * height, 216.0) + 6.0 * lid
    pressure = 1.013e5 * np.exp(-height / 8000.0)
    humidity = 0.010 * np.exp(-height / 2500.0) * (1.0 - 0.6 * lid)
    # Structure of a few levels' depth, as models have it: about two ducts a column.
    humidity *= 1.0 + 0.1 * gaussian_filter1d(rng.normal(size=height.shape), 4, axis=0)
    return [a.astype(np.float32) for a in (pressure, temperature, humidity, height)]


def script_profile(pressure: Any, temperature: Any, humidity: Any, height: Any) -> list[Any]:
    """One profile by the script: MetPy quantities throughout, ducts by a loop over levels."""
    import metpy.calc as mpcalc
    from metpy.units import units

    p, t = pressure * units.Pa, temperature * units.K
    q, z = humidity * units("kg/kg"), height * units.m
    mixing_ratio = mpcalc.mixing_ratio_from_specific_humidity(q)
    e = mpcalc.vapor_pressure(p, mixing_ratio)
    n = (
        77.6 * units("K/hPa") * (p - e) / t
        + 72.0 * units("K/hPa") * e / t
        + 3.75e5 * units("K^2/hPa") * e / t**2
    ).to("dimensionless")
    m = n + 1e6 * (z / (6371.0 * units.km)).to("dimensionless")
    gradient = (np.diff(n) / np.diff(z)).to("1/km")
    k = 1.0 / (1.0 + 6371.0 * units.km * gradient * 1e-6)
    ducts = []
    i, last = 0, len(z) - 1
    while i < last:
        if m[i + 1] < m[i]:
            bottom = i
            while i < last and m[i + 1] < m[i]:
                i += 1
            j = bottom
            while j > 0 and m[j - 1] >= m[i]:
                j -= 1
            base = z[j]
            if j > 0:
                base = z[j - 1] + (m[i] - m[j - 1]) / (m[j] - m[j - 1]) * (z[j] - z[j - 1])
            ducts.append((base, z[i], max(m[j : i + 1]) - m[i]))
        else:
            i += 1
    return [n, m, gradient, k, ducts]


def write_file(path: Path, grid: list[np.ndarray]) -> None:
    """Write the grid as netCDF-4 with zlib and shuffle, level 4, one level per chunk."""
    import netCDF4

    with netCDF4.Dataset(path, "w") as file:
        file.createDimension("level", grid[0].shape[0])
        file.createDimension("column", grid[0].shape[1])
        for name, values in zip(NAMES, grid, strict=True):
            variable = file.createVariable(
                name, "f4", ("level", "column"), compression="zlib", complevel=4,
                chunksizes=(1, grid[0].shape[1]),
            )  # fmt: skip
            variable[:] = values


def read_file(path: Path) -> list[np.ndarray]:
    """Read the four variables whole."""
    import netCDF4

    with netCDF4.Dataset(path) as file:
        file.set_auto_mask(False)
        return [file[name][:] for name in NAMES]


def main() -> None:
    options = arguments(__doc__)
    columns = COLUMNS // 10 if options.quick else COLUMNS
    grid = make_grid(columns)
    batch = [a.T for a in grid]
    radius = np.full(columns, 6371e3)

    seconds = {}
    for threads in sorted({1, options.threads}):
        numba.set_num_threads(threads)
        seconds[threads] = median_seconds(lambda: analyse_columns(*batch, radius))
    result = analyse_columns(*batch, radius)

    def script() -> None:
        for c in range(SCRIPT_PROFILES):
            script_profile(*(a[:, c] for a in grid))

    scaled = median_seconds(script) / SCRIPT_PROFILES * columns
    # The two must do the same job: MetPy's N and ours within its ratio of molar masses.
    for c in range(SCRIPT_PROFILES):
        n = script_profile(*(a[:, c] for a in grid))[0].magnitude
        np.testing.assert_allclose(n, result.refractivity[c], atol=0.02)

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "grid.nc"
        write_file(path, grid)
        reading = median_seconds(lambda: read_file(path), REPEATS)

    most = max(seconds)
    rows = [
        ("ducts_per_column", "ducts per column", float(result.ducts.count.mean()), None),
        ("script_seconds", f"script, {columns:,} profiles (scaled), s", scaled, None),
        ("read_seconds", "reading the same from zlib netCDF, s", reading, None),
        ("columns_seconds_1", "kernel, 1 thread, s", seconds[1], None),
        ("columns_vs_script_1", "script / kernel, 1 thread", scaled / seconds[1], None),
        ("columns_vs_read_1", "kernel / reading, 1 thread", seconds[1] / reading, None),
        ("columns_seconds", f"kernel, {most} threads, s", seconds[most], None),
        ("columns_vs_script", f"script / kernel, {most} threads", scaled / seconds[most], 2000),
        ("columns_vs_read", f"kernel / reading, {most} threads", seconds[most] / reading, 0.4),
    ]
    report(f"{LEVELS} levels x {columns:,} columns, float32 (level, column)", rows, options.json)


if __name__ == "__main__":
    main()
