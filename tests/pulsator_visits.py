"""How often the period is right with few visits, and does it know: FADELINE_REFERENCE=… python tests/pulsator_visits.py

Of every real star of the public tables N visits that follow one another, from one chosen by chance on, are kept (a
visit: points of any band within half an hour). Prints, for each N and kind, in per cent: periods right, stars with a
probability above 0.9 ("sure"), right ones among these, and the mean probability, which should equal the share of right
ones.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent / "candles"))

from candle_light_curves import taken
from pulsating_stars import real_stars

from reduce.candles import cepheid, rr_lyrae
from reduce.candles.period import search_period
from reduce.candles.pulsator import CERTAIN_ENOUGH
from reduce.candles.series import series_of

VISITS = (10, 15, 20, 30)
SAME_VISIT_D = 0.02
SEED = 2024
PER_STAR = 1


def first_visits(curve, n, rng):
    """Rows of n visits that follow one another, from a random one on."""
    order = np.argsort(curve.bjd_tdb, kind="stable")
    number = np.cumsum(np.diff(curve.bjd_tdb[order], prepend=-np.inf) > SAME_VISIT_D)
    last = int(number[-1])
    if last < n:
        return None
    start = int(rng.integers(1, last - n + 2))
    return order[(number >= start) & (number < start + n)]


def table(folder, which, kind):
    """Rows (n, stars, right, sure, right of sure, mean probability)."""
    rows = []
    stars = list(real_stars(folder, which))
    for n in VISITS:
        rng = np.random.default_rng(SEED + n)
        right, probability = [], []
        for row, curve in stars:
            for _ in range(PER_STAR):
                chosen = first_visits(curve, n, rng)
                if chosen is None:
                    continue
                series = series_of(taken(curve, chosen), ("B", "V", "I"))
                found = search_period(series, kind.shortest_d, kind.longest_d, kind.types)
                if found is None:
                    continue
                away = abs(found.best.frequency - 1.0 / float(row["period_d"]))
                right.append(away < 0.25 / series.span_d)
                # a period longer than the series is never quoted
                probability.append(found.best.probability if 1.0 / found.best.frequency < series.span_d else 0.0)
        right, probability = np.array(right), np.array(probability)
        sure = probability > CERTAIN_ENOUGH
        of_sure = right[sure].mean() if sure.any() else np.nan
        rows.append((n, len(right), right.mean(), sure.mean(), of_sure, probability.mean()))
    return rows


def main():
    folder = Path(os.environ["FADELINE_REFERENCE"])
    folder = next(place for place in (folder / "reference" / "variables", folder / "variables") if place.is_dir())
    for which, kind in (("cepheid", cepheid.KIND), ("rrlyrae", rr_lyrae.KIND)):
        print(f"{which}\n  visits  stars  right  sure  right of sure  mean probability")
        for n, count, right, sure, of_sure, mean in table(folder, which, kind):
            print(f"  {n:6d} {count:6d} {right:6.0%} {sure:5.0%} {of_sure:14.0%} {mean:17.0%}")


if __name__ == "__main__":
    main()
