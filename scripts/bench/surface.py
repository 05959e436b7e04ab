"""How fast the surface layer of a million columns over sea is, against the reference library.

The reference (pycoare, COARE 3.5) is called as a user would: once for a whole batch, with its ten
iterations and no cool skin. It is timed on a part of the columns and scaled, its cost per column
being the same. The floor is what the logarithms, exponentials, roots and table look-ups of the
iterations cost by themselves, with nothing done with them.
"""

from __future__ import annotations

import math
import warnings

import numba
import numpy as np
from timing import arguments, median_seconds, report

from forecast.physics.evaporation_duct import evaporation_duct
from forecast.physics.moisture import specific_humidity_from_relative_humidity
from forecast.physics.stability import psi_unstable, unstable_table
from forecast.physics.surface_layer import solve_sea

COLUMNS, REFERENCE_SHARE = 1_000_000, 5
# Per column at 3.75 iterations: counted in the source.
LOGARITHMS, EXPONENTIALS, ROOTS, LOOK_UPS = 11, 4, 4, 8


@numba.njit(parallel=True, error_model="numpy")
def bare_calls(x, table, out):
    """The calls of one solve, each on an argument that depends on the one before."""
    for c in numba.prange(x.size):
        v = x[c]
        for _ in range(LOGARITHMS):
            v = 1.5 + 0.1 * math.log(v)
        for _ in range(EXPONENTIALS):
            v = 1.0 + 0.1 * math.exp(v)
        for _ in range(ROOTS):
            v = 1.0 + 0.1 * math.sqrt(v)
        for _ in range(LOOK_UPS):
            v = 1.0 + 0.1 * psi_unstable(-v, 0, table)
        out[c] = v


def draw(columns: int) -> tuple[np.ndarray, ...]:
    """Wind, height, temperature (°C), humidity (%), water (°C), pressure (hPa), as in the tests."""
    rng = np.random.default_rng(3)
    u, z = rng.uniform(1.0, 18.0, columns), rng.uniform(5.0, 20.0, columns)
    t, rh = rng.uniform(2.0, 32.0, columns), rng.uniform(45.0, 95.0, columns)
    return u, z, t, rh, t + rng.uniform(-2.0, 8.0, columns), rng.uniform(990.0, 1030.0, columns)


def main() -> None:
    options = arguments(__doc__)
    columns = COLUMNS // 10 if options.quick else COLUMNS
    u, z, t, rh, sst, p = draw(columns)
    kelvin, water, pascal = t + 273.15, sst + 273.15, 100.0 * p
    q = specific_humidity_from_relative_humidity(rh / 100.0, kelvin, pascal)
    part = columns // REFERENCE_SHARE

    def reference() -> list[np.ndarray]:
        import pycoare

        # It changes its arguments in place.
        a = {
            name: values[:part].copy()
            for name, values in (("t", t), ("rh", rh), ("zu", z), ("zt", z), ("zq", z),
                                 ("ts", sst), ("p", p))
        }  # fmt: skip
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            result = pycoare.coare_35(
                u[:part].copy(), **a, lat=45, zi=600, rs=0, rl=370, jcool=0, nits=10
            )
            return [result.ustar(), result.tstar(), result.qstar()]

    layer = solve_sea(u, kelvin, q, pascal, water, z, z)
    scaled = median_seconds(reference) * columns / part
    # The two must do the same job: u* within the 2 % of the tests, stable air left out, where ten
    # of the reference's iterations do not settle.
    ok = layer.converged[:part] & (sst > t - 0.5)[:part]
    assert np.abs(layer.friction_velocity[:part][ok] / reference()[0][ok] - 1.0).max() < 0.02

    seconds, floor, ducts = {}, {}, {}
    out = np.empty(columns)
    for threads in sorted({1, options.threads}):
        numba.set_num_threads(threads)
        seconds[threads] = median_seconds(lambda: solve_sea(u, kelvin, q, pascal, water, z, z))
        floor[threads] = median_seconds(lambda: bare_calls(u, unstable_table(), out))
        ducts[threads] = median_seconds(lambda: evaporation_duct(layer, pascal))
    most = max(seconds)
    rows = [
        ("converged", "columns with an answer", float(layer.converged.sum()), None),
        ("too_stable", "too stable for the function", float(layer.too_stable.sum()), None),
        ("unsettled", "not converged", float(layer.unsettled.sum()), None),
        ("iterations", "mean iterations", float(layer.iterations.mean()), None),
        ("reference_seconds", "reference (scaled), s", scaled, None),
        ("surface_seconds_1", "surface layer, 1 thread, s", seconds[1], None),
        (
            "surface_vs_reference_1",
            "reference / surface layer, 1 thread",
            scaled / seconds[1],
            None,
        ),
        ("surface_seconds", f"surface layer, {most} threads, s", seconds[most], None),
        (
            "surface_vs_reference",
            f"reference / surface layer, {most} threads",
            scaled / seconds[most],
            50,
        ),
        (
            "floor_vs_reference",
            f"reference / bare calls, {most} threads",
            scaled / floor[most],
            None,
        ),
        ("duct_seconds", f"evaporation ducts, {most} threads, s", ducts[most], None),
    ]
    report(f"surface layer of {columns:,} columns over sea", rows, options.json)


if __name__ == "__main__":
    main()
