"""A detector of its own for tests: Poisson light, bias with an overscan that drifts, amplifiers, shutter, glow."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

NY, NX = 192, 256


@dataclass
class CameraTruth:
    """What the camera does; electrons in, whole ADU out."""

    gain: float = 1.5
    read_noise_e: float = 8.0
    bias_adu: float = 1000.0
    dark_e_per_s: float = 0.2
    shape: tuple[int, int] = (NY, NX)
    flat: np.ndarray = field(default_factory=lambda: vignetting((NY, NX)))
    shutter_s: np.ndarray | float = 0.0
    bend: float = 0.0
    """Fraction lost at 65535 ADU: counts = light (1 - bend light / top)."""

    def __post_init__(self) -> None:
        self.columns = np.random.default_rng(7).normal(0.0, 1.5, self.shape[1])[None, :]

    def electrons(self, rate_e_s: np.ndarray | float, exposure_s: float, rng: np.random.Generator) -> np.ndarray:
        """Collected and read, before the converter."""
        light = np.broadcast_to(rate_e_s, self.shape) * self.flat * (exposure_s + self.shutter_s)
        collected = rng.poisson(light + self.dark_e_per_s * exposure_s).astype(float)
        return collected + rng.normal(0.0, self.read_noise_e, self.shape)

    def adu(self, rate_e_s: np.ndarray | float, exposure_s: float, seed: int) -> np.ndarray:
        """A raw frame."""
        rng = np.random.default_rng(seed)
        light = self.electrons(rate_e_s, exposure_s, rng) / self.gain
        light = light * (1.0 - self.bend * np.maximum(light, 0.0) / 65535.0)
        return np.clip(np.rint(light + self.bias_adu + self.columns), 0, 65535).astype(np.uint16)


def vignetting(shape: tuple[int, int], loss: float = 0.35) -> np.ndarray:
    """Relative response, 1 in the middle of the values."""
    ny, nx = shape
    y, x = np.indices(shape)
    u, v = 2.0 * x / (nx - 1) - 1.0, 2.0 * y / (ny - 1) - 1.0
    flat = (1.0 - loss * (u**2 + v**2) / 2.0) * (1.0 + np.random.default_rng(6).normal(0.0, 0.01, shape))
    return flat / np.median(flat)
