from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from random_fields import SIDE_PX, RandomField, random_field, seen

from reduce.field.match import FieldHint, FieldMatch, match_field
from reduce.field.wcs import pixel_to_sky, sky_to_pixel

SHAPE = (SIDE_PX, SIDE_PX)


def find(field: RandomField, hint: FieldHint | None = None) -> FieldMatch:
    return match_field(field.detections, field.ra_deg, field.dec_deg, field.mag, hint or field.hint, SHAPE)


def is_true(field: RandomField, match: FieldMatch) -> bool:
    """The plate is right to a pixel in the corners and nearly all pairs are the same star."""
    if match.solution is None:
        return False
    corners = np.array([[0, 0, SIDE_PX - 1, SIDE_PX - 1], [0, SIDE_PX - 1, 0, SIDE_PX - 1]], float)
    x, y = sky_to_pixel(match.solution, *pixel_to_sky(field.plate, *corners))
    same = field.star[match.detected] == match.catalogue
    return bool(np.hypot(x - corners[0], y - corners[1]).max() < 1.5 and same.mean() > 0.9)


# common stars, detections and catalogue stars without counterpart, runs
MIXES = [(8, 0, 0, 30), (8, 3, 3, 40), (12, 6, 6, 30), (25, 15, 15, 20), (40, 100, 20, 10), (40, 10, 40, 10)]


@pytest.mark.parametrize(("common", "only_seen", "only_known", "runs"), MIXES)
def test_finds_fields_of_any_rotation_parity_and_scale(common, only_seen, only_known, runs):
    rng = np.random.default_rng(common * 1000 + only_seen)
    fields = [random_field(rng, common, only_seen, only_known) for _ in range(runs)]
    found = [is_true(field, find(field)) for field in fields]
    assert np.mean(found) >= 0.99


def test_never_finds_a_field_that_is_not_there():
    rng = np.random.default_rng(77)
    for n_seen, n_known in [(8, 8), (12, 30), (30, 30), (60, 60), (200, 40)] * 2:
        field = random_field(rng, 0, n_seen, n_known)
        assert find(field).solution is None


def test_coincidences_in_a_crowd_are_not_a_field():
    # Every place of a crowded frame is near some star: six pairs are found for almost any plate, and prove nothing.
    rng, side = np.random.default_rng(1), 256
    for _ in range(2):
        x, y = rng.uniform(0, side - 1, (2, 300))
        crowd = seen(x, y, rng.uniform(1, 2, 300))
        ra, dec = 150 + rng.uniform(0, side / 3600, 15), rng.uniform(0, side / 3600, 15)
        mag = rng.uniform(10, 12, 15)
        assert match_field(crowd, ra, dec, mag, FieldHint(scale_arcsec=1.0), (side, side)).solution is None


def test_four_stars_are_enough_for_a_known_camera_only():
    rng = np.random.default_rng(5)
    found = {True: 0, False: 0}
    for _ in range(30):
        field = random_field(rng, 4, 0, 0)
        scale = field.plate.scale_arcsec
        known = FieldHint(field.hint.ra_deg, field.hint.dec_deg, scale, 0.02, field.plate.mirrored)
        found[True] += is_true(field, find(field, known))
        found[False] += find(field, replace(known, scale_tolerance=0.2)).solution is not None
    assert found[True] >= 27  # four stars may lie nearly on a line
    assert found[False] == 0


def test_a_stated_parity_or_scale_that_is_wrong_finds_nothing():
    field = random_field(np.random.default_rng(3), 20, 4, 4)
    assert is_true(field, find(field))
    assert find(field, replace(field.hint, mirrored=not field.plate.mirrored)).solution is None
    assert find(field, replace(field.hint, scale_arcsec=2 * field.plate.scale_arcsec)).solution is None


def test_a_pointing_that_is_far_off_does_not_matter():
    field = random_field(np.random.default_rng(4), 20, 4, 4)
    assert is_true(field, find(field, replace(field.hint, ra_deg=(field.plate.crval_deg[0] + 90) % 360)))


def test_the_order_of_the_catalogue_does_not_matter():
    field = random_field(np.random.default_rng(6), 20, 5, 5)
    other = np.random.default_rng(7).permutation(len(field.ra_deg))
    match = find(field)
    again = match_field(
        field.detections, field.ra_deg[other], field.dec_deg[other], field.mag[other], field.hint, SHAPE
    )
    assert match.solution is not None
    assert again.solution is not None
    assert again.solution.cd_deg == pytest.approx(np.array(match.solution.cd_deg), abs=1e-12)
    assert sorted(other[again.catalogue]) == sorted(match.catalogue)


def test_too_little_is_refused_in_a_sentence():
    field = random_field(np.random.default_rng(8), 20, 0, 0)
    two = seen(np.array([10.0, 20.0]), np.array([10.0, 30.0]), np.array([2.0, 1.0]))
    few = match_field(two, field.ra_deg, field.dec_deg, field.mag, field.hint, SHAPE)
    assert (few.solution, len(few.detected), len(few.catalogue)) == (None, 0, 0)
    assert "only 2 stars" in few.reason
    one = np.array([1.0])
    assert "fewer than three" in match_field(field.detections, one, one, one, field.hint, SHAPE).reason
    alien = random_field(np.random.default_rng(9), 20, 0, 0)
    strange = match_field(field.detections, alien.ra_deg, alien.dec_deg, alien.mag, field.hint, SHAPE)
    assert strange.solution is None
    assert "was not recognised" in strange.reason
