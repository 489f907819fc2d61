"""Frames with known stars, drawn by GalSim or by a formula, for tests of photometry."""

from __future__ import annotations

from dataclasses import dataclass

import galsim
import numpy as np

from reduce.records import CalibratedImage

SCALE_ARCSEC = 1.0


@dataclass(frozen=True)
class Truth:
    x_px: np.ndarray
    y_px: np.ndarray
    flux_e: np.ndarray
    light_e: np.ndarray
    """(ny, nx) expected electrons of the stars alone."""

    @property
    def xy(self) -> np.ndarray:
        return np.column_stack([self.x_px, self.y_px])


def moffat(fwhm_px: float, beta: float = 3.5) -> galsim.GSObject:
    return galsim.Moffat(beta=beta, fwhm=fwhm_px)


def draw(
    profile: galsim.GSObject, x_px: np.ndarray, y_px: np.ndarray, flux_e: np.ndarray, side: int, stamp: int = 64
) -> Truth:
    """Stars drawn by GalSim: profile integrated over square pixels."""
    whole = galsim.ImageD(side, side, init_value=0.0)
    for x, y, flux in zip(x_px, y_px, flux_e, strict=True):
        # GalSim counts pixels from 1.
        centre = galsim.PositionD(x + 1.0, y + 1.0)
        cut = galsim.ImageD(galsim.BoundsI(round(x) + 1 - stamp // 2, round(x) + stamp // 2,
                                           round(y) + 1 - stamp // 2, round(y) + stamp // 2))  # fmt: skip
        profile.withFlux(flux).drawImage(cut, scale=1.0, center=centre)
        common = cut.bounds & whole.bounds
        whole[common] += cut[common]
    return Truth(np.asarray(x_px), np.asarray(y_px), np.asarray(flux_e), whole.array.copy())


def grid(side: int, step: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Isolated positions at random places within their pixels."""
    at = np.arange(step // 2, side - step // 2 + 1, step).astype(float)
    x, y = (axis.ravel() for axis in np.meshgrid(at, at))
    return x + rng.uniform(-0.5, 0.5, len(x)), y + rng.uniform(-0.5, 0.5, len(y))


def calibrated(data_e: np.ndarray, read_noise_e: float = 8.0, mask: np.ndarray | None = None) -> CalibratedImage:
    shape = data_e.shape
    return CalibratedImage(
        data_e=data_e.astype(np.float32),
        variance_e2=np.full(shape, read_noise_e**2, np.float32),
        mask=np.zeros(shape, np.uint8) if mask is None else mask,
        flat_used=True,
        gain_e_per_adu=1.5,
        read_noise_e=read_noise_e,
        saturation_e=9e4,
    )


def expose(light_e: np.ndarray, sky_e: np.ndarray | float, read_noise_e: float, rng: np.random.Generator) -> np.ndarray:
    """One noisy exposure: photon noise of stars and sky, read noise, whole ADU."""
    electrons = rng.poisson(light_e + sky_e) + rng.normal(0.0, read_noise_e, light_e.shape)
    return np.rint(electrons / 1.5) * 1.5
