"""What an observer sets up: settings, targets, the comparison sequence and the frames folder, shown and changed."""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from reduce.campaign.frames_folder import FRAMES_FOLDER, gone_sentence
from reduce.campaign.people import PROGRAM, who
from reduce.campaign.settings_file import SETTINGS_FILE, change_settings, settings_keys, settings_texts
from reduce.campaign.targets import TargetError, corrected, new_target
from reduce.plain_text import PlainError, clean_text
from reduce.settings import Settings
from reduce.views import FilterRow, SetupView

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

SETTINGS_IN_FORCE = "settings in force"
"""Setting of the logbook: what observatory.toml said last, so that each change is one line of the log."""
SITE = "site.position"
"""Stands for the three keys of the site's place: typed as latitude, longitude and, if known, height."""


class SetupError(PlainError):
    """What was typed in Setup cannot be used."""


# ---- shown -------------------------------------------------------------------------------------------------


def setup_view(campaign: Campaign) -> SetupView:
    """Settings, filters and folders as they are now."""
    texts = dict.fromkeys(settings_keys(), "") | settings_texts(campaign.settings)
    site = campaign.settings.site
    if site is not None:
        texts[SITE] = f"{site.latitude_deg:.10g}, {site.longitude_deg:.10g}, {site.height_m:.10g}"
    return SetupView(
        settings=texts,
        frames_folder=str(campaign.frames_folder),
        trouble=campaign.settings_trouble or gone_sentence(campaign.book),
        filters=_filters(campaign),
        sequence=campaign.sequence().name,
        sequence_notes=tuple(campaign.sequence_notes()),
    )


def _filters(campaign: Campaign) -> tuple[FilterRow, ...]:
    """Every filter name of lights and flats, and those named in the settings alone."""
    count: Counter[str] = Counter()
    bands: dict[str, str | None] = dict(campaign.settings.filters)
    for frame in campaign.known_frames():
        if frame.info.kind in ("light", "flat"):
            count[frame.info.filter_name] += 1
            bands.setdefault(frame.info.filter_name, frame.info.band)
    named = campaign.settings.filters
    return tuple(FilterRow(clean_text(name), bands[name], count[name], name in named) for name in sorted(bands) if name)


# ---- changed -----------------------------------------------------------------------------------------------


def change(campaign: Campaign, subject: str, typed: str) -> str:
    """Change one thing as it was typed; the words for what was done.

    Parameters
    ----------
    subject
        ``setting:<key of observatory.toml>``; ``frames folder``; ``sequence`` (a file to import);
        ``target:<name>:<fact>`` (see `targets.corrected`).

    Raises
    ------
    PlainError
        One sentence; nothing was changed then.
    """
    kind, _, rest = subject.partition(":")
    if kind == "setting":
        return _change_setting(campaign, rest, typed.strip())
    if kind == "target":
        name, _, fact = rest.rpartition(":")
        return _correct(campaign, name, fact, typed.strip())
    if subject == "frames folder":
        return move_frames_folder(campaign, Path(typed.strip()).expanduser())
    if subject == "sequence":
        from reduce.campaign.sequences import import_sequence

        new, again = import_sequence(campaign, Path(typed.strip()).expanduser())
        follows = "frames are measured again" if again else "nothing needs to be measured again"
        return f"Comparison sequence {new.name} of {len(new)} stars is in force; {follows}."
    raise SetupError(f"There is nothing called {clean_text(subject)} to set up.")


def _change_setting(campaign: Campaign, key: str, typed: str) -> str:
    changes = site_changes(typed) if key == SITE else {key: typed}
    if key == "site.name" and campaign.settings.site is None:
        raise SetupError("Give the site's position first, then its name.")
    if not put_settings(campaign, changes):
        return "That is how it was."
    shown = clean_text(typed) or "nothing"
    return f"{key.partition('.')[2].replace('_', ' ')}: {shown}. Frames that it concerns are measured again."


