"""Stamp packs: faithful, small, byte-equal, and safe against damaged or hostile bytes."""

from __future__ import annotations

import json
import struct
import zlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from star_images import SCALE_ARCSEC, calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import measure_stars
from reduce.measure.stamps import MAGIC, StampError, pack, unpack
from reduce.records import FieldSolution, PixelFlag

FWHM = 3.0
SOLUTION = FieldSolution((10.0, 20.0), (0.0, 0.0), ((-1 / 3600, 0.0), (0.0, 1 / 3600)), 40, 0.1)


@pytest.fixture(scope="module")
def frame():
    rng = np.random.default_rng(1)
    x, y = grid(400, 50, rng)
    truth = draw(moffat(FWHM), x, y, 10 ** rng.uniform(3.5, 5.5, len(x)), 400)
    data = expose(truth.light_e, 500.0, 8.0, rng)
    data[205, 205] = np.nan
    mask = np.zeros(data.shape, np.uint8)
    mask[205, 205] = PixelFlag.NOT_FINITE
    mask[10:20, 30] = PixelFlag.BAD
    image = calibrated(data, mask=mask)
    table = measure_stars(image, x, y, FWHM, SCALE_ARCSEC, truth.xy)
    table["ra_deg"], table["dec_deg"] = 10.0 - x / 3600, 20.0 + y / 3600
    table["role"][10], table["target"][10] = 1, "Example A"
    table["role"][0], table["target"][0] = 1, "Example B"
    return image, table


def test_what_comes_back(frame) -> None:
    image, table = frame
    content = pack(image, table, FWHM, SOLUTION)
    found = unpack(content)
    assert [stamp.target for stamp in found.stamps[:3]] == ["Example A", "Example B", ""]
    assert len(found.stamps) == 42
    assert found.cd_deg == SOLUTION.cd_deg
    for stamp in found.stamps:
        ny, nx = stamp.data_e.shape
        at = np.s_[stamp.y0 : stamp.y0 + ny, stamp.x0 : stamp.x0 + nx]
        sigma = np.sqrt(500.0 + 64.0)
        np.testing.assert_allclose(stamp.data_e, image.data_e[at], atol=0.6 * sigma / 16, equal_nan=True)
        np.testing.assert_allclose(stamp.variance_e2, image.variance_e2[at], rtol=1 / 64)
        np.testing.assert_array_equal(stamp.mask, image.mask[at])
    brightness = [np.nansum(stamp.data_e - stamp.sky_e_px) for stamp in found.stamps[2:]]
    assert brightness[0] > brightness[-1]


def test_sizes(frame) -> None:
    image, table = frame
    content = pack(image, table, FWHM, SOLUTION)
    target, at_edge = unpack(content).stamps[:2]
    assert min(target.data_e.shape) >= max(15 * FWHM, 60 / SCALE_ARCSEC)
    assert at_edge.x0 == at_edge.y0 == 0, "cut at the border of the image"
    assert min(unpack(content).stamps[2].data_e.shape) >= 8 * FWHM
    assert len(content) < 60_000
    assert len(content) < 0.25 * sum(9 * stamp.data_e.size for stamp in unpack(content).stamps)


def test_equal_input_gives_equal_bytes(frame) -> None:
    image, table = frame
    assert pack(image, table, FWHM, SOLUTION) == pack(image, table.copy(), FWHM, SOLUTION)


def test_photometry_of_stamps_is_that_of_the_frame(frame) -> None:
    image, table = frame
    for stamp in unpack(pack(image, table, FWHM, SOLUTION)).stamps[2:12]:
        x, y = np.array([stamp.x_px - stamp.x0]), np.array([stamp.y_px - stamp.y0])
        k = np.flatnonzero(table["x_px"] == stamp.x_px)[0]
        rounded = measure_stars(calibrated(stamp.data_e - stamp.sky_e_px), x, y, FWHM, SCALE_ARCSEC, np.zeros((0, 2)))
        own_sky = rounded["sky_e_px"] * rounded["area_px"][0]
        off = (rounded["flux_e"][0] + own_sky - table["flux_e"][k]) / table["flux_err_e"][k]
        assert np.abs(off[:8]).max() < 0.1


def test_no_stars(frame) -> None:
    image, table = frame
    assert unpack(pack(image, table[:0], FWHM, SOLUTION)).stamps == ()


def header_of(content: bytes) -> tuple[dict, bytes]:
    body = zlib.decompress(content[4:])
    (length,) = struct.unpack_from("<I", body)
    return json.loads(body[4 : 4 + length]), body[4 + length :]


def made_of(header: object, rest: bytes) -> bytes:
    text = json.dumps(header).encode()
    return MAGIC + zlib.compress(struct.pack("<I", len(text)) + text + rest)


@pytest.mark.parametrize(
    "change",
    [
        {"nx": 10**9}, {"nx": -5}, {"nx": 0}, {"ny": "many"}, {"light_step": None}, {"x": []}, {"ny": 1024, "nx": 1024},
    ],
)  # fmt: skip
def test_false_sizes_are_refused(frame, change: dict) -> None:
    header, rest = header_of(pack(*frame, FWHM, SOLUTION))
    header["stamps"][-1].update(change)
    with pytest.raises(StampError, match="damaged"):
        unpack(made_of(header, rest))


def test_a_bomb_is_refused_before_it_goes_off() -> None:
    with pytest.raises(StampError, match="64 MB"):
        unpack(MAGIC + zlib.compress(bytes(80 * 1024 * 1024), 9))


@pytest.mark.parametrize("header", [[], {}, {"stamps": 3}, None, "x", {"stamps": [None]}])
def test_other_headers_are_refused(header: object) -> None:
    with pytest.raises(StampError):
        unpack(made_of(header, b""))


def test_names_are_made_harmless(frame) -> None:
    header, rest = header_of(pack(*frame, FWHM, SOLUTION))
    header["stamps"][0]["target"] = "\x1b[2Jbad"
    assert "\x1b" not in unpack(made_of(header, rest)).stamps[0].target


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_damaged_packs_give_one_sentence(frame, data: st.DataObject) -> None:
    content = bytearray(pack(*frame, FWHM, SOLUTION))
    if data.draw(st.booleans()):
        content = content[: data.draw(st.integers(0, len(content) - 1))]
    else:
        content[data.draw(st.integers(0, len(content) - 1))] ^= data.draw(st.integers(1, 255))
    with pytest.raises(StampError):
        unpack(bytes(content))
