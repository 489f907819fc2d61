"""The point-spread function and the fluxes under it, against GalSim's truth and the photon limit."""

from __future__ import annotations

from functools import lru_cache

import galsim
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from star_images import SCALE_ARCSEC, Truth, calibrated, draw, expose, grid, moffat

from reduce.measure.aperture import measure_stars
from reduce.measure.psf import Psf, PsfStars, build_psf, frame_psf, stamp_psf
from reduce.measure.psf_flux import FIT_FWHM, measure_psf, psf_flux
from reduce.measure.stamps import pack, unpack
from reduce.records import LADDER_FWHM, FieldSolution, PixelFlag, StarFlag
from reduce.stars.stamps import offsets_of

SKY, READ_NOISE = 300.0, 8.0
PIXEL_NOISE2 = SKY + READ_NOISE**2
WHOLE = LADDER_FWHM.index(4.0)

PROFILES = {
    "moffat": (moffat(3.0), 3.0),
    "undersampled": (moffat(1.7, 2.5), 1.85),
    "kolmogorov": (galsim.Kolmogorov(fwhm=3.0), 3.0),
    "wide": (galsim.Kolmogorov(fwhm=8.0), 8.0),
    "sheared": (galsim.Moffat(beta=3.0, fwhm=3.0).shear(g1=0.2, g2=0.15), 3.1),
    "trailed": (galsim.Convolve(galsim.Kolmogorov(fwhm=3.0), galsim.Box(5.0, 0.2).rotate(30 * galsim.degrees)), 4.2),
}


def measured(truth: Truth, data_e: np.ndarray, fwhm: float, mask: np.ndarray | None = None, targets: int = 0):
    """Image, table with PSF columns, and PSF; the last ``targets`` stars do not tell the shape."""
    image = calibrated(data_e, READ_NOISE, mask)
    table = measure_stars(image, truth.x_px, truth.y_px, fwhm, SCALE_ARCSEC, truth.xy)
    table["role"][len(table) - targets :] = 1 if targets else 0
    psf = frame_psf(image, table, truth.xy, fwhm, SCALE_ARCSEC)
    measure_psf(image, table, truth.xy, fwhm, psf)
    return image, table, psf


@lru_cache(maxsize=8)
def frame(kind: str, seed: int = 1) -> tuple[Truth, np.ndarray, float]:
    """A noisy frame of about 60 isolated stars of S/N 100 and more."""
    profile, fwhm = PROFILES[kind]
    rng = np.random.default_rng(seed)
    step = round(14 * fwhm)
    x, y = grid(8 * step, step, rng)
    noise = np.sqrt(2.5 * fwhm**2 * PIXEL_NOISE2)
    truth = draw(profile, x, y, np.exp(rng.uniform(np.log(100 * noise), np.log(900 * noise), len(x))), 8 * step, step)
    return truth, expose(truth.light_e, SKY, READ_NOISE, rng), fwhm


def stamps_of(profile: galsim.GSObject, fwhm: float, n: int, rng: np.random.Generator):
    """Noiseless unit stars at random places within their pixels: light (n, s, s), x, y."""
    half = int(np.ceil(FIT_FWHM * fwhm))
    x, y = 200 + rng.uniform(-0.5, 0.5, n), 200 + rng.uniform(-0.5, 0.5, n)
    images = []
    for k in range(n):
        cut = galsim.ImageD(galsim.BoundsI(201 - half, 201 + half, 201 - half, 201 + half))
        profile.drawImage(cut, scale=1.0, center=galsim.PositionD(x[k] + 1, y[k] + 1))
        images.append(cut.array)
    return np.array(images), x, y


def sums(psf: Psf, fwhm: float, data: np.ndarray, x: np.ndarray, y: np.ndarray):
    half = (data.shape[1] - 1) // 2
    dx, dy = offsets_of(x, y, half)
    light = psf.light(dx, dy, x, y)
    return psf_flux(
        data, np.full(data.shape, PIXEL_NOISE2), np.zeros(data.shape, np.uint8), np.full(len(x), SKY),
        light, psf.slopes(light, dx, dy, x, y), dx**2 + dy**2 <= (FIT_FWHM * fwhm) ** 2, fwhm_px=fwhm,
    )  # fmt: skip


def flux_of_snr(light: np.ndarray, snr: float) -> float:
    """Flux whose photon limit under the true profile is this signal-to-noise."""
    flux = 1e4
    for _ in range(40):
        flux = snr / np.sqrt((light**2 / (PIXEL_NOISE2 + flux * light)).sum())
    return float(flux)


