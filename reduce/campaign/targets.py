"""Targets as people type them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import get_args

from reduce.candles.relations import names_for
from reduce.plain_text import PlainError, clean_text
from reduce.records import ReddeningScale, Target, TargetKind

FARTHEST_HOST_ARCSEC = 3600.0
"""No galaxy but the very nearest reaches a degree from its centre (common practice)."""


class TargetError(PlainError):
    """What was typed for a target cannot be understood."""


def parse_angle(text: str, what: str, hours: bool) -> float:
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
    """``RA,DEC`` → degrees, ICRS; each decimal degrees or sexagesimal (RA then in hours).

    The comma may be left out where it is clear: between two numbers, or between three and three.
    """
    parts = text.split(",")
    words = text.split()
    if len(parts) == 1 and len(words) in (2, 6):
        half = len(words) // 2
        parts = [" ".join(words[:half]), " ".join(words[half:])]
    if len(parts) != 2:
        raise TargetError(f"{what} {clean_text(text)!r} is not RA,DEC.")
    ra, dec = parse_angle(parts[0], f"{what}: RA", True), parse_angle(parts[1], f"{what}: Dec", False)
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
    _refuse_kind(parts[3], name)
    z = _redshift(parts[4], name) if len(parts) == 5 and parts[4] else None
    e, scale = _reddening(ebv_mw, name) if ebv_mw else (None, "SF11")
    host_ra, host_dec = parse_position(host, f"Host of {name}") if host else (None, None)
    return _not_far_from_host(Target(
        name=name, kind=parts[3], ra_deg=ra, dec_deg=dec, z=z, ebv_mw=e, ebv_scale=scale,  # type: ignore[arg-type]
        host_ra_deg=host_ra, host_dec_deg=host_dec,
        reference_folder=str(reference.resolve()) if reference else None,
    ))  # fmt: skip


def new_target(facts: Mapping[str, str]) -> Target:
    """A `Target` from what was typed field by field: name, position, kind, and the facts that `corrected` takes.

    Raises
    ------
    TargetError
        One sentence.
    """
    given = {key: text.strip() for key, text in facts.items() if text.strip()}
    name = clean_text(given.pop("name", ""), 60)
    if not name:
        raise TargetError("The target has no name.")
    if "position" not in given:
        raise TargetError(f"Target {name} has no position: type RA, Dec in degrees or as hh:mm:ss, dd:mm:ss.")
    ra, dec = parse_position(given.pop("position"), f"Target {name}")
    kind = given.pop("kind", "type_ia")
    _refuse_kind(kind, name)
    reference = given.pop("reference", "")
    target = Target(name=name, kind=kind, ra_deg=ra, dec_deg=dec)  # type: ignore[arg-type]
    return corrected(target, **given, reference=Path(reference).expanduser() if reference else None)


def _refuse_kind(kind: str, name: str) -> None:
    if kind not in get_args(TargetKind):
        kinds = ", ".join(get_args(TargetKind))
        raise TargetError(f"Target {name}: kind {clean_text(kind)!r} is not one of {kinds}.")


def corrected(
    target: Target,
    *,
    position: str | None = None,
    z: str | None = None,
    ebv_mw: str | None = None,
    spectrum: str | None = None,
    host: str | None = None,
    reference: Path | None = None,
    metallicity: str | None = None,
    relation: str | None = None,
) -> Target:
    """The target with new facts as they were typed; what is None stays, an empty text (or path) is no longer known.

    Raises
    ------
    TargetError
        One sentence.
    """
    name = target.name
    if position is not None:
        ra, dec = parse_position(position, f"Target {name}")
        target = replace(target, ra_deg=ra, dec_deg=dec)
    if z is not None:
        target = replace(target, z=_redshift(z, name) if z else None)
    if ebv_mw is not None:
        e, scale = _reddening(ebv_mw, name) if ebv_mw else (None, target.ebv_scale)
        target = replace(target, ebv_mw=e, ebv_scale=scale)
    if spectrum is not None:
        target = replace(target, spectroscopic_type=clean_text(spectrum, 20) or None)
    if host is not None:
        host_ra, host_dec = parse_position(host, f"Host of {name}") if host else (None, None)
        target = _not_far_from_host(replace(target, host_ra_deg=host_ra, host_dec_deg=host_dec))
    if reference == Path():
        target = replace(target, reference_folder=None)
    elif reference is not None:
        if not reference.is_dir():
            raise TargetError(f"The reference folder {clean_text(reference, 300)} does not exist.")
        target = replace(target, reference_folder=str(reference.resolve()))
    if metallicity is not None:
        dex, err = _metallicity(metallicity, name)
        target = replace(target, metallicity_dex=dex, metallicity_err=err)
    if relation is not None:
        target = replace(target, relation=_relation(relation, target))
    return target


def _metallicity(text: str, name: str) -> tuple[float, float | None]:
    value, _, error = (part.strip() for part in text.partition(","))
    dex = _number(value, f"Target {name}: metallicity")
    err = _number(error, f"Target {name}: error of the metallicity") if error else None
    if not -4 <= dex <= 1.5:
        raise TargetError(f"Target {name}: metallicity {dex:g} is outside −4 to 1.5 dex; it is relative to the Sun.")
    if err is not None and not 0 < err <= 3:
        raise TargetError(f"Target {name}: error of the metallicity {err:g} is outside 0 to 3 dex.")
    return dex, err


def _relation(text: str, target: Target) -> str | None:
    if not text.strip():
        return None
    names = names_for(target.kind)
    found = next((name for name in names if name.casefold() == text.strip().casefold()), None)
    if found is None:
        known = ", ".join(names) or f"none for kind {target.kind}"
        raise TargetError(f"Target {target.name}: relation {clean_text(text, 60)!r} is not one of: {known}.")
    return found


def _not_far_from_host(target: Target) -> Target:
    apart = target.host_arcsec
    if apart is not None and apart > FARTHEST_HOST_ARCSEC:
        raise TargetError(
            f"The host's centre is {apart / 3600:.1f} degrees from {target.name}: compare both positions, and whether "
            "right ascensions are in degrees."
        )
    return target


def _redshift(text: str, name: str) -> float:
    z = _number(text, f"Target {name}: redshift")
    if not -0.01 <= z <= 2:
        raise TargetError(f"Target {name}: redshift {z:g} is outside −0.01 to 2; a velocity in km/s is not meant.")
    return z


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
