"""Light curves from a CSV file: one object or many, one point a line.

Columns ``name, mjd, band, mag, err, z, ebv_mw``; optional ``flux, flux_err`` (zero point 25), ``err_night``
and ``err_band`` (mag), ``bjd_tdb``, ``kind`` (type_ia where it is not given), ``metallicity_dex, metallicity_err`` and
``relation``. An empty ``z`` or ``ebv_mw`` means unknown; a line without ``mag`` is a limit and needs a flux. Other
columns are ignored, and so are empty lines and lines that start with ``#``.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import get_args

import numpy as np

from reduce.plain_text import PlainError, clean_text
from reduce.records import FLUX_ZERO_POINT, LightCurve, Target, TargetKind

REQUIRED = ("name", "mjd", "band", "mag", "err", "z", "ebv_mw")
MAG_PER_RELATIVE_FLUX = 2.5 / math.log(10.0)
MJD_RANGE = (0.0, 200000.0)
"""A larger number is a Julian date, not a modified one."""
JD_RANGE = (2400000.0, 2600000.0)


class LightCurveFileError(PlainError, ValueError):
    """A light-curve file that cannot be used; one sentence with file, line and column."""


@dataclass(frozen=True, slots=True)
class _Line:
    """One line of the file and the words to complain about it."""

    place: str
    cells: dict[str, str]

    def number(self, column: str, low: float, high: float) -> float | None:
        """The finite number of a cell, None when the cell is empty or absent."""
        text = self.cells.get(column, "")
        if text == "":
            return None
        try:
            value = float(text)
        except ValueError:
            raise self.error(column, f"{clean_text(text, 40)!r} is not a number") from None
        if not low <= value <= high:
            raise self.error(column, f"{clean_text(text, 40)} is not between {low:g} and {high:g}")
        return value

    def needed(self, column: str, low: float, high: float) -> float:
        """As `number`, but the cell must be filled."""
        value = self.number(column, low, high)
        if value is None:
            raise self.error(column, "the cell is empty")
        return value

    def error(self, column: str, what: str) -> LightCurveFileError:
        """The sentence for a cell."""
        return LightCurveFileError(f"{self.place}, column {column}: {what}; correct the cell.")


@dataclass(slots=True)
class _Object:
    facts: Target
    rows: list[tuple[float, ...]] = field(default_factory=list)
    bands: list[str] = field(default_factory=list)
    sources: list[str] = field(default_factory=list)
    by_colour_terms: list[bool] = field(default_factory=list)


def _lines(path: Path) -> Iterator[_Line]:
    name = clean_text(path)
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            reader = csv.reader(stream, strict=True)
            header: list[str] | None = None
            for cells in reader:
                cells = [cell.strip() for cell in cells]
                if not any(cells) or cells[0].startswith("#"):
                    continue
                if header is None:
                    header = cells
                    _check_header(name, header)
                    continue
                place = f"{name}, line {reader.line_num}"
                if len(cells) != len(header):
                    raise LightCurveFileError(
                        f"{place}: {len(cells)} cells where the header has {len(header)}; correct the line."
                    )
                yield _Line(place, dict(zip(header, cells, strict=True)))
    except (csv.Error, UnicodeDecodeError) as error:
        raise LightCurveFileError(f"{name} is not a CSV text file ({clean_text(error)}); export it as CSV.") from error
    except OSError as error:
        raise LightCurveFileError(f"{name} cannot be read: {clean_text(error.strerror)}.") from error


def _check_header(name: str, header: list[str]) -> None:
    missing = [column for column in REQUIRED if column not in header]
    if missing:
        raise LightCurveFileError(f"{name}: no column {missing[0]}; the header must name {','.join(REQUIRED)}.")
    twice = sorted({column for column in header if header.count(column) > 1})
    if twice:
        raise LightCurveFileError(f"{name}: column {clean_text(twice[0], 40)} is there twice; remove one.")


def _point(line: _Line) -> tuple[float, ...]:
    """mjd, mag, err, err_night, err_band, flux, flux_err, bjd_tdb; NaN where unknown."""
    if (line.number("mjd", -math.inf, math.inf) or 0.0) > MJD_RANGE[1]:
        raise line.error("mjd", "this looks like a Julian date, subtract 2400000.5")
    mjd = line.needed("mjd", *MJD_RANGE)
    mag = line.number("mag", -30.0, 40.0)
    err = line.number("err", 0.0, 100.0)
    flux = line.number("flux", -1e30, 1e30)
    flux_err = line.number("flux_err", 0.0, 1e30)
    if mag is None and flux is None:
        raise line.error("mag", "neither mag nor flux is given")
    if mag is not None and not err:
        raise line.error("err", "a magnitude needs an error above 0")
    if flux is not None and not flux_err:
        raise line.error("flux_err", "a flux needs an error above 0")
    if flux is None and mag is not None and err is not None:
        flux = 10.0 ** (-0.4 * (mag - FLUX_ZERO_POINT))
        flux_err = flux * err / MAG_PER_RELATIVE_FLUX
    night, band = line.number("err_night", 0.0, 100.0), line.number("err_band", 0.0, 100.0)
    bjd = line.number("bjd_tdb", *JD_RANGE)
    values = (mag, err if mag is not None else None, night or 0.0, band, flux, flux_err, bjd)
    return (mjd, *(math.nan if value is None else value for value in values))


def _by_colour_terms(line: _Line) -> bool:
    word = line.cells.get("passbands", "")
    if word not in ("", "known", "unknown"):
        raise line.error("passbands", f"{clean_text(word, 40)!r} is neither known nor unknown")
    return word == "unknown"


def read_light_curves(path: Path) -> list[tuple[Target, LightCurve]]:
    """Targets and light curves of a CSV file, in the order in which the objects first appear.

    Positions are not in the file and are NaN. The night of a point is the whole part of its MJD.

    Raises
    ------
    LightCurveFileError
        One sentence naming file, line and column.
    """
    objects: dict[str, _Object] = {}
    for line in _lines(Path(path)):
        name = clean_text(line.cells["name"])
        if not name:
            raise line.error("name", "the cell is empty")
        if not line.cells["band"]:
            raise line.error("band", "the cell is empty")
        facts = _target(name, line)
        known = objects.setdefault(name, _Object(facts))
        for column in ("z", "ebv_mw", "kind", "metallicity_dex", "metallicity_err", "relation"):
            if getattr(known.facts, column) != getattr(facts, column):
                raise line.error(column, f"differs from the earlier lines of {name}")
        known.rows.append(_point(line))
        known.bands.append(clean_text(line.cells["band"], 40))
        known.sources.append(clean_text(line.cells.get("source", ""), 40))
        known.by_colour_terms.append(_by_colour_terms(line))
    if not objects:
        raise LightCurveFileError(f"{clean_text(path)} holds no points; add lines below a header {','.join(REQUIRED)}.")
    return [(thing.facts, _light_curve(thing)) for thing in objects.values()]


def _target(name: str, line: _Line) -> Target:
    kind = line.cells.get("kind") or "type_ia"
    if kind not in get_args(TargetKind):
        raise line.error("kind", f"{clean_text(kind, 40)!r} is not one of {', '.join(get_args(TargetKind))}")
    return Target(
        name, kind, math.nan, math.nan,  # type: ignore[arg-type]
        z=line.number("z", -0.01, 20.0), ebv_mw=line.number("ebv_mw", 0.0, 100.0),
        metallicity_dex=line.number("metallicity_dex", -4.0, 1.5),
        metallicity_err=line.number("metallicity_err", 0.0, 3.0),
        relation=clean_text(line.cells.get("relation", ""), 60) or None,
    )  # fmt: skip


def _light_curve(thing: _Object) -> LightCurve:
    mjd, mag, err, err_night, err_band, flux, flux_err, bjd = np.array(thing.rows, float).T
    night = np.array([str(math.floor(time)) for time in mjd])
    return LightCurve(
        mjd, np.array(thing.bands), mag, err, err_night, err_band, flux, flux_err, night, bjd,
        source=np.array(thing.sources), by_colour_terms=np.array(thing.by_colour_terms),
    )  # fmt: skip
