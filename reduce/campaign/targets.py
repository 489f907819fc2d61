"""Targets as people type them."""

from __future__ import annotations

import math
from pathlib import Path
from typing import get_args

from reduce.plain_text import PlainError, clean_text
from reduce.records import ReddeningScale, Target, TargetKind


class TargetError(PlainError):
    """What was typed for a target cannot be understood."""


def _angle(text: str, what: str, hours: bool) -> float:
    """Decimal degrees, or sexagesimal (hours for right ascension) when the text holds colons or blanks."""
    parts = text.strip().replace(":", " ").split()
    try:
        numbers = [float(part) for part in parts]
    except ValueError as error:
        raise TargetError(f"{what} {clean_text(text)!r} is not a number in degrees or sexagesimal.") from error
    if not 1 <= len(numbers) <= 3 or any(not math.isfinite(n) for n in numbers):
        raise TargetError(f"{what} {clean_text(text)!r} is not a number in degrees or sexagesimal.")
    if len(numbers) == 1:
        return numbers[0]
    if any(not 0 <= n < 60 for n in numbers[1:]):
        raise TargetError(f"{what} {clean_text(text)!r} has minutes or seconds outside 0 to 60.")
    size = sum(abs(n) / 60.0**k for k, n in enumerate(numbers)) * (15.0 if hours else 1.0)
    return -size if parts[0].startswith("-") else size


def parse_position(text: str, what: str) -> tuple[float, float]:
    """``RA,DEC`` → degrees, ICRS; each decimal degrees or sexagesimal (RA then in hours)."""
    parts = text.split(",")
    if len(parts) != 2:
        raise TargetError(f"{what} {clean_text(text)!r} is not RA,DEC.")
    ra, dec = _angle(parts[0], f"{what}: RA", True), _angle(parts[1], f"{what}: Dec", False)
    if not 0 <= ra < 360:
        raise TargetError(f"{what}: RA {ra:g} is outside 0 to 360 degrees.")
    if not -90 <= dec <= 90:
        raise TargetError(f"{what}: Dec {dec:g} is outside −90 to 90 degrees.")
    return ra, dec


def parse_target(text: str, ebv_mw: str | None, host: str | None, reference: Path | None) -> Target:
    """A `Target` from ``NAME,RA,DEC,KIND[,Z]`` and the options that go with it.

    Raises
    ------
    TargetError
        One sentence.
    """
    parts = [part.strip() for part in text.split(",")]
    if len(parts) not in (4, 5) or not parts[0]:
        raise TargetError(f"Target {clean_text(text)!r} is not NAME,RA,DEC,KIND or NAME,RA,DEC,KIND,Z.")
    name = clean_text(parts[0], 60)
    ra, dec = parse_position(f"{parts[1]},{parts[2]}", f"Target {name}")
    if parts[3] not in get_args(TargetKind):
        kinds = ", ".join(get_args(TargetKind))
        raise TargetError(f"Target {name}: kind {clean_text(parts[3])!r} is not one of {kinds}.")
    z = None
    if len(parts) == 5 and parts[4]:
        z = _number(parts[4], f"Target {name}: redshift")
        if not -0.01 <= z <= 2:
            raise TargetError(f"Target {name}: redshift {z:g} is outside −0.01 to 2; a velocity in km/s is not meant.")
    e, scale = _reddening(ebv_mw, name) if ebv_mw else (None, "SF11")
    host_ra, host_dec = parse_position(host, f"Host of {name}") if host else (None, None)
    return Target(
        name=name, kind=parts[3], ra_deg=ra, dec_deg=dec, z=z, ebv_mw=e, ebv_scale=scale,  # type: ignore[arg-type]
        host_ra_deg=host_ra, host_dec_deg=host_dec,
        reference_folder=str(reference.resolve()) if reference else None,
    )  # fmt: skip


def _number(text: str, what: str) -> float:
    try:
        value = float(text)
    except ValueError as error:
        raise TargetError(f"{what} {clean_text(text)!r} is not a number.") from error
    if not math.isfinite(value):
        raise TargetError(f"{what} {clean_text(text)!r} is not a number.")
    return value


def _reddening(text: str, name: str) -> tuple[float, ReddeningScale]:
    value, _, scale = (part.strip() for part in text.partition(","))
    e = _number(value, f"Target {name}: E(B−V)")
    if not 0 <= e < 5:
        raise TargetError(f"Target {name}: E(B−V) {e:g} is outside 0 to 5 mag.")
    if scale in ("", "SF11"):
        return e, "SF11"
    if scale == "SFD":
        return e, "SFD"
    raise TargetError(f"Target {name}: reddening scale {clean_text(scale)!r} is neither SF11 nor SFD.")
