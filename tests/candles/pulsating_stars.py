"""Invented pulsating stars, and real ones of the public tables, for the tests of periods and mean magnitudes."""

import csv

import numpy as np
from candle_light_curves import light_curve

from reduce.records import LightCurve, Target

# semi-amplitudes and phases of a saw-tooth in V, harmonics 1 to 4 (an invented RRab or short Cepheid)
SAW = ((0.35, 1.1), (0.16, 4.6), (0.10, 2.1), (0.05, 5.4))
SINE = ((0.22, 0.4), (0.025, 2.0))
SIZE = {"B": 1.35, "V": 1.0, "I": 0.62}
MEAN = {"B": 15.9, "V": 15.2, "I": 14.5}


def wave(phase, harmonics=SAW):
    """Magnitudes about the mean."""
    return sum(a * np.cos(2 * np.pi * k * phase + p) for k, (a, p) in enumerate(harmonics, 1))


def night_times(n, rng, span_d=100.0, hours=5.0):
    """Barycentric times of n visits on different nights of one observatory."""
    nights = np.sort(rng.choice(int(span_d), n, replace=False))
    return 2460000.0 + nights + 0.6 + rng.uniform(0.0, hours / 24.0, n)


def star(times, period, bands="VI", err=0.01, rng=None, harmonics=SAW):
    """One visit at each time, in every band five minutes apart."""
    bjd, band, mag = [], [], []
    for place, name in enumerate(bands):
        t = np.asarray(times) + place * 0.0035
        bjd.extend(t)
        band.extend([name] * len(t))
        noise = 0.0 if rng is None else rng.normal(0.0, err, len(t))
        mag.extend(MEAN[name] + SIZE[name] * wave(t / period, harmonics) + noise)
    curve = light_curve(np.array(bjd) - 2400000.5, band, mag, np.full(len(mag), err))
    return LightCurve(
        **{k: getattr(curve, k) for k in LightCurve.__slots__ if k != "bjd_tdb"}, bjd_tdb=np.array(bjd, float)
    )


def true_mean(band, harmonics=SAW):
    """Intensity mean by brute force."""
    mag = MEAN[band] + SIZE[band] * wave(np.arange(100000) / 1e5, harmonics)
    return float(-2.5 * np.log10(np.mean(10 ** (-0.4 * mag))))


def target(kind, **facts):
    return Target("Lantern 9", kind, 150.0, -12.0, **facts)


def real_stars(folder, which):
    """(row of the table, light curve) of every star; times are heliocentric, as published."""
    with (folder / f"{which}_lightcurves.csv").open(encoding="utf-8") as stream:
        points = {}
        for row in csv.DictReader(stream):
            points.setdefault(row["name"], []).append(row)
    with (folder / f"{which}_table.csv").open(encoding="utf-8") as stream:
        table = list(csv.DictReader(stream))
    for row in table:
        mine = points[row["name"]]
        hjd, mag, err = (np.array([float(p[key]) for p in mine]) for key in ("hjd", "mag", "err"))
        bands = [p["band"] for p in mine]
        night = [f"{int(t)}{band}" for t, band in zip(hjd, bands, strict=True)]
        curve = light_curve(hjd - 2400000.5, bands, mag, np.maximum(err, 0.002), night=np.array(night))
        yield (
            row,
            LightCurve(**{k: getattr(curve, k) for k in LightCurve.__slots__ if k != "bjd_tdb"}, bjd_tdb=hjd),
        )
