"""Comparison sequences from CSV, and matching of positions on the sky."""

from __future__ import annotations

import csv
import math
from collections import Counter
from collections.abc import Iterable
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
    columns, lines = _table(text, name)
    bands = [band for band in BANDS if band in columns]
    if not bands:
        raise SequenceError(f"{name} has no magnitudes; name columns from {', '.join(BANDS)}.")
    if not lines:
        raise SequenceError(f"{name} has no stars below its first line.")
    ids = [clean_text(cell, 60) for cell in columns["id"]]
    if "" in ids:
        raise SequenceError(f"{name}, line {lines[ids.index('')]}: a star has no id.")
    twice = sorted(star for star, times in Counter(ids).items() if times > 1)
    if twice:
        raise SequenceError(f"{name} names the star {twice[0]!r} twice; ids must differ.")

    def numbers(column: str, low: float, high: float, required: bool = False) -> Floats:
        found = [
            _number(cell, f"{name}, line {line}: {column}", low, high, required)
            for cell, line in zip(columns[column], lines, strict=True)
        ]
        return np.array(found)

    ra, dec = numbers("ra", 0.0, 360.0, required=True), numbers("dec", -90.0, 90.0, required=True)
    _refuse_hours(name, ra, dec)
    mag, mag_err = {}, {}
    for band in bands:
        mag[band] = numbers(band, -30.0, 40.0)
        stated = numbers(f"{band}_err", 0.0, 5.0) if f"{band}_err" in columns else np.full(len(lines), np.nan)
        known = np.isfinite(mag[band])
        mag_err[band] = np.where(known, np.where(np.isfinite(stated) & (stated > 0), stated, UNSTATED_ERR_MAG), np.nan)
    return Sequence(clean_text(path.stem, 60), tuple(ids), ra, dec, mag, mag_err)


def _table(text: str, file: str) -> tuple[dict[str, list[str]], list[int]]:
    """Cells of every column, and the line of the file that each row stands on; comments and blank lines are skipped."""
    numbered = [
        (number, line)
        for number, line in enumerate(text.replace("\r\n", "\n").replace("\r", "\n").split("\n"), 1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    reader = csv.reader([line for _, line in numbered], skipinitialspace=True)
    try:
        names = [cell.strip() for cell in next(reader, [])]
        rows = [([cell.strip() for cell in cells], numbered[reader.line_num - 1][0]) for cells in reader]
    except csv.Error as error:
        raise SequenceError(f"{file} is not CSV: {clean_text(error)}.") from error
    for wanted in ("id", "ra", "dec"):
        if wanted not in names:
            raise SequenceError(
                f"{file} has no column {wanted!r}; the first line must name id,ra,dec and bands, with commas between."
            )
    for name, times in Counter(names).items():
        if name and times > 1:
            raise SequenceError(f"{file} names the column {clean_text(name, 40)!r} twice; keep one of them.")
    for cells, line in rows:
        if len(cells) > len(names):
            raise SequenceError(
                f"{file}, line {line}: more cells than columns; write decimals with a point, and text without commas."
            )
        cells.extend([""] * (len(names) - len(cells)))
    return {name: [cells[k] for cells, _ in rows] for k, name in enumerate(names)}, [line for _, line in rows]


def _number(cell: str, place: str, low: float, high: float, required: bool) -> float:
    """A finite number within limits; NaN for an empty cell that may be empty."""
    if cell.lower() in ("", "nan", "null", "none", "--", "-"):
        if required:
            raise SequenceError(f"{place} is empty.")
        return float("nan")
    try:
        value = float("_" if "_" in cell else cell)  # Python itself would read 1_4 as 14
    except ValueError as error:
        hint = "; positions must be in decimal degrees" if ":" in cell else ""
        raise SequenceError(f"{place} {clean_text(cell, 40)!r} is no number{hint}.") from error
    if not (math.isfinite(value) and low <= value <= high):
        raise SequenceError(f"{place} {value:g} is outside {low:g} to {high:g}.")
    return value


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


def write_sequence(path: Path, sequence: Sequence, comments: Iterable[str] = ()) -> None:
    """Write what `read_sequence` reads; an existing file is never overwritten.

    Raises
    ------
    SequenceError
        The file exists, or cannot be written.
    """
    lines = [*(f"# {clean_text(comment, 300)}" for comment in comments), *sequence_lines(sequence)]
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write("\n".join(lines) + "\n")
    except FileExistsError as error:
        raise SequenceError(f"{clean_text(path)} exists already; choose another name.") from error
    except OSError as error:
        raise SequenceError(
            f"{clean_text(path)} cannot be written: {(error.strerror or str(error)).lower()}."
        ) from error


def sequence_lines(sequence: Sequence) -> list[str]:
    """A sequence as lines of CSV: positions to 0.4 milliarcsec, magnitudes to 0.1 mmag, unknown cells empty."""
    bands = [band for band in BANDS if band in sequence.mag]
    lines = [",".join(["id", "ra", "dec", *(f"{band},{band}_err" for band in bands)])]
    for k, star in enumerate(sequence.ids):
        cells = [_cell(star), f"{sequence.ra_deg[k]:.7f}", f"{sequence.dec_deg[k]:.7f}"]
        for band in bands:
            mag, err = float(sequence.mag[band][k]), float(sequence.mag_err[band][k])
            cells += [f"{mag:.4f}", f"{err:.4f}"] if math.isfinite(mag) and math.isfinite(err) else ["", ""]
        lines.append(",".join(cells))
    return lines


def _cell(text: str) -> str:
    """A name as one cell of CSV that no spreadsheet takes for a formula."""
    harmless = clean_text(text, 60).lstrip("=+-@").replace('"', "'")
    return f'"{harmless}"' if "," in harmless else harmless
