"""How many bytes a FITS file declares: walks the headers only, allocates nothing, believes nothing.

A FITS file is a row of header blocks of 2,880 bytes up to END, each header followed by its data, padded to whole
blocks (FITS 4.0, section 3). Files may be packed whole by gzip, whose last four bytes say how long the content is (RFC
1952): where that agrees with the header, nothing but the header is unpacked. Tile compression is ordinary FITS here.
"""

from __future__ import annotations

import gzip
import io
import math
import os
import re
import stat
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from reduce.frames.tiles import heap_fits, tiles_fit
from reduce.records import FrameError

BLOCK = 2880
MOST_PIXELS = 600_000_000
"""Of one image; no detector has as many, so a header that says so lies."""
MOST_HEADER_BLOCKS = 1000
MOST_PACKING = 4000
"""Pixels a byte of a tile-compressed image; more is a lie (a constant image packs about 1,000 times)."""
MOST_UNPACKED = 2_400_000_000
"""Bytes."""
BOMB_BYTES, BOMB_PACKING = 100_000_000, 100
"""A file that unpacks to so much, and to so many times its size, is no image: noise does not pack."""
MOST_DEFLATE = 1100
"""Bytes out of one byte; the method reaches 1032."""
MOST_COLUMNS = 999
"""The standard allows no more."""
_STRUCTURE = re.compile(r"(Z?(NAXIS\d*|BITPIX|PCOUNT|GCOUNT|IMAGE|TILE\d+)|THEAP|TFIELDS|TFORM\d+|GROUPS)$")
"""Keywords that decide where data lie."""
_GZIP_MAGIC = b"\x1f\x8b"
_OTHER_PACKINGS = ((b"BZh", "bzip2"), (b"\xfd7zXZ", "xz"), (b"PK\x03\x04", "zip"), (b"\x1f\x9d", "compress"))


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
    def is_random_groups(self) -> bool:
        """Data of the old form for interferometers, which is no image."""
        return self.cards.get("GROUPS") == "T" and self.cards.get("NAXIS1") == "0"

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
            start = file.read(6)
            for magic, name in _OTHER_PACKINGS:
                if start.startswith(magic):
                    raise FrameError(f"the file is packed by {name}; unpack it, or pack it by gzip.")
            if not start.startswith(_GZIP_MAGIC[: len(start)]):
                file.seek(0)
                return list(_walk(file, size))
            file.seek(max(0, size - 4))
            content = _Packed(size, int.from_bytes(file.read(4), "little"))
            file.seek(0)
            with gzip.open(file) as unpacked:
                return list(_walk(unpacked, content))
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        raise CutShort(cannot_read(error)) from error
    except OSError as error:
        raise FrameError(cannot_read(error)) from error


@dataclass(frozen=True, slots=True)
class _Packed:
    """What is known of a file packed by gzip before it is unpacked."""

    size: int
    content_size: int
    """As its end says, modulo 2³²; of a file still being written, anything."""

    def ends_with(self, unit: DeclaredUnit, bare_end: int) -> bool:
        return self.content_size in (unit.end, bare_end)

    def refuse_lies(self, unit: DeclaredUnit) -> None:
        if unit.end > MOST_UNPACKED or (unit.end > BOMB_BYTES and MOST_DEFLATE > unit.end / self.size > BOMB_PACKING):
            raise FrameError(
                f"the file would unpack from {self.size / 1e6:.3g} to {unit.end / 1e6:.0f} MB, which no image of a "
                "camera does; it is damaged, copy it again."
            )
        if unit.end > MOST_DEFLATE * self.size:
            raise CutShort(_cut_short(self.size, unit.end))


def unpacked(path: Path, headers_only: bool = False) -> io.BytesIO | None:
    """The content of a file packed by gzip, checked against its check sum; None for a file that is not packed.

    Parameters
    ----------
    headers_only
        Leave the data of the last unit out, and with them the check.

    Raises
    ------
    FrameError
        It is damaged, or unpacks to more than its headers declare.
    """
    with open(path, "rb") as file:
        if file.read(2) != _GZIP_MAGIC:
            return None
    last = declared_units(path)[-1]
    try:
        with gzip.open(path) as packed:
            if headers_only:
                return io.BytesIO(packed.read(last.data_start))
            content = packed.read(last.end)
            _skip_packed(packed, BOMB_BYTES, 0)  # to the end, where the check sum stands
    except (OSError, EOFError, zlib.error) as error:
        raise FrameError(cannot_read(error)) from error
    return io.BytesIO(content)


