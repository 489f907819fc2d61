"""Distance moduli of one galaxy from a CSV file: ``name, mu, err``, and a column for each error that several share."""

from __future__ import annotations

import csv
import math
from pathlib import Path

from reduce.plain_text import PlainError, clean_text

REQUIRED = ("name", "mu", "err")


class ModuliFileError(PlainError, ValueError):
    """A file of moduli that cannot be used; one sentence."""


def read_moduli(path: Path) -> list[tuple[str, float, float, dict[str, float]]]:
    """(name, modulus, error of its own, shared error → signed part) of every line, all in mag.

    Raises
    ------
    ModuliFileError
        One sentence naming file and line.
    """
    shown = clean_text(path, 300)
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            rows = [
                [cell.strip() for cell in cells]
                for cells in csv.reader(stream, strict=True)
                if any(cells) and not cells[0].startswith("#")
            ]
    except (csv.Error, UnicodeDecodeError) as error:
        raise ModuliFileError(f"{shown} is not a CSV text file; export it as CSV.") from error
    except OSError as error:
        raise ModuliFileError(f"{shown} cannot be read: {clean_text(error.strerror)}.") from error
    if len(rows) < 2 or tuple(rows[0][:3]) != REQUIRED or len(set(rows[0])) < len(rows[0]):
        raise ModuliFileError(f"{shown} needs a header that begins with {','.join(REQUIRED)} and a line below it.")
    return [_modulus(f"{shown}, {cells[0] or 'a line without name'}", rows[0], cells) for cells in rows[1:]]


def _modulus(place: str, header: list[str], cells: list[str]) -> tuple[str, float, float, dict[str, float]]:
    place = clean_text(place, 400)
    if len(cells) != len(header):
        raise ModuliFileError(f"{place}: {len(cells)} cells where the header has {len(header)}; correct the line.")
    values: dict[str, float] = {}
    for column, text in zip(header[1:], cells[1:], strict=True):
        if text == "" and column not in REQUIRED:
            continue
        try:
            values[column] = float(text)
        except ValueError:
            values[column] = math.nan
        if not math.isfinite(values[column]) or abs(values[column]) > 100.0:
            raise ModuliFileError(f"{place}: {clean_text(column, 40)} is no number of magnitudes; correct the cell.")
    if not values["err"] > 0:
        raise ModuliFileError(f"{place}: err must be above 0; correct the cell.")
    shared = {clean_text(name, 40): value for name, value in values.items() if name not in REQUIRED}
    return clean_text(cells[0], 60), values["mu"], values["err"], shared