def site_changes(typed: str) -> dict[str, str]:
    """Keys of the site from ``LATITUDE, LONGITUDE[, HEIGHT]``; nothing takes the whole site away."""
    parts = [part.strip() for part in typed.split(",")] if typed else ["", "", ""]
    if len(parts) not in (2, 3):
        raise SetupError(f"{clean_text(typed)!r} is not latitude, longitude, height: 43.5, -5.2, 620.")
    keys = ("site.latitude_deg", "site.longitude_deg", "site.height_m")
    found = dict(zip(keys, parts, strict=False))
    return found if typed else found | {"site.name": ""}


def put_settings(campaign: Campaign, changes: Mapping[str, str]) -> bool:
    """Set keys of observatory.toml as they were typed; False when nothing is new. The logbook gets a line.

    Raises
    ------
    SettingsError
        One sentence; the file is then as it was.
    """
    change_settings(campaign.folder / SETTINGS_FILE, changes)
    if not campaign.look_at_settings():
        return False
    remember_settings(campaign)
    words = ", ".join(f"{key} = {clean_text(typed) or 'nothing'}" for key, typed in changes.items())
    campaign.book.note("", f"{SETTINGS_FILE}: {words}.", who(), kind="event")
    return True


def _correct(campaign: Campaign, name: str, fact: str, typed: str) -> str:
    target = campaign.target(name)
    match fact:
        case "reference":
            new = corrected(target, reference=Path(typed).expanduser() if typed else Path())
        case "position":
            new = corrected(target, position=typed)
        case "z":
            new = corrected(target, z=typed)
        case "ebv_mw":
            new = corrected(target, ebv_mw=typed)
        case "spectrum":
            new = corrected(target, spectrum=typed)
        case "host":
            new = corrected(target, host=typed)
        case _:
            raise SetupError(f"Nothing is known of a target's {clean_text(fact)}.")
    if not campaign.correct_target(new):
        return "That is how it was."
    return f"{target.name}: {clean_text(fact)} {clean_text(typed) or 'not known'}; the light curve follows by itself."


def follow_target(campaign: Campaign, facts: Mapping[str, str]) -> str:
    """One more target, from its facts as they were typed (see `targets.new_target`).

    Raises
    ------
    TargetError
        One sentence; there is one of this name, for example.
    """
    target = new_target(facts)
    folded = target.name.casefold().replace(" ", "")
    if any(known.name.casefold().replace(" ", "") == folded for known in campaign.targets()):
        raise TargetError(f"{target.name} is followed already; correct its facts instead.")
    campaign.book.add_target(target)
    campaign.book.note(target.name, f"{target.name} is followed from now on.", who(), kind="event")
    return f"{target.name} is followed from now on; frames are measured again for it."


def move_frames_folder(campaign: Campaign, folder: Path) -> str:
    """Say where the frames are now; those measured before are known again by their content.

    Raises
    ------
    CampaignError
        There is no such folder.
    """
    from reduce.campaign.door import refuse_frames_folder

    refuse_frames_folder(folder)
    shown = clean_text(folder.resolve(), 300)
    if not campaign.book.set_setting(FRAMES_FOLDER, str(folder.resolve())):
        return "That is how it was."
    campaign.book.note("", f"Frames are in {shown} now.", who(), kind="event")
    return f"Frames are looked for in {shown} now."


# ---- followed ----------------------------------------------------------------------------------------------


def remember_settings(campaign: Campaign) -> bool:
    """Write into the logbook which settings are in force; False when it knows."""
    return campaign.book.set_setting(SETTINGS_IN_FORCE, _digest(campaign.settings))


def follow_settings(campaign: Campaign) -> None:
    """Take over an observatory.toml that was changed by hand, or say what is wrong with it: one line of the log."""
    trouble = campaign.settings_trouble
    if campaign.look_at_settings() and remember_settings(campaign):
        campaign.book.note("", f"{SETTINGS_FILE} was changed.", PROGRAM, kind="event")
    elif campaign.settings_trouble and campaign.settings_trouble != trouble:
        campaign.book.note("", campaign.settings_trouble, PROGRAM, kind="event")


def _digest(settings: Settings) -> str:
    return hashlib.sha256(settings.model_dump_json().encode()).hexdigest()
