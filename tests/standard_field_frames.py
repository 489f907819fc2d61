"""FITS frames of standard fields with a known zero point, extinction and colour term: Moffat stars on a flat sky.

Nothing of the reducer makes them: altitudes are astropy's, the airmass is Pickering's (2002, DIO 12, 20).
"""

from __future__ import annotations

import os
import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import astropy.units as u
import numpy as np
from astropy.coordinates import AltAz, EarthLocation, SkyCoord
from astropy.io import fits
from astropy.time import Time

NX, NY, SCALE_ARCSEC = 460, 400, 1.0
GAIN, READ_NOISE_E, BIAS_ADU = 1.5, 8.0, 1000.0
FWHM_PX, BETA = 3.0, 4.0
LATITUDE, LONGITUDE, HEIGHT_M = 20.0, -16.0, 1500.0
ZERO_POINTS = {"B": 22.10, "V": 22.35}
FIRST_ORDER = {"B": 0.27, "V": 0.15}
SECOND_ORDER = {"B": -0.03, "V": 0.0}
TERMS = {"B": 0.09, "V": -0.045}
SKY_E_PX = {"B": 120.0, "V": 200.0}
NIGHT_STEP = {"B": -0.04, "V": -0.03}
"""How the zero point changes from one night to the next."""
PLACE = EarthLocation.from_geodetic(LONGITUDE * u.deg, LATITUDE * u.deg, HEIGHT_M * u.m)

# Landolt 2009 (AJ 137, 4186): V, B-V and positions in degrees.
STANDARDS = {
    "RU 149": (
        ("RU 149B", 111.073217, -0.551717, 12.642, 0.662),
        ("RU 149D", 111.064075, -0.546622, 11.480, -0.037),
        ("RU 149F", 111.058654, -0.527414, 13.471, 1.115),
        ("RU 149G", 111.049700, -0.532808, 12.829, 0.541),
    ),
    "PG0918": (
        ("PG0918+029", 140.367571, 2.767297, 13.327, -0.271),
        ("PG0918+029A", 140.396279, 2.772064, 14.490, 0.536),
        ("PG0918+029B", 140.387183, 2.799744, 13.963, 0.765),
        ("PG0918+029C", 140.426275, 2.776964, 13.537, 0.631),
        ("PG0918+029D", 140.341400, 2.791189, 12.272, 1.044),
    ),
}
TARGET_CENTRE = (120.0, 5.0)


@dataclass(frozen=True)
class Star:
    ra_deg: float
    dec_deg: float
    v: float
    bv: float

    def mag(self, band: str) -> float:
        return self.v + (self.bv if band == "B" else 0.0)


def stars_of(field: str, rng: np.random.Generator, bv_range: tuple[float, float] = (0.2, 1.3)) -> list[Star]:
    """Standards with fainter strangers about them, or an invented field about the target."""
    if field == "target":
        centre = TARGET_CENTRE
        found = [Star(*centre, 14.0, 0.1)]
        n, faintest, brightest = 24, 15.0, 12.0
    else:
        rows = STANDARDS[field]
        centre = (np.mean([row[1] for row in rows]), np.mean([row[2] for row in rows]))
        found = [Star(*row[1:]) for row in rows]
        n, faintest, brightest = 12, 16.0, 13.5
    while n:
        star = Star(
            centre[0] + rng.uniform(-0.055, 0.055), centre[1] + rng.uniform(-0.048, 0.048),
            rng.uniform(brightest, faintest), rng.uniform(*bv_range),
        )  # fmt: skip
        if all(np.hypot(star.ra_deg - s.ra_deg, star.dec_deg - s.dec_deg) * 3600 > 22 for s in found):
            found.append(star)
            n -= 1
    return found


def airmass_of(ra_deg: float, dec_deg: float, mjd: float) -> float:
    there = SkyCoord(ra_deg * u.deg, dec_deg * u.deg).transform_to(
        AltAz(obstime=Time(mjd, format="mjd"), location=PLACE)
    )
    h = float(there.alt.deg)
    return float(1.0 / np.sin(np.radians(h + 244.0 / (165.0 + 47.0 * h**1.1))))


