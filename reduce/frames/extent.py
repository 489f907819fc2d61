"""How many bytes a FITS file declares: walks the headers only, allocates nothing, believes nothing.

A FITS file is a row of header blocks of 2,880 bytes up to END, each header followed by its data, padded to whole
blocks (FITS 4.0, section 3). Files may be packed whole by gzip; tile compression is ordinary FITS to this module.
"""

from __future__ import annotations

import gzip
import math
import os
import stat
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from reduce.records import FrameError

BLOCK = 2880
MOST_PIXELS = 1_000_000_000
"""Of one image; no detector has as many, so a header that says so lies."""
MOST_HEADER_BLOCKS = 4000
MOST_PACKING = 4000
"""Pixels a byte of a tile-compressed image; more is a lie (a constant image packs about 1,000 times)."""
_GZIP_MAGIC = b"\x1f\x8b"


class CutShort(FrameError):
    """The file is shorter than it says: it may still be written."""


@dataclass(frozen=True, slots=True)
class DeclaredUnit:
    """One header and what it declares."""

    cards: dict[str, str]
    data_start: int
    end: int
    """Where its padded data ends, in bytes of the (unpacked) file."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Axes of the image as stored or, for a tile-compressed one, as it was; () for a table or no data."""
        prefix = "Z" if self.cards.get("ZIMAGE") == "T" else ""
        if not prefix and _word(self.cards.get("XTENSION", "")) not in ("", "IMAGE"):
            return ()
        return tuple(
            _whole(self.cards, f"{prefix}NAXIS{k}") for k in range(1, _whole(self.cards, f"{prefix}NAXIS") + 1)
        )


def declared_units(path: Path) -> list[DeclaredUnit]:
    """Headers of a file, after checking that their data are all there.

    Raises
    ------
    FrameError
        Empty, not FITS, cut short, packed badly, or declaring what no camera makes; in one sentence.
    """
    try:
        mode = os.stat(path).st_mode
        if not stat.S_ISREG(mode) and not stat.S_ISDIR(mode):
            raise FrameError("this is a pipe or a device, not a file; remove it from the folder.")  # reading would wait
        with open(path, "rb") as file:
            size = os.fstat(file.fileno()).st_size
            if size == 0:
                raise CutShort("the file is empty (0 bytes); copy it again.")
            packed = file.read(2) == _GZIP_MAGIC
            file.seek(0)
            if not packed:
                return list(_walk(file, size))
            with gzip.open(file) as unpacked:
                return list(_walk(unpacked, None))
    except (OSError, EOFError, zlib.error) as error:
        raise FrameError(cannot_read(error)) from error


def _walk(file: BinaryIO | gzip.GzipFile, size: int | None) -> Iterator[DeclaredUnit]:
    position = 0
    while size is None or position < size:
        cards = _read_header(file, first=position == 0)
        if cards is None:
            return
        start = file.tell()
        unit = DeclaredUnit(cards, start, start + _data_bytes(cards))
        _refuse_lies(unit)
        if size is not None and unit.end > size:
            # Some writers leave the last block unpadded: all data are there.
            if size < start + _bare_data_bytes(cards):
                raise CutShort(_cut_short(size, unit.end))
        elif size is None:
            _skip_packed(file, unit.end - start, unit.end)
        yield unit
        position = unit.end
        if size is not None:
            file.seek(position)


def _read_header(file: BinaryIO | gzip.GzipFile, first: bool) -> dict[str, str] | None:
    """Cards of the next header as raw text; None when the file ends, or what follows is padding."""
    cards: dict[str, str] = {}
    for n in range(MOST_HEADER_BLOCKS):
        block = file.read(BLOCK)
        if n == 0 and first and not block.startswith(b"SIMPLE"[: max(len(block), 1)]):
            raise FrameError("this is not a FITS file; remove it from the folder or save it as FITS.")
        if n == 0 and not first and not block.startswith(b"XTENSION"):
            return None
        if len(block) < BLOCK and b"END" not in block:
            raise CutShort(f"the file is cut short: its header ends after {file.tell()} bytes; copy it again.")
        for k in range(0, len(block), 80):
            card = block[k : k + 80].decode("ascii", "replace")
            key = card[:8].strip()
            if key == "END":
                return cards
            if card[8:10] == "= ":
                cards.setdefault(key, card[10:].split("/")[0].strip())
    raise FrameError("the header has no end; the file is damaged, copy it again.")


def _skip_packed(file: BinaryIO | gzip.GzipFile, n_bytes: int, end: int) -> None:
    left = n_bytes
    while left > 0:
        got = len(file.read(min(left, 1 << 20)))
        if got == 0 and left >= BLOCK:
            raise CutShort(_cut_short(end - left, end))
        if got == 0:
            return
        left -= got


def _cut_short(size: int, declared: int) -> str:
    return f"the file is cut short: it holds {size} of {declared} bytes; copy it again or wait until it is written."


def _word(raw: str) -> str:
    return raw.strip("' ")


def _whole(cards: dict[str, str], key: str, default: int = 0) -> int:
    text = cards.get(key)
    if text is None:
        return default
    try:
        value = int(text)
    except ValueError:
        raise FrameError(f"the header is damaged: {key} is not a whole number; copy the file again.") from None
    if value < 0 or value > 10**15:
        raise FrameError(f"the header is damaged: {key} = {value}; copy the file again.")
    return value


def _bare_data_bytes(cards: dict[str, str]) -> int:
    n_axes = _whole(cards, "NAXIS")
    if n_axes == 0:
        return 0
    if n_axes > 999:
        raise FrameError("the header is damaged: NAXIS is more than 999; copy the file again.")
    pixels = math.prod(_whole(cards, f"NAXIS{k}") for k in range(1, n_axes + 1))
    try:
        bits = abs(int(cards.get("BITPIX", "")))
    except ValueError:
        raise FrameError("the header is damaged: BITPIX is missing; copy the file again.") from None
    return bits // 8 * _whole(cards, "GCOUNT", 1) * (_whole(cards, "PCOUNT") + pixels)


def _data_bytes(cards: dict[str, str]) -> int:
    return -(-_bare_data_bytes(cards) // BLOCK) * BLOCK


def _refuse_lies(unit: DeclaredUnit) -> None:
    shape = unit.shape
    if not shape:
        return
    pixels = math.prod(shape)
    tiled = unit.cards.get("ZIMAGE") == "T"
    if pixels > MOST_PIXELS or (tiled and pixels > MOST_PACKING * max(1, unit.end - unit.data_start)):
        raise FrameError(
            f"the header declares an image of {' × '.join(map(str, shape[:4]))} pixels, which cannot be true; "
            "the file is damaged, copy it again."
        )


def cannot_read(error: BaseException) -> str:
    """What kept a file from being read, in one sentence."""
    if isinstance(error, PermissionError):
        return "the file may not be read; give this account permission to read it."
    if isinstance(error, FileNotFoundError):
        return "the file is not there; it was moved or deleted."
    if isinstance(error, IsADirectoryError):
        return "this is a folder, not a file."
    if isinstance(error, EOFError):
        return "the file is cut short: its gzip packing has no end; copy it again."
    if isinstance(error, OSError) and error.strerror:
        return f"the file cannot be read ({error.strerror}); check the disk or the network."
    return "the file cannot be unpacked: its gzip packing is damaged; copy it again."
