"""Fluxes, errors and flags of apertures, against GalSim's truth, photutils and the photon limit."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from photutils.aperture import CircularAperture, aperture_photometry
from star_images import SCALE_ARCSEC, Truth, calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import circle_overlap, ladder_radii_px, measure_stars
from reduce.records import N_RADII, PixelFlag, StarFlag
from reduce.stars.centroid import centroid

FWHM, READ_NOISE = 3.0, 8.0


def field(seed: int = 1, flux: tuple[float, float] = (4e4, 4e5)) -> Truth:
    rng = np.random.default_rng(seed)
    x, y = grid(500, 50, rng)
    return draw(moffat(FWHM), x, y, rng.uniform(*flux, len(x)), 500)


def measure(truth: Truth, data_e: np.ndarray, mask: np.ndarray | None = None, **more):
    return measure_stars(calibrated(data_e, mask=mask), truth.x_px, truth.y_px, FWHM, SCALE_ARCSEC, truth.xy, **more)


@given(
    st.floats(-0.5, 0.5), st.floats(-0.5, 0.5), st.floats(0.05, 8.0),
)  # fmt: skip
@example(0.0, 0.0, 6.988752202065863)  # its square rounds otherwise as a power than as a product
def test_overlaps_fill_the_circle(x: float, y: float, radius: float) -> None:
    offsets = np.arange(-10.0, 11.0)
    part = circle_overlap((offsets - x)[None, None, :], (offsets - y)[None, :, None], radius)[0]
    assert part.sum() == pytest.approx(np.pi * radius**2, rel=1e-9)
    assert part.min() >= -1e-12
    assert part.max() <= 1 + 1e-12


def test_sums_are_those_of_photutils() -> None:
    truth = field()
    data = expose(truth.light_e, 500.0, READ_NOISE, np.random.default_rng(2)).astype(np.float32)
    table = measure(truth, data)
    for k, radius in enumerate(ladder_radii_px(FWHM, SCALE_ARCSEC)):
        apertures = CircularAperture(truth.xy, radius)
        theirs = aperture_photometry(data.astype(float), apertures, method="exact")["aperture_sum"].value
        ours = table["flux_e"][:, k] + table["sky_e_px"] * table["area_px"][:, k]
        np.testing.assert_allclose(ours, theirs, rtol=1e-9)
        np.testing.assert_allclose(table["area_px"][:, k], apertures.area, rtol=1e-9)


def test_edge_sums_are_those_of_photutils() -> None:
    x, y = np.array([1.3, 498.8, 250.2]), np.array([250.0, 2.1, 497.5])
    truth = draw(moffat(FWHM), x, y, np.full(3, 1e5), 500)
    data = expose(truth.light_e, 500.0, READ_NOISE, np.random.default_rng(3)).astype(np.float32)
    table = measure(truth, data)
    for k, radius in enumerate(ladder_radii_px(FWHM, SCALE_ARCSEC)):
        aperture = CircularAperture(truth.xy, radius)
        theirs = aperture_photometry(data.astype(float), aperture, method="exact")["aperture_sum"].value
        ours = table["flux_e"][:, k] + table["sky_e_px"] * table["area_px"][:, k]
        np.testing.assert_allclose(ours, theirs, rtol=1e-9)
    cut = ladder_radii_px(FWHM, SCALE_ARCSEC) > 2.0
    assert (table["flags"][:, cut] & StarFlag.EDGE).all()
    assert not (table["flags"][:, 0] & StarFlag.EDGE)[2], "1.8 pixels do not reach the edge 2.0 away"


def test_noiseless_fluxes_are_unbiased() -> None:
    """All stars lose the same share of light, to a millimagnitude, wherever they sit within their pixels.

    That holds from 1.5 FWHM on. Below, light is not even within the pixels at the rim, and a single star is off by
    more: with a FWHM of 3 pixels, measured here, 1.0 mmag rms at 0.8 to 1.25 FWHM and 4.1 at 0.6.
    """
    truth = field()
    table = measure(truth, truth.light_e + 500.0)
    for k, radius in enumerate(ladder_radii_px(FWHM, SCALE_ARCSEC)):
        shares = table["flux_e"][:, k] / truth.flux_e
        core = FWHM / (2 * np.sqrt(2 ** (1 / 3.5) - 1))
        expected = 1 - (1 + (radius / core) ** 2) ** (1 - 3.5)
        off_mag = 2.5 * np.log10(shares / shares.mean())
        if radius >= 1.5 * FWHM:
            assert np.abs(off_mag).max() < 1e-3
        assert off_mag.std() < (1.1e-3 if radius >= 0.8 * FWHM else 4.5e-3)
        # The pixel's own blur moves light out of the small apertures; the sky ring takes 0.3 mmag of the wings.
        if radius >= 3 * FWHM:
            assert shares.mean() == pytest.approx(expected, abs=1e-3)


def photon_limit(truth: Truth, k: int, sky_e: float) -> float:
    """Fisher limit of one star's flux with position, profile and sky known."""
    one = draw(moffat(FWHM), truth.x_px[k : k + 1], truth.y_px[k : k + 1], np.ones(1), 500).light_e
    return float((one**2 / (one * truth.flux_e[k] + sky_e + READ_NOISE**2)).sum() ** -0.5)


