"""Whether a tile-compressed image (FITS 4.0, section 10) is what its header says, before anything is unpacked.

Such an image is a table with one row a tile; a row says how many bytes the tile takes and where in the heap behind the
table they begin. A damaged row would make a reader allocate what it names.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from gzip import GzipFile
from typing import BinaryIO

import numpy as np

_FORM = re.compile(r"^'?\s*(\d*)([LXBAIJKEDCMPQ])([LXBAIJKEDCM]?)")
_BYTES = {"L": 1, "B": 1, "A": 1, "I": 2, "J": 4, "K": 8, "E": 4, "D": 8, "C": 8, "M": 16, "P": 8, "Q": 16}


def tiles_fit(numbers: Mapping[str, int], shape: tuple[int, ...]) -> bool:
    """Whether the table has one row a tile.

    Parameters
    ----------
    numbers
        Whole numbers of the header by keyword.
    """
    tiles = [numbers.get(f"ZTILE{k}", axis if k == 1 else 1) for k, axis in enumerate(shape, 1)]
    if min(tiles, default=0) < 1:
        return False
    return math.prod(-(-axis // tile) for axis, tile in zip(shape, tiles, strict=True)) == numbers.get("NAXIS2")


def heap_fits(file: BinaryIO | GzipFile, start: int, numbers: Mapping[str, int], forms: list[str]) -> bool:
    """Whether every tile lies within the heap.

    Parameters
    ----------
    start
        Where the table begins, in bytes of the file.
    numbers
        Whole numbers of the header by keyword.
    forms
        TFORM of the columns.
    """
    width, rows = numbers.get("NAXIS1", 0), numbers.get("NAXIS2", 0)
    end = width * rows + numbers.get("PCOUNT", 0)
    heap = numbers.get("THEAP", width * rows)
    file.seek(start)
    raw = file.read(width * rows)
    if len(raw) < width * rows:
        return False
    table = np.frombuffer(raw, np.uint8).reshape(rows, width)
    at = 0
    for form in forms:
        match = _FORM.match(form)
        if match is None:
            return False
        repeat, letter, element = int(match[1] or 1), match[2], match[3]
        size = -(-repeat // 8) if letter == "X" else repeat * _BYTES[letter]
        if at + size > width:
            return False
        if letter in "PQ" and repeat == 1:
            pairs = np.ascontiguousarray(table[:, at : at + size]).view(">i4" if letter == "P" else ">i8")
            count, offset = pairs[:, 0].astype(float), pairs[:, 1].astype(float)
            last = heap + offset + count * _BYTES.get(element or "B", 1)
            if ((count < 0) | (offset < 0) | (last > end)).any():
                return False
        at += size
    return at == width
