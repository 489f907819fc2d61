"""Comparison sequences from CSV, and matching of positions on the sky."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from reduce.plain_text import PlainError, clean_text
from reduce.records import BANDS, Floats, Sequence

UNSTATED_ERR_MAG = 0.02
"""Error of a catalogue magnitude that states none: common practice for a published comparison star."""
LARGEST_FILE_BYTES = 50_000_000


class SequenceError(PlainError):
    """The comparison sequence cannot be used; the message names file, line and remedy."""


def read_sequence(path: Path) -> Sequence:
    """Read ``id,ra,dec`` (degrees, ICRS) and any of ``B,B_err … i,i_err``; empty cells are unknown.

    A magnitude without an error gets 0.02 mag. Other columns are ignored.

    Raises
    ------
    SequenceError
        One sentence.
    """
    name = clean_text(path)
    try:
        if path.stat().st_size > LARGEST_FILE_BYTES:
            raise SequenceError(f"{name} is too large for a comparison sequence; is it the right file?")
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise SequenceError(f"{name} cannot be read: {(error.strerror or str(error)).lower()}.") from error
    except UnicodeDecodeError as error:
        raise SequenceError(f"{name} is not a text file; save the comparison stars as CSV.") from error
    lines = [line for line in text.splitlines() if line.strip() and not line.lstrip().startswith("#")]
    try:
        rows = list(csv.DictReader(lines, skipinitialspace=True, restkey="(too many)"))
    except csv.Error as error:
        raise SequenceError(f"{name} is not CSV: {clean_text(error)}.") from error
    columns = {column.strip(): column for column in (rows[0] if rows else {}) if isinstance(column, str)}
    missing = [wanted for wanted in ("id", "ra", "dec") if wanted not in columns]
    if missing:
        raise SequenceError(f"{name} has no column {missing[0]!r}; the first line must name id,ra,dec and bands.")
    bands = [band for band in BANDS if band in columns]
    if not bands:
        raise SequenceError(f"{name} has no magnitudes; name columns from {', '.join(BANDS)}.")
    ids = [clean_text(row[columns["id"]] or "", 60) for row in rows]
    for line, star in enumerate(ids, 2):
        if not star:
            raise SequenceError(f"{name}, row {line}: a star has no id.")
    twice = sorted({star for star in ids if ids.count(star) > 1})
    if twice:
        raise SequenceError(f"{name} names the star {twice[0]!r} twice; ids must differ.")
    ra = _column(rows, columns["ra"], name, "ra", 0.0, 360.0, required=True)
    dec = _column(rows, columns["dec"], name, "dec", -90.0, 90.0, required=True)
    _refuse_hours(name, ra, dec)
    mag, mag_err = {}, {}
    for band in bands:
        mag[band] = _column(rows, columns[band], name, band, -30.0, 40.0)
        key = columns.get(f"{band}_err")
        stated = np.full(len(rows), np.nan) if key is None else _column(rows, key, name, f"{band}_err", 0.0, 5.0)
        known = np.isfinite(mag[band])
        mag_err[band] = np.where(known, np.where(np.isfinite(stated) & (stated > 0), stated, UNSTATED_ERR_MAG), np.nan)
    return Sequence(clean_text(path.stem, 60), tuple(ids), ra, dec, mag, mag_err)


def _column(
    rows: list[dict[str, str]], key: str, file: str, label: str, low: float, high: float, required: bool = False
) -> Floats:
    values = np.full(len(rows), np.nan)
    for k, row in enumerate(rows):
        text = (row.get(key) or "").strip()
        if not text or text.lower() in ("nan", "null", "none", "--", "-"):
            if required:
                raise SequenceError(f"{file}, row {k + 2}: {label} is empty.")
            continue
        try:
            values[k] = float(text)
        except ValueError as error:
            hint = "; positions must be in decimal degrees" if ":" in text else ""
            raise SequenceError(f"{file}, row {k + 2}: {label} {clean_text(text, 40)!r} is no number{hint}.") from error
        if not (math.isfinite(values[k]) and low <= values[k] <= high):
            raise SequenceError(f"{file}, row {k + 2}: {label} {values[k]:g} is outside {low:g} to {high:g}.")
    return values


def _refuse_hours(file: str, ra: Floats, dec: Floats) -> None:
    """A sequence in hours spans 15 times less in right ascension than its declinations make likely."""
    if len(ra) < 5 or ra.max() > 24.0:
        return
    width = np.ptp(ra) * math.cos(math.radians(float(dec.mean())))
    if width < np.ptp(dec) / 8.0:
        raise SequenceError(f"{file}: ra seems to be in hours; give decimal degrees (hours × 15).")


def cross_match(
    ra_deg: Floats, dec_deg: Floats, ra2_deg: Floats, dec2_deg: Floats, radius_arcsec: float
) -> NDArray[np.int64]:
    """Nearest star of a second list for every star of a first.

    Returns
    -------
    (n,) index into the second list, -1 where none lies within the radius.
    """
    from scipy.spatial import cKDTree

    if len(ra_deg) == 0 or len(ra2_deg) == 0:
        return np.full(len(ra_deg), -1, dtype=np.int64)
    chord = 2.0 * math.sin(math.radians(radius_arcsec / 3600.0) / 2.0)
    tree = cKDTree(_unit(ra2_deg, dec2_deg))
    distance, index = tree.query(_unit(ra_deg, dec_deg), distance_upper_bound=chord * (1 + 1e-12))
    return np.where(np.isfinite(distance), index, -1).astype(np.int64)


def _unit(ra_deg: Floats, dec_deg: Floats) -> Floats:
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.column_stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
