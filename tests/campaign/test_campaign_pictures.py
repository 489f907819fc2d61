"""What the app looks at: star readings, the difference image and frames laid on each other, on frames of the demo."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from small_campaign import BIAS, DARKS, FIRST, FLATS, lay, make_campaign, opened, reduce_here, target_of

from reduce.campaign.difference_image import DifferenceError, difference_image
from reduce.campaign.star_readings import readings_of, star_readings
from reduce.field.registered import registered
from reduce.frames.reader import open_frame
from reduce.records import STAR_DTYPE

LATER = "2025-03-02/20250302-"
SCIENCE, REFERENCE = f"{LATER}004-V.fits", [f"{FIRST}{n:03}-V.fits" for n in (39, 40, 41)]


@pytest.fixture(scope="module")
def folder(demo, tmp_path_factory):
    """One frame of the target with a reference."""
    place = tmp_path_factory.mktemp("pictures")
    lay(demo, place / "reference", REFERENCE)
    target = replace(target_of(demo), kind="other", reference_folder=str(place / "reference"))
    made = make_campaign(demo, place, [*BIAS, *DARKS, *FLATS, SCIENCE], [target])
    reduce_here(made)
    return made


def test_readings_agree_with_catalogue_and_light_curve(folder) -> None:
    with opened(folder) as campaign:
        (row,) = [row for row in campaign.frame_rows() if row.kind == "light"]
        stars = {star.name: star for star in star_readings(campaign, row.id) if star.name}
        sequence, name = campaign.sequence(), campaign.target(None).name
        (point,) = campaign.curve(name, per_frame=True)
        assert stars[name].is_target
        assert stars[name].snr == pytest.approx(point.flux / point.flux_err, rel=0.2)
        assert stars[name].mag == pytest.approx(point.natural_mag, abs=0.03)
        bright = [k for k, star in enumerate(sequence.ids) if star in stars and (stars[star].snr or 0) > 100]
        assert len(bright) > 10
        misses = [stars[sequence.ids[k]].mag - sequence.mag["V"][k] for k in bright]
        assert np.abs(np.median(misses)) < 0.05, "the colour term is left out"
        for k in bright:
            x, y = row.pixel[sequence.ids[k]]
            assert np.hypot(stars[sequence.ids[k]].x_px - x, stars[sequence.ids[k]].y_px - y) < 1.0
        growth = np.median([stars[sequence.ids[k]].growth_mag for k in bright], axis=0)
        assert growth[-1] == 0.0
        assert growth[0] > growth[4] > growth[7] > -0.01, (
            "light outside an aperture; a neighbour may disturb single stars"
        )
        assert star_readings(campaign, "no such frame") == ()


def test_a_frame_without_a_zero_point_gives_no_magnitude(folder) -> None:
    with opened(folder) as campaign:
        measured = campaign.measured()[0]
        for star in readings_of(measured, None, campaign.sequence()):
            assert (star.mag, star.mag_err) == (None, None)
        assert readings_of(replace(measured, stars=np.zeros(0, STAR_DTYPE)), None, campaign.sequence()) == ()
        unknown = measured.stars.copy()
        unknown["flux_e"] = unknown["flux_err_e"] = unknown["peak_adu"] = np.nan
        star = readings_of(replace(measured, stars=unknown), None, campaign.sequence())[0]
        assert (star.snr, star.peak_adu) == (None, None), "unknown is never 0"


def test_the_difference_holds_the_light_that_is_measured_on_it_and_no_host(folder) -> None:
    with opened(folder) as campaign:
        (row,) = [row for row in campaign.frame_rows() if row.kind == "light"]
        name = campaign.target(None).name
        left = difference_image(campaign, row.id, name)
        measured = campaign.measured()[0]
        target = measured.stars[measured.stars["role"] == 1][0]
        y, x = np.mgrid[: left.light_e.shape[0], : left.light_e.shape[1]]
        radius = np.hypot(x + left.x0 - target["x_px"], y + left.y0 - target["y_px"])
        fwhm_px = measured.quality.fwhm_px
        within = np.nansum(np.where(radius < 2.0 * fwhm_px, left.light_e, 0.0))
        assert within == pytest.approx(target["psf_flux_e"], rel=0.1)
        beside = left.light_e[(radius > 4.0 * fwhm_px) & np.isfinite(left.light_e)]
        assert abs(np.median(beside)) < 0.3 * np.std(beside)


def test_a_difference_that_is_not_there_says_why(folder) -> None:
    with opened(folder) as campaign:
        (row,) = [row for row in campaign.frame_rows() if row.kind == "light"]
        with pytest.raises(DifferenceError, match="not measured"):
            difference_image(campaign, "no such frame", campaign.target(None).name)
        with pytest.raises(DifferenceError, match="not measured on this frame"):
            difference_image(campaign, row.id, "another")


def test_a_frame_laid_on_another_has_its_stars_where_the_other_has_them(folder) -> None:
    with opened(folder) as campaign:
        rows = campaign.frame_rows()
        (light,) = [row for row in rows if row.kind == "light"]
        reference = next(row for row in rows if row.kind == "reference")
        image = open_frame(folder.parent / "reference" / REFERENCE[0].split("/")[-1], campaign.settings).read()
        if reference.file != REFERENCE[0].split("/")[-1]:
            reference = next(row for row in rows if row.file == REFERENCE[0].split("/")[-1])
        nx = ny = 512
        laid = registered(image, reference.solution, light.solution, nx, ny)
        assert laid.shape == (ny, nx)
        seen = 0
        for star in star_readings(campaign, light.id):
            column, line = round(star.x_px), round(star.y_px)
            if star.is_target or (star.snr or 0) < 150 or not (8 < column < nx - 9 and 8 < line < ny - 9):
                continue
            cut = laid[line - 4 : line + 5, column - 4 : column + 5]
            if not np.isfinite(cut).all():
                continue
            light_here = np.maximum(cut - np.median(cut) - 0.3 * np.ptp(cut), 0.0)
            dy, dx = np.mgrid[-4:5, -4:5]
            at_x = float((light_here * dx).sum() / light_here.sum()) + column
            at_y = float((light_here * dy).sum() / light_here.sum()) + line
            assert np.hypot(at_x - star.x_px, at_y - star.y_px) < 0.9, "nearest pixel: half a pixel in each axis"
            seen += 1
        assert seen > 5