@pytest.mark.parametrize("kind", PROFILES)
def test_the_profile_gives_all_brightnesses_the_same_share(kind: str) -> None:
    """Without noise on the measured star, only a wrong profile can make faint and bright stars differ."""
    truth, data, fwhm = frame(kind)
    _, table, psf = measured(truth, data, fwhm)
    light, x, y = stamps_of(PROFILES[kind][0], fwhm, 40, np.random.default_rng(3))
    share = []
    for snr in (20.0, 60.0, 200.0, 500.0):
        flux = flux_of_snr(light[0], snr)
        found = sums(psf, fwhm, SKY + flux * light, x, y)
        assert found.n_rejected.sum() == 0
        share.append(float(np.mean(found.flux_e) / flux))
    off_mmag = 1085.7 * (np.array(share) / share[-1] - 1.0)
    assert np.abs(off_mmag).max() < 2.0
    bright = (table["flux_e"][:, WHOLE] > 60 * table["flux_err_e"][:, WHOLE]) & (table["psf_flux_err_e"] > 0)
    whole, err = table["flux_e"][bright, WHOLE], table["flux_err_e"][bright, WHOLE]
    ratio = np.average(table["psf_flux_e"][bright] / whole, weights=(whole / err) ** 2)
    assert ratio == pytest.approx(1.0, abs=0.003)


@pytest.mark.parametrize("kind", ["moffat", "undersampled", "kolmogorov", "trailed"])
@pytest.mark.parametrize("snr", [20.0, 100.0, 500.0])
def test_scatter_is_that_of_the_photons(kind: str, snr: float) -> None:
    """With the profile from noisy stars: no bias, the Fisher limit of the true profile to 8 %, honest errors.

    At S/N 500 the profile's own error is seen beside the photons: measured here, pulls of 1.03 to 1.08 and a χ² of up
    to 1.3 (undersampled).
    """
    profile, fwhm = PROFILES[kind]
    truth, data, _ = frame(kind)
    _, _, psf = measured(truth, data, fwhm)
    rng = np.random.default_rng(17)
    light, x, y = stamps_of(profile, fwhm, 60, rng)
    times = 50
    light, x, y = np.repeat(light, times, axis=0), np.repeat(x, times), np.repeat(y, times)
    flux = flux_of_snr(light[0], snr)
    noisy = rng.poisson(SKY + flux * light) + rng.normal(0.0, READ_NOISE, light.shape)
    found = sums(psf, fwhm, noisy, x, y)
    share = np.mean(sums(psf, fwhm, SKY + flux * light, x, y).flux_e)
    limit = (light**2 / (PIXEL_NOISE2 + flux * light)).sum(axis=(1, 2)) ** -0.5
    deviation = found.flux_e - share
    n = len(x)
    assert abs(deviation.mean()) < 3.0 * limit.mean() / np.sqrt(n), "at S/N 20 this is 2.7 mmag, at 100 0.6"
    assert (deviation / limit).std() < 1.08
    assert (deviation / found.err_e).std() == pytest.approx(1.0, abs=0.05 if snr < 300 else 0.1)
    assert np.median(found.chi2) == pytest.approx(1.0, abs=0.1) or snr > 300
    assert (found.n_rejected > 0).mean() < 0.01


def test_a_star_far_from_its_neighbours_is_measured_as_well_as_the_best_aperture_and_better() -> None:
    truth, data, fwhm = frame("moffat")
    _, table, _ = measured(truth, data, fwhm)
    relative = (table["flux_err_e"] / table["flux_e"])[:, : WHOLE + 1].min(axis=1)
    ours = table["psf_flux_err_e"] / table["psf_flux_e"]
    assert (ours < relative).mean() > 0.95