def _walk(file: BinaryIO | gzip.GzipFile, size: int | _Packed) -> Iterator[DeclaredUnit]:
    position = 0
    while isinstance(size, _Packed) or position < size:
        cards = _read_header(file, first=position == 0)
        if cards is None:
            if isinstance(size, _Packed):
                _skip_packed(file, BOMB_BYTES, 0)  # to the end, where the check sum stands
            return
        start = file.tell()
        unit = DeclaredUnit(cards, start, start + _data_bytes(cards))
        _refuse_lies(unit)
        bare_end = start + _bare_data_bytes(cards)  # some writers leave the last block unpadded: all data are there
        position = unit.end
        if isinstance(size, _Packed):
            size.refuse_lies(unit)
            if size.ends_with(unit, bare_end):
                yield unit
                return
            _skip_packed(file, unit.end - start, unit.end)
        elif bare_end > size:
            raise CutShort(_cut_short(size, unit.end))
        else:
            if unit.cards.get("ZIMAGE") == "T":
                _refuse_bad_heap(file, unit)
            file.seek(position)
        yield unit


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
            key = card[:8].strip().upper()
            if key == "END":
                return cards
            if card[8:10] == "= ":
                value = card[10:].split("/")[0].strip()
                if cards.setdefault(key, value) != value and _STRUCTURE.match(key):
                    raise FrameError(f"the header is damaged: it states {key} twice; copy the file again.")
    raise FrameError(
        f"the header has no end, or more than {MOST_HEADER_BLOCKS * BLOCK // 80} cards; the file is damaged, copy it "
        "again."
    )


def _skip_packed(file: BinaryIO | gzip.GzipFile, n_bytes: int, end: int) -> None:
    """Unpack ``n_bytes`` that lead to ``end``; an ``end`` of 0 is wherever the file ends."""
    left = n_bytes
    while left > 0:
        got = len(file.read(min(left, 1 << 20)))
        if got == 0 and left >= BLOCK and end:
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
    if bits not in (8, 16, 32, 64):
        raise FrameError(f"the header is damaged: BITPIX = {cards['BITPIX'][:20]}; copy the file again.")
    return bits // 8 * _whole(cards, "GCOUNT", 1) * (_whole(cards, "PCOUNT") + pixels)


def _data_bytes(cards: dict[str, str]) -> int:
    return -(-_bare_data_bytes(cards) // BLOCK) * BLOCK


def _refuse_lies(unit: DeclaredUnit) -> None:
    shape = unit.shape
    if not shape:
        return
    pixels = math.prod(shape)
    tiled = unit.cards.get("ZIMAGE") == "T"
    if (
        pixels > MOST_PIXELS
        or (tiled and pixels > MOST_PACKING * max(1, unit.end - unit.data_start))
        or (tiled and not tiles_fit(_whole_numbers(unit.cards), shape))
    ):
        raise FrameError(
            f"the header declares an image of {' × '.join(map(str, shape[:4]))} pixels, which cannot be true; "
            "the file is damaged, copy it again."
        )


def _whole_numbers(cards: dict[str, str]) -> dict[str, int]:
    return {key: int(text) for key, text in cards.items() if re.fullmatch(r"\d{1,15}", text)}


def _refuse_bad_heap(file: BinaryIO | gzip.GzipFile, unit: DeclaredUnit) -> None:
    forms = [unit.cards.get(f"TFORM{k}", "") for k in range(1, min(_whole(unit.cards, "TFIELDS"), MOST_COLUMNS) + 1)]
    if not heap_fits(file, unit.data_start, _whole_numbers(unit.cards), forms):
        raise FrameError("the file is damaged: tiles of its compressed image lie outside it; copy it again.")


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
