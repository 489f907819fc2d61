"""The scenario: what was invented, as typed records of ``scenario.toml``."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, date, datetime, time
from importlib.resources import files
from typing import Any, Literal

from reduce.records import ReddeningScale

Expected = Literal["kept", "doubtful", "dropped", "unreadable"]
FaultName = Literal[
    "cloud", "trailed", "overexposed", "another field", "truncated", "empty", "text",
    "satellite", "wheel slip", "compressed", "extension", "wrong object",
]  # fmt: skip
REWRITTEN: tuple[FaultName, ...] = ("compressed", "extension", "wrong object")
"""Faults that change how a good frame is written; all others are frames of their own."""
MJD_OF_UNIX_EPOCH = 40587.0


@dataclass(frozen=True, slots=True)
class SiteScene:
    """Where the telescope stands; north and east positive."""

    name: str
    latitude_deg: float
    longitude_deg: float
    height_m: float


@dataclass(frozen=True, slots=True)
class TelescopeScene:
    """The light collector."""

    name: str
    aperture_m: float
    scintillation_coefficient: float
    focal_length_mm: float


@dataclass(frozen=True, slots=True)
class CameraScene:
    """The detector and its flaws."""

    name: str
    nx: int
    ny: int
    pixel_um: float
    scale_arcsec: float
    gain_e_per_adu: float
    read_noise_e: float
    bias_adu: float
    dark_e_per_s: float
    saturation_adu: int
    hot_pixels: int
    dead_column: int
    pixel_response: float
    vignetting: float
    dust_rings: int
    cosmic_rays_per_minute: float
    temperature_c: float


@dataclass(frozen=True, slots=True)
class BandScene:
    """One filter: exposure, response, extinction, sky and the host's magnitude."""

    exposure_s: float
    zero_point: float
    colour_term: float
    first_order: float
    second_order: float
    dark_sky: float
    moon_sky: float
    flat_level: float
    galaxy_mag: float


@dataclass(frozen=True, slots=True)
class SupernovaScene:
    """Where it is, and the ranges its parameters are drawn from."""

    name: str
    ra_deg: float
    dec_deg: float
    ebv_mw: float
    ebv_scale: ReddeningScale
    t_max_mjd: float
    t_max_spread_d: float
    mu: tuple[float, float]
    dm15: tuple[float, float]
    e_host: tuple[float, float]
    peculiar_velocity_kms: float


@dataclass(frozen=True, slots=True)
class GalaxyScene:
    """An exponential disc; the centre is given from the supernova."""

    east_arcsec: float
    north_arcsec: float
    scale_length_arcsec: float
    axis_ratio: float
    position_angle_deg: float


@dataclass(frozen=True, slots=True)
class StarsScene:
    """How many stars, how bright, and how well the catalogue knows them."""

    field: int
    square_arcsec: float
    comparison: int
    comparison_radius_arcsec: float
    v_range: tuple[float, float]
    comparison_v_range: tuple[float, float]
    bv_range: tuple[float, float]
    catalogue_error: tuple[float, float]
    separation_arcsec: float


@dataclass(frozen=True, slots=True)
class SkyScene:
    """What varies from frame to frame and night to night."""

    frame_transparency_rms: float
    night_zero_point_rms: float
    mirror_dimming_per_day: float
    seeing_jitter: float
    dither_arcsec: float
    pointing_error_arcsec: float


@dataclass(frozen=True, slots=True)
class NightScene:
    """One night: ``start_mjd`` is the start of its first light frame, UTC."""

    start_mjd: float
    evening: date
    """Local date of the evening."""
    seeing_arcsec: float
    rotation_deg: float
    bias: int = 0
    darks: tuple[float, ...] = ()
    flats: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Fault:
    """Something that goes wrong in one night and band."""

    name: FaultName
    night: int
    band: str
    expected: Expected
    dimming_mag: float = 0.0
    trail_arcsec: float = 0.0
    exposure_s: float | None = None
    streak_angle_deg: float = 0.0
    """From +x towards +y, of a satellite that crosses the supernova."""
    streak_e: float = 0.0
    """Peak of its streak, electrons a pixel."""
    seen_through: str | None = None
    """Filter that was really in the beam."""


@dataclass(frozen=True, slots=True)
class Scenario:
    """Everything that was invented."""

    site: SiteScene
    telescope: TelescopeScene
    camera: CameraScene
    bands: Mapping[str, BandScene]
    supernova: SupernovaScene
    galaxy: GalaxyScene
    stars: StarsScene
    sky: SkyScene
    nights: tuple[NightScene, ...]
    faults: tuple[Fault, ...]


def mjd_of(day: date, clock: time) -> float:
    """MJD of a UTC date and clock time."""
    return datetime.combine(day, clock, UTC).timestamp() / 86400.0 + MJD_OF_UNIX_EPOCH


def _tuples(table: dict[str, Any]) -> dict[str, Any]:
    return {key: tuple(value) if isinstance(value, list) else value for key, value in table.items()}


def _night(table: dict[str, Any], longitude_deg: float) -> NightScene:
    rest = _tuples(table)
    start_mjd = mjd_of(rest.pop("date"), rest.pop("start"))
    # The local day begins at noon: half a day earlier than midnight.
    evening = date.fromordinal(date(1858, 11, 17).toordinal() + int(start_mjd + longitude_deg / 360.0 - 0.5))
    return NightScene(start_mjd=start_mjd, evening=evening, **rest)


def read_scenario() -> Scenario:
    """The scenario that is shipped."""
    raw = tomllib.loads((files("demo_frames") / "scenario.toml").read_text(encoding="utf-8"))
    site = SiteScene(**raw["site"])
    return Scenario(
        site=site,
        telescope=TelescopeScene(**raw["telescope"]),
        camera=CameraScene(**raw["camera"]),
        bands={name: BandScene(**table) for name, table in raw["bands"].items()},
        supernova=SupernovaScene(**_tuples(raw["supernova"])),
        galaxy=GalaxyScene(**raw["galaxy"]),
        stars=StarsScene(**_tuples(raw["stars"])),
        sky=SkyScene(**raw["sky"]),
        nights=tuple(_night(table, site.longitude_deg) for table in raw["nights"]),
        faults=tuple(Fault(**table) for table in raw["faults"]),
    )
