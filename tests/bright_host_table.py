"""The table of bright_hosts.py: what was asked, what was found, whether it holds."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from bright_hosts import Entry, Frame, Night, Results, Star

BRIGHT_MAG, FAINT_MAG = (11.0, 13.0), (16.0, 17.6)
FEWEST_FRAMES = 3


def rms(values: Iterable[float]) -> float:
    found = np.asarray(list(values), dtype=float)
    return float(np.sqrt(np.mean(found**2))) if len(found) else float("nan")


class Ledger:
    """Lines of the table and the count of broken bounds."""

    def __init__(self) -> None:
        self.lines: list[str] = []
        self.broken = 0

    def say(self, text: str = "") -> None:
        self.lines.append(text)

    def judge(self, what: str, value: float, shown: str, bound: str, holds: Callable[[float], bool]) -> None:
        good = bool(np.isfinite(value) and holds(value))
        self.broken += not good
        self.say(f"  {what:<58} {shown:>16}   {bound:<14} {'holds' if good else 'BROKEN'}")


def table(full: Results | None, small: Results | None) -> tuple[list[str], int]:
    """Lines, and how many bounds are broken."""
    ledger = Ledger()
    if full is not None:
        _methods(ledger, full.frames)
        for way in full.seconds:
            _states(ledger, way, [f for f in full.frames if f.way == way])
        _stars(ledger, full.stars)
        _entries(ledger, full.entries)
        _faults(ledger, full.frames)
        ledger.say("seconds a light frame with calibration and solving, one process of two: "
                   + ", ".join(f"{way} {s:.2f}" for way, s in full.seconds.items()))  # fmt: skip
    if small is not None:
        _honesty(ledger, small.nights)
    return ledger.lines, ledger.broken


def _methods(ledger: Ledger, frames: Iterable[Frame]) -> None:
    ledger.say("measured - true (d) over all fault-free frames, whatever their verdict")
    ledger.say("  way        method            n    rms mag   median |d|    rms(d/limit)   mean mmag   rms(d/quoted)")
    good = [f for f in frames if not f.fault and np.isfinite(f.mag)]
    for way, method in sorted({(f.way, f.method) for f in good}):
        mine = [f for f in good if (f.way, f.method) == (way, method)]
        off = np.array([f.mag - f.true_mag for f in mine])
        in_limits = off / [f.limit_mag for f in mine]
        pulls = off / [f.err for f in mine]
        ledger.say(
            f"  {way:<10} {method:<14} {len(mine):4}   {rms(off):8.4f}   {np.median(np.abs(off)):8.4f}   "
            f"{rms(in_limits):12.2f}   {1000 * off.mean():9.1f}   {rms(pulls):12.2f}"
        )
        if method == "reference":
            ledger.judge("pooled rms(error/limit) with a reference", rms(in_limits), f"{rms(in_limits):.3f}", "<= 1.10",
                         lambda v: v <= 1.10)  # fmt: skip
            mean = 1000 * float(off.mean())
            ledger.judge("mean with a reference", mean, f"{mean:+.1f} mmag", "within 5", lambda v: abs(v) <= 5)


def _states(ledger: Ledger, way: str, frames: list[Frame]) -> None:
    ledger.say(f"verdicts, {way}")
    kept = [f for f in frames if f.state == "kept" and np.isfinite(f.mag)]
    pulls = np.array([abs(f.mag - f.true_mag) / f.err for f in kept])
    for most, share in ((3.5, 0.002), (5.0, 0.0)):
        beyond = int(np.sum(pulls > most))
        ledger.judge(f"kept frames off by more than {most} sigma", beyond / max(len(kept), 1),
                     f"{beyond} of {len(kept)}", f"<= {share:.1%}" if share else "none",
                     lambda v, share=share: v <= share)  # fmt: skip
    clean = [f for f in frames if not f.fault]
    share = sum(f.state == "kept" for f in clean) / max(len(clean), 1)
    ledger.judge("fault-free frames kept", share, f"{share:.1%} of {len(clean)}", ">= 95%", lambda v: v >= 0.95)


def _faults(ledger: Ledger, frames: Iterable[Frame]) -> None:
    ledger.say("faults: n, kept / doubtful / dropped or none, largest error of a kept one in mag and in quoted sigma")
    found = [f for f in frames if f.fault]
    for way, fault in sorted({(f.way, f.fault) for f in found}):
        mine = [f for f in found if (f.way, f.fault) == (way, fault)]
        kept = [f for f in mine if f.state == "kept" and np.isfinite(f.mag)]
        worst = max((abs(f.mag - f.true_mag) for f in kept), default=0.0)
        pull = max((abs(f.mag - f.true_mag) / f.err for f in kept), default=0.0)
        doubtful = sum(f.state == "doubtful" for f in mine)
        none = len(mine) - sum(f.state in ("kept", "doubtful") for f in mine)
        ledger.say(f"  {way:<10} {fault:<22} {len(mine):3}   {len(mine) - doubtful - none:3} /{doubtful:3} /{none:3}   "
                   f"{worst:6.3f} {pull:6.1f}")  # fmt: skip


def _stars(ledger: Ledger, stars: Iterable[Star]) -> None:
    ledger.say("comparison stars, repeatability about their own mean over fault-free kept frames")
    groups: dict[tuple[int, str, str], list[Star]] = {}
    for star in stars:
        if not star.fault and star.state == "kept" and not star.saturated:
            groups.setdefault((star.host, star.star, star.band), []).append(star)

    def spread(low: float, high: float, in_photons: bool) -> tuple[float, float, int]:
        """Pooled rms with the means' degrees of freedom, median of the stars' own rms, number of stars and bands."""
        total, degrees, own = 0.0, 0, []
        for seen in groups.values():
            if not (low <= np.mean([s.true_mag for s in seen]) < high) or len(seen) < FEWEST_FRAMES:
                continue
            weight = np.array([s.photon_mag**-2 for s in seen])
            mags = np.array([s.mag for s in seen])
            off = mags - np.sum(weight * mags) / weight.sum() if in_photons else mags - mags.mean()
            chi = float(np.sum(weight * off**2)) if in_photons else float(np.sum(off**2))
            total, degrees = total + chi, degrees + len(seen) - 1
            own.append((chi / (len(seen) - 1)) ** 0.5)
        return (total / max(degrees, 1)) ** 0.5, float(np.median(own)) if own else float("nan"), len(own)

    pooled, median, n = spread(*BRIGHT_MAG, in_photons=False)
    noise, _, _ = spread(*BRIGHT_MAG, in_photons=True)
    ledger.judge(f"mag 11-13, {n} stars x bands: median rms (pooled {1000 * pooled:.1f}, {noise:.2f} x photon)",
                 1000 * median, f"{1000 * median:.2f} mmag", "<= 4 mmag", lambda v: v <= 4)  # fmt: skip
    pooled, median, n = spread(*FAINT_MAG, in_photons=True)
    ledger.judge(f"mag 16-17.6, {n} stars x bands: pooled rms / photon (median {median:.2f})", pooled, f"{pooled:.3f}",
                 "<= 1.10", lambda v: v <= 1.10)  # fmt: skip


def _entries(ledger: Ledger, entries: Iterable[Entry]) -> None:
    ledger.say("comparison sequence")
    entries = list(entries)
    wrong = [e for e in entries if abs(e.wrong_by) >= max(0.05, 4 * e.sigma) and e.n_frames >= 10]
    aside = sum(e.word == "set aside" for e in wrong)
    missed = ", ".join(f"{e.host}/{e.star}/{e.band} {e.wrong_by:+.2f}" for e in wrong if e.word != "set aside")
    if wrong:
        ledger.judge("wrong entries set aside (0.05 mag, 4 sigma, ten frames)", aside / len(wrong),
                     f"{aside} of {len(wrong)}", "all", lambda v: v == 1)  # fmt: skip
        ledger.say(f"    missed (host/star/band): {missed or 'none'}")
    sound = [e for e in entries if e.wrong_by == 0]
    lost = sum(e.word == "set aside" for e in sound)
    if sound:
        ledger.judge("sound entries set aside", lost / len(sound), f"{lost} of {len(sound)}", "<= 3%",
                     lambda v: v <= 0.03)  # fmt: skip


def _honesty(ledger: Ledger, nights: Iterable[Night]) -> None:
    nights = [n for n in nights if n.state == "kept"]
    for method in sorted({n.method for n in nights}):
        mine = [n for n in nights if n.method == method]
        off = np.array([n.mag - n.true_mag for n in mine])
        err = np.array([n.err for n in mine])
        ledger.say(f"without a reference, {method}: {len(mine)} hosts, rms {rms(off):.3f} mag, median |error| "
                   f"{np.median(np.abs(off)):.3f}, mean {off.mean():+.3f}")  # fmt: skip
    off = np.array([n.mag - n.true_mag for n in nights])
    err = np.array([n.err for n in nights])
    within = float(np.mean(np.abs(off) < err)) if len(off) else float("nan")
    ledger.judge(f"within 1 sigma, {len(off)} hosts", within, f"{within:.0%}", "60-80%", lambda v: 0.6 <= v <= 0.8)
    ratio = float(np.median(err) / rms(off)) if len(off) else float("nan")
    ledger.judge("median quoted error / true rms", ratio, f"{ratio:.2f}", "<= 2", lambda v: v <= 2)
