# ruff: noqa: E501 (the table reads best with one flip a line)
"""Prove that the tests can fail: one wrong sign, factor or index at a time, in a copy of the checkout.

``python tests/sabotage.py [NAME...]`` copies the checkout to a temporary folder, applies one flip, runs only the test
files that should notice, and prints which test did. Exit code 1 when a flip stays unnoticed, when its old text does not
stand exactly once in its file, or when the tests named are not green without any flip.
"""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

CHECKOUT = Path(__file__).resolve().parent.parent
PARTS = ("reduce", "tui", "demo_frames", "config", "tests", "pyproject.toml", "README.md")
LONGEST_RUN_S = 600


@dataclass(frozen=True)
class Flip:
    name: str
    file: str
    old: str
    new: str
    tests: tuple[str, ...]


def _flip(name: str, file: str, old: str, new: str, *tests: str) -> Flip:
    return Flip(name, f"reduce/{file}", old, new, tuple(f"tests/{test}.py" for test in tests))


PHOTOMETRY = "published/test_published_photometry"
STANDARD = "published/test_published_standard"
TIME = "published/test_published_time"
FIELD = "published/test_published_field"
DISTANCE = "published/test_published_distance"
CALIBRATE = "frames/test_frames_calibrate"
APERTURE = "measure/test_measure_aperture"
TYPE_IA = "candles/test_candles_type_ia"
NIGHTS = "curve/test_curve_nights"

