"""Seconds of one type Ia fit against its number of points: python tests/benchmarks/bench_type_ia.py.

The bound is 0.15 s of processor time for 200 points on one BLAS thread.
"""

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"  # before numpy is loaded

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent.parent / "candles"))

from candle_light_curves import TRUTH, joined, simulated, target

from reduce.candles import type_ia


def seconds(curve, repeats=5):
    """Median processor time of a fit."""
    times = []
    for _ in range(repeats):
        start = time.process_time()
        type_ia.fit(curve, target())
        times.append(time.process_time() - start)
    return float(np.median(times))


def main():
    """Print one line a light curve."""
    generator = np.random.default_rng(1)
    start = time.perf_counter()
    type_ia.fit(simulated(TRUTH), target())
    print(f"first fit of a process, tables included  {time.perf_counter() - start:.3f} s")
    for step in (10.0, 4.0, 2.0, 1.0, 0.5):
        curve = simulated(TRUTH, bands="BVRI", phases=np.arange(-10.0, 50.0, step), noise=generator)
        weak = simulated(TRUTH, bands="BV", phases=np.arange(30.0, 60.0, 1.0), err=0.5)
        both = joined(curve, weak)
        print(f"{len(curve):4d} points  {seconds(curve):.3f} s   with 60 weak ones  {seconds(both):.3f} s")


if __name__ == "__main__":
    main()
