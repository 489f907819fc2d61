"""From an empty folder to a campaign, step by step: each step is checked before the next, nothing is made before the
last.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from reduce.almanac.sky import separation_deg
from reduce.campaign.door import Campaign, refuse_frames_folder
from reduce.campaign.known import FAR_DEG
from reduce.campaign.sequences import read_usable_sequence
from reduce.campaign.settings_file import SETTINGS_FILE, changed_text, starter_text
from reduce.campaign.setup import SITE, site_changes
from reduce.campaign.survey import survey_folder
from reduce.campaign.targets import new_target
from reduce.records import BANDS
from reduce.settings import Settings, parse_settings
from reduce.views import FolderSurvey


def settings_text(typed: Mapping[str, str], start: str | None = None) -> str:
    """The observatory.toml that was typed.

    Parameters
    ----------
    start
        Of a file that lies in the folder already; None: the starter file.

    Raises
    ------
    PlainError
        One sentence on the first value that cannot be.
    """
    changes: dict[str, str] = {}
    for key, text in typed.items():
        if text.strip():
            changes |= site_changes(text.strip()) if key == SITE else {key: text}
    return changed_text(start if start is not None else starter_text(), changes)


def survey(frames: Path, typed: Mapping[str, str]) -> FolderSurvey:
    """What lies in the frames folder, with the filters as the observer named them.

    Raises
    ------
    CampaignError
        There is no such folder.
    """
    refuse_frames_folder(frames)
    return survey_folder(frames, _settings(typed))


def check_settings(typed: Mapping[str, str]) -> None:
    """Refuse, in one sentence, settings that cannot be."""
    _settings(typed)


def check_target(facts: Mapping[str, str]) -> str:
    """The target that was typed, as it was understood; or one sentence raised."""
    target = new_target(facts)
    return f"{target.name} at RA {target.ra_deg:.6f}°, Dec {target.dec_deg:+.6f}°."


def check_stars(path: Path, facts: Mapping[str, str]) -> str:
    """One sentence on a comparison sequence for this target.

    Raises
    ------
    PlainError
        The file cannot be used.
    """
    stars, target = read_usable_sequence(path), new_target(facts)
    counts = ", ".join(
        f"{band} {int((stars.mag[band] == stars.mag[band]).sum())}" for band in BANDS if band in stars.mag
    )
    apart = min(
        separation_deg(target.ra_deg, target.dec_deg, float(ra), float(dec))
        for ra, dec in zip(stars.ra_deg, stars.dec_deg, strict=True)
    )
    if apart > FAR_DEG:
        return (
            f"{len(stars)} stars ({counts}), but the nearest lies {apart:.1f} degrees from {target.name}: compare both "
            "positions, and whether right ascensions are in degrees."
        )
    return f"{len(stars)} stars ({counts}); the nearest lies {60 * apart:.1f} arcmin from {target.name}."


def begin(folder: Path, frames: Path, stars: Path, facts: Mapping[str, str], typed: Mapping[str, str]) -> None:
    """Make the campaign; an observatory.toml that lies in the folder already is kept and added to.

    Parameters
    ----------
    facts
        Of the target, see `targets.new_target`.
    typed
        Key of observatory.toml (or ``site.position``) → its value.

    Raises
    ------
    PlainError
        One sentence; nothing was made then.
    """
    there = folder / SETTINGS_FILE
    text = settings_text(typed, there.read_text(encoding="utf-8") if there.exists() else None)
    Campaign.create(folder, frames, stars, [new_target(facts)], settings_text=text).book.close()


def _settings(typed: Mapping[str, str]) -> Settings:
    return parse_settings(settings_text(typed), SETTINGS_FILE)