FLIPS = (
    # ---- noise
    _flip("read noise not squared", "measure/noise.py", "read_noise_e**2 + digitisation_e", "read_noise_e + digitisation_e", PHOTOMETRY),
    _flip("sky without photon noise", "measure/noise.py", "source_e + area_px * sky_e_px", "source_e", PHOTOMETRY),
    _flip("scintillation: airmass to the power 2", "measure/noise.py", "1e-5 * airmass**3", "1e-5 * airmass**2", PHOTOMETRY),
    _flip("scintillation: aperture to the power -4/3", "measure/noise.py", "math.pow(aperture_m, -2.0 / 3.0)", "math.pow(aperture_m, -4.0 / 3.0)", PHOTOMETRY),
    _flip("digitisation of a detector", "frames/detector.py", "DIGITISATION_ADU = ", "DIGITISATION_ADU = 2 * ", "published/test_published_detector", PHOTOMETRY),
    _flip("sky level known perfectly", "measure/noise.py", "+ (area_px * sky_err_e_px) ** 2", "+ 0.0 * (area_px * sky_err_e_px) ** 2", PHOTOMETRY),
    _flip("measured photons without the sky's", "measure/aperture.py", "photons += np.maximum(sky, 0.0) * square.sum(axis=(1, 2))", "photons += 0.0", APERTURE),
    # ---- raw frame to electrons
    _flip("gain divides", "frames/calibrate.py", "(adu - pedestal) * np.float32(gain)", "(adu - pedestal) / np.float32(gain)", CALIBRATE),
    _flip("bias added", "frames/calibrate.py", "(adu - pedestal) * np", "(adu + pedestal) * np", CALIBRATE),
    _flip("read noise not squared in a frame", "frames/calibrate.py", "np.float32(read_noise_e**2 +", "np.float32(read_noise_e +", CALIBRATE),
    _flip("dark scaled the wrong way round", "frames/masters.py", "return exposure_s / dark_s", "return dark_s / exposure_s", CALIBRATE),
    _flip("flat multiplies", "frames/calibrate.py", "data /= flat", "data *= flat", CALIBRATE),
    _flip("flat leaves the variance alone", "frames/calibrate.py", "variance /= flat**2", "variance /= flat", CALIBRATE),
    # ---- time
    _flip("half exposure subtracted", "almanac/times.py", "start_mjd + exposure_s / 2.0", "start_mjd - exposure_s / 2.0", TIME),
    _flip("light time subtracted", "almanac/times.py", "tdb_minus_tt_s + light_time_s(mjd, ra_deg, dec_deg, site)", "tdb_minus_tt_s - light_time_s(mjd, ra_deg, dec_deg, site)", TIME),
    _flip("TDB - TT subtracted", "almanac/times.py", "tt_minus_utc_s(mjd) + tdb_minus_tt_s", "tt_minus_utc_s(mjd) - tdb_minus_tt_s", TIME),
    _flip("TT - TAI left out", "almanac/times.py", "tai_minus_utc_s(mjd_utc) + TT_MINUS_TAI_S", "tai_minus_utc_s(mjd_utc)", TIME),
    _flip("night ends at midnight", "almanac/times.py", "east / 360.0 - 0.5", "east / 360.0", "almanac/test_almanac_times"),
    _flip("longitude counted west", "almanac/times.py", "mjd + east / 360.0", "mjd - east / 360.0", "almanac/test_almanac_times"),
    # ---- field
    _flip("plate mirrored", "field/wcs.py", "deproject(a * dx + b * dy,", "deproject(-a * dx - b * dy,", FIELD),
    _flip("header counts pixels from 0", "field/wcs.py", "solution.crpix_px[0] + 1.0", "solution.crpix_px[0]", "field/test_field_wcs"),
    _flip("parity of the match", "field/match.py", "flat = pixel if mirrored else pixel.conjugate()", "flat = pixel.conjugate() if mirrored else pixel", "field/test_field_match"),
    _flip("any coincidence believed", "field/match.py", "CHANCE = 1e-8", "CHANCE = 1e8", "field/test_field_match"),
    # ---- apertures
    _flip("aperture area", "measure/aperture.py", "part.sum(axis=(1, 2))", "(part > 0).sum(axis=(1, 2)).astype(float)", APERTURE),
    _flip("annulus inside the star", "measure/sky.py", "INNER_FWHM = 4.0", "INNER_FWHM = 1.0", "measure/test_measure_sky", APERTURE),
    _flip("sign of the growth curve", "measure/growth.py", "_clipped_mean(-2.5 * np.log10(whole / part)", "_clipped_mean(2.5 * np.log10(whole / part)", "measure/test_measure_growth"),
    # ---- standard system
    _flip("zero point's sign", "standard/zeropoint.py", "plain = y - np.nan_to_num(fit.zp)[:, None] - fit.term * colour\n    residual = plain + fit.delta\n    frames_of_star", "plain = y + np.nan_to_num(fit.zp)[:, None] - fit.term * colour\n    residual = plain + fit.delta\n    frames_of_star", STANDARD, "standard/test_standard_zeropoint"),
    _flip("weights 1/σ", "standard/zeropoint.py", "np.where(keep, 1.0 / full, 0.0), colour, prior, informs, term)\n    return", "np.where(keep, full**-0.5, 0.0), colour, prior, informs, term)\n    return", STANDARD),
    _flip("instrumental magnitude of the exposure's sum", "standard/frame_stars.py", "-2.5 * np.log10(positive / info.exposure_s)", "-2.5 * np.log10(positive)", "standard/test_standard_solve"),
    _flip("colour term's sign", "standard/zeropoint.py", "y_mean - slope * c_mean +", "y_mean + slope * c_mean +", STANDARD),
    _flip("colour term subtracted from targets", "standard/colour.py", "return natural_mag + coefficient * colour", "return natural_mag - coefficient * colour", STANDARD),
    _flip("colour equation", "standard/colour.py", "1.0 - blue_coefficient + red_coefficient", "1.0 + blue_coefficient - red_coefficient", STANDARD),
    _flip("second-order extinction of stars", "standard/extinction.py", "- second_order * airmass * colour", "+ second_order * airmass * colour", STANDARD),
    _flip("second-order extinction of targets", "standard/colour.py", "term - second_order * (", "term + second_order * (", STANDARD),
    _flip("first-order extinction's sign", "standard/extinction.py", "Extinction(-slope,", "Extinction(slope,", STANDARD),
    # ---- points
    _flip("zero point of target fluxes", "curve/visits.py", "frame.zp_mag - FLUX_ZERO_POINT)) / stars", "FLUX_ZERO_POINT - frame.zp_mag)) / stars", NIGHTS),
    _flip("flux zero point", "records.py", "FLUX_ZERO_POINT = 25.0", "FLUX_ZERO_POINT = 23.9", STANDARD, "exchange/test_exchange_light_curve_file", TYPE_IA),
    _flip("mean of a night weighted by the errors", "curve/combine.py", "inverse = flux_err**-2.0", "inverse = flux_err**2.0", STANDARD),
    _flip("err_night and err_band exchanged", "curve/light_curve.py", "err_night=column((point.err_night for", "err_night=column((point.err_band for", "curve/test_curve_light_curve"),
    _flip("err_night and err_band exchanged in points", "curve/nights.py", "err_night=self._err_night(zero_point_err),\n            err_band=self.err_band,", "err_night=self.err_band,\n            err_band=self._err_night(zero_point_err),", NIGHTS),
    _flip("combined zero points do not average down", "curve/nights.py", "np.sqrt(np.sum((mean.weight * zero_point_errs) ** 2))", "np.sqrt(np.sum(mean.weight * zero_point_errs**2))", NIGHTS),
    # ---- distance
    _flip("host dust brightens", "candles/posterior.py", "np.column_stack([np.ones(len(points)), dust])", "np.column_stack([np.ones(len(points)), -dust])", TYPE_IA),
    _flip("Milky Way dust added twice", "candles/type_ia.py", "mags.value - dust * ebv", "mags.value + dust * ebv", TYPE_IA),
    _flip("K-correction subtracted", "candles/model.py", "self.absolute_mag(band, dm15)[None, :] + by_phase[:, None]", "self.absolute_mag(band, dm15)[None, :] - by_phase[:, None]", TYPE_IA, "candles/test_candles_real_supernovae"),
    _flip("prior of the decline rate left out", "candles/posterior.py", "ln_p += prior.ln_dm15(dm15)", "ln_p += 0.0 * prior.ln_dm15(dm15)", TYPE_IA),
    _flip("prior of the decline rate upside down", "candles/model.py", "return -0.5 * np.where(x < 0,", "return 0.5 * np.where(x < 0,", TYPE_IA),
    _flip("time contraction", "candles/distance.py", "(mjd - t_max) / (1.0 + z)", "(mjd - t_max) * (1.0 + z)", DISTANCE),
    _flip("grey scatter left out", "candles/budget.py", 'BudgetLine("intrinsic scatter", solved.data.model.scatter.grey,', 'BudgetLine("intrinsic scatter", 0.0,', TYPE_IA),
    _flip("absolute magnitudes 0.1 brighter", "candles/model.py", "np.asarray(np.polynomial.polynomial.polyval(np.asarray(dm15) - 1.1, coefficients), float)", "np.asarray(np.polynomial.polynomial.polyval(np.asarray(dm15) - 1.1, coefficients), float) - 0.1", TYPE_IA, DISTANCE),
    _flip("H0 scale's sign", "candles/distance.py", "5.0 * math.log10(h0_to / h0_from)", "5.0 * math.log10(h0_from / h0_to)", DISTANCE),
    _flip("reddening scale not converted", "candles/reddening.py", "SF11_PER_SFD = 0.86", "SF11_PER_SFD = 1.0", DISTANCE),
    _flip("distance: 25 instead of -25", "candles/distance.py", "10.0 ** ((mu - 25.0) / 5.0)", "10.0 ** ((mu + 25.0) / 5.0)", DISTANCE),
    _flip("distance: 2.5 instead of 5", "candles/distance.py", "5.0 * math.log10(distance_mpc) + 25.0", "2.5 * math.log10(distance_mpc) + 25.0", DISTANCE),
)  # fmt: skip