@pytest.mark.parametrize(("brightness", "sky_e"), [((6e3, 8e3), 200.0), ((3e4, 4e4), 2000.0), ((2e5, 3e5), 800.0)])
def test_scatter_and_errors_against_the_photon_limit(brightness: tuple[float, float], sky_e: float) -> None:
    rng = np.random.default_rng(5)
    truth = field(4, brightness)
    fluxes, errors = [], []
    for _ in range(12):
        data = expose(truth.light_e, sky_e, READ_NOISE, rng).astype(np.float32)
        x, y, _, good = centroid(data, truth.x_px + 0.3, truth.y_px - 0.3, FWHM)
        assert good.all()
        table = measure_stars(calibrated(data), x, y, FWHM, SCALE_ARCSEC, truth.xy)
        fluxes.append(table["flux_e"])
        errors.append(table["flux_err_e"])
    flux, err = np.array(fluxes), np.array(errors)
    scatter = np.sqrt(flux.var(axis=0, ddof=1).mean(axis=0)) / np.median(flux, axis=(0, 1))
    limit = np.sqrt(np.mean([photon_limit(truth, k, sky_e) ** 2 for k in range(0, 81, 9)]))
    assert np.mean(truth.flux_e) / limit > 50
    assert scatter.min() < 1.3 * limit / np.mean(truth.flux_e)

    expected = measure(truth, truth.light_e + sky_e)["flux_e"]
    pulls = (flux - flux.mean(axis=0)) / err * np.sqrt(12 / 11)
    for k in range(N_RADII):
        assert 0.9 < np.sqrt((pulls[:, :, k] ** 2).mean()) < 1.1, k
        offset = 2.5 * np.log10((flux[:, :, k] / expected[:, k]).mean())
        assert abs(offset) < 5e-3, k


def test_flat_noise_enters_the_error() -> None:
    from dataclasses import replace

    truth = field(flux=(4e6, 4e6))
    plain = calibrated(truth.light_e + 500.0)
    rough = replace(plain, relative_flat_error=0.01)
    first, second = (
        measure_stars(image, truth.x_px, truth.y_px, FWHM, SCALE_ARCSEC, truth.xy)["flux_err_e"]
        for image in (plain, rough)
    )
    rng = np.random.default_rng(1)
    flats = [
        measure(truth, (truth.light_e + 500.0) * rng.normal(1.0, 0.01, truth.light_e.shape))["flux_e"][:, 6]
        for _ in range(10)
    ]
    extra = np.sqrt(second[:, 6] ** 2 - first[:, 6] ** 2).mean()
    assert extra == pytest.approx(np.std(flats, axis=0, ddof=1).mean(), rel=0.1)


