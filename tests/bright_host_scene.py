"""Invented nights on bright hosts, before any light falls: stars, galaxy, supernova, camera, weather and faults.

Everything is drawn from a seed and the number of the host. Magnitudes are standard ones; positions of the host's parts
are arcsec east and north of its core. Knows nothing of the project's own code.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

BANDS = ("B", "V", "R", "I")
COLOUR = {"B": ("B", "V"), "V": ("B", "V"), "R": ("V", "R"), "I": ("V", "I")}
ZERO_POINT = {"B": 21.2, "V": 21.5, "R": 21.5, "I": 21.0}
"""Magnitude of one electron a second above the atmosphere."""
FIRST_ORDER = {"B": 0.28, "V": 0.16, "R": 0.11, "I": 0.06}
SECOND_ORDER = {"B": -0.03, "V": 0.0, "R": 0.0, "I": 0.0}
COLOUR_TERM = {"B": 0.07, "V": -0.04, "R": -0.05, "I": 0.03}
SKY_MAG = {"B": 21.8, "V": 20.9, "R": 20.4, "I": 19.3}
"""Per square arcsec."""
SITE = (40.0, 0.0, 900.0)
"""Latitude, longitude (degrees), height (m)."""
FIRST_NIGHT_MJD = 60380
EXPOSURE_S, REFERENCE_EXPOSURE_S = 90.0, 240.0
HOST_KINDS = ("spiral", "elliptical", "edge-on", "irregular", "lenticular")
FAULTS = (
    "cosmic ray on target", "satellite over target", "trailed", "cloud", "defocus", "saturated", "wrong filter",
)  # fmt: skip
WRONG_STARS = 3

Mags = dict[str, np.ndarray]


@dataclass(frozen=True)
class Camera:
    nx: int
    ny: int
    scale_arcsec: float
    name: str = "Tarn 1k"
    gain_e_per_adu: float = 1.4
    read_noise_e: float = 7.0
    bias_adu: float = 980.0
    dark_e_per_s: float = 0.03
    saturation_adu: int = 65535
    aperture_m: float = 0.35


@dataclass(frozen=True)
class Stars:
    """Field stars; the first ``n_sequence`` make the comparison sequence."""

    ra_deg: np.ndarray
    dec_deg: np.ndarray
    mag: Mags
    n_sequence: int
    catalogue_mag: Mags
    catalogue_err: Mags
    wrong_by: Mags
    """What is wrong with an entry on purpose, magnitudes; 0 for a sound one."""

    def ids(self) -> list[str]:
        return [f"C{k + 1:02d}" for k in range(self.n_sequence)]


@dataclass(frozen=True)
class Part:
    """One component of a host."""

    profile: str
    """``sersic`` or ``knot``."""
    mag: dict[str, float]
    radius_arcsec: float
    """Half-light radius; of a knot its sigma."""
    index: float = 1.0
    axis_ratio: float = 1.0
    angle_deg: float = 0.0
    east_arcsec: float = 0.0
    north_arcsec: float = 0.0


@dataclass(frozen=True)
class Host:
    kind: str
    ra_deg: float
    dec_deg: float
    parts: tuple[Part, ...]


@dataclass(frozen=True)
class Shot:
    """One exposure as it is planned and as the sky has it."""

    name: str
    role: str
    """``night`` or ``reference``."""
    night: int
    band: str
    mjd_start: float
    exposure_s: float
    fwhm_arcsec: float
    moffat_beta: float | None
    """None: Kolmogorov turbulence."""
    shear: tuple[float, float]
    shear_slope: tuple[float, float]
    """Added towards the corners along x and y."""
    size_slope: float
    rotation_deg: float
    dither_arcsec: tuple[float, float]
    dimming_mag: float
    """Of haze, even over the field."""
    sky_brighter: float
    sky_tilt: float
    fault: str
    seed: tuple[int, ...]


@dataclass(frozen=True)
class Scene:
    number: int
    camera: Camera
    ra_deg: float
    dec_deg: float
    bands: tuple[str, ...]
    stars: Stars
    host: Host
    target_ra_deg: float
    target_dec_deg: float
    target_mag: tuple[dict[str, float], ...]
    """Of each night."""
    colour_term: dict[str, float]
    shots: tuple[Shot, ...]
    wrong_filter_is: dict[str, str] = field(default_factory=lambda: {"B": "V", "V": "R", "R": "I", "I": "R"})

    @property
    def host_distance_arcsec(self) -> float:
        east = (self.host.ra_deg - self.target_ra_deg) * np.cos(np.radians(self.dec_deg))
        return float(3600 * np.hypot(east, self.host.dec_deg - self.target_dec_deg))


@dataclass(frozen=True)
class Plan:
    """How much of everything."""

    nights: int = 3
    frames_per_band: int = 4
    bands: tuple[str, ...] = BANDS
    size_px: int = 1024
    references_per_band: int = 4
    faults_per_night: int = 3
    wrong_stars: int = WRONG_STARS
    colour_terms: bool = True


def draw_scene(seed: int, number: int, plan: Plan) -> Scene:
    rng = np.random.default_rng([seed, number, 1])
    camera = Camera(plan.size_px, plan.size_px, round(float(rng.uniform(0.6, 1.0)), 3))
    # The field culminates about the middle of the first night; a site of its own longitude makes UTC local time.
    lst_midnight = 280.46 + 360.98564737 * (FIRST_NIGHT_MJD + 1 - 51544.5) + SITE[1]
    ra = float((lst_midnight + rng.uniform(-12, 12)) % 360)
    dec = float(rng.uniform(10, 60))
    half_deg = plan.size_px * camera.scale_arcsec / 7200
    distance, angle = rng.uniform(3, 15), rng.uniform(0, 2 * np.pi)
    target_ra = ra + rng.uniform(-0.2, 0.2) * half_deg / np.cos(np.radians(dec))
    target_dec = dec + rng.uniform(-0.2, 0.2) * half_deg
    host_ra = target_ra + distance * np.cos(angle) / 3600 / np.cos(np.radians(dec))
    host_dec = target_dec + distance * np.sin(angle) / 3600
    host = draw_host(rng, number, host_ra, host_dec)
    stars = _draw_stars(rng, plan, ra, dec, half_deg, (host_ra, host_dec))
    v, bv = rng.uniform(14.9, 16.8), rng.uniform(-0.05, 0.4)
    target_mag = []
    for night in range(plan.nights):
        now = v + 0.12 * night
        colour = bv + 0.03 * night
        target_mag.append({"B": now + colour, "V": now, "R": now - 0.5 * colour, "I": now - 0.8 * colour})
    shots = _draw_shots(rng, seed, number, plan)
    terms = COLOUR_TERM if plan.colour_terms else dict.fromkeys(BANDS, 0.0)
    return Scene(
        number, camera, ra, dec, plan.bands, stars, host, target_ra, target_dec, tuple(target_mag), terms, shots
    )


def _draw_stars(
    rng: np.random.Generator, plan: Plan, ra: float, dec: float, half_deg: float, host: tuple[float, float]
) -> Stars:
    n_bright, n_middle, n_faint, n_field = (6, 16, 14, 110) if plan.size_px >= 1000 else (4, 12, 8, 40)
    n = n_bright + n_middle + n_faint
    v = np.concatenate([
        rng.uniform(11, 13, n_bright), rng.uniform(13, 16, n_middle), rng.uniform(16, 17.6, n_faint),
        17.6 + 3.0 * rng.uniform(0, 1, n_field) ** 0.6,
    ])  # fmt: skip
    cos = np.cos(np.radians(dec))
    east, north = np.zeros(len(v)), np.zeros(len(v))
    host_east, host_north = (host[0] - ra) * cos * 3600, (host[1] - dec) * 3600
    for k in range(len(v)):
        # Comparison stars stand alone, as an observer would choose them, and none stands on the galaxy.
        reach = half_deg * 3600 * (0.9 if k < n else 1.1)
        while True:
            east[k], north[k] = rng.uniform(-reach, reach, 2)
            clear = 20.0 if k < n else 12.0
            apart = np.hypot(east[:k] - east[k], north[:k] - north[k])
            near = apart[:n] if k >= n else apart
            off_host = np.hypot(east[k] - host_east, north[k] - host_north)
            if off_host > (60.0 if k < n else 25.0) and (not len(near) or near.min() > clear):
                break
    bv = rng.uniform(0.35, 1.35, len(v))
    vr = 0.57 * bv + rng.normal(0, 0.015, len(v))
    vi = 1.1 * bv + rng.normal(0, 0.03, len(v))
    mag = {"B": v + bv, "V": v, "R": v - vr, "I": v - vi}
    err = {band: rng.uniform(0.004, 0.010, n) + 0.008 * (v[:n] > 16) for band in BANDS}
    wrong = {band: np.zeros(n) for band in BANDS}
    bad = rng.choice(np.arange(n), plan.wrong_stars, replace=False)
    for k in bad:
        by = float(rng.choice([-1, 1]) * rng.uniform(0.05, 0.4))
        for band in BANDS:
            wrong[band][k] = by
    catalogue = {band: mag[band][:n] + rng.normal(0, err[band]) + wrong[band] for band in BANDS}
    return Stars(ra + east / 3600 / cos, dec + north / 3600, mag, n, catalogue, err, wrong)


def draw_host(rng: np.random.Generator, number: int, ra_deg: float, dec_deg: float) -> Host:
    """A galaxy of total V 12.8–14.8 whose bulge is redder than its disc and whose knots are blue."""
    kind = HOST_KINDS[number % len(HOST_KINDS)]
    total, radius = rng.uniform(12.8, 14.8), rng.uniform(8, 18)
    bulge_share = {"spiral": 0.25, "elliptical": 1.0, "edge-on": 0.2, "irregular": 0.0, "lenticular": 0.55}[kind]
    ratio = {"edge-on": 0.18, "elliptical": 0.75}.get(kind, float(rng.uniform(0.4, 0.95)))
    angle = float(rng.uniform(0, 180))
    knot_share = {"spiral": 0.12, "irregular": 0.25, "edge-on": 0.06}.get(kind, 0.0)

    def mags(share: float, bv: float) -> dict[str, float]:
        v = total - 2.5 * np.log10(share)
        return {"B": v + bv, "V": v, "R": v - 0.57 * bv, "I": v - 1.1 * bv}

    parts = []
    if bulge_share:
        index = 4.0 if kind == "elliptical" else float(rng.uniform(1.5, 3.0))
        size = radius if kind == "elliptical" else 0.22 * radius
        round_ = ratio if kind == "elliptical" else 0.85
        parts.append(Part("sersic", mags(bulge_share, 0.95), size, index, round_, angle))
    disc_share = 1 - bulge_share - knot_share
    if disc_share > 0.01:
        parts.append(Part("sersic", mags(disc_share, 0.65), radius, 1.0, ratio, angle))
    if knot_share:
        n = 36
        weight = rng.pareto(1.8, n) + 0.2
        for k in range(n):
            r = radius * 1.3 * np.sqrt(rng.uniform(0.02, 1))
            arm = np.pi * (k % 2) + 2.2 * np.log(r / radius + 0.2) + rng.normal(0, 0.18)
            theta = arm if kind == "spiral" else rng.uniform(0, 2 * np.pi)
            u, w = r * np.cos(theta), ratio * r * np.sin(theta)
            turn = np.radians(angle)
            east, north = u * np.sin(turn) + w * np.cos(turn), u * np.cos(turn) - w * np.sin(turn)
            share = knot_share * weight[k] / weight.sum()
            size = float(rng.uniform(0.3, 1.2))
            parts.append(Part("knot", mags(share, 0.15), size, east_arcsec=float(east), north_arcsec=float(north)))
    return Host(kind, ra_deg, dec_deg, tuple(parts))


def _draw_shots(rng: np.random.Generator, seed: int, number: int, plan: Plan) -> tuple[Shot, ...]:
    shots: list[Shot] = []
    for night in range(plan.nights):
        rotation, flip_after = float(rng.uniform(-3, 3)), int(rng.integers(4, 20))
        beta = None if rng.uniform() < 0.5 else float(rng.uniform(2.7, 4.2))
        count = plan.frames_per_band * len(plan.bands)
        seeing = rng.uniform(1.5, 3.2)
        faulty = dict(zip(
            rng.choice(count, min(plan.faults_per_night, count // 2), replace=False),
            rng.choice(FAULTS, min(plan.faults_per_night, count // 2), replace=False), strict=True,
        ))  # fmt: skip
        haze = rng.uniform(0, 0.3) if rng.uniform() < 0.3 else 0.0
        for k in range(count):
            band = plan.bands[k // plan.frames_per_band]
            shot = _draw_shot(rng, (seed, number, night, k), "night", night, band)
            shots.append(replace(
                shot,
                mjd_start=FIRST_NIGHT_MJD + 3 * night + 0.88 + 0.012 * count / 16 + 0.004 * k,
                fwhm_arcsec=float(np.clip(seeing * rng.lognormal(0, 0.10), 1.5, 3.5)),
                moffat_beta=beta,
                rotation_deg=rotation + (180 if k >= flip_after else 0),
                dimming_mag=float(haze + abs(rng.normal(0, 0.015)) + 0.1 * haze * rng.normal()),
                fault=str(faulty.get(k, "")),
            ))  # fmt: skip
    rotation = float(rng.uniform(0, 360))
    for k in range(plan.references_per_band * len(plan.bands)):
        shot = _draw_shot(rng, (seed, number, 99, k), "reference", 99, plan.bands[k // plan.references_per_band])
        shots.append(replace(
            shot, mjd_start=FIRST_NIGHT_MJD + 742 + 0.9 + 0.004 * k, exposure_s=REFERENCE_EXPOSURE_S,
            fwhm_arcsec=float(rng.uniform(1.5, 2.0)), rotation_deg=rotation, dimming_mag=0.0,
        ))  # fmt: skip
    return tuple(shots)


def _draw_shot(rng: np.random.Generator, seed: tuple[int, ...], role: str, night: int, band: str) -> Shot:
    """One exposure; its caller says when, in which seeing and with what fault."""
    angle, size = rng.uniform(0, np.pi), rng.uniform(0.0, 0.045)
    name = f"{'ref' if role == 'reference' else f'night{night + 1}'}-{band}-{seed[-1]:03d}.fits"
    return Shot(
        name, role, night, band, 0.0, EXPOSURE_S, 2.0, None,
        (float(size * np.cos(2 * angle)), float(size * np.sin(2 * angle))),
        (float(rng.normal(0, 0.012)), float(rng.normal(0, 0.012))),
        float(abs(rng.normal(0, 0.03))), 0.0,
        (float(rng.uniform(-20, 20)), float(rng.uniform(-20, 20))), 0.0,
        float(rng.lognormal(0, 0.15)), float(rng.normal(0, 0.02)), "", seed,
    )  # fmt: skip
