"""Star fields drawn by GalSim: profiles integrated over square pixels, photon and read noise."""

from __future__ import annotations

import galsim
import numpy as np

SKY_E, READ_NOISE_E = 300.0, 8.0
NO_LIMIT = 1e9


def drawn(
    profile: galsim.GSObject, x: np.ndarray, y: np.ndarray, flux_e: np.ndarray, side: int, rng: np.random.Generator
) -> np.ndarray:
    """One exposure (side, side) in electrons with sky."""
    image = galsim.ImageF(side, side, scale=1.0)
    for at_x, at_y, flux in zip(x, y, flux_e, strict=True):
        # GalSim counts pixels from 1.
        profile.withFlux(flux).drawImage(image=image, center=galsim.PositionD(at_x + 1, at_y + 1), add_to_image=True)
    light = np.maximum(image.array, 0.0).astype(float)
    return (rng.poisson(light + SKY_E) + rng.normal(0, READ_NOISE_E, light.shape)).astype(np.float32)


def apart(side: int, step: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Isolated places at random within their pixels."""
    at = np.arange(step, side - step / 2, step)
    x, y = (axis.ravel().astype(float) for axis in np.meshgrid(at, at))
    return x + rng.uniform(-0.5, 0.5, len(x)), y + rng.uniform(-0.5, 0.5, len(y))


def nearest(x: np.ndarray, y: np.ndarray, true_x: np.ndarray, true_y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Index of the drawn star nearest to each place, and its distance."""
    distance = np.hypot(x[:, None] - true_x, y[:, None] - true_y)
    return distance.argmin(axis=1), distance.min(axis=1)