def _run(copy: Path, tests: tuple[str, ...]) -> tuple[int, str]:
    """Exit code and output of pytest in the copy, which is what it imports (`_imports_copy` makes sure)."""
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-x", "-q", "-p", "no:cacheprovider", "-p", "sabotage_guard", *tests],
        cwd=copy, env=_environment(copy), capture_output=True, text=True, check=False, timeout=LONGEST_RUN_S,
    )  # fmt: skip
    return done.returncode, done.stdout + done.stderr


def _environment(copy: Path) -> dict[str, str]:
    return {
        **os.environ,
        "PYTHONPATH": str(copy),
        "PYTHONDONTWRITEBYTECODE": "1",
        "OPENBLAS_NUM_THREADS": "1",
        "HYPOTHESIS_STORAGE_DIRECTORY": str(copy / ".hypothesis"),
    }


def _make_copy(folder: Path) -> Path:
    copy = folder / "checkout"
    copy.mkdir()
    for part in PARTS:
        source = CHECKOUT / part
        if source.is_dir():
            shutil.copytree(source, copy / part, symlinks=True, ignore=shutil.ignore_patterns("__pycache__"))
        else:
            shutil.copy2(source, copy / part)
    # Loaded by pytest itself: an installed package in place of the copy would make every flip look unnoticed.
    (copy / "sabotage_guard.py").write_text(
        "import pathlib, reduce\n"
        "here = pathlib.Path(__file__).parent\n"
        "assert pathlib.Path(reduce.__file__).is_relative_to(here), f'{reduce.__file__} is not the copy'\n"
    )
    return copy


