"""What is wrong with this installation, this terminal or this campaign, and what to do about it."""

from __future__ import annotations

import locale
import os
import shutil
import sqlite3
import sys
from dataclasses import dataclass
from importlib.metadata import version as installed
from pathlib import Path

from reduce.plain_text import PlainError
from reduce.version import version

LIBRARIES = ("textual", "numpy", "scipy", "astropy", "photutils", "pandas", "click", "pydantic")
SMALLEST_TERMINAL = (80, 24)
FREE_BYTES_WANTED = 500_000_000


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that was looked at."""

    good: bool
    sentence: str


def examine(folder: Path | None) -> list[Finding]:
    """Look at the installation and the terminal and, when a folder is given, at its campaign."""
    findings = [*_installation(), *_terminal(), _time_data()]
    if folder is not None:
        findings += _campaign(folder)
    return findings


def _installation() -> list[Finding]:
    here = ", ".join(f"{name} {installed(name)}" for name in LIBRARIES)
    return [
        Finding(True, f"Fadeline {version()} on Python {sys.version.split()[0]}."),
        Finding(True, f"Libraries: {here}."),
        Finding(True, f"SQLite {sqlite3.sqlite_version}."),
    ]


def _terminal() -> list[Finding]:
    if not sys.stdout.isatty():
        return [Finding(True, "Output is not a terminal: its size and colours were not looked at.")]
    size = shutil.get_terminal_size()
    big = size.columns >= SMALLEST_TERMINAL[0] and size.lines >= SMALLEST_TERMINAL[1]
    encoding = locale.getpreferredencoding(False)
    unicode = encoding.upper().replace("-", "") == "UTF8"
    colours = "none (NO_COLOR)" if os.environ.get("NO_COLOR") else os.environ.get("COLORTERM") or "by TERM"
    return [
        Finding(big, f"Terminal of {size.columns}×{size.lines}" + ("." if big else ": enlarge it to 80×24.")),
        Finding(unicode, f"Encoding {encoding}" + ("." if unicode else ": set LANG=C.UTF-8 for finer charts.")),
        Finding(True, f"TERM={os.environ.get('TERM', '')}, colours: {colours}."),
    ]


def _time_data() -> Finding:
    from reduce.almanac.times import bjd_tdb

    value = float(bjd_tdb(60000.0, 0.0, 0.0, None))
    return Finding(abs(value - 2460000.5) < 0.01, "Barycentric times are computed from built-in tables (no network).")


def _campaign(folder: Path) -> list[Finding]:
    from reduce.campaign.door import Campaign

    try:
        campaign = Campaign.open(folder)
    except PlainError as error:
        return [Finding(False, str(error))]
    damage = campaign.book.check()
    findings = [
        Finding(not damage, damage or f"Logbook sound; followed: {', '.join(t.name for t in campaign.targets())}."),
        Finding(
            campaign.frames_folder.is_dir(),
            f"Frames folder {campaign.frames_folder}"
            + ("." if campaign.frames_folder.is_dir() else " is not there: mount its disk or put it back."),
        ),
    ]
    free = shutil.disk_usage(folder).free
    findings.append(
        Finding(
            free >= FREE_BYTES_WANTED,
            f"{free / 1e9:.1f} GB free"
            + ("." if free >= FREE_BYTES_WANTED else ": make room, or measuring will stop."),
        )
    )
    findings += [Finding(False, sentence) for sentence in campaign.missing_settings()]
    findings += [Finding(False, sentence) for sentence in campaign.detector_sentences()]
    return findings
