"""Points of other observatories: from a light-curve file into the campaign, beside its own."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path

from reduce.almanac.times import night_of
from reduce.exchange.light_curve_file import LightCurveFileError, read_light_curves
from reduce.plain_text import clean_text
from reduce.records import BANDS, Choices, LightCurve, Point


def points_of_file(path: Path, target: str, source: str, longitude_deg: float | None) -> list[Point]:
    """Nightly points of one target from a light-curve file (see `read_light_curves`).

    Parameters
    ----------
    source
        Who measured them, where the file has no column ``source``; '' when nobody said.
    longitude_deg
        Of the campaign's site: a night is the local date of its evening.

    Raises
    ------
    LightCurveFileError
        One sentence: the file cannot be read, is of several objects, or says nowhere who measured a point.
    """
    shown = clean_text(path, 300)
    objects = read_light_curves(path)
    mine = [curve for thing, curve in objects if thing.name == target] or [curve for _, curve in objects]
    if len(mine) > 1:
        raise LightCurveFileError(f"{shown} holds {len(mine)} objects and none is {target}; name one so in the file.")
    curve = mine[0]
    strange = sorted({str(band) for band in curve.band} - set(BANDS))
    if strange:
        known = " ".join(BANDS)
        raise LightCurveFileError(f"{shown}: band {clean_text(strange[0], 40)} is none of {known}; remove its lines.")
    return [_point(curve, k, shown, target, clean_text(source, 40), longitude_deg) for k in range(len(curve))]


def _point(curve: LightCurve, k: int, shown: str, target: str, source: str, longitude_deg: float | None) -> Point:
    stated = "" if curve.source is None else str(curve.source[k])
    who = (stated or source).replace(":", " ").replace("/", " ").strip()
    if not who:
        raise LightCurveFileError(f"{shown} does not say who measured its points; add a column source or use --source.")
    mjd, band = float(curve.mjd[k]), str(curve.band[k])
    night = f"{night_of(mjd, longitude_deg)} {who}"
    mag, err = _number(curve.mag[k]), _number(curve.err[k])
    return Point(
        star=target, file=None, night=night, band=band, mjd=mjd, bjd_tdb=None, mag=mag, err=err,
        err_night=_number(curve.err_night[k]), err_band=_number(curve.err_band[k]), flux=float(curve.flux[k]),
        flux_err=float(curve.flux_err[k]), state="kept" if mag is not None else "limit", flags=("imported",),
        zp_group=f"{who}/{band}/{night}", source=who,
        passbands_known=curve.by_colour_terms is None or not bool(curve.by_colour_terms[k]),
    )  # fmt: skip


def _number(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def with_imported(own: Sequence[Point], imported: Iterable[Point], choices: Choices) -> tuple[Point, ...]:
    """Nightly points of both, those of others behind; what a person excluded is marked."""
    others = [
        replace(point, state="excluded") if (point.star, point.night, point.band) in choices.excluded_points else point
        for point in imported
    ]
    return (*own, *others)
