"""The invented detector: what it does to light, and its noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from demo_frames.scenario import CameraScene
from reduce.records import Floats

Raw = NDArray[np.uint16]
DUST_LOSS = 0.05
FLAT_GRADIENT = 0.02
COLUMN_RMS_ADU = 1.5
DEAD_RESPONSE = 0.05
HOT_RATE_E_PER_S = (8.0, 200.0)
RAY_LENGTH_PX = 5
RAY_E = (400.0, 4000.0)
"""Electrons that one ray leaves in a thin detector, and pixels it crosses at most plus one."""


@dataclass(frozen=True, slots=True)
class Detector:
    """Fixed patterns, each of shape (ny, nx)."""

    scene: CameraScene
    bias_adu: Floats
    dark_e_per_s: Floats
    sensitivity: dict[str, Floats]
    """Band → relative response, 1 on average near the centre."""

    def read_out(self, electrons: Floats, rng: np.random.Generator) -> Raw:
        """Digitise collected electrons: read noise, bias, the converter's end."""
        adu = (electrons + rng.normal(0.0, self.scene.read_noise_e, electrons.shape)) / self.scene.gain_e_per_adu
        return np.clip(np.rint(adu + self.bias_adu), 0, self.scene.saturation_adu).astype(np.uint16)

    def expose(self, light_e: Floats, band: str, exposure_s: float, rng: np.random.Generator) -> Raw:
        """A raw frame of the expected electrons ``light_e`` of a perfect detector."""
        collected = rng.poisson(light_e * self.sensitivity[band] + self.dark_e_per_s * exposure_s).astype(float)
        self._add_cosmic_rays(collected, exposure_s, rng)
        return self.read_out(collected, rng)

    def dark(self, exposure_s: float, rng: np.random.Generator) -> Raw:
        """A raw frame with the shutter closed."""
        return self.read_out(rng.poisson(self.dark_e_per_s * exposure_s).astype(float), rng)

    def bias(self, rng: np.random.Generator) -> Raw:
        """A raw frame of no exposure."""
        return self.read_out(np.zeros(self.bias_adu.shape), rng)

    def _add_cosmic_rays(self, electrons: Floats, exposure_s: float, rng: np.random.Generator) -> None:
        ny, nx = electrons.shape
        for _ in range(rng.poisson(self.scene.cosmic_rays_per_minute * exposure_s / 60.0)):
            x, y, angle = rng.uniform(0, nx), rng.uniform(0, ny), rng.uniform(0, 2.0 * np.pi)
            length = int(rng.integers(1, RAY_LENGTH_PX))
            left_e = rng.uniform(*RAY_E) / length
            for step in range(length):
                i, j = int(y + step * np.sin(angle)), int(x + step * np.cos(angle))
                if 0 <= i < ny and 0 <= j < nx:
                    electrons[i, j] += left_e


def make_detector(scene: CameraScene, bands: tuple[str, ...], seed: int) -> Detector:
    """Draw the fixed patterns."""
    rng = np.random.default_rng([seed, 3])
    yy, xx = np.indices((scene.ny, scene.nx), dtype=float)
    u, v = 2.0 * xx / (scene.nx - 1) - 1.0, 2.0 * yy / (scene.ny - 1) - 1.0
    bias = scene.bias_adu + 4.0 * v + rng.normal(0.0, COLUMN_RMS_ADU, scene.nx)[None, :]
    glow = 0.4 * np.exp(-((u + 1.0) ** 2 + (v - 1.0) ** 2) / 0.05)
    dark = scene.dark_e_per_s * (1.0 + rng.gamma(2.0, 0.1, bias.shape)) + glow
    hot = rng.choice(dark.size, scene.hot_pixels, replace=False)
    dark.flat[hot] += rng.uniform(*HOT_RATE_E_PER_S, scene.hot_pixels)
    pixels = 1.0 + rng.normal(0.0, scene.pixel_response, bias.shape)
    pixels[:, scene.dead_column] *= DEAD_RESPONSE
    dust = np.ones(bias.shape)
    for _ in range(scene.dust_rings):
        x, y, radius = rng.uniform(0, scene.nx), rng.uniform(0, scene.ny), rng.uniform(10.0, 22.0)
        dust *= 1.0 - DUST_LOSS * np.exp(-((np.hypot(xx - x, yy - y) - radius) ** 2) / 18.0)
    vignetting = 1.0 - scene.vignetting * (u**2 + v**2) / 2.0
    sensitivity = {
        band: pixels * dust * vignetting * (1.0 + FLAT_GRADIENT * (u * np.cos(k) + v * np.sin(k)))
        for k, band in enumerate(bands)
    }
    return Detector(scene, bias, dark, sensitivity)
