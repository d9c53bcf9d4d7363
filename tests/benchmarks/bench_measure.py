"""How long measuring a line takes, against general fitting libraries in the same run.

Run ``python tests/benchmarks/bench_measure.py``. Only ratios count: machines are shared and noisy.
Unit: the bare transform of the same records. The others fit the same damped line to the whole
record in time, with its derivative where the library takes one.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from statistics import median
from typing import Any

import lmfit
import numpy as np
import scipy.fft
from scipy.optimize import least_squares

import fidkit as fk

RECORDS, POINTS, DWELL = 500, 8192, 1e-4
REPEATS = 5


def seconds(function: Callable[[], Any]) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def ratios() -> dict[str, float]:
    rng = np.random.default_rng(1)
    instants = DWELL * np.arange(POINTS)
    frequency, rate = rng.uniform(-4000, 4000, RECORDS), 1 / rng.uniform(0.02, 0.2, RECORDS)
    values = np.exp((2j * np.pi * frequency - rate)[:, None] * instants)
    values += (rng.standard_normal(values.shape) + 1j * rng.standard_normal(values.shape)) / 30
    fid = fk.from_array(values, dwell_time=DWELL, carrier_frequency=63.87e6)

    def apart(record: np.ndarray) -> np.ndarray:
        return np.concatenate([record.real, record.imag])

    def model(f: float, r: float, a: float, b: float) -> np.ndarray:
        return (a + 1j * b) * np.exp((2j * np.pi * f - r) * instants)

    def by_lmfit(count: int = 3) -> None:
        for row in range(count):
            start = lmfit.Parameters()
            start.add_many(("f", frequency[row]), ("r", rate[row]), ("a", 0.9), ("b", 0.1))
            lmfit.minimize(
                lambda p, row=row: apart(values[row] - model(*p.valuesdict().values())), start
            )

    def by_scipy(count: int = 10) -> None:
        for row in range(count):
            least_squares(
                lambda p, row=row: apart(values[row] - model(*p)),
                [frequency[row], rate[row], 0.9, 0.1],
                x_scale=[1, 10, 1, 1],
                method="lm",
            )

    found: dict[str, list[float]] = {"fidkit.measure": [], "scipy least_squares": [], "lmfit": []}
    for _ in range(REPEATS):
        bare = seconds(lambda: scipy.fft.fft(values))
        found["fidkit.measure"].append(seconds(lambda: fk.measure(fid)) / bare)
        found["scipy least_squares"].append(RECORDS / 10 * seconds(by_scipy) / bare)
        found["lmfit"].append(RECORDS / 3 * seconds(by_lmfit) / bare)
    return {name: median(times) for name, times in found.items()}


def main() -> None:
    print(f"{RECORDS} records of {POINTS} points, one line each, start value found / given")
    print(f"{'way':22} {'time / bare transform':>22}")
    for name, ratio in ratios().items():
        print(f"{name:22} {ratio:22.1f}")


if __name__ == "__main__":
    main()