@pytest.mark.parametrize("kind", ["moffat", "undersampled", "trailed"])
def test_five_stars_are_enough(kind: str) -> None:
    """Five stars of S/N 60: the profile's own error stays below the photon noise of stars of S/N 100."""
    profile, fwhm = PROFILES[kind]
    rng = np.random.default_rng(23)
    step = round(14 * fwhm)
    x, y = grid(6 * step, step, rng)
    x, y = x[7:12], y[7:12]
    light, sx, sy = stamps_of(profile, fwhm, 40, rng)
    truth = draw(profile, x, y, np.full(5, flux_of_snr(light[0], 60.0)), 6 * step, step)
    off = []
    for _ in range(4):
        _, _, psf = measured(truth, expose(truth.light_e, SKY, READ_NOISE, rng), fwhm)
        assert psf is not None
        assert psf.n_stars == 5
        faint, bright = (
            np.mean(sums(psf, fwhm, SKY + flux * light, sx, sy).flux_e) / flux
            for flux in (flux_of_snr(light[0], 20.0), flux_of_snr(light[0], 100.0))
        )
        off.append(faint / bright - 1.0)
    assert np.abs(off).max() < 0.01


def test_the_shape_may_run_over_the_field() -> None:
    """Stars 30 % wider on one side than on the other: an aperture of 1.5 FWHM sees a slope, the profile none."""
    rng = np.random.default_rng(7)
    x, y = grid(800, 60, rng)
    flux = np.exp(rng.uniform(np.log(2e4), np.log(3e5), len(x)))
    across = (x - 400) / 400
    light = np.zeros((800, 800))
    for k in range(len(x)):
        light += draw(galsim.Moffat(beta=3.0, fwhm=3.0 * (1 + 0.15 * across[k])), x[k : k + 1], y[k : k + 1],
                      flux[k : k + 1], 800).light_e  # fmt: skip
    truth = Truth(x, y, flux, light)
    _, table, psf = measured(truth, expose(light, SKY, READ_NOISE, rng), 3.0)
    assert psf.moffat.degree >= 1

    def slope(found: np.ndarray, err: np.ndarray) -> float:
        return float(np.polyfit(across, found / flux, 1, w=flux / err)[0])

    assert abs(slope(table["psf_flux_e"], table["psf_flux_err_e"])) < 0.004
    assert slope(table["flux_e"][:, 4], table["flux_err_e"][:, 4]) < -0.03


def test_a_steady_shape_is_not_made_to_run() -> None:
    for kind in ("moffat", "kolmogorov", "trailed"):
        truth, data, fwhm = frame(kind)
        assert measured(truth, data, fwhm)[2].moffat.degree == 0


@pytest.mark.parametrize("snr", [20.0, 60.0])
def test_a_cosmic_ray_costs_little(snr: float) -> None:
    profile, fwhm = PROFILES["moffat"]
    truth, data, _ = frame("moffat")
    _, _, psf = measured(truth, data, fwhm)
    rng = np.random.default_rng(29)
    light, x, y = stamps_of(profile, fwhm, 400, rng)
    flux = flux_of_snr(light[0], snr)
    noisy = rng.poisson(SKY + flux * light) + rng.normal(0.0, READ_NOISE, light.shape)
    clean = sums(psf, fwhm, noisy, x, y)
    middle = light.shape[1] // 2
    for k in range(len(noisy)):
        i, j = middle + rng.integers(-2, 3), middle + rng.integers(-2, 3)
        noisy[k, i, j] += np.exp(rng.uniform(np.log(300.0), np.log(30000.0)))
        noisy[k, i, j + 1] += rng.uniform(0.0, 500.0)
    struck = sums(psf, fwhm, noisy, x, y)
    seen = struck.n_rejected > 0
    assert seen.mean() > 0.95
    cost = (struck.flux_e - clean.flux_e) / flux
    assert np.sqrt(np.mean(cost**2)) < 0.04 / 1.0857
    pulls = (struck.flux_e - flux) / struck.err_e
    assert pulls.std() < 1.1
    assert abs(pulls.mean()) < 0.2


@pytest.mark.parametrize("kind", ["moffat", "undersampled", "kolmogorov", "trailed"])
def test_bright_stars_are_not_eaten(kind: str) -> None:
    """The position off by 0.1 FWHM and a star 3 % wider than the others: nothing is called a cosmic ray."""
    profile, fwhm = PROFILES[kind]
    truth, data, _ = frame(kind)
    _, _, psf = measured(truth, data, fwhm)
    light, x, y = stamps_of(profile.dilate(1.03), fwhm, 200, np.random.default_rng(31))
    flux = flux_of_snr(light[0], 500.0)
    noisy = np.random.default_rng(32).poisson(SKY + flux * light) + 0.0
    there = x + 0.1 * fwhm < 200.5  # else it would be the cut-out of another pixel
    beside = sums(psf, fwhm, noisy[there], x[there] + 0.1 * fwhm, y[there])
    assert (beside.n_rejected > 0).mean() < 0.02
    assert np.median(beside.x_off_px) == pytest.approx(-0.1 * fwhm, rel=0.15)
    assert abs(np.median(beside.y_off_px)) < 0.01 * fwhm


