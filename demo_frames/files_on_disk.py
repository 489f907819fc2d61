"""How the invented observatory writes its files, whole and broken."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import numpy as np
from astropy.io import fits

from demo_frames.detector import Raw
from demo_frames.scenario import MJD_OF_UNIX_EPOCH, Scenario
from demo_frames.schedule import SECONDS_PER_DAY, Exposure
from demo_frames.star_field import BANDS, StarField

IMAGE_TYPES = {"light": "Light Frame", "bias": "Bias Frame", "dark": "Dark Frame", "flat": "Flat Field"}
TEXT_FILE = "The camera answered with an error, no image was read out.\n"
KEPT_SHARE = 0.55
"""Part of a truncated file that reached the disk."""
WRONG_OBJECT = "Polar alignment"


def iso_time(mjd: float) -> str:
    """UTC to the millisecond, as DATE-OBS holds it."""
    milliseconds = round((mjd - MJD_OF_UNIX_EPOCH) * SECONDS_PER_DAY * 1000.0)
    return str(np.datetime64(milliseconds, "ms"))


def sexagesimal(value: float, signed: bool) -> str:
    """``hh mm ss.ss`` or ``+dd mm ss.s`` of a non-negative or signed number."""
    digits = 1 if signed else 2
    total = round(abs(value) * 3600.0 * 10**digits)
    whole, fraction = divmod(total, 10**digits)
    minutes, seconds = divmod(whole, 60)
    hours, minutes = divmod(minutes, 60)
    sign = ("-" if value < 0 else "+") if signed else ""
    return f"{sign}{hours:02d} {minutes:02d} {seconds:02d}.{fraction:0{digits}d}"


def header(
    scenario: Scenario, exposure: Exposure, claimed: tuple[float, float], rng: np.random.Generator
) -> fits.Header:
    """Cards of one frame; ``claimed`` is where the telescope believes to point, degrees."""
    camera, telescope = scenario.camera, scenario.telescope
    cards = fits.Header()
    cards["IMAGETYP"] = IMAGE_TYPES[exposure.kind]
    cards["DATE-OBS"] = (iso_time(exposure.start_mjd), "UTC, start of exposure")
    cards["EXPTIME"] = (exposure.exposure_s, "[s]")
    if exposure.band:
        cards["FILTER"] = exposure.band
    if exposure.kind == "light":
        wrong = exposure.fault is not None and exposure.fault.name == "wrong object"
        cards["OBJECT"] = WRONG_OBJECT if wrong else scenario.supernova.name
        cards["RA"] = (sexagesimal(claimed[0] / 15.0, signed=False), "hours, J2000")
        cards["DEC"] = (sexagesimal(claimed[1], signed=True), "degrees, J2000")
    cards["OBSERVAT"] = scenario.site.name
    cards["TELESCOP"] = telescope.name
    cards["INSTRUME"] = camera.name
    cards["FOCALLEN"] = (telescope.focal_length_mm, "[mm]")
    cards["XPIXSZ"] = (camera.pixel_um, "[um]")
    cards["YPIXSZ"] = (camera.pixel_um, "[um]")
    cards["XBINNING"] = 1
    cards["YBINNING"] = 1
    cards["GAIN"] = (camera.gain_e_per_adu, "[e-/ADU]")
    cards["RDNOISE"] = (camera.read_noise_e, "[e-]")
    cards["CCD-TEMP"] = (round(camera.temperature_c + rng.normal(0.0, 0.1), 2), "[C]")
    return cards


def write_frame(path: Path, raw: Raw, cards: fits.Header, fault: str) -> None:
    """Write one frame in the form that the fault asks for."""
    path.parent.mkdir(parents=True, exist_ok=True)
    if fault == "empty":
        path.write_bytes(b"")
        return
    if fault == "text":
        path.write_text(TEXT_FILE, encoding="utf-8")
        return
    if fault == "compressed":
        hdus = fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(raw, cards, compression_type="RICE_1")])
    elif fault == "extension":
        image = fits.ImageHDU(raw, name="SCI")
        image.header["INHERIT"] = True
        hdus = fits.HDUList([fits.PrimaryHDU(header=cards), image])
    else:
        hdus = fits.HDUList([fits.PrimaryHDU(raw, cards)])
    buffer = io.BytesIO()
    hdus.writeto(buffer)
    content = buffer.getvalue()
    path.write_bytes(content[: int(KEPT_SHARE * len(content))] if fault == "truncated" else content)


def write_comparison(path: Path, stars: StarField) -> None:
    """The comparison sequence: degrees and magnitudes with errors."""
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(["id", "ra", "dec", *(name for band in BANDS for name in (band, f"{band}_err"))])
        for k, star in enumerate(stars.ids):
            mags = [
                text
                for band in BANDS
                for text in (f"{stars.catalogue_mag[band][k]:.4f}", f"{stars.catalogue_err[band][k]:.3f}")
            ]
            writer.writerow([star, f"{stars.ra_deg[k]:.6f}", f"{stars.dec_deg[k]:.6f}", *mags])


def observatory_toml(scenario: Scenario) -> str:
    """Settings of the invented observatory, as its observer would have written them."""
    site, telescope, camera = scenario.site, scenario.telescope, scenario.camera
    second_order = ", ".join(
        f"{name} = {band.second_order}" for name, band in scenario.bands.items() if band.second_order
    )
    return f"""\
[site]
name = "{site.name}"
latitude_deg = {site.latitude_deg}
longitude_deg = {site.longitude_deg}
height_m = {site.height_m}

[telescope]
name = "{telescope.name}"
aperture_m = {telescope.aperture_m}
scintillation_coefficient = {telescope.scintillation_coefficient}

[camera]
name = "{camera.name}"
gain_e_per_adu = {camera.gain_e_per_adu}
read_noise_e = {camera.read_noise_e}
saturation_adu = {camera.saturation_adu}
scale_arcsec = {camera.scale_arcsec}
dark_e_per_s = {camera.dark_e_per_s}

[photometry]
second_order_extinction = {{ {second_order} }}
"""
