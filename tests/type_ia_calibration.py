"""Simulation-based calibration of the type Ia posterior: python tests/type_ia_calibration.py [N] [SEED].

Draws N invented supernovae from the priors, with gaps, faint points and limits, and ranks each truth among draws from
its posterior. Ranks are uniform when the posterior is right: printed are their histogram in ten bins, the shares within
the central 68 and 95 %, and the probability of the Kolmogorov-Smirnov distance from uniform.
"""

from __future__ import annotations

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"  # before numpy is loaded

import sys
from pathlib import Path

import numpy as np
from scipy.stats import kstest

sys.path.insert(0, str(Path(__file__).parent / "candles"))

from simulated_supernovae import ranks


def main() -> None:
    """Print the table."""
    numbers = [int(word) for word in sys.argv[1:]]
    n, seed = (numbers + [400, 1][len(numbers) :])[:2]
    found, silent = ranks(n, seed)
    print(f"{len(found)} posteriors, {silent} of {n} without a distance; {len(found) / 10:.0f} expected in each bin")
    for k, name in enumerate(("mu", "host E", "t_max", "dm15")):
        rank = found[:, k]
        bins = " ".join(f"{count:3d}" for count in np.histogram(rank, 10, (0.0, 1.0))[0])
        inner, wide = (np.mean(np.abs(rank - 0.5) < half) for half in (0.34, 0.475))
        p = kstest(rank, "uniform").pvalue
        print(f"{name:7} {bins}   68 %: {100 * inner:.0f}   95 %: {100 * wide:.0f}   p = {p:.3f}")


if __name__ == "__main__":
    main()