def test_flags_hold_for_the_radii_that_touch_a_pixel() -> None:
    truth = field()
    radii = ladder_radii_px(FWHM, SCALE_ARCSEC)
    mask = np.zeros((500, 500), np.uint8)
    x, y = np.rint(truth.x_px).astype(int), np.rint(truth.y_px).astype(int)
    mask[y[0], x[0]] = PixelFlag.SATURATED
    mask[y[1], x[1] + 6] = PixelFlag.BAD
    data = truth.light_e + 500.0
    data[y[2] + 5, x[2]] = np.nan
    table = measure(truth, data, mask)
    assert (table["flags"][0] & StarFlag.SATURATED).all()
    gap = x[1] + 5.5 - truth.x_px[1]
    assert ((table["flags"][1] & StarFlag.BAD_PIXEL > 0) == (radii > gap)).all()
    gap = y[2] + 4.5 - truth.y_px[2]
    assert ((table["flags"][2] & StarFlag.BAD_PIXEL > 0) == (radii > gap)).all()
    assert np.isfinite(table["flux_e"]).all()
    assert (table["flags"][3:] == 0).all()


def test_centroid_and_linearity_flags() -> None:
    truth = field()
    centred = np.ones(len(truth.x_px), bool)
    centred[4] = False
    raw = (truth.light_e + 2000.0).astype(np.float32)
    limit = np.sort([raw[round(b), round(a)] for a, b in truth.xy])[-3]
    table = measure(truth, truth.light_e + 500.0, centred=centred, raw_adu=raw, linear_limit_adu=float(limit) - 1)
    assert (table["flags"][4] & StarFlag.NO_CENTROID).all()
    assert ((table["flags"][:, 0] & StarFlag.NON_LINEAR) > 0).sum() == 3
    assert table["peak_adu"].max() == raw.max()


def test_neighbours_flag_the_apertures_they_reach() -> None:
    x, y = np.array([100.0, 112.0, 300.0, 309.0, 400.0]), np.array([100.0, 100.0, 300.0, 300.0, 400.0])
    truth = draw(moffat(FWHM), x, y, np.array([1e5, 1e5, 1e5, 1e2, 1e5]), 500)
    table = measure(truth, truth.light_e + 500.0)
    radii = ladder_radii_px(FWHM, SCALE_ARCSEC)
    crowded = table["flags"] & StarFlag.CROWDED > 0
    assert crowded[0][radii >= 9].all()
    assert not crowded[0][radii <= 3].any()
    assert not crowded[2].any(), "a thousandth of its light"
    assert crowded[3].all()
    assert not crowded[4].any()


def test_neighbours_light_is_not_underestimated() -> None:
    """Where no flag is set, the neighbour adds less than 1 % to the aperture."""
    for apart in (6.0, 8.0, 11.0, 15.0):
        x, y = np.array([100.0, 100.0 + apart]), np.array([100.0, 100.0])
        both = draw(moffat(FWHM, 2.5), x, y, np.array([1e5, 6e4]), 300)
        alone = draw(moffat(FWHM, 2.5), x[:1], y[:1], np.array([1e5]), 300)
        flux, alone_flux = (
            measure_stars(calibrated(t.light_e), x[:1], y[:1], FWHM, SCALE_ARCSEC, both.xy) for t in (both, alone)
        )
        added = flux["flux_e"][0] / alone_flux["flux_e"][0] - 1
        quiet = flux["flags"][0] & StarFlag.CROWDED == 0
        assert (added[quiet] < 0.01).all(), apart


