"""Host light taken off with a reference, or without one: true fluxes and honest errors on galaxies drawn by GalSim."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from host_scenes import TARGET, Frame, Galaxy, Rendered, Sky, field_of

from reduce.measure.host import HostFree, subtract
from reduce.measure.host_annulus import annulus_host
from reduce.measure.mirror import mirror_host
from reduce.measure.reference import band_note, stack_reference, supernova_light_note
from reduce.measure.stamps import StampPack
from reduce.records import LADDER_FWHM, StarFlag

ORDINARY = Frame(scale_arcsec=1.0, side=330, seeing_arcsec=2.6)
DEEP = replace(ORDINARY, seeing_arcsec=1.9, depth=10.0, supernova_e=0.0, shift_px=(4.3, -2.6))


@pytest.fixture(scope="module")
def sky() -> Sky:
    return field_of(3, 24, half_arcsec=140.0)


@pytest.fixture(scope="module")
def reference(sky: Sky):
    return stack_reference([(Rendered(sky, DEEP, 1).pack, 1.0)], TARGET)


def measured(rendered: Rendered, reference) -> HostFree:
    found = subtract(rendered.pack, rendered.row, reference)
    assert isinstance(found, HostFree), found
    return found


def miss(found: HostFree, rendered: Rendered) -> tuple[float, float]:
    """Error of the flux and what was quoted for it, electrons."""
    quoted = float(np.hypot(found.row["psf_flux_err_e"], found.common_err_e))
    return float(found.row["psf_flux_e"]) - rendered.supernova_e * rendered.enclosed(), quoted


CASES = {
    "much blurrier frame": (replace(ORDINARY, seeing_arcsec=3.3), DEEP, "reference"),
    "frame a little blurrier": (replace(ORDINARY, seeing_arcsec=2.1), DEEP, "reference"),
    "frame sharper than the reference": (ORDINARY, replace(DEEP, seeing_arcsec=3.2), "frame"),
    "turned reference": (ORDINARY, replace(DEEP, rotation_deg=37.0), "reference"),
    "mirrored reference of finer pixels": (
        ORDINARY, replace(DEEP, mirrored=True, scale_arcsec=0.7, side=470, rotation_deg=180.0), "reference",
    ),
    "reference of coarser pixels": (
        replace(ORDINARY, scale_arcsec=0.8, side=410), replace(DEEP, seeing_arcsec=2.2), "reference",
    ),
    "trailed frame": (replace(ORDINARY, shear=(0.15, 0.1)), DEEP, "reference"),
}  # fmt: skip


SLOW = ("frame a little blurrier", "turned reference", "reference of coarser pixels", "trailed frame")


@pytest.mark.parametrize("case", [pytest.param(c, marks=pytest.mark.slow) if c in SLOW else c for c in CASES])
def test_flux_is_true_and_its_error_honest(sky: Sky, case: str) -> None:
    frame, deep, convolved = CASES[case]
    reference = stack_reference([(Rendered(sky, deep, 1).pack, 1.0)], TARGET)
    pulls, limits, excess = [], [], []
    for seed in range(4):
        dither = replace(frame, shift_px=(1.7 * (seed % 2), 2.3 * (seed % 2)), rotation_deg=0.1 * (seed % 2))
        rendered = Rendered(sky, dither, 10 + seed)
        found = measured(rendered, reference)
        assert found.convolved == convolved
        error, quoted = miss(found, rendered)
        pulls.append(error / quoted)
        limits.append(quoted / rendered.photon_limit_e)
        excess.append((error - rendered.luck_e) / rendered.photon_limit_e)
    assert np.abs(pulls).max() < 3.0
    # In quadrature with the photons' own error of 1: 1.10.
    assert np.sqrt(np.mean(np.square(excess))) < 0.46
    assert 0.95 < np.mean(limits) < 1.15, "quoted errors are those of the photons, with a little of the reference"


def test_the_annulus_would_have_been_far_off(sky: Sky, reference) -> None:
    """What the method is for: on the same frame a plain ring of sky is tens of errors off."""
    rendered = Rendered(sky, ORDINARY, 10)
    error, quoted = miss(measured(rendered, reference), rendered)
    aperture = float(rendered.row["flux_e"][LADDER_FWHM.index(1.5)]) / rendered.supernova_e - 0.95
    assert abs(error) < 3 * quoted
    assert abs(aperture) * rendered.supernova_e > 5 * quoted


def test_apertures_on_the_difference(sky: Sky, reference) -> None:
    """The ladder of the replaced row holds the supernova alone, with the same loss as a star's."""
    rendered = Rendered(sky, replace(ORDINARY, supernova_e=1e5), 10)
    row = measured(rendered, reference).row
    y, x = np.mgrid[0 : ORDINARY.side, 0 : ORDINARY.side]
    for k in (2, 4, 6):
        radius = LADDER_FWHM[k] * rendered.fwhm_px
        fine = rendered.unit[np.hypot(x - rendered.centre[0], y - rendered.centre[1]) < radius].sum()
        assert row["flux_e"][k] == pytest.approx(1e5 * fine, abs=4 * row["flux_err_e"][k] + 0.02 * 1e5)
    assert np.isfinite(row["flux_e"]).all()
    assert (row["flux_err_e"] > 0).all()


