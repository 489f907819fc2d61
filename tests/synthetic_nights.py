"""Measured frames of an invented field with known zero points, colour terms and catalogue errors."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np

from reduce.field.wcs import sky_to_pixel
from reduce.records import (
    COLOUR_OF_BAND,
    LADDER_FWHM,
    N_RADII,
    STAR_DTYPE,
    FieldSolution,
    FrameInfo,
    Measured,
    Quality,
    Sequence,
    Target,
)
from reduce.settings import Photometry, Settings, Site

SITE = Site(name="Invented Hill", latitude_deg=40.0, longitude_deg=-5.0, height_m=1200.0)
SETTINGS = Settings(site=SITE, photometry=Photometry(second_order_extinction={"B": -0.03}))
TERMS = {"B": 0.08, "V": -0.04, "R": -0.03, "I": 0.02}
FIRST_ORDER = {"B": 0.30, "V": 0.18, "R": 0.12, "I": 0.07}
SECOND_ORDER = {"B": -0.03}
ZERO_POINTS = {"B": 22.6, "V": 22.9, "R": 22.8, "I": 22.2}
SKY_E_PX = {"B": 150.0, "V": 300.0, "R": 500.0, "I": 900.0}
CENTRE = (150.0, 20.0)
FWHM_PX = 3.0
TARGET = Target("Invented SN", "type_ia", *CENTRE)
FIRST_MJD = 60000.9
"""Shortly before midnight at the site."""


@dataclass(frozen=True)
class Field:
    """True magnitudes and what the catalogue says of them."""

    true_mag: dict[str, np.ndarray]
    sequence: Sequence


def invented_field(rng: np.random.Generator, n: int = 30, error: float | None = None, bands: str = "BVRI") -> Field:
    """Stars of V 12.5–15.5 and B−V 0.3–1.3; catalogue errors 0.004–0.012 mag unless ``error`` is given."""
    bv = rng.uniform(0.3, 1.3, n)
    v = rng.uniform(12.5, 15.5, n)
    vr = 0.56 * bv + rng.normal(0, 0.02, n)
    ri = 0.5 * bv + rng.normal(0, 0.02, n)
    true = {"B": v + bv, "V": v, "R": v - vr, "I": v - vr - ri}
    errors = {band: rng.uniform(0.004, 0.012, n) if error is None else np.full(n, error) for band in bands}
    catalogue = {band: true[band] + errors[band] * rng.normal(size=n) for band in bands}
    ra = CENTRE[0] + rng.uniform(-0.08, 0.08, n)
    dec = CENTRE[1] + rng.uniform(-0.08, 0.08, n)
    ids = tuple(f"s{k:02d}" for k in range(n))
    return Field(true, Sequence("invented", ids, ra, dec, catalogue, errors))


@dataclass(frozen=True)
class Shot:
    """One exposure to be simulated; target magnitudes are standard ones."""

    name: str
    band: str
    mjd: float
    target_mag: dict[str, float]
    airmass: float = 1.2
    transparency_mag: float = 0.0
    patchy_mag: float = 0.0
    exposure_s: float = 120.0
    camera: str = "cam"
    lost: tuple[int, ...] = ()
    """Stars off the frame."""
    flat_scatter_mag: float = 0.0
    noise: bool = True
    rotation_deg: float = 0.0
    plane_mag: tuple[float, float] = (0.0, 0.0)
    """How much fainter stars are half a frame to the right and half a frame up."""
    seen_through: str | None = None
    """Filter that was really there."""


def true_zero_point(shot: Shot) -> float:
    """Zero point at colour 0 of a frame."""
    return ZERO_POINTS[shot.band] - FIRST_ORDER[shot.band] * shot.airmass - shot.transparency_mag


def measure(shot: Shot, field: Field, rng: np.random.Generator, targets: Iterable[Target] = (TARGET,)) -> Measured:
    """What a perfect measurement of the exposure gives, with photon, sky and read noise."""
    band, sequence, targets = shot.seen_through or shot.band, field.sequence, list(targets)
    blue, red = COLOUR_OF_BAND[band]
    n = len(sequence)
    mag = np.concatenate([field.true_mag[band], [shot.target_mag[band]] * len(targets)])
    colour = np.concatenate(
        [
            field.true_mag[blue] - field.true_mag[red],
            [shot.target_mag[blue] - shot.target_mag[red]] * len(targets),
        ]
    )
    shot, labelled = replace(shot, band=band), shot.band
    coefficient = TERMS[band] - SECOND_ORDER.get(band, 0.0) * shot.airmass
    instrumental = mag - true_zero_point(shot) - coefficient * colour
    instrumental = instrumental + shot.flat_scatter_mag * rng.normal(size=len(mag))
    instrumental = instrumental + shot.patchy_mag * rng.uniform(size=len(mag))
    scale, turn = 1.0 / 3600.0, np.radians(shot.rotation_deg)
    cd = ((-scale * np.cos(turn), scale * np.sin(turn)), (scale * np.sin(turn), scale * np.cos(turn)))
    solution = FieldSolution(CENTRE, (255.5, 255.5), cd, n, 0.1)
    rows = np.zeros(len(mag), STAR_DTYPE)
    rows["ra_deg"] = np.concatenate([sequence.ra_deg, [t.ra_deg for t in targets]])
    rows["dec_deg"] = np.concatenate([sequence.dec_deg, [t.dec_deg for t in targets]])
    rows["x_px"], rows["y_px"] = sky_to_pixel(solution, rows["ra_deg"], rows["dec_deg"])
    place = np.stack([rows["x_px"] - 255.5, rows["y_px"] - 255.5], axis=-1) / 256.0
    instrumental = instrumental + place @ np.array(shot.plane_mag)
    rows["role"][n:] = 1
    rows["target"][n:] = [t.name for t in targets]
    radius = np.array([*LADDER_FWHM, *np.full(N_RADII - len(LADDER_FWHM), 2.0)]) * FWHM_PX
    enclosed = 1 - np.exp(-((radius / FWHM_PX) ** 2) * 4 * np.log(2))
    flux = 10 ** (-0.4 * instrumental[:, None]) * shot.exposure_s * enclosed
    background = np.pi * radius**2 * (SKY_E_PX[band] + 64.0)
    err = np.sqrt(flux + background)
    if shot.noise:
        # One draw a star: apertures are nested, and only one of them is used.
        flux = flux + err * rng.normal(size=(len(mag), 1))
    rows["flux_e"], rows["area_px"] = flux, np.pi * radius**2
    rows["flux_err_e"] = np.sqrt(np.maximum(flux, 0) + background)
    there = np.array([k not in shot.lost for k in range(len(mag))])
    info = FrameInfo(
        kind="light", band=labelled, filter_name=labelled, object_name="", camera=shot.camera, mjd_mid=shot.mjd,
        exposure_s=shot.exposure_s, ra_deg=None, dec_deg=None, scale_arcsec=1.0, gain_e_per_adu=1.5,
        read_noise_e=8.0, saturation_adu=65000.0, nx=512, ny=512,
    )  # fmt: skip
    quality = Quality(
        fwhm_px=FWHM_PX, elongation=1.1, trail_agreement=0.1, sky_e_px=SKY_E_PX[band], sky_sigma_e_px=15.0,
        n_detected=n, n_saturated=0, exposure_s=shot.exposure_s, airmass=shot.airmass, scintillation=0.0,
        sun_altitude_deg=-40.0, flat_used=True,
    )  # fmt: skip
    return Measured(
        shot.name, "recipe", "measured", "", info, None, quality, solution, rows[there]
    )  # fmt: skip


def with_quality(measured: Measured, **changes: object) -> Measured:
    """The same frame with other quality figures."""
    assert measured.quality is not None
    return replace(measured, quality=replace(measured.quality, **changes))  # type: ignore[arg-type]


def nightly_shots(nights: int = 12, repeats: int = 3, bands: str = "BVRI", rise: float = 0.03) -> list[Shot]:
    """A target that fades slowly and reddens, several frames a band and night."""
    shots = []
    for night in range(nights):
        base = 14.6 + rise * night
        mags = {"B": base + 0.1 + 0.05 * night, "V": base, "R": base - 0.1, "I": base - 0.2 + 0.01 * night}
        for k in range(repeats):
            for b, band in enumerate(bands):
                mjd = FIRST_MJD + night + 0.004 * (k * len(bands) + b)
                shots.append(
                    Shot(f"{band}{night:02d}{k}", band, mjd, mags, airmass=1.1 + 0.08 * k + 0.05 * (night % 4))
                )
    return shots
