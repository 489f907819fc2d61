"""Random star fields: a frame's detections and a catalogue that share some of their stars."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from reduce.field.match import FieldHint
from reduce.field.wcs import pixel_to_sky
from reduce.records import Detections, FieldSolution

SIDE_PX = 1024


def seen(x: np.ndarray, y: np.ndarray, flux: np.ndarray) -> Detections:
    """Round stars of one width, brightest first."""
    order = np.argsort(-flux)
    one = np.ones(len(x))
    return Detections(
        x[order], y[order], flux[order], flux[order] / 10, 3.0 * one, one, 0.0 * one, np.zeros(len(x), bool)
    )


@dataclass(frozen=True)
class RandomField:
    detections: Detections
    star: np.ndarray
    """(n,) catalogue row of each detection, -1 for a contaminant."""
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    mag: np.ndarray
    hint: FieldHint
    plate: FieldSolution


def random_field(
    rng: np.random.Generator,
    common: int,
    only_seen: int,
    only_known: int,
    *,
    noise_px: float = 0.1,
    mag_noise: float = 0.3,
) -> RandomField:
    """Any rotation, either parity, a scale up to 15 % off what is claimed, a pointing some arcminutes off.

    ``only_seen`` detections and ``only_known`` catalogue stars have no counterpart; all are as bright as the others.
    """
    scale, turn, mirrored = rng.uniform(0.4, 2.0), rng.uniform(0, 2 * math.pi), bool(rng.integers(2))
    c, s = scale / 3600 * math.cos(turn), scale / 3600 * math.sin(turn)
    centre = (float(rng.uniform(0, 360)), float(np.degrees(np.arcsin(rng.uniform(-0.98, 0.98)))))
    middle = (SIDE_PX - 1) / 2
    plate = FieldSolution(centre, (middle, middle), ((c, s), (-s, c)) if mirrored else ((-c, s), (s, c)), 0, 0.0)
    places = rng.uniform(20, SIDE_PX - 20, (2, common + only_seen + only_known))
    mag = 10.0 + rng.power(2.0, places.shape[1]) * 5.0
    on_frame, in_catalogue = np.arange(common + only_seen), np.r_[:common, common + only_seen : places.shape[1]]
    ra, dec = pixel_to_sky(plate, *places[:, in_catalogue])
    x, y = places[:, on_frame] + rng.normal(0, noise_px, (2, len(on_frame)))
    flux = 10 ** (-0.4 * (mag[on_frame] + rng.normal(0, mag_noise, len(on_frame)) - 25))
    star = np.where(on_frame < common, on_frame, -1)[np.argsort(-flux)]
    off = rng.normal(0, 0.05, 2)
    hint = FieldHint(centre[0] + off[0], centre[1] + off[1], scale * rng.uniform(0.87, 1.15))
    return RandomField(seen(x, y, flux), star, ra, dec, mag[in_catalogue], hint, plate)
