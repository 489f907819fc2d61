"""Light curves out: an ECSV table that says what its columns are, or CSV that a spreadsheet opens safely."""

from __future__ import annotations

import csv
import io
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any, Literal

from reduce.exchange.point_json import POINT_KEYS, point_to_json
from reduce.plain_text import PlainError, clean_text
from reduce.records import Point, Target

ExportFormat = Literal["ecsv", "csv"]
EXPORT_KEYS = (*POINT_KEYS, "source")
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


class ExportError(PlainError):
    """The light curve cannot be written; one sentence."""


@dataclass(frozen=True, slots=True)
class _Column:
    kind: type
    unit: str
    description: str


_COLUMNS: Mapping[str, _Column] = {
    "star": _Column(str, "", "target or comparison star"),
    "file": _Column(str, "", "frame; empty for the mean of a night"),
    "night": _Column(str, "", "local date of the evening"),
    "band": _Column(str, "", "B V R I: Landolt (Vega-like); g r i: SDSS (AB)"),
    "mjd": _Column(float, "d", "MJD, UTC, mid-exposure"),
    "bjd_tdb": _Column(float, "d", "barycentric Julian date, TDB, mid-exposure"),
    "mag": _Column(float, "mag", "standard magnitude; empty for a limit"),
    "err": _Column(float, "mag", "independent error"),
    "err_night": _Column(float, "mag", "error shared by the points of one band and night"),
    "err_band": _Column(float, "mag", "error shared by all points of a band"),
    "flux": _Column(float, "", "10^(-0.4 (mag - 25)), also of non-detections"),
    "flux_err": _Column(float, "", "independent error of flux"),
    "state": _Column(str, "", "kept, doubtful, dropped, excluded or limit"),
    "flags": _Column(str, "", "words, separated by blanks"),
    "host_method": _Column(str, "", "how the light of the host galaxy was taken off"),
    "zp_group": _Column(str, "", "camera/band/night that share a zero point"),
    "provisional": _Column(bool, "", "true: the frames wait for better masters"),
    "source": _Column(str, "", "the other observatory that measured it; empty: own"),
}


def write_points(
    points: Sequence[Point],
    target: Target | None,
    destination: Path | IO[str],
    format: ExportFormat = "ecsv",
    meta: Mapping[str, Any] | None = None,
) -> int:
    """Write points; the columns are those of `reduce.exchange.point_json.POINT_KEYS`, and ``source``.

    Parameters
    ----------
    target
        Its name, position, redshift and reddening go into the head of an ECSV table.
    destination
        A file, replaced as a whole or not at all, or a text stream.
    meta
        More for the head of an ECSV table: versions, scale, passbands.

    Returns
    -------
    int
        Number of points written.

    Raises
    ------
    ExportError
        The file cannot be written.
    """
    text = _ecsv(points, target, meta or {}) if format == "ecsv" else _csv(points)
    if isinstance(destination, Path):
        _replace(destination, text)
    else:
        destination.write(text)
    return len(points)


def _cells(point: Point) -> dict[str, Any]:
    """Values of one row; text is cleaned, unknown numbers are None."""
    row = point_to_json(point) | {"flags": " ".join(point.flags), "source": point.source}
    return {
        key: clean_text("" if row[key] is None else row[key]) if _COLUMNS[key].kind is str else row[key]
        for key in EXPORT_KEYS
    }


def _csv(points: Sequence[Point]) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(EXPORT_KEYS)
    for point in points:
        writer.writerow([_csv_cell(value) for value in _cells(point).values()])
    return stream.getvalue()


def _csv_cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f"'{value}" if value.startswith(FORMULA_STARTS) else value
    return repr(value)


def _ecsv(points: Sequence[Point], target: Target | None, meta: Mapping[str, Any]) -> str:
    from astropy.table import MaskedColumn, Table

    rows = [_cells(point) for point in points]
    for row in rows:
        if row["star"].startswith("#"):  # a line that begins with it would be read as a comment
            row["star"] = f"'{row['star']}"
    table = Table(masked=False)
    for key in EXPORT_KEYS:
        column = _COLUMNS[key]
        values = [row[key] for row in rows]
        missing = [value is None for value in values]
        blank = math.nan if column.kind is float else column.kind()
        filled = [blank if value is None else value for value in values]
        dtype = "U1" if column.kind is str and not rows else column.kind
        table[key] = MaskedColumn(
            filled, mask=missing if any(missing) else False, dtype=dtype, unit=column.unit or None,
            description=column.description,
        )  # fmt: skip
    table.meta.update(_head(target, meta))
    stream = io.StringIO()
    table.write(stream, format="ascii.ecsv")
    return stream.getvalue()


def _head(target: Target | None, meta: Mapping[str, Any]) -> dict[str, Any]:
    """What a reader must know to use the numbers, the caller's facts last."""
    head: dict[str, Any] = {
        "time_scale": {"mjd": "UTC", "bjd_tdb": "TDB"},
        "magnitude_system": {"B V R I": "Landolt (Vega-like)", "g r i": "SDSS (AB)"},
        "flux_zero_point": 25.0,
    }
    if target is not None:
        head["target"] = {
            "name": target.name, "kind": target.kind, "ra_deg_icrs": target.ra_deg,
            "dec_deg_icrs": target.dec_deg,
            "z_heliocentric": target.z, "ebv_mw": target.ebv_mw, "ebv_scale": target.ebv_scale,
        }  # fmt: skip
    cleaned: dict[str, Any] = _clean({**head, **meta})
    return cleaned


def _clean(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {clean_text(key): _clean(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_clean(item) for item in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value if value is None or isinstance(value, (bool, int)) else clean_text(value, 2000)


def _replace(path: Path, text: str) -> None:
    """Put the text in the place of a file, behind a link too; what is no file (a device, a pipe) is written to."""
    path = path.resolve()
    if path.exists() and not path.is_file():
        try:
            path.write_text(text, encoding="utf-8")
        except OSError as error:
            raise ExportError(
                f"{clean_text(path, 300)} cannot be written: {clean_text(error.strerror or error)}."
            ) from error
        return
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        try:
            with part.open("w", encoding="utf-8", newline="") as file:
                file.write(text)
                file.flush()
                os.fsync(file.fileno())
            part.replace(path)
        finally:
            part.unlink(missing_ok=True)
    except OSError as error:
        why = clean_text(error.strerror or error)
        raise ExportError(f"{clean_text(path, 300)} cannot be written: {why}; choose another file.") from error