@pytest.mark.parametrize("kind", ["moffat", "undersampled", "trailed"])
def test_neighbours_at_one_and_a_half_widths_are_told_apart(kind: str) -> None:
    profile, fwhm = PROFILES[kind]
    rng = np.random.default_rng(37)
    step = round(16 * fwhm)
    x, y = grid(9 * step, step, rng)
    flux = np.full(len(x), 2e5)
    angle = rng.uniform(0.0, 2.0 * np.pi, len(x))
    pair = np.arange(len(x)) % 2 == 1
    flux[pair] = 3e4
    near_x, near_y = x + 1.5 * fwhm * np.cos(angle), y + 1.5 * fwhm * np.sin(angle)
    near_flux = 3e4 * np.exp(rng.uniform(-1.2, 1.2, len(x)))
    truth = draw(
        profile, np.concatenate([x, near_x[pair]]), np.concatenate([y, near_y[pair]]),
        np.concatenate([flux, near_flux[pair]]), 9 * step, step,
    )  # fmt: skip
    _, table, _ = measured(truth, expose(truth.light_e, SKY, READ_NOISE, rng), fwhm, targets=int(pair.sum()))
    alone = np.concatenate([~pair, np.zeros(int(pair.sum()), bool)])
    share = np.median(table["psf_flux_e"][alone] / truth.flux_e[alone])
    pulls = (table["psf_flux_e"] / share - truth.flux_e)[~alone] / table["psf_flux_err_e"][~alone]
    assert pulls.std() < 1.15
    assert abs(pulls.mean()) < 0.35
    aperture = (table["flux_e"][:, 4] - truth.flux_e)[~alone] / table["flux_err_e"][~alone, 4]
    assert aperture.std() > 5.0, "through an aperture they are not"


def test_a_neighbour_that_was_not_measured_does_not_spoil_a_star() -> None:
    rng = np.random.default_rng(41)
    x, y = grid(400, 50, rng)
    flux = np.full(len(x), 1e5)
    near = np.array([[x[9] + 4.5, y[9]]])
    truth = draw(moffat(3.0), np.append(x, near[0, 0]), np.append(y, near[0, 1]), np.append(flux, 8e4), 400)
    image = calibrated(expose(truth.light_e, SKY, READ_NOISE, rng), READ_NOISE)
    table = measure_stars(image, x, y, 3.0, SCALE_ARCSEC, truth.xy)
    measure_psf(image, table, truth.xy, 3.0, frame_psf(image, table, truth.xy, 3.0, SCALE_ARCSEC))
    alone = np.arange(len(x)) != 9
    share = np.median(table["psf_flux_e"][alone] / flux[alone])
    assert table["psf_flux_e"][9] / share == pytest.approx(1e5, abs=3.5 * table["psf_flux_err_e"][9])


def test_stamps_give_the_same_profile_as_the_frame() -> None:
    truth, data, fwhm = frame("trailed")
    image, table, psf = measured(truth, data, fwhm)
    solution = FieldSolution((150.0, 20.0), (250.0, 250.0), ((-1 / 3600, 0.0), (0.0, 1 / 3600)), 40, 0.1)
    unpacked = unpack(pack(image, table, fwhm, solution))
    again = stamp_psf(unpacked)
    window = (200.3, 210.6, 180, 190, (41, 41))
    ours, theirs = psf.at(*window), again.at(*window)
    assert np.abs(ours - theirs).max() < 0.01 * ours.max()
    assert theirs.sum() == pytest.approx(ours.sum(), rel=0.005)


@settings(max_examples=25, deadline=None)
@given(st.floats(100.0, 101.0), st.floats(100.0, 101.0))
def test_a_unit_star_holds_one_within_four_widths_wherever_it_lies(x: float, y: float) -> None:
    fwhm = PROFILES["moffat"][1]
    psf = _psf_of_moffat()
    light = psf.at(x, y, 80, 80, (42, 42))
    rows, columns = np.mgrid[80:122, 80:122]
    inside = np.hypot(columns - x, rows - y) <= 4 * fwhm
    assert light[inside].sum() == pytest.approx(1.0, abs=0.003)
    assert psf.at(x + 7, y - 3, 87, 77, (42, 42)) == pytest.approx(light, abs=1e-12)


