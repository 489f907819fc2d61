"""Invented supernovae drawn from everything that the type Ia fit assumes, with gaps, faint points and limits.

Priors, scatter and noise are written out from the equations, without the code of the fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from candle_light_curves import light_curve, model_mag

from reduce.candles.model import type_ia_model
from reduce.records import LightCurve, Target

BAND_SETS = ("BV", "BVRI", "gri", "VRI", "BVri", "V")
CLOCK_D, CLOCK_PER_DAY = 0.5, 0.02
"""Supernovae seen only after maximum do not keep time with the templates: rest-frame days, more when later."""


@dataclass(frozen=True)
class Invented:
    """One object and its truth in the order (μ, host E, t_max, Δm15)."""

    target: Target
    curve: LightCurve
    truth: tuple[float, float, float, float]


def _two_piece_normal(generator: np.random.Generator) -> float:
    """Δm15 of the prior: mode 1.0, -0.17/+0.38, between 0.7 and 1.8."""
    while True:
        sigma = 0.17 if generator.random() < 0.17 / (0.17 + 0.38) else 0.38
        value = 1.0 + (-1 if sigma == 0.17 else 1) * abs(generator.normal(0.0, sigma))
        if 0.7 <= value <= 1.8:
            return float(value)


def _dust(generator: np.random.Generator) -> float:
    """Host E(B-V) of the prior: exp(-E/0.108) times N(0, 1)."""
    while True:
        value = generator.exponential(0.108)
        if generator.random() < np.exp(-0.5 * value**2):
            return float(value)


def invent(generator: np.random.Generator) -> Invented:
    """One supernova as some telescope sees it."""
    model = type_ia_model()
    z = float(generator.uniform(0.005, 0.05))
    truth = {
        "mu": float(generator.uniform(32.0, 37.0)), "t_max": 60000.0 + float(generator.uniform(0.0, 30.0)),
        "dm15": _two_piece_normal(generator), "e_host": _dust(generator), "z": z, "ebv_mw": 0.03,
    }  # fmt: skip
    bands = BAND_SETS[generator.integers(len(BAND_SETS))]
    first = float(generator.choice([-10.0, -5.0, 0.0, 8.0]))
    phases = first + np.cumsum(generator.exponential(3.5, 16))  # clear skies at random
    if generator.random() < 0.3:
        start = generator.uniform(0.0, 15.0)
        phases = phases[(phases < start) | (phases > start + 12.0)]  # the Moon, or a broken dome
    phases = phases[(phases > -12.0) & (phases < 60.0)]
    mjd = np.concatenate([truth["t_max"] + phases * (1.0 + z) for _ in bands])
    band = np.repeat(list(bands), len(phases))
    phase = np.tile(phases, len(bands))

    sigma = np.array([np.interp(p, model.phases, model.template_scatter[b]) for p, b in zip(phase, band, strict=True)])
    same = band[:, None] == band[None, :]
    cov = np.outer(sigma, sigma) * np.exp(-np.abs(phase[:, None] - phase[None, :]) / 7.0) * np.where(same, 1.0, 0.3)
    zero_point = 0.015 if {"B", "g"} & set(bands) else 0.03
    cov += np.where(same, np.array([model.scatter.colour[b] ** 2 + zero_point**2 for b in band])[:, None], 0.0)
    cov += np.eye(len(band)) * 0.012**2
    mag = np.concatenate([model_mag(b, truth["t_max"] + phases * (1.0 + z), **truth) for b in bands])
    mag = mag + generator.multivariate_normal(np.zeros(len(mag)), cov)
    flux_true = 10.0 ** (-0.4 * (mag - 25.0))
    # the noise of the sky alone: some fade below S/N 5, and some are never seen
    brightest = 10.0 ** (-0.4 * (truth["mu"] - 19.0 - 25.0))
    noise = np.hypot(brightest * generator.choice([0.005, 0.02, 0.06]), 0.01 * flux_true)
    flux = flux_true + noise * generator.standard_normal(len(mag))
    seen = flux > 3.0 * noise
    with np.errstate(invalid="ignore", divide="ignore"):
        observed = np.where(seen, 25.0 - 2.5 * np.log10(np.where(seen, flux, 1.0)), np.nan)
    err = np.where(seen, 1.0857362 * noise / np.where(seen, flux, 1.0), np.nan)
    limits = truth["t_max"] + np.array([-30.0, -22.0]) * (1.0 + z)
    dark = generator.standard_normal(2) * noise.min()
    curve = light_curve(
        np.append(mjd, limits), [*band, bands[0], bands[0]], np.append(observed, [np.nan, np.nan]),
        np.append(err, [np.nan, np.nan]), flux=np.append(flux, dark),
        flux_err=np.append(noise, [noise.min(), noise.min()]),
    )  # fmt: skip
    used = phase[np.isfinite(err) & (np.nan_to_num(err, nan=9.0) < 0.217)]
    late = max(float(used.min()) if len(used) else 0.0, 0.0)
    clock = (CLOCK_D + CLOCK_PER_DAY * min(late, 30.0)) * (1.0 + z) if late > 0.0 else 0.0
    grey = float(generator.normal(0.0, 0.1062))
    t_max = truth["t_max"] + clock * float(generator.standard_normal())
    target = Target("Lantern 9", "type_ia", np.nan, np.nan, z, truth["ebv_mw"], spectroscopic_type="Ia")
    return Invented(target, curve, (truth["mu"] + grey, truth["e_host"], t_max, truth["dm15"]))


def ranks(n: int, seed: int, draws_each: int = 999):
    """(k, 4) ranks from 0 to 1 of the truth among draws from the posterior, and how many of n had no distance.

    Whether a distance is withheld follows from the data alone, so that the ranks of the others stay uniform.
    """
    from reduce.candles import type_ia

    generator = np.random.default_rng(seed)
    found, silent = [], 0
    for _ in range(n):
        thing = invent(generator)
        draws = type_ia.draws(thing.curve, thing.target, draws_each, np.random.default_rng(1))
        if draws is None:
            silent += 1
        else:
            found.append((draws < np.array(thing.truth)[None, :]).mean(axis=0))
    return np.array(found), silent
