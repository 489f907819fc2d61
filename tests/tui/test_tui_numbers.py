"""Numbers, pictures and points as they are written on the screens."""

import math
from dataclasses import replace

import numpy as np
import pytest
from fake_desk import invented_points
from hypothesis import given
from hypothesis import strategies as st

from tui.estimate_panel import distance_mpc
from tui.number_text import number, ut, with_error
from tui.preview_image import Stretch, brightness, grey_levels, shrink, stretch_of
from tui.screens.frames import shortened
from tui.screens.light_curve import drawn_mag, marker


def test_unknown_is_a_dash_never_zero() -> None:
    assert number(None, 2) == number(math.nan, 2) == with_error(None, 0.1, 2) == ut(None) == "–"
    assert with_error(15.2, None, 2) == "15.20"
    assert with_error(15.2, 0.012, 3) == "15.200 ± 0.012"


def test_ut_of_mjd() -> None:
    assert ut(63000.5) == "12:00"
    assert ut(63000.0) == ut(63000.99999) == "00:00"


def test_modulus_of_25_is_one_megaparsec() -> None:
    """μ = 25 is 1 Mpc by definition of the modulus, μ = 5 lg(d / 10 pc)."""
    assert distance_mpc(25.0, None) == "1.0 Mpc"
    assert distance_mpc(35.0, 0.1) == "100.0 +4.7 −4.5 Mpc"


def test_limit_is_drawn_three_sigma_above_nothing() -> None:
    point = replace(invented_points("Vesna 7", 1, 1)[3], flux=-50.0, flux_err=100.0)
    assert point.state == "limit"
    assert drawn_mag(point) == pytest.approx(25.0 - 2.5 * math.log10(300.0))
    assert marker(point, plain=False) == "↓"
    assert marker(point, plain=True) == "v"


def test_states_have_their_own_signs() -> None:
    point = invented_points("Vesna 7", 1, 1)[0]
    signs = {state: marker(replace(point, state=state), False) for state in ("kept", "excluded", "doubtful", "dropped")}
    assert signs == {"kept": "B", "excluded": "x", "doubtful": "?", "dropped": "x"}


def test_long_file_names_keep_their_end() -> None:
    assert shortened("a.fits") == "a.fits"
    assert len(shortened("vesna7_2031-05-05_V_0012.fits")) == 16
    assert shortened("vesna7_2031-05-05_V_0012.fits").endswith("_V_0012.fits")


@given(st.integers(1, 60), st.integers(1, 60), st.integers(1, 30), st.integers(1, 30))
def test_shrinking_loses_no_star(frame_ny: int, frame_nx: int, nx: int, ny: int) -> None:
    image = np.zeros((frame_ny, frame_nx), np.float32)
    image[frame_ny // 3, frame_nx // 2] = 7.0
    small = shrink(image, nx, ny)
    assert small.data.max() == 7.0
    assert small.data.shape[0] <= max(ny, 1)
    assert small.data.shape[1] <= max(nx, 1)
    assert (small.frame_nx, small.frame_ny) == (frame_nx, frame_ny)


def test_greys_rise_with_brightness_and_survive_nan() -> None:
    data = np.linspace(0, 1000, 400).reshape(20, 20).astype(np.float32)
    data[3, 3] = np.nan
    level = grey_levels(brightness(data, Stretch(100.0, 10.0, 900.0), 1.0), 16)
    assert level.min() == 0
    assert level.max() == 15
    assert np.all(np.diff(np.delete(level.ravel(), 63)) >= 0)
    empty = np.full((2, 2), np.nan, np.float32)
    assert grey_levels(brightness(empty, stretch_of(empty), 1.0), 16).tolist() == [[0, 0], [0, 0]]
