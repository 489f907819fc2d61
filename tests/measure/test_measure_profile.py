"""Radial profiles for the eye: on a star of known shape."""

import math

import numpy as np
import pytest

from reduce.measure.profile import radial_profile


def a_star(x: float, y: float, sky: float = 300.0, peak: float = 1000.0, sigma: float = 1.5) -> np.ndarray:
    rows, columns = np.mgrid[:80, :90].astype(float)
    light = peak * np.exp(-((columns - x) ** 2 + (rows - y) ** 2) / (2 * sigma**2))
    return (sky + light).astype(np.float32)


def test_light_falls_as_the_star_was_made() -> None:
    found = radial_profile(a_star(40.3, 31.7), 40.3, 31.7, 8.0)
    radius, light = np.array(found.radius_px), np.array(found.light_adu)
    assert np.allclose(light, 1000.0 * np.exp(-(radius**2) / (2 * 1.5**2)), atol=0.01)
    assert len(radius) == pytest.approx(math.pi * 8.0**2, rel=0.05), "every pixel within the radius"
    assert list(radius) == sorted(radius)
    assert found.ring_px == tuple(n + 0.5 for n in range(8))
    assert list(found.ring_adu) == sorted(found.ring_adu, reverse=True)


def test_pixels_without_a_number_and_edges_are_left_out() -> None:
    image = a_star(3.0, 76.0)
    image[76, 4] = np.nan
    found = radial_profile(image, 3.0, 76.0, 6.0)
    assert np.isfinite(found.light_adu).all()
    assert max(found.light_adu) == pytest.approx(1000.0, abs=0.1)
    assert min(found.radius_px) == 0.0


@pytest.mark.parametrize(("x", "y"), [(500.0, 20.0), (-60.0, 20.0), (20.0, 900.0)])
def test_a_place_off_the_image_gives_nothing(x: float, y: float) -> None:
    found = radial_profile(a_star(40.0, 30.0), x, y, 6.0)
    assert (found.radius_px, found.ring_adu) == ((), ())