@pytest.mark.parametrize("fwhm", [1.8, 3.0, 5.0])
def test_cosmic_rays_are_seen_and_stars_are_not_taken_for_them(fwhm: float) -> None:
    rng = np.random.default_rng(6)
    x, y = grid(500, 50, rng)
    truth = draw(moffat(fwhm), x, y, 10 ** rng.uniform(3, 5.7, len(x)), 500)
    data = expose(truth.light_e, 300.0, READ_NOISE, rng).astype(np.float32)
    radius = 4  # index of 1.5 FWHM
    clean = measure_stars(calibrated(data), x, y, fwhm, SCALE_ARCSEC, truth.xy)
    assert (clean["flags"] & StarFlag.COSMIC_RAY > 0).sum() <= N_RADII, "at most one star in 81"
    faint = np.flatnonzero(truth.flux_e < 2e4)
    for k in faint:
        data[round(y[k]) + round(fwhm), round(x[k])] += 3000.0
    hit = measure_stars(calibrated(data), x, y, fwhm, SCALE_ARCSEC, truth.xy)
    seen = hit["flags"][faint, radius] & StarFlag.COSMIC_RAY > 0
    assert seen.mean() > 0.9


def test_widths_are_those_of_the_image() -> None:
    import galsim

    rng = np.random.default_rng(7)
    x, y = grid(500, 50, rng)
    # A shear g makes axes of ratio (1 + g) / (1 - g) = 1.5 with the same area.
    truth = draw(galsim.Gaussian(fwhm=4.0).shear(g1=0.2, g2=0.0), x, y, np.full(len(x), 1e5), 500)
    table = measure_stars(calibrated(truth.light_e + 100.0), x, y, 4.0, SCALE_ARCSEC, truth.xy)
    assert table["fwhm_px"] == pytest.approx(4.0, rel=0.03)
    assert table["elongation"] == pytest.approx(1.5, rel=0.03)


def test_equal_input_gives_equal_bytes_however_many_stars() -> None:
    truth = field()
    data = expose(truth.light_e, 500.0, READ_NOISE, np.random.default_rng(8)).astype(np.float32)
    whole = measure(truth, data)
    again = measure(truth, data)
    assert whole.tobytes() == again.tobytes()
    alone = measure_stars(calibrated(data), truth.x_px[40:41], truth.y_px[40:41], FWHM, SCALE_ARCSEC, truth.xy)
    assert alone.tobytes() == whole[40:41].tobytes()


def test_no_stars() -> None:
    table = measure_stars(calibrated(np.zeros((50, 50))), np.zeros(0), np.zeros(0), 3.0, 1.0, np.zeros((0, 2)))
    assert len(table) == 0


def test_a_star_on_ruined_pixels_has_no_flux() -> None:
    data = np.full((60, 60), np.nan)
    table = measure_stars(calibrated(data), np.array([30.0]), np.array([30.0]), 3.0, 1.0, np.zeros((0, 2)))
    assert np.isnan(table["flux_e"]).all()
    assert (table["flags"] & StarFlag.BAD_PIXEL).all()


@settings(max_examples=25, deadline=None)
@given(st.floats(-30, 90), st.floats(-30, 90), st.floats(1.0, 6.0), st.floats(0.3, 3.0))
def test_any_position_is_measured_or_flagged(x: float, y: float, fwhm: float, scale: float) -> None:
    data = np.random.default_rng(9).normal(100.0, 10.0, (60, 60))
    table = measure_stars(calibrated(data), np.array([x]), np.array([y]), fwhm, scale, np.zeros((0, 2)))
    radii = ladder_radii_px(fwhm, scale)
    whole = (x - radii >= -0.5) & (x + radii <= 59.5) & (y - radii >= -0.5) & (y + radii <= 59.5)
    assert (whole <= (table["flags"][0] & StarFlag.EDGE == 0)).all()
    outside = (x - radii < -0.51) | (x + radii > 59.51) | (y - radii < -0.51) | (y + radii > 59.51)
    assert (outside <= (table["flags"][0] & StarFlag.EDGE > 0)).all()
