"""How good type Ia distances are on real supernovae: python tests/type_ia_tables.py [--held-out | --others] [N].

Prints what is shown by whole light curves, by data that end or begin at a phase, by some bands and by four nights. The
photometry is found through FADELINE_REFERENCE; N takes every Nth supernova. Phases are those of the fit to the whole
light curve, whose time of maximum is also the yardstick for data that begin late. Nothing is tuned on the supernovae
that are held out (`supernova_samples.is_held_out`).
"""

from __future__ import annotations

import os

os.environ["OPENBLAS_NUM_THREADS"] = "1"  # before numpy is loaded

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent / "candles"))

from supernova_samples import TypeIaSample, four_nights, only, robust

from reduce.candles import type_ia

LAST = (-5.0, 0.0, 5.0, 10.0, 15.0, 20.0, 30.0)
FIRST = (5.0, 10.0, 15.0, 20.0)
BANDS = ("BVgri", "gri", "gr", "BVri", "BVR", "BV", "BVRI", "VRI", "V")
FIRST_BEFORE, LAST_AFTER = 8.0, 25.0
"""Rest-frame days: whole light curves begin before the one; those cut at the front last until after the other."""
LEAST_LEFT = 6
"""Points that a cut must leave."""


class Table:
    """Lines of a table: what each estimate says against the Hubble law, and the whole light curve's maximum."""

    def __init__(self, sample: TypeIaSample) -> None:
        self.sample = sample
        self.lines: dict[str, list[tuple[float, ...]]] = {}
        self.silent: dict[str, int] = {}

    def add(self, line: str, name: str, estimate, whole) -> None:
        """One estimate; one without a modulus is only counted."""
        if estimate.mu is None:
            self.silent[line] = self.silent.get(line, 0) + 1
            return
        hubble, velocity = self.sample.hubble(name)
        t_err = estimate.t_max_err
        row = (estimate.mu - hubble, estimate.mu_err, velocity, estimate.mu - self.sample.listed[name])
        self.lines.setdefault(line, []).append((*row, estimate.t_max - whole.t_max, t_err, estimate.mu - whole.mu))

    def figures(self, line: str) -> dict[str, float]:
        """Scatter in mag, shares from 0 to 1, days."""
        mu, err, velocity, listed, t, t_err, _ = np.array(self.lines[line]).T
        off = np.abs(mu - np.median(mu))
        return {
            "n": len(mu), "silent": self.silent.get(line, 0), "bias": float(np.median(mu)), "scatter": robust(mu),
            # each difference is shortened by what peculiar velocities add in quadrature
            "velocity_removed": 1.48 * float(np.median(off * err / np.hypot(err, velocity))),
            "listed_bias": float(np.median(listed)), "listed": robust(listed), "sigma": float(np.median(err)),
            "within_1": float(np.mean(np.abs(mu) < np.hypot(err, velocity))),
            "within_2": float(np.mean(np.abs(mu) < 2 * np.hypot(err, velocity))),
            "t_within_1": float(np.mean(np.abs(t) < t_err)), "t_err": float(np.median(t_err)),
            "t_off_3d": float(np.mean(np.abs(t) > 3.0)),
        }  # fmt: skip


def fill(sample: TypeIaSample, names: list[str], groups: str = "whole last first bands nights") -> Table:
    """All fits of all cuts."""
    table = Table(sample)
    for name in names:
        target, curve = sample.curve(name)
        whole = type_ia.fit(curve, target)
        if whole.mu is None:
            table.silent["whole"] = table.silent.get("whole", 0) + 1
            continue
        phase = np.array([point.phase_d for point in whole.points])
        if phase.min() >= FIRST_BEFORE:
            continue
        table.add("whole", name, whole, whole)

        def cut(line: str, points, name=name, target=target, whole=whole) -> None:
            if len(points) >= LEAST_LEFT:
                table.add(line, name, type_ia.fit(points, target), whole)

        if "last" in groups:
            for last in LAST:
                if phase.min() < last - 2.0:
                    cut(f"until {last:+.0f} d", only(curve, target, whole.t_max, last=last))
        if "first" in groups and phase.max() > LAST_AFTER and phase.min() < 0.0:
            for first in FIRST:
                cut(f"from {first:+.0f} d", only(curve, target, whole.t_max, first=first))
        if "bands" in groups:
            for bands in BANDS:
                if set(bands) <= set(curve.band.tolist()):
                    cut(bands, only(curve, target, whole.t_max, bands=bands))
        if "nights" in groups:
            cut("four nights", four_nights(curve, name))
    return table


def main() -> None:
    """Print the tables."""
    half = {"--held-out": True, "--others": False}
    chosen = [half[word] for word in sys.argv[1:] if word in half]
    step = [int(word) for word in sys.argv[1:] if word.isdigit()]
    sample = TypeIaSample(Path(os.environ["FADELINE_REFERENCE"]))
    names = sample.names(chosen[0] if chosen else None)[:: step[0] if step else 1]
    table = fill(sample, names)
    print("data           N none   bias scatter -veloc. listed  sigma  1 sigma 2 sigma   t_max 1 sigma  err  >3 d")
    order = ["whole", *(f"until {last:+.0f} d" for last in LAST), *(f"from {first:+.0f} d" for first in FIRST), *BANDS]
    for line in [*order, "four nights"]:
        if line in table.lines:
            f = table.figures(line)
            print(
                f"{line:12} {f['n']:3.0f} {f['silent']:4.0f}  {f['bias']:+.3f}  {f['scatter']:.3f}   "
                f"{f['velocity_removed']:.3f}  {f['listed']:.3f}  {f['sigma']:.3f}   {100 * f['within_1']:3.0f} %   "
                f"{100 * f['within_2']:3.0f} %        {100 * f['t_within_1']:3.0f} %  {f['t_err']:5.2f}  "
                f"{100 * f['t_off_3d']:3.0f} %"
            )


if __name__ == "__main__":
    main()
