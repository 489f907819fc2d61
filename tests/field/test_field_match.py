from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from random_fields import SIDE_PX, RandomField, random_field

from reduce.field.match import FieldHint, FieldMatch, match_field
from reduce.field.wcs import sky_to_pixel

SHAPE = (SIDE_PX, SIDE_PX)


def find(field: RandomField, hint: FieldHint | None = None) -> FieldMatch:
    return match_field(field.detections, field.ra_deg, field.dec_deg, field.mag, hint or field.hint, SHAPE)


def is_true(field: RandomField, match: FieldMatch) -> bool:
    """The plate is right to a pixel in the corners and nearly all pairs are the same star."""
    if match.solution is None:
        return False
    corners = np.array([[0, 0, SIDE_PX - 1, SIDE_PX - 1], [0, SIDE_PX - 1, 0, SIDE_PX - 1]], float)
    from reduce.field.wcs import pixel_to_sky

    x, y = sky_to_pixel(match.solution, *pixel_to_sky(field.plate, *corners))
    same = field.star[match.detected] == match.catalogue
    return bool(np.hypot(x - corners[0], y - corners[1]).max() < 1.5 and same.mean() > 0.9)


# common stars, detections and catalogue stars without counterpart, runs
MIXES = [(8, 0, 0, 40), (8, 3, 3, 60), (12, 6, 6, 60), (25, 15, 15, 40), (40, 100, 20, 20), (40, 10, 200, 20)]


@pytest.mark.parametrize(("common", "only_seen", "only_known", "runs"), MIXES)
def test_finds_fields_of_any_rotation_parity_and_scale(common, only_seen, only_known, runs):
    rng = np.random.default_rng(common * 1000 + only_seen)
    fields = [random_field(rng, common, only_seen, only_known) for _ in range(runs)]
    found = [is_true(field, find(field)) for field in fields]
    assert np.mean(found) >= 0.99


def test_never_finds_a_field_that_is_not_there():
    rng = np.random.default_rng(77)
    for n_seen, n_known in [(8, 8), (12, 30), (30, 30), (60, 200), (300, 100)] * 8:
        field = random_field(rng, 0, n_seen, n_known)
        for mirrored in (None, field.plate.mirrored):
            assert find(field, replace(field.hint, mirrored=mirrored)).solution is None