@lru_cache(maxsize=1)
def _psf_of_moffat() -> Psf:
    truth, data, fwhm = frame("moffat")
    return measured(truth, data, fwhm)[2]


def test_the_same_frame_gives_the_same_bits() -> None:
    truth, data, fwhm = frame("kolmogorov")
    first, again = (measured(truth, data, fwhm)[1] for _ in range(2))
    assert first.tobytes() == again.tobytes()


def test_saturated_bad_and_missing_pixels_are_flagged_or_left_out() -> None:
    truth, data, fwhm = frame("moffat")
    mask = np.zeros(data.shape, np.uint8)
    x, y = np.rint(truth.x_px).astype(int), np.rint(truth.y_px).astype(int)
    mask[y[10], x[10]] = PixelFlag.SATURATED
    mask[y[11], x[11] + 3] = PixelFlag.BAD
    mask[y[12] - 1 : y[12] + 2, x[12] - 1 : x[12] + 2] = PixelFlag.BAD
    data = data.copy()
    data[y[11], x[11] + 3] = 5e4
    _, table, _ = measured(truth, data, fwhm, mask)
    assert table["psf_flags"][10] & StarFlag.SATURATED
    assert table["psf_flags"][11] == 0
    assert table["psf_flux_e"][11] == pytest.approx(truth.flux_e[11], rel=0.02)
    assert table["psf_flags"][12] & StarFlag.BAD_PIXEL


def test_a_star_cut_by_the_edge_is_flagged_and_one_beside_it_measured() -> None:
    rng = np.random.default_rng(43)
    x, y = grid(400, 50, rng)
    x, y = np.append(x, [-1.0, 3.0]), np.append(y, [225.0, 125.0])
    truth = draw(moffat(3.0), x, y, np.full(len(x), 1e5), 400)
    _, table, _ = measured(truth, expose(truth.light_e, SKY, READ_NOISE, rng), 3.0, targets=2)
    assert table["psf_flags"][-2] & StarFlag.EDGE
    assert (table["psf_flags"][:-2] & StarFlag.EDGE == 0).all()
    assert table["psf_flags"][-1] == 0
    share = np.median(table["psf_flux_e"][:-2] / 1e5)
    assert table["psf_flux_e"][-1] / share == pytest.approx(1e5, abs=4 * table["psf_flux_err_e"][-1])


@pytest.mark.parametrize("n", [0, 1])
def test_too_few_stars_leave_the_columns_not_measured(n: int) -> None:
    truth, data, fwhm = frame("moffat")
    few = Truth(truth.x_px[:n], truth.y_px[:n], truth.flux_e[:n], truth.light_e)
    _, table, psf = measured(few, data, fwhm)
    assert psf is None
    assert (table["psf_flux_err_e"] == 0).all()


def test_a_frame_of_noise_or_nothing_gives_no_profile_or_no_harm() -> None:
    rng = np.random.default_rng(47)
    x, y = grid(300, 50, rng)
    for data in (rng.normal(SKY, 18.0, (300, 300)), np.zeros((300, 300)), np.full((300, 300), np.nan)):
        truth = Truth(x, y, np.ones(len(x)), np.zeros((300, 300)))
        _, table, psf = measured(truth, data, 3.0)
        assert psf is None or np.isfinite(psf.table).all()
        assert not np.isinf(table["psf_flux_e"]).any()


def test_a_star_without_any_usable_pixel_says_nothing() -> None:
    """Its own matrix has no inverse; the others' profile is what it would have been."""
    light, x, y = stamps_of(moffat(3.0), 3.0, 16, np.random.default_rng(8))
    x = 60.0 * np.arange(16) + x
    data = np.random.default_rng(9).poisson(2e5 * np.maximum(light, 0.0) + SKY) - SKY
    usable = np.ones(data.shape, bool)
    whole = build_psf(PsfStars(x, y, data, np.full(data.shape, SKY), usable), 3.0)
    for lost in ([15], [3, 9], list(range(12)), list(range(16))):
        kept = usable.copy()
        kept[lost] = False
        found = build_psf(PsfStars(x, y, data, np.full(data.shape, SKY), kept), 3.0)
        if len(lost) == 16:
            assert found is None
        else:
            window = (200.3, 210.6, 194, 204, (13, 13))
            assert np.abs(found.at(*window) - whole.at(*window)).max() < 0.01 * whole.at(*window).max()
