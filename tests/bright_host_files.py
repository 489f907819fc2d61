"""Frames of the nights on bright hosts as files, with headers as a camera writes them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from astropy.io import fits
from bright_host_frames import Detector, FrameTruth, Optics, render
from bright_host_scene import EXPOSURE_S, FIRST_NIGHT_MJD, REFERENCE_EXPOSURE_S, Camera, Scene, Shot

FLAT_E, N_BIAS, N_DARK, N_FLAT = 38000.0, 9, 7, 9


def iso_time(mjd: float) -> str:
    return str(np.datetime64(round((mjd - 40587) * 86400000), "ms"))


def sexagesimal(value: float) -> str:
    sign, value = ("-" if value < 0 else "+"), abs(value)
    whole = round(value * 36000)
    return f"{sign}{whole // 36000:02d}:{whole // 600 % 60:02d}:{whole % 600 / 10:04.1f}"


def write(path: Path, raw: np.ndarray, camera: Camera, cards: dict[str, object]) -> None:
    header = fits.Header()
    header["INSTRUME"], header["TELESCOP"] = camera.name, "Tarn House 0.35 m"
    header["GAIN"], header["RDNOISE"] = (camera.gain_e_per_adu, "[e-/ADU]"), (camera.read_noise_e, "[e-]")
    header["XPIXSZ"], header["YPIXSZ"] = 9.0, 9.0
    header["FOCALLEN"] = (round(9.0 / camera.scale_arcsec * 206.264806, 2), "[mm]")
    header["XBINNING"], header["YBINNING"], header["CCD-TEMP"] = 1, 1, -20.0
    header.update(cards)
    path.parent.mkdir(parents=True, exist_ok=True)
    fits.PrimaryHDU(raw, header).writeto(path, overwrite=True)


def write_light(folder: Path, scene: Scene, shot: Shot, detector: Detector) -> FrameTruth:
    raw, truth = render(scene, shot, detector)
    slip = np.random.default_rng([*shot.seed, 5]).normal(0, 25 / 3600, 2)
    optics = Optics(scene, shot)
    ra = (optics.ra + slip[0]) % 360
    write(folder / shot.name, raw, scene.camera, {
        "IMAGETYP": "Light Frame", "OBJECT": f"Host {scene.number}", "FILTER": shot.band,
        "DATE-OBS": iso_time(shot.mjd_start), "EXPTIME": shot.exposure_s,
        "RA": sexagesimal(ra / 15)[1:], "DEC": sexagesimal(optics.dec + slip[1]),
    })  # fmt: skip
    return truth


def write_calibration(
    folder: Path, detector: Detector, bands: tuple[str, ...], seed: int,
    dark_exposures_s: tuple[float, ...] = (EXPOSURE_S, REFERENCE_EXPOSURE_S),
) -> None:  # fmt: skip
    """Bias, darks of every exposure and flats, taken in the afternoon of the first night."""
    camera, rng = detector.camera, np.random.default_rng([seed, 8])
    moment = FIRST_NIGHT_MJD + 0.7
    dark = detector.dark_e_per_s
    plan = [("bias", "Bias Frame", 0.0, "", N_BIAS)]
    plan += [(f"dark{t:.0f}", "Dark Frame", t, "", N_DARK) for t in dark_exposures_s]
    plan += [(f"flat{band}", "Flat Field", 4.0, band, N_FLAT) for band in bands]
    for name, kind, exposure_s, band, count in plan:
        for k in range(count):
            light = FLAT_E * rng.uniform(0.85, 1.15) * detector.sensitivity[band] if band else 0.0
            moment += (exposure_s + 4) / 86400
            cards: dict[str, object] = {"IMAGETYP": kind, "DATE-OBS": iso_time(moment), "EXPTIME": exposure_s}
            if band:
                cards["FILTER"] = band
            raw = detector.read_out(light + dark * exposure_s, rng)
            write(folder / f"{name}-{k:02d}.fits", raw, camera, cards)
