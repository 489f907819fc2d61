"""Images out of focus are told from all that seeing, trailing and sampling make, as the program measures them."""

from __future__ import annotations

import galsim
import numpy as np
import pytest
from star_images import calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import measure_stars
from reduce.standard.findings import core_ratio
from reduce.standard.verdict import FLAT_TOPPED
from reduce.stars.detect import detect
from reduce.stars.width import frame_fwhm


def ring(radius_px: float, hole: float, fwhm_px: float) -> galsim.GSObject:
    whole, missing = galsim.TopHat(radius_px), galsim.TopHat(radius_px * hole)
    shadow = galsim.Add([whole.withFlux(1 / (1 - hole**2)), missing.withFlux(-(hole**2) / (1 - hole**2))])
    return galsim.Convolve(shadow, galsim.Moffat(beta=3, fwhm=fwhm_px))


def measured_core(profile: galsim.GSObject) -> float:
    rng = np.random.default_rng(1)
    x, y = grid(400, 80, rng)
    light = draw(profile, x, y, 10 ** rng.uniform(4.5, 5.8, len(x)), 400, stamp=100).light_e
    image = calibrated(expose(light, 200.0, 8.0, rng))
    fwhm_px = frame_fwhm(detect(image.data_e, image.mask, saturation_e=1e9))
    table = measure_stars(image, x, y, fwhm_px, 1.0, np.column_stack([x, y]))
    return core_ratio(-2.5 * np.log10(np.maximum(table["flux_e"], 1.0)))


@pytest.mark.parametrize("profile", [
    moffat(1.8), moffat(3.0, 2.5), moffat(6.0), galsim.Kolmogorov(fwhm=4), galsim.Gaussian(fwhm=3),
    galsim.Gaussian(fwhm=6), moffat(3.0).shear(g1=0.4, g2=0), galsim.Convolve(moffat(3.0), galsim.Box(10, 0.01)),
])  # fmt: skip
def test_images_in_focus(profile: galsim.GSObject) -> None:
    assert 2.0 < measured_core(profile) < 0.9 * FLAT_TOPPED


@pytest.mark.parametrize(("radius_px", "hole"), [(4.0, 0.4), (6.0, 0.4), (8.0, 0.4), (8.0, 0.01), (12.0, 0.35)])
def test_images_out_of_focus(radius_px: float, hole: float) -> None:
    assert measured_core(ring(radius_px, hole, 3.0)) > 1.05 * FLAT_TOPPED
