"""Expected signal-to-noise against drawn pixels, and the noise model against frames made from a known telescope."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plan_samples import HIGH, telescope

from reduce.almanac.airmass import airmass
from reduce.plan.exposure import LEAST_S, Conditions
from reduce.plan.hours import options, rounded, saturation_warnings
from reduce.plan.moonlight import sky_airmass
from reduce.plan.telescope import conditions, telescope_noise
from reduce.records import LADDER_FWHM, FieldSolution, FrameInfo, FrameZeroPoint, Measured, Quality, Solution, Target
from reduce.settings import Camera, Planning, Settings, Site

GROWTH_MAG = np.linspace(-0.4, 0.0, len(LADDER_FWHM))
SITE = Site(latitude_deg=37.9, longitude_deg=-4.6, height_m=820.0)
FOLLOWED = Target("Farrow 3", "type_ia", 190.0, 15.0)


def test_signal_to_noise_of_drawn_stars() -> None:
    """Gaussian stars on a flat sky, drawn electron by electron and summed by hand in the aperture the plan assumes."""
    noise = telescope(aperture_m=None)
    mag, exposure_s = 17.0, 60.0
    star, sky, _ = noise.rates("V", mag, HIGH)
    fwhm = noise.fwhm_arcsec * HIGH.airmass**0.6
    y, x = np.mgrid[-20:21, -20:21].astype(float)
    sigma = fwhm / math.sqrt(8 * math.log(2))
    profile = np.exp(-(x**2 + y**2) / (2 * sigma**2))
    inside = np.hypot(x, y) < fwhm
    annulus = np.hypot(x, y) > 12
    total = star / 0.9375 * exposure_s
    rng = np.random.default_rng(5)
    sums = []
    for _ in range(1500):
        image = rng.poisson(total * profile / profile.sum() + (sky + 0.05) * exposure_s) + rng.normal(0, 8.0, x.shape)
        sums.append(image[inside].sum() - inside.sum() * np.median(image[annulus]))
    drawn = np.mean(sums) / np.std(sums)
    assert noise.snr("V", mag, exposure_s, HIGH) == pytest.approx(drawn, rel=0.06)


@settings(max_examples=60, deadline=None)
@given(mag=st.floats(11, 20), wanted=st.floats(5, 150), band=st.sampled_from("BVRI"), light=st.floats(0, 2000))
def test_exposure_reaches_what_is_wanted(mag: float, wanted: float, band: str, light: float) -> None:
    noise, where = telescope(aperture_m=None), Conditions(1.4, 45.0, light)
    seconds = noise.exposure(band, mag, wanted, where)
    # the sky's own error is in the signal-to-noise, not in the closed form: a few per cent
    assert noise.snr(band, mag, seconds, where) == pytest.approx(wanted, rel=0.07)


@settings(max_examples=60, deadline=None)
@given(mag=st.floats(12, 19), seconds=st.floats(10, 600))
def test_worse_sky_worse_signal(mag: float, seconds: float) -> None:
    noise = telescope()
    best = noise.snr("V", mag, seconds, Conditions(1.0, 90.0))
    assert noise.snr("V", mag, seconds, Conditions(2.0, 30.0)) < best
    assert noise.snr("V", mag, seconds, Conditions(1.0, 90.0, 1000.0)) < best
    assert noise.snr("V", mag, seconds, Conditions(1.0, 90.0, 0.0, 5.0)) < best
    assert noise.snr("V", mag, 2 * seconds, Conditions(1.0, 90.0)) > best


def test_peak_at_saturation_of_a_drawn_star() -> None:
    noise = telescope()
    mag = 12.0
    seconds = noise.saturating_exposure("V", mag, HIGH)
    star, sky, _ = noise.rates("V", mag, HIGH)
    sigma = noise.fwhm_arcsec * HIGH.airmass**0.6 / math.sqrt(8 * math.log(2))
    fine = np.linspace(-0.5, 0.5, 201)
    density = np.exp(-(fine[:, None] ** 2 + fine[None, :] ** 2) / (2 * sigma**2)) / (2 * math.pi * sigma**2)
    central = np.trapezoid(np.trapezoid(density, fine, axis=0), fine)
    assert (star / 0.9375 * central + sky) * seconds == pytest.approx(noise.saturation_e, rel=1e-3)


def test_bright_star_is_split_below_saturation() -> None:
    noise = telescope()
    n, seconds = noise.split("V", 11.0, 120.0, HIGH, 300.0)
    assert n * seconds == pytest.approx(120.0)
    assert seconds <= 0.7 * noise.saturating_exposure("V", 11.0, HIGH)


def test_usual_exposure_that_would_saturate_is_warned_of() -> None:
    noise = telescope()
    longest = noise.longest_unsaturated("V", 11.5, HIGH)
    (warning,) = saturation_warnings(noise, {"V": 11.5, "B": 17.0}, HIGH)
    assert warning.startswith("V: the usual 120 s")
    assert f"below {longest:.0f} s" in warning


def test_read_out_noise_keeps_a_faint_star_in_one_frame() -> None:
    dark = telescope(read_noise_e=60.0)
    assert dark.split("B", 19.0, 250.0, HIGH, 300.0)[0] == 1
    assert telescope(read_noise_e=1.0).split("B", 19.0, 250.0, HIGH, 300.0)[0] == 3
    assert telescope(read_noise_e=60.0).split("B", 19.0, 1000.0, HIGH, 300.0)[0] == 4


def test_offers_are_sorted_and_never_too_short() -> None:
    offers = options(telescope(), "V", 13.0, HIGH, Planning())
    assert offers
    assert all(offer.exposure_s >= LEAST_S for offer in offers)
    assert options(telescope(), "V", 10.0, HIGH, Planning()) == ()  # saturates in the shortest frame
    offers = options(telescope(), "V", 18.0, HIGH, Planning())
    assert [offer.n * offer.exposure_s for offer in offers] == sorted(offer.n * offer.exposure_s for offer in offers)
    assert offers[0].snr == pytest.approx(20.0, rel=0.1)
    assert options(telescope(), "V", 25.0, HIGH, Planning()) == ()


@given(st.floats(1, 2000))
def test_rounded_exposure_is_never_shorter(seconds: float) -> None:
    assert seconds - 1e-6 <= rounded(seconds) <= seconds + 10.0


# ---- measured from frames --------------------------------------------------------------------------------


def frame(k: int, mjd: float, sky_e_px: float, seconds: float = 120.0) -> Measured:
    info = FrameInfo(
        kind="light", band="V", filter_name="V", object_name="", camera="c", mjd_mid=mjd, exposure_s=seconds,
        ra_deg=None, dec_deg=None, scale_arcsec=1.2, gain_e_per_adu=1.5, read_noise_e=7.0, saturation_adu=60000.0,
        nx=512, ny=512,
    )  # fmt: skip
    through = airmass(mjd, FOLLOWED.ra_deg, FOLLOWED.dec_deg, SITE)
    assert through is not None
    quality = Quality(2.0 * through**0.6 / 1.2, 1.05, 0.1, sky_e_px, 10.0, 100, 0, seconds, through, 0.001, -30.0, True)
    cd = ((1.2 / 3600, 0.0), (0.0, 1.2 / 3600))
    field = FieldSolution((FOLLOWED.ra_deg, FOLLOWED.dec_deg), (0, 0), cd, 9, 0.1)
    return Measured(f"f{k}", "r", "measured", "", info, None, quality, field, growth_mag=GROWTH_MAG)


def made_night(start: float, dark: float, moon: float, zero_point: float, extinction: float, first: int):
    """Frames every 20 minutes of a telescope with these figures (sky in e-/s/arcsec², moon per nanolambert)."""
    rows, zero_points = [], {}
    for k in range(20):
        mjd = start + k / 72.0
        where = conditions(mjd, FOLLOWED.ra_deg, FOLLOWED.dec_deg, Settings(site=SITE))
        if where.altitude_deg < 25:
            continue
        rate = dark * sky_airmass(90.0 - where.altitude_deg) + moon * where.moonlight_nl
        row = frame(first + k, mjd, rate * 1.2**2 * 120.0)
        rows.append(row)
        zp = zero_point - extinction * row.quality.airmass + GROWTH_MAG[LADDER_FWHM.index(1.5)]  # some light is lost
        zero_points[row.frame] = FrameZeroPoint(row.frame, "V", zp, 0.005, 9, 1.0, 0.01, 0.0, 1.5)
    return rows, zero_points


def test_noise_model_finds_the_telescope_it_was_made_from() -> None:
    dark, moon, zero_point, extinction = 0.9, 0.0051, 21.6, 0.17
    one, zp_one = made_night(60741.85, dark, moon, zero_point, extinction, 0)  # first quarter
    two, zp_two = made_night(60748.85, dark, moon, zero_point, extinction, 100)  # full Moon
    solution = Solution({}, {**zp_one, **zp_two}, (), (), (), ())
    settings_ = Settings(site=SITE, camera=Camera(dark_e_per_s=0.02))
    noise = telescope_noise([*one, *two], solution, settings_)
    assert noise is not None
    found = noise.bands["V"]
    assert found.zero_point == pytest.approx(zero_point, abs=0.002)
    assert found.extinction == pytest.approx(extinction, abs=0.005)
    assert found.dark_sky == pytest.approx(dark, rel=0.05)
    assert found.moon_sky == pytest.approx(moon, rel=0.05)
    assert noise.fwhm_arcsec == pytest.approx(2.0, rel=0.01)
    assert (noise.read_noise_e, noise.dark_e_s_px, noise.saturation_e) == (7.0, 0.02, 90000.0)


def test_without_a_zero_point_there_is_no_model() -> None:
    rows, _ = made_night(60741.85, 0.9, 0.005, 21.6, 0.17, 0)
    assert telescope_noise(rows, Solution({}, {}, (), (), (), ()), Settings(site=SITE)) is None