def _noticed_by(output: str) -> str:
    found = re.search(r"^(?:FAILED|ERROR) (\S+)", output, re.MULTILINE)
    return found.group(1).removeprefix("tests/") if found else ""


def _try(flip: Flip, copy: Path) -> tuple[str, str]:
    """("red", test), or what went wrong and why."""
    path = copy / flip.file
    whole = path.read_text(encoding="utf-8")
    count = whole.count(flip.old)
    if count != 1:
        return "LOST", f"the old text stands {count} times in {flip.file}"
    path.write_text(whole.replace(flip.old, flip.new), encoding="utf-8")
    try:
        code, output = _run(copy, flip.tests)
    finally:
        path.write_text(whole, encoding="utf-8")
    if code == 0:
        return "GREEN", "no test noticed: " + ", ".join(flip.tests)
    test = _noticed_by(output)
    if code != 1 or not test:
        return "BROKEN", f"pytest ended with {code}: {output.strip().splitlines()[-1] if output.strip() else ''}"
    return "red", test


def _without_flips(flips: list[Flip], copy: Path) -> str:
    tests = tuple(sorted({test for flip in flips for test in flip.tests}))
    code, output = _run(copy, tests)
    return "" if code == 0 else _noticed_by(output) or output[-500:]


def main(names: list[str]) -> int:
    """Run the flips of these names (parts of names will do), or all."""
    flips = [flip for flip in FLIPS if not names or any(name in flip.name for name in names)]
    if not flips:
        print("No flip has such a name; there are:", *(flip.name for flip in FLIPS), sep="\n  ")
        return 1
    failures = 0
    with tempfile.TemporaryDirectory(prefix="sabotage-") as folder:
        copy = _make_copy(Path(folder))
        if red := _without_flips(flips, copy):
            print(f"The tests are not green without any flip: {red}")
            return 1
        for flip in flips:
            start = time.perf_counter()
            state, detail = _try(flip, copy)
            failures += state != "red"
            print(f"{state:6} {flip.name} · {detail} · {time.perf_counter() - start:.1f} s", flush=True)
    print(f"{len(flips) - failures} of {len(flips)} flips turn a test red.")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
