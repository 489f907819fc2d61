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


class Photometry(_Table):
    """Choices of the solution that belong to an observatory."""

    aperture_fwhm: dict[str, float] = {}
    """Band → aperture radius in FWHM; absent: chosen by signal-to-noise."""
    second_order_extinction: dict[str, float] = {"B": -0.03}
    """Band → k″, mag per airmass per mag of colour; −0.03 in B is common practice."""
    colour_terms: dict[str, float] = {}
    """Band → colour term to adopt when the comparison stars cannot give one."""


class Settings(_Table):
    """Everything that a campaign's ``observatory.toml`` says."""

    site: Site | None = None
    telescope: Telescope = Telescope()
    camera: Camera = Camera()
    filters: dict[str, Literal["B", "V", "R", "I", "g", "r", "i"]] = {}
    """Filter name in headers → band letter, before the built-in table."""
    photometry: Photometry = Photometry()


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
        raise SettingsError(f"{source}, key {key}: {first['msg'].lower()} (found {first['input']!r}).") from error


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
