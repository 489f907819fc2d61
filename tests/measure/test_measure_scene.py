"""Stamps made ready for differences: the sky under them, and which of their stars may speak."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from host_scenes import TARGET, Frame, Rendered, field_of

from reduce.measure.host import subtract
from reduce.measure.psf import stamp_psf
from reduce.measure.reference import stack_reference
from reduce.measure.scene import CLEAR_FWHM, pair, scene_of
from reduce.measure.stamps import Stamp, StampPack

SKY = field_of(3, 24, half_arcsec=140.0)
FRAME = Frame(scale_arcsec=1.0, side=330, seeing_arcsec=2.6)
DEEP = replace(FRAME, seeing_arcsec=1.9, depth=10.0, supernova_e=0.0, shift_px=(4.3, -2.6))


def flat_stamp(x: float, y: float, sky: float, target: str = "") -> Stamp:
    shape = (21, 21)
    data, variance = np.full(shape, 500.0, np.float32), np.full(shape, 64.0, np.float32)
    return Stamp(target, round(x) - 10, round(y) - 10, x, y, 0.0, 0.0, sky, data, variance, np.zeros(shape, np.uint8))


def test_the_sky_is_a_plane_free_of_the_stars_own_wings() -> None:
    """Thirty annuli with noise about a plane; six of them hold 20 electrons a pixel of their own stars' wings."""
    rng = np.random.default_rng(4)
    x, y = rng.uniform(0, 1000, (2, 30))
    plane = 300.0 + 0.02 * (x - 420.0) - 0.01 * (y - 610.0)
    sky = plane + rng.normal(0, 0.7, 30) + np.where(np.arange(30) < 6, 20.0, 0.0)
    stamps = (flat_stamp(420.0, 610.0, 350.0, TARGET), *map(flat_stamp, x, y, sky))
    scene = scene_of(StampPack(3.0, ((-1 / 3600, 0.0), (0.0, 1 / 3600)), 1.0, stamps), TARGET)
    assert scene.sky_e_px == pytest.approx(300.0, abs=0.5)
    assert 0.4 < scene.sky_err_e_px < 1.1
    left = np.array([500.0 - cut.light_e.mean() for cut in scene.stars])
    np.testing.assert_allclose(left, plane, atol=1.0)


@pytest.mark.parametrize("n", [0, 1, 3, 7])
def test_few_annuli_give_a_level_sky(n: int) -> None:
    stars = [flat_stamp(100.0 * k + 50.0, 80.0 * k + 60.0, 300.0 + k) for k in range(n)]
    scene = scene_of(StampPack(3.0, ((-1 / 3600, 0.0), (0.0, 1 / 3600)), 1.0,
                               (flat_stamp(420.0, 610.0, 290.0, TARGET), *stars)), TARGET)  # fmt: skip
    assert scene.sky_e_px == pytest.approx(290.0 if n == 0 else 300.0 + (n - 1) / 2, abs=1.0)


def with_knot(rendered: Rendered, at: tuple[float, float]) -> StampPack:
    """The pack as if a star had been detected ``at`` arcsec east and north of the target: part of its galaxy."""
    first, dx = rendered.pack.stamps[0], np.linalg.solve(rendered.cd_arcsec, np.array(at))
    cos = np.cos(np.radians(first.dec_deg))
    knot = replace(first, target="", x_px=first.x_px + float(dx[0]), y_px=first.y_px + float(dx[1]),
                   ra_deg=first.ra_deg + at[0] / 3600 / cos, dec_deg=first.dec_deg + at[1] / 3600,
                   sky_e_px=first.sky_e_px)  # fmt: skip
    stamps = rendered.pack.stamps
    return replace(rendered.pack, stamps=(stamps[0], knot, *stamps[1:]))


def test_parts_of_the_galaxy_are_no_stars() -> None:
    """A knot 3 arcsec from the supernova holds light of the supernova: it tells neither profile nor blur nor place."""
    frame, deep = Rendered(SKY, FRAME, 10), Rendered(SKY, DEEP, 1)
    knotty, knotty_deep = with_knot(frame, (3.0, 0.5)), with_knot(deep, (3.0, 0.5))
    assert pair(scene_of(knotty, TARGET), scene_of(knotty_deep, TARGET)).pairs == tuple(
        (i + 1, j + 1) for i, j in pair(scene_of(frame.pack, TARGET), scene_of(deep.pack, TARGET)).pairs
    )
    window = (100.2, 100.4, 85, 85, (31, 31))
    np.testing.assert_array_equal(stamp_psf(knotty).at(*window), stamp_psf(frame.pack).at(*window))
    plain = subtract(frame.pack, frame.row, stack_reference([(deep.pack, 1.0)], TARGET))
    found = subtract(knotty, frame.row, stack_reference([(knotty_deep, 1.0)], TARGET))
    # The knot's annulus is one more of the sky; nothing else may change.
    assert abs(found.row["psf_flux_e"] - plain.row["psf_flux_e"]) < 0.1 * plain.row["psf_flux_err_e"]


def test_of_few_stars_only_those_well_off_the_target_are_taken() -> None:
    def few(pack: StampPack) -> StampPack:
        return replace(pack, stamps=pack.stamps[:4])

    frame, deep = Rendered(SKY, FRAME, 10), Rendered(SKY, DEEP, 1)
    near = few(with_knot(frame, (3.0, 0.5))), few(with_knot(deep, (3.0, 0.5)))
    first, second = (scene_of(pack, TARGET) for pack in near)
    found = pair(first, second).pairs
    assert len(found) == 2
    assert all(first.off_target(first.stars[i]) > CLEAR_FWHM * first.fwhm_px for i, _ in found)
