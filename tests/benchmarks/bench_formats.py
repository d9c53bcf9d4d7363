"""How long reading takes, against nmrglue's reader of the same file in the same run.

Run ``python tests/benchmarks/bench_formats.py``. Only ratios count: machines are shared and noisy.
Our times include the checks and the making of the signal; nmrglue's only the decoding.
"""

from __future__ import annotations

import sys
import time
import warnings
from collections.abc import Callable
from pathlib import Path
from statistics import median

import nmrglue

import fidkit as fk

sys.path.insert(0, str(Path(__file__).parents[1]))
from published import published_file

FILES = {
    "RJL/ofid1.jdx": "2 x 8192, plain numbers",
    "RJL/ofid2.jdx": "2 x 8192, packed",
    "RJL/ofid3.jdx": "2 x 8192, squeezed",
    "RJL/ofid4.jdx": "2 x 8192, differences",
    "OFF/TESTFID.DX": "2 x 16384, differences",
    "RJL/o05.jdx": "8192, differences and repeats",
}
REPEATS = 9


def seconds(function: Callable[[], object]) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def ratios() -> dict[str, float]:
    """Our time over nmrglue's, the median of pairs taken one after the other."""
    found = {}
    for name in FILES:
        path = published_file(name)
        pairs = []
        for _ in range(REPEATS):
            ours = seconds(lambda path=path: fk.read(path))
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                other = seconds(lambda path=path: nmrglue.jcampdx.read(str(path)))
            pairs.append(ours / other)
        found[name] = median(pairs)
    return found


def main() -> None:
    print(f"{'file':16} {'what':32} {'time / nmrglue':>15}   goal")
    for name, ratio in ratios().items():
        print(f"{name:16} {FILES[name]:32} {ratio:15.2f}   1.00")


if __name__ == "__main__":
    main()