def exposure(
    stars: list[Star], band: str, mjd_mid: float, exposure_s: float, rng: np.random.Generator, *,
    zero_point_step: float = 0.0, turn_deg: float = 3.0, cloud_mag: float = 0.0,
) -> tuple[np.ndarray, dict[str, object]]:  # fmt: skip
    """Raw counts and header of one frame centred on the mean of the first star's field."""
    ra0, dec0 = np.mean([s.ra_deg for s in stars]), np.mean([s.dec_deg for s in stars])
    ra0, dec0 = ra0 + rng.normal(0, 3 / 3600), dec0 + rng.normal(0, 3 / 3600)
    x_air = airmass_of(ra0, dec0, mjd_mid)
    fwhm = FWHM_PX * x_air**0.6
    alpha = fwhm / (2 * np.sqrt(2 ** (1 / BETA) - 1))
    image = np.full((NY, NX), SKY_E_PX[band] * exposure_s / 60.0)
    turn = np.radians(turn_deg)
    fine = (np.arange(5) - 2) / 5
    for star in stars:
        dra = np.radians(star.ra_deg - ra0)
        d, d0 = np.radians(star.dec_deg), np.radians(dec0)
        below = np.sin(d0) * np.sin(d) + np.cos(d0) * np.cos(d) * np.cos(dra)
        east = np.degrees(np.cos(d) * np.sin(dra) / below) * 3600
        north = np.degrees((np.cos(d0) * np.sin(d) - np.sin(d0) * np.cos(d) * np.cos(dra)) / below) * 3600
        x = (NX - 1) / 2 + (-east * np.cos(turn) + north * np.sin(turn)) / SCALE_ARCSEC
        y = (NY - 1) / 2 + (east * np.sin(turn) + north * np.cos(turn)) / SCALE_ARCSEC
        level = ZERO_POINTS[band] + zero_point_step - cloud_mag
        coefficient = TERMS[band] - SECOND_ORDER[band] * x_air
        instrumental = star.mag(band) - level + FIRST_ORDER[band] * x_air - coefficient * star.bv
        flux = 10 ** (-0.4 * instrumental) * exposure_s
        low_x, high_x = max(int(x) - 45, 0), min(int(x) + 46, NX)
        low_y, high_y = max(int(y) - 45, 0), min(int(y) + 46, NY)
        if low_x >= high_x or low_y >= high_y:
            continue
        px = (np.arange(low_x, high_x)[:, None] + fine).ravel() - x
        py = (np.arange(low_y, high_y)[:, None] + fine).ravel() - y
        shape = (BETA - 1) / (np.pi * alpha**2) * (1 + (px**2 + py[:, None] ** 2) / alpha**2) ** -BETA
        binned = shape.reshape(high_y - low_y, 5, high_x - low_x, 5).mean(axis=(1, 3))
        image[low_y:high_y, low_x:high_x] += flux * binned
    raw = (rng.poisson(image) + rng.normal(0, READ_NOISE_E, image.shape)) / GAIN + BIAS_ADU
    header = {
        "IMAGETYP": "Light", "FILTER": band, "EXPTIME": exposure_s, "RA": float(ra0), "DEC": float(dec0),
        "DATE-OBS": Time(mjd_mid - exposure_s / 2 / 86400, format="mjd").isot,
    }  # fmt: skip
    return raw, header


def write(path: Path, raw: np.ndarray, header: Mapping[str, object]) -> None:
    """As a camera does, some time ago."""
    path.parent.mkdir(parents=True, exist_ok=True)
    hdu = fits.PrimaryHDU(np.clip(np.rint(raw), 0, 65535).astype(np.uint16))
    hdu.header.update({"INSTRUME": "Invented cam", "GAIN": GAIN, "RDNOISE": READ_NOISE_E, "PIXSCALE": SCALE_ARCSEC})
    for key, value in header.items():
        hdu.header[key] = value
    hdu.writeto(path)
    then = time.time() - 3600
    os.utime(path, (then, then))


def write_calibration(folder: Path, rng: np.random.Generator, mjd: float, bands: str = "BV") -> None:
    """Bias frames and even flats."""
    for k in range(5):
        raw = BIAS_ADU + rng.normal(0, READ_NOISE_E, (NY, NX)) / GAIN
        when = {"DATE-OBS": Time(mjd + 1e-4 * k, format="mjd").isot}
        write(folder / f"bias{k}.fits", raw, {"IMAGETYP": "Bias", "EXPTIME": 0.0, **when})
        for band in bands:
            flat = BIAS_ADU + (rng.poisson(45000.0, (NY, NX)) + rng.normal(0, READ_NOISE_E, (NY, NX))) / GAIN
            write(folder / f"flat{band}{k}.fits", flat, {"IMAGETYP": "Flat", "FILTER": band, "EXPTIME": 2.0, **when})


SETTINGS_TEXT = f"""
[site]
latitude_deg = {LATITUDE}
longitude_deg = {LONGITUDE}
height_m = {HEIGHT_M}
[camera]
scale_arcsec = {SCALE_ARCSEC}
saturation_adu = 65000
"""


def write_sequence(path: Path, stars: list[Star]) -> None:
    """Comparison stars: every star but the first, which is the target."""
    lines = ["id,ra,dec,B,B_err,V,V_err"]
    lines += [
        f"c{k:02d},{s.ra_deg:.6f},{s.dec_deg:.6f},{s.mag('B'):.4f},0.005,{s.v:.4f},0.005"
        for k, s in enumerate(stars[1:])
    ]
    path.write_text("\n".join(lines) + "\n")


FIRST_MJD = 60718.87
"""A February evening at the site."""


def lay_standard_nights(
    folder: Path, rng: np.random.Generator, nights: int = 2, steps: int = 5, bands: str = "BV"
) -> None:
    """Both standard fields, again and again through some nights; every OBJECT says something else."""
    fields = {name: stars_of(name, rng) for name in STANDARDS}
    for night in range(nights):
        for step in range(steps):
            for f, (name, stars) in enumerate(fields.items()):
                for b, band in enumerate(bands):
                    mjd = FIRST_MJD + night + 0.065 * step + 0.004 * (2 * f + b)
                    raw, header = exposure(
                        stars, band, mjd, 40.0, rng, zero_point_step=night * NIGHT_STEP[band],
                        turn_deg=3.0 + 180.0 * (step > 2),
                    )  # fmt: skip
                    header["OBJECT"] = "flat lamp test"
                    write(folder / f"n{night}" / f"s{step}-{name.replace(' ', '')}-{band}.fits", raw, header)