def test_nothing_there(sky: Sky, reference) -> None:
    """Without a supernova the flux is zero within its error, on either side."""
    fluxes = []
    for seed in range(4):
        rendered = Rendered(sky, replace(ORDINARY, supernova_e=0.0), 30 + seed)
        found = measured(rendered, reference)
        fluxes.append(float(found.row["psf_flux_e"]) / np.hypot(found.row["psf_flux_err_e"], found.common_err_e))
    assert np.abs(fluxes).max() < 3.0
    assert min(fluxes) < 0 < max(fluxes)


def test_scale_is_that_of_the_exposures(sky: Sky, reference) -> None:
    for depth in (0.5, 2.0):
        found = measured(Rendered(sky, replace(ORDINARY, depth=depth), 5), reference)
        assert found.kernel_sum == pytest.approx(depth / 10.0, rel=0.01)
        assert 0 < found.scale_err < 0.01


@pytest.mark.slow
def test_error_of_the_reference_is_told_apart(sky: Sky) -> None:
    """Fluxes of one frame over many references scatter by the error that all nights are said to share."""
    frame = Rendered(sky, replace(ORDINARY, depth=4.0), 10)
    found = [
        measured(frame, stack_reference([(Rendered(sky, replace(DEEP, depth=2.0), 50 + k).pack, 1.0)], TARGET))
        for k in range(10)
    ]
    scatter = np.std([one.row["psf_flux_e"] for one in found], ddof=1)
    # Of ten draws the standard deviation is known to 24 %.
    assert 0.5 < scatter / np.mean([one.common_err_e for one in found]) < 1.6
    assert any("not much deeper" in note for note in found[0].notes)


@pytest.mark.parametrize("seeing", [2.6, 1.7])
def test_cosmic_ray_on_the_target(sky: Sky, seeing: float) -> None:
    deep = replace(DEEP, seeing_arcsec=2.1)
    reference = stack_reference([(Rendered(sky, deep, 1).pack, 1.0)], TARGET)
    frame = replace(ORDINARY, seeing_arcsec=seeing)
    clean = measured(Rendered(sky, frame, 10), reference)
    struck = measured(Rendered(sky, frame, 10, cosmic_ray_e=8000.0), reference)
    assert struck.row["psf_rejected"] >= 2
    assert abs(-2.5 * np.log10(struck.row["psf_flux_e"] / clean.row["psf_flux_e"])) < 0.04
    assert struck.row["psf_flux_err_e"] > clean.row["psf_flux_err_e"]


def test_a_variable_star_does_not_set_the_scale(sky: Sky, reference) -> None:
    flux = sky.flux_e.copy()
    flux[np.argmax(flux)] *= 1.5
    steady = measured(Rendered(sky, ORDINARY, 10), reference)
    found = measured(Rendered(replace(sky, flux_e=flux), ORDINARY, 10), reference)
    assert found.n_stars < steady.n_stars
    assert found.kernel_sum == pytest.approx(0.1, rel=0.01)


