"""How long a chain over many records takes, against the bare transform in the same run.

Run ``python tests/benchmarks/bench_chain.py``. Only ratios count: machines are shared and noisy.
Unit: ``scipy.fft.fft(workers=2)`` of the zero-filled single-precision batch. The other way is
record by record with nmrglue's functions, as a script at the bench would do it.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from statistics import median
from typing import Any

import numpy as np
import scipy.fft
from nmrglue import proc_base

import fidkit as fk

RECORDS, POINTS = 2000, 8192
REPEATS = 7


def seconds(function: Callable[[], Any]) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def ratios() -> dict[str, float]:
    rng = np.random.default_rng(1)
    values = rng.standard_normal((RECORDS, 2 * POINTS), dtype=np.float32).view(np.complex64)
    filled = np.zeros((RECORDS, 2 * POINTS), np.complex64)
    filled[:, :POINTS] = values
    fid = fk.from_array(values, dwell_time=1e-4, carrier_frequency=63.87e6)
    chain = fk.Chain(
        [
            fk.Call("apodize_exponential", broadening=2.0),
            fk.Call("zero_fill", factor=2),
            fk.Call("fourier_transform"),
            fk.Call("correct_phase", zero_order=30.0, first_order=20.0),
        ]
    )

    def script() -> list[Any]:
        done = []
        for record in values[: RECORDS // 10]:
            record = proc_base.em(record, lb=2e-4)
            record = proc_base.fft(proc_base.zf_size(record, 2 * POINTS))
            done.append(proc_base.ps(record, p0=30.0, p1=20.0))
        return done

    found: dict[str, list[float]] = {"fidkit chain": [], "script on nmrglue": []}
    for _ in range(REPEATS):
        bare = seconds(lambda: scipy.fft.fft(filled, workers=2))
        found["fidkit chain"].append(seconds(lambda: chain(fid)) / bare)
        found["script on nmrglue"].append(10 * seconds(script) / bare)
    return {name: median(times) for name, times in found.items()}


def main() -> None:
    print(f"{RECORDS} records of {POINTS} points, window, zero fill, transform, phases")
    print(f"{'way':20} {'time / bare transform':>22}")
    for name, ratio in ratios().items():
        print(f"{name:20} {ratio:22.2f}")


if __name__ == "__main__":
    main()
