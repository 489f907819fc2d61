"""What a picture shows: faint star and bright core at once, the sky black, every part at its place."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tui.picture_view import View
from tui.preview_image import (
    blocks,
    brightness,
    clamped,
    dithered,
    enlarged,
    grey_levels,
    pasted,
    shrink,
    stretch_of,
)
from tui.widgets.preview import LEVELS, Place, Preview, Ring, ring_cells
from tui.widgets.raster import braille_codes

SIDE, SKY, NOISE, FWHM = 512, 300.0, 17.0, 3.0
"""A minute on a 0.4 m telescope with the sky at 300 e-: noise √300."""
STAR, CORE, BRIGHT = (100, 380), (256, 256), (400, 90)


def a_night() -> np.ndarray:
    """A faint star, a galaxy with a bright core and a star near saturation.

    With a zero point of 22.4 mag (1 e-/s) a star of 17th magnitude gives 8700 e- in a minute; this one gives 1300.
    """
    rng = np.random.default_rng(8)
    y, x = np.mgrid[:SIDE, :SIDE].astype(float)
    image = rng.normal(SKY, NOISE, (SIDE, SIDE))
    s2 = (FWHM / 2.3548) ** 2

    def star(place: tuple[int, int], flux: float) -> np.ndarray:
        return flux / (2 * math.pi * s2) * np.exp(-((x - place[0]) ** 2 + (y - place[1]) ** 2) / (2 * s2))

    galaxy = 12000.0 * np.exp(-7.67 * ((np.hypot(x - CORE[0], y - CORE[1]) / 25.0 + 0.002) ** 0.25))
    return (image + star(STAR, 1300.0) + star(BRIGHT, 500_000.0) + 2.0 * galaxy).astype(np.float32)


@pytest.mark.parametrize("cells", [24, 40, 100])
def test_a_faint_star_and_a_bright_core_are_seen_at_once(cells: int) -> None:
    image = a_night()
    small = shrink(image, cells, cells)
    level = grey_levels(brightness(small.data, small.stretch, image.size / small.data.size), LEVELS)
    across = small.data.shape[1]

    def at(place: tuple[int, int]) -> tuple[int, int]:
        return int(place[1] * across / SIDE), int(place[0] * across / SIDE)

    far = level[: across // 8, : across // 8]
    assert np.mean(far == 0) > 0.9, "the sky is black"
    assert far.max() <= 1
    row, column = at(STAR)
    assert level[max(row - 1, 0) : row + 2, max(column - 1, 0) : column + 2].max() >= 2
    core = level[at(CORE)]
    assert 8 <= core < LEVELS - 1, "the core is bright, but not as bright as the brightest star"
    assert level[at((CORE[0] + 60, CORE[1]))] < core
    assert level[at(BRIGHT)] == LEVELS - 1


def test_a_part_is_shown_with_the_greys_of_the_whole() -> None:
    image = a_night()
    whole, part = shrink(image, 40, 40), shrink(image, 40, 40, (80, 360, 40, 40))
    assert part.stretch == whole.stretch
    assert part.window == (80, 360, 40, 40)
    assert np.array_equal(part.data, image[360:400, 80:120])


@given(
    st.tuples(st.integers(-50, 90), st.integers(-50, 90), st.integers(1, 99), st.integers(1, 99)),
    st.integers(1, 60),
    st.integers(1, 60),
)
def test_a_window_is_moved_onto_the_frame(window: tuple[int, int, int, int], nx: int, ny: int) -> None:
    x0, y0, columns, rows = clamped(window, nx, ny)
    assert x0 >= 0
    assert y0 >= 0
    assert 1 <= columns <= window[2]
    assert 1 <= rows <= window[3]
    assert x0 + columns <= nx
    assert y0 + rows <= ny


@given(st.integers(1, 40), st.integers(1, 40), st.integers(2, 50), st.integers(2, 50))
def test_blocks_fit_and_pixels_are_repeated_where_there_are_few(ny: int, nx: int, wide: int, high: int) -> None:
    image = np.arange(ny * nx, dtype=np.float32).reshape(ny, nx)
    shown = enlarged(image, wide, high)
    assert shown.shape[0] <= max(high, 1)
    assert shown.shape[1] <= max(wide, 1)
    assert shown.max() == image.max()
    assert set(shown.ravel()) <= set(image.ravel())
    if min(wide / nx, high / ny) >= 1:
        assert set(shown.ravel()) == set(image.ravel())
    if nx == ny:
        assert shown.shape == (min(wide, high), min(wide, high)), "as large as it can be, and square"
        small = blocks(image, wide, high)
        assert small.shape == (min(wide, high, nx), min(wide, high, nx))


@given(
    st.integers(0, 99), st.integers(0, 59), st.sampled_from([(1, 2), (2, 4)]), st.integers(3, 70), st.integers(2, 30),
    st.tuples(st.integers(0, 60), st.integers(0, 30), st.integers(4, 40), st.integers(4, 30)) | st.none(),
)  # fmt: skip
def test_a_lone_star_is_drawn_in_the_cell_that_its_position_is_given(x, y, dots, width, height, window) -> None:
    image = np.zeros((60, 100), np.float32)
    image[y, x] = 1.0
    part = shrink(image, 400, 400, window)
    across, down = dots
    preview = Preview()
    preview._look = "braille" if down == 4 else "blocks"
    _, place = preview._cells(part, width, height)
    data = enlarged(part.data, across * width, down * height, across, down)[::-1]
    lit = {(int(r) // down, int(c) // across) for r, c in np.argwhere(data > 0)}
    cell = place.cell_of(float(x), float(y))
    assert place.rows <= height
    assert place.columns <= width
    if place.holds(*cell) and lit:
        assert any(abs(r - cell[0]) <= 1 and abs(c - cell[1]) <= 1 for r, c in lit)
        if place.pixels_x <= 1.0:  # nothing is shrunk: exactly there
            assert cell in lit


def test_a_part_that_lies_partly_off_the_frame_is_cut() -> None:
    part = np.arange(9, dtype=np.float32).reshape(3, 3)
    frame = pasted(part, -1, 3, (4, 5))
    assert frame.shape == (5, 4)
    assert frame[3:5, 0:2].tolist() == [[1, 2], [4, 5]]
    assert np.isnan(frame).sum() == 16
    assert np.isnan(pasted(part, 9, 9, (4, 5))).all()


def test_dots_are_denser_where_it_is_brighter_and_absent_on_black() -> None:
    density = [dithered(np.full((16, 16), level)).mean() for level in (0.0, 0.2, 0.5, 0.8, 1.0)]
    assert density[0] == 0.0
    assert density == sorted(density)
    assert density[-1] == 1.0
    assert abs(density[2] - 0.5) < 0.1


def test_braille_dots_stand_where_they_were_set() -> None:
    """Unicode 15, block 2800: dots 1 2 3 7 are the left column from the top, 4 5 6 8 the right one."""
    dots = np.zeros((4, 4), bool)
    dots[0, 0] = dots[3, 3] = True
    assert [chr(code) for code in braille_codes(dots)[0]] == ["⠁", "⢀"]


def test_cells_and_positions_are_each_others_inverse() -> None:
    place = Place(100, 40, 30, 12, 4.0, 8.0)
    for row, column in ((0, 0), (11, 29), (5, 17)):
        assert place.cell_of(*place.position_of(row, column)) == (row, column)
    assert place.cell_of(100, 40) == (11, 0), "the first row of a frame is at the bottom"
    assert not place.holds(*place.cell_of(99.4, 40))


def test_an_aperture_is_a_circle_of_its_radius_or_two_brackets() -> None:
    place = Place(0, 0, 80, 40, 0.5, 1.0)
    cells = ring_cells(Ring(20.0, 20.0, "()", "", 5.0), place, plain=False)
    for row, column, character in cells:
        x, y = place.position_of(row, column)
        assert math.hypot(x - 20.0, y - 20.0) == pytest.approx(5.0, abs=0.8)
        assert character == "·"
    middle = place.cell_of(20.0, 20.0)
    small = ring_cells(Ring(20.0, 20.0, "()", "", 0.5), place, plain=False)
    assert small == [(middle[0], middle[1] - 1, "("), (middle[0], middle[1] + 1, ")")]


def test_zooming_halves_the_window_about_the_cursor_and_back_shows_all() -> None:
    view = View(1024, 1024, (512.0, 512.0))
    assert view.window(48, 20) == (0, 0, 1024, 1024)
    near = view.zoomed(2, (300.0, 700.0))
    x0, y0, columns, rows = near.window(48, 20)
    assert rows == 256
    assert columns == round(48 * 256 / 40)
    assert abs(x0 + columns / 2 - 300) <= 1
    assert abs(y0 + rows / 2 - 700) <= 1
    assert near.zoomed(-5, (0.0, 0.0)).window(48, 20) == (0, 0, 1024, 1024)
    assert view.zoomed(99, (5.0, 5.0)).window(48, 20)[3] >= 12


def test_noise_is_found_beside_stars_and_an_empty_frame_has_a_stretch() -> None:
    found = stretch_of(a_night())
    assert found.sky == pytest.approx(SKY, rel=0.1)
    assert NOISE * 0.9 < found.noise < NOISE * 2.0
    assert found.top > found.sky + 500 * NOISE
    nothing = stretch_of(np.full((3, 3), np.nan, np.float32))
    assert nothing.noise > 0


@pytest.mark.parametrize(("size", "n"), [(10, 10), (10, 3), (128, 80), (7, 5), (100, 33)])
def test_a_pixel_goes_to_the_block_that_holds_its_middle(size: int, n: int) -> None:
    image = np.arange(size, dtype=np.float32)[None, :].repeat(size, axis=0)
    expected = [max(i for i in range(size) if int((i + 0.5) * n / size) == k) for k in range(n)]
    assert blocks(image, n, n)[0].tolist() == expected