def test_saturated_and_dead_pixels_are_left_out(sky: Sky, reference) -> None:
    rendered = Rendered(sky, ORDINARY, 10)
    whole = measured(Rendered(sky, ORDINARY, 10), reference)
    x, y = np.rint(rendered.centre).astype(int)
    rendered.image.mask[y + 1, x - 1] = 2
    rendered.image.data_e[y + 1, x - 1] = 6e4
    found = measured(rendered, reference)
    error, quoted = miss(found, rendered)
    assert abs(error) < 3 * quoted
    assert found.row["psf_flux_err_e"] > whole.row["psf_flux_err_e"], "the error knows of it"
    assert not found.row["psf_flags"] & int(StarFlag.BAD_PIXEL)
    hollow = Rendered(sky, ORDINARY, 10)
    hollow.image.mask[y - 2 : y + 3, x - 2 : x + 3] = 2
    lost = subtract(hollow.pack, hollow.row, reference)
    assert isinstance(lost, str) or lost.row["psf_flags"] & int(StarFlag.BAD_PIXEL)


def test_few_stars_are_said(sky: Sky) -> None:
    poor = replace(sky, east=sky.east[:3], north=sky.north[:3], flux_e=np.full(3, 1e5))
    reference = stack_reference([(Rendered(poor, DEEP, 1).pack, 1.0)], TARGET)
    rendered = Rendered(poor, ORDINARY, 10)
    found = measured(rendered, reference)
    assert any("3 usable stars" in note for note in found.notes)
    error, _ = miss(found, rendered)
    assert abs(error) < 0.1 * rendered.supernova_e


def test_stack_of_three(sky: Sky, reference) -> None:
    """Dithered frames, one of other pixels, one with a cosmic ray: as good as one deep frame."""
    third = replace(DEEP, depth=10 / 3)
    frames = [
        Rendered(sky, third, 61),
        Rendered(sky, replace(third, shift_px=(-7.4, 3.1), seeing_arcsec=2.2), 62, cosmic_ray_e=2e4),
        Rendered(sky, replace(third, scale_arcsec=0.8, side=410, rotation_deg=90.0, seeing_arcsec=2.1), 63),
    ]
    packs = [(frame.pack, 1.0) for frame in frames]
    stacked = stack_reference(packs, TARGET)
    assert stacked.n_frames == 3
    noise = np.median(stacked.scene.target.variance_e2)
    assert noise < 0.5 * np.median(stack_reference(packs[:1], TARGET).scene.target.variance_e2)
    for seed in (10, 11, 12):
        rendered = Rendered(sky, ORDINARY, seed)
        error, quoted = miss(measured(rendered, stacked), rendered)
        assert abs(error) < 3 * quoted
    again = stack_reference(packs[::-1], TARGET)
    assert np.array_equal(again.scene.target.light_e, stacked.scene.target.light_e), "order does not matter"


def test_equal_input_gives_equal_bytes(sky: Sky, reference) -> None:
    rendered = Rendered(sky, ORDINARY, 10)
    first, second = measured(rendered, reference), measured(rendered, reference)
    assert first.row.tobytes() == second.row.tobytes()
    assert first.common_err_e == second.common_err_e


def test_what_is_missing_is_said(sky: Sky, reference) -> None:
    rendered = Rendered(sky, ORDINARY, 10)
    pack = rendered.pack
    alone = StampPack(pack.fwhm_px, pack.cd_deg, pack.gain_e_per_adu, pack.stamps[1:])
    assert subtract(alone, rendered.row, reference) == "The stamp of the target is missing; measure the frame again."
    starless = replace(pack, stamps=pack.stamps[:1])
    assert "too few stars" in subtract(starless, rendered.row, reference)
    assert stack_reference([(alone, 1.0)], TARGET) is None
    elsewhere = Rendered(field_of(99, 24, half_arcsec=140.0), DEEP, 1)
    other = stack_reference([(elsewhere.pack, 1.0)], TARGET)
    assert subtract(pack, rendered.row, other) == "The frame shares no usable star with the reference."


def test_supernova_light_in_the_reference() -> None:
    assert supernova_light_note([60000.0, 60040.0], [59700.0, 60900.0]) == ""
    assert "60050.0 was taken 50 days after" in supernova_light_note([60000.0, 60040.0], [59700.0, 60050.0])
    assert "10 days before" in supernova_light_note([60000.0], [59990.0])
    assert supernova_light_note([], [59990.0]) == ""


