"""Stamp packs as files named by their content: ``stamps/ab/<digest>.pack``."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

from reduce.logbook.database import LogbookError
from reduce.plain_text import clean_text


def _place(folder: Path, digest: str) -> Path:
    return folder / "stamps" / digest[:2] / f"{digest}.pack"


def write_stamps(folder: Path, pack: bytes) -> str:
    """Write a pack so that it is on the disk before its digest is returned; '' for no pack.

    Raises
    ------
    LogbookError
        The disk is full or the folder cannot be written.
    """
    if not pack:
        return ""
    digest = hashlib.sha256(pack).hexdigest()
    path = _place(folder, digest)
    if path.exists():
        return digest
    part = path.with_name(f"{path.name}.{os.getpid()}.part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        try:
            with part.open("wb") as file:
                file.write(pack)
                file.flush()
                os.fsync(file.fileno())
            part.replace(path)
        finally:
            part.unlink(missing_ok=True)
        _sync_folder(path.parent)
    except OSError as error:
        raise LogbookError(
            f"{clean_text(path.parent, 300)} cannot take the stamps: {clean_text(error.strerror or error)}; "
            "nothing was changed: make room or check permissions, then go on."
        ) from error
    return digest


def _sync_folder(folder: Path) -> None:
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def read_stamps(folder: Path, digest: str) -> bytes:
    """The pack of a digest, checked; b"" for the empty digest.

    Raises
    ------
    LogbookError
        The file is missing or was changed.
    """
    if not digest:
        return b""
    path = _place(folder, digest)
    try:
        pack = path.read_bytes()
    except OSError as error:
        raise LogbookError(f"{clean_text(path, 300)} cannot be read: {clean_text(error.strerror or error)}.") from error
    if hashlib.sha256(pack).hexdigest() != digest:
        raise LogbookError(f"{clean_text(path, 300)} was changed on disk; put the copy of a backup in its place.")
    return pack
