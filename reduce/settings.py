"""Typed configuration of a campaign, read from ``observatory.toml``; every mistake is one sentence."""

from __future__ import annotations

import tomllib
from difflib import get_close_matches
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from reduce.plain_text import PlainError


class SettingsError(PlainError):
    """The configuration cannot be used; the message names file, key and remedy in one sentence."""


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Site(_Table):
    """Where the telescope stands."""

    name: str = ""
    latitude_deg: Annotated[float, Field(ge=-90, le=90)]
    """North positive."""
    longitude_deg: Annotated[float, Field(ge=-180, le=360)]
    """East positive."""
    height_m: Annotated[float, Field(ge=-500, le=9000)] = 0.0


class Telescope(_Table):
    """The light collector; the aperture enters the scintillation noise."""

    name: str = ""
    aperture_m: Annotated[float, Field(gt=0, lt=40)] | None = None
    scintillation_coefficient: Annotated[float, Field(gt=0, lt=10)] = 1.5
    """C_Y of Osborn et al. 2015 (MNRAS 452, 1707); 1.5 is typical of good sites."""


class Camera(_Table):
    """Noise inputs and scale, used where the header is silent."""

    name: str = ""
    gain_e_per_adu: Annotated[float, Field(gt=0)] | None = None
    read_noise_e: Annotated[float, Field(ge=0)] | None = None
    saturation_adu: Annotated[float, Field(gt=0)] | None = None
    linear_limit_adu: Annotated[float, Field(gt=0)] | None = None
    """Raw level above which the response departs from linear by more than 1 %."""
    scale_arcsec: Annotated[float, Field(gt=0, lt=60)] | None = None
    """Arcsec per unbinned pixel."""
    dark_e_per_s: Annotated[float, Field(ge=0)] | None = None
    """Dark current at working temperature, for frames without a master dark."""
    overrides_header: bool = False
    """Gain, read noise and saturation written here win over what headers state: headers can be wrong."""
    fringe_bands: tuple[Literal["B", "V", "R", "I", "g", "r", "i"], ...] = ()
    """Bands in which this (thinned) detector shows fringes; they are taken off with a pattern made of night skies."""


class Photometry(_Table):
    """Choices of the solution that belong to an observatory."""

    aperture_fwhm: dict[str, float] = {}
    """Band → aperture radius in FWHM, 0 for the PSF; absent: chosen by signal-to-noise."""
    second_order_extinction: dict[str, float] = {"B": -0.03}
    """Band → k″, mag per airmass per mag of colour; −0.03 in B is common practice."""
    colour_terms: dict[str, float] = {}
    """Band → colour term to adopt when the comparison stars cannot give one."""


class Planning(_Table):
    """Limits and costs that plans keep to."""

    lowest_altitude_deg: Annotated[float, Field(ge=5, lt=90)] = 30.0
    """Airmass 2, common practice."""
    sun_altitude_deg: Annotated[float, Field(ge=-18, le=-6)] = -12.0
    """Frames of targets are planned while the Sun is lower; nautical twilight, common practice."""
    moon_separation_deg: Annotated[float, Field(ge=0, le=180)] = 30.0
    """Nearer than this to the Moon no frame is planned (common practice)."""
    slew_s: Annotated[float, Field(ge=0, le=3600)] = 90.0
    """Slewing, centring and settling, once a target and night."""
    filter_s: Annotated[float, Field(ge=0, le=600)] = 15.0
    """Changing the filter, once a band."""
    readout_s: Annotated[float, Field(ge=0, le=600)] = 10.0
    """Reading out and storing, once a frame."""
    longest_exposure_s: Annotated[float, Field(gt=0, le=7200)] = 300.0
    """Of one frame."""
    clear_chance: Annotated[float, Field(gt=0, le=1)] = 0.6
    """That a coming night can be used (common practice; the site knows better)."""
    snr_goal: dict[Literal["B", "V", "R", "I", "g", "r", "i"], Annotated[float, Field(gt=0, le=10000)]] = {}
    """Band → signal-to-noise that a night shall reach on a target; absent: 50, 0.02 mag (common practice)."""
    cadence_d: Annotated[float, Field(gt=0, le=100)] = 2.0
    """A target is due when its last point is older."""
    mu_err_goal: Annotated[float, Field(gt=0, lt=1)] = 0.13
    """Error of a type Ia modulus (mag) that is good enough: what a night could add beyond it is not worth its time."""


class Frames(_Table):
    """What kind a file is, where its header does not say: patterns of file names ("*_flat_*"), or of folders and file
    names ("flats/*").
    """

    light: tuple[str, ...] = ()
    bias: tuple[str, ...] = ()
    dark: tuple[str, ...] = ()
    flat: tuple[str, ...] = ()


class Distance(_Table):
    """The absolute scale of type Ia distances; without either, that of the model."""

    h0: Annotated[float, Field(ge=20, le=200)] | None = None
    """km/s/Mpc."""
    m_b: Annotated[float, Field(ge=-21, le=-17)] | None = None
    """A calibrated M_B at maximum for Δm15 = 1.1 without host dust; it goes before h0."""


class Settings(_Table):
    """Everything that a campaign's ``observatory.toml`` says."""

    site: Site | None = None
    telescope: Telescope = Telescope()
    camera: Camera = Camera()
    filters: dict[str, Literal["B", "V", "R", "I", "g", "r", "i"]] = {}
    """Filter name in headers → band letter, before the built-in table."""
    frames: Frames = Frames()
    photometry: Photometry = Photometry()
    distance: Distance = Distance()
    planning: Planning = Planning()


def _known_keys(location: tuple[int | str, ...]) -> list[str]:
    model: Any = Settings
    for part in location[:-1]:
        annotation = model.model_fields.get(str(part)) if hasattr(model, "model_fields") else None
        if annotation is None:
            return []
        options = [annotation.annotation, *getattr(annotation.annotation, "__args__", ())]
        model = next((o for o in options if isinstance(o, type) and issubclass(o, BaseModel)), None)
        if model is None:
            return []
    return list(model.model_fields)


def parse_settings(text: str, source: str = "observatory.toml") -> Settings:
    """Settings from TOML text.

    Raises
    ------
    SettingsError
        One sentence with the file, the key and, for an unknown key, the nearest known one.
    """
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"{source} is not valid TOML: {error}.") from error
    try:
        return Settings.model_validate(raw)
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        if first["type"] == "extra_forbidden":
            near = get_close_matches(str(first["loc"][-1]), _known_keys(first["loc"]), 1, 0.3)
            hint = f"; did you mean {near[0]}?" if near else "; remove it."
            raise SettingsError(f"{source} has an unknown key {key}{hint}") from error
        wants = first["msg"][0].lower() + first["msg"][1:]
        raise SettingsError(f"{source}, key {key}: {wants} (found {first['input']!r}).") from error


def read_settings(path: Path) -> Settings:
    """Settings of the file at ``path``; a missing file gives the defaults.

    Raises
    ------
    SettingsError
        As `parse_settings`, or when the file cannot be read.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        return Settings()
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsError(f"{path} cannot be read: {error}.") from error
    return parse_settings(text, str(path))