def test_another_band_system_shows_in_the_colours() -> None:
    rng = np.random.default_rng(4)
    n = 20
    ra, dec, colour = 150 + rng.uniform(-0.1, 0.1, n), 20 + rng.uniform(-0.1, 0.1, n), rng.uniform(0.2, 1.4, n)
    noise = rng.normal(0, 0.01, n)
    for term, heard in ((0.0, False), (0.1, True)):
        ratio = 10 ** (-0.4 * (term * colour + noise))
        pairs = list(zip(ra, dec, ratio, np.full(n, 0.005), strict=True))
        assert bool(band_note(pairs, ra, dec, colour)) == heard
    assert band_note(pairs[:3], ra, dec, colour) == "", "three stars tell nothing"


# ---- without a reference -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_mirrored_host_of_an_even_galaxy(sky: Sky, seed: int) -> None:
    galaxy = Galaxy(east=5.0, north=5.0, angle_deg=60.0 * seed)
    rendered = Rendered(replace(sky, galaxy=galaxy), ORDINARY, seed)
    found = mirror_host(rendered.pack, rendered.row, *rendered.host_sky)
    assert isinstance(found, HostFree), found
    error, quoted = miss(found, rendered)
    assert abs(error) < 2.5 * quoted
    assert found.row["psf_flux_err_e"] > 1.1 * rendered.photon_limit_e, "the mirrored sky brings its own photons"
    assert found.method == "mirrored"


def test_mirrored_host_finds_the_centre(sky: Sky) -> None:
    """The given centre may be an arcsecond off."""
    rendered = Rendered(replace(sky, galaxy=Galaxy(east=5.0, north=5.0)), ORDINARY, 1)
    ra, dec = rendered.host_sky
    true, off = (
        mirror_host(rendered.pack, rendered.row, ra + shift / 3600, dec - shift / 3600) for shift in (0.0, 1.0)
    )
    assert off.row["psf_flux_e"] == pytest.approx(true.row["psf_flux_e"], abs=0.3 * float(true.row["psf_flux_err_e"]))


def test_mirrored_host_is_refused(sky: Sky) -> None:
    near = Rendered(replace(sky, galaxy=Galaxy(east=1.0, north=1.0)), ORDINARY, 1)
    assert "too near to its host's centre" in mirror_host(near.pack, near.row, *near.host_sky)
    far = Rendered(replace(sky, galaxy=Galaxy(east=20.0, north=0.0)), ORDINARY, 1)
    assert "opposite" in mirror_host(far.pack, far.row, *far.host_sky)
    galaxy = Galaxy(east=6.0, north=4.0)
    crowded = replace(
        sky, east=np.append(sky.east, 12.0), north=np.append(sky.north, 8.0), flux_e=np.append(sky.flux_e, 3e4),
        galaxy=galaxy,
    )  # fmt: skip
    rendered = Rendered(crowded, ORDINARY, 1)
    assert "opposite" in mirror_host(rendered.pack, rendered.row, *rendered.host_sky)


@pytest.mark.slow
@pytest.mark.parametrize("way", [mirror_host, annulus_host])
def test_errors_without_reference_are_honest(sky: Sky, way) -> None:
    """Uneven galaxies: what is quoted covers what is missed, and is not simply wide."""
    pulls, errors = [], []
    for seed in range(12):
        rng = np.random.default_rng(900 + seed)
        radius, angle = rng.uniform(5.0, 12.0), rng.uniform(0.0, 2 * np.pi)
        galaxy = Galaxy(
            east=radius * np.cos(angle), north=radius * np.sin(angle), angle_deg=rng.uniform(0, 180),
            axis_ratio=rng.uniform(0.4, 0.9), knots=30, seed=seed,
        )  # fmt: skip
        rendered = Rendered(replace(sky, galaxy=galaxy), ORDINARY, seed)
        found = way(rendered.pack, rendered.row, *rendered.host_sky)
        if isinstance(found, str):
            continue
        error, quoted = miss(found, rendered)
        pulls.append(error / quoted)
        errors.append((error / rendered.supernova_e, quoted / rendered.supernova_e))
    assert len(pulls) >= 9
    # The annulus's floor was set on steeper galaxies (tests/bright_hosts.py --small): on these it may cover all.
    assert 0.45 < np.mean(np.abs(pulls) < 1.0) <= (0.95 if way is mirror_host else 1.0)
    assert np.sqrt(np.mean(np.square(pulls))) < 1.6
    error, quoted = np.array(errors).T
    assert np.median(quoted) < 2.0 * np.sqrt(np.mean(error**2))
