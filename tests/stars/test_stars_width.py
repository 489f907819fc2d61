from __future__ import annotations

import galsim
import numpy as np
import pytest
from drawn_fields import NO_LIMIT, apart, drawn

from reduce.records import Detections
from reduce.stars.detect import detect
from reduce.stars.stamps import cut_out, offsets_of
from reduce.stars.width import frame_fwhm, moffat_enclosed, moffat_fwhm

PROFILES = {
    "Gaussian": galsim.Gaussian(fwhm=1.0),
    "Moffat 2.5": galsim.Moffat(beta=2.5, fwhm=1.0),
    "Moffat 4.765": galsim.Moffat(beta=4.765, fwhm=1.0),
    "Kolmogorov": galsim.Kolmogorov(fwhm=1.0),
}


@pytest.mark.parametrize(("fwhm", "within"), [(2.0, 0.06), (3.5, 0.03), (6.0, 0.03)])
@pytest.mark.parametrize("name", PROFILES)
def test_width_of_a_frame_is_the_full_width_at_half_maximum(name, fwhm, within):
    # 3 % where the image is well sampled; at two pixels wings and pixels cannot be told apart that well.
    rng = np.random.default_rng(1)
    x, y = apart(256, max(40, int(8 * fwhm)), rng)
    image = drawn(PROFILES[name].dilate(fwhm), x, y, np.full(len(x), 1e5 * max(1.0, fwhm / 3)), 256, rng)
    found = frame_fwhm(detect(image, np.zeros(image.shape, np.uint8), saturation_e=NO_LIMIT))
    assert found == pytest.approx(fwhm, rel=within)


def test_moffat_figures_are_galsims():
    for beta, alpha in ((2.5, 3.0), (3.5, 2.0)):
        drawn_by = galsim.Moffat(beta=beta, scale_radius=alpha)
        assert moffat_fwhm(alpha, beta) == pytest.approx(drawn_by.fwhm, rel=1e-6)
        assert moffat_enclosed(drawn_by.half_light_radius, alpha, beta) == pytest.approx(0.5, abs=1e-6)


def stars(fwhm: list[float], saturated: list[bool]) -> Detections:
    width = np.array(fwhm)
    return Detections(width, width, width, width, width, width, width, np.array(saturated, bool))


def test_frame_width_leaves_out_saturated_stars_galaxies_and_unknowns():
    assert frame_fwhm(stars([3.0, 3.1, 2.9, 3.0, 9.0, np.nan], [False] * 6)) == pytest.approx(3.0)
    assert frame_fwhm(stars([9.0, 9.0, 3.0], [True, True, False])) == 3.0
    assert np.isnan(frame_fwhm(stars([np.nan, 3.0], [False, True])))


def test_cut_outs_hold_the_pixels_about_the_star_and_the_fill_outside():
    image = np.arange(30.0).reshape(5, 6)
    cuts = cut_out(image, np.array([2.4, 0.0]), np.array([1.6, 0.0]), 1, -1.0)
    assert cuts[0].tolist() == image[1:4, 1:4].tolist()
    assert cuts[1].tolist() == [[-1, -1, -1], [-1, 0, 1], [-1, 6, 7]]
    dx, dy = offsets_of(np.array([2.4]), np.array([1.6]), 1)
    assert dx.ravel() == pytest.approx([-1.4, -0.4, 0.6])
    assert dy.ravel() == pytest.approx([-0.6, 0.4, 1.4])
