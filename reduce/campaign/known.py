"""What an open campaign knows: its folder, settings, targets, comparison stars, frames and masters."""

from __future__ import annotations

from functools import cached_property
from pathlib import Path

from reduce.almanac.sky import separation_deg
from reduce.campaign.frames_folder import frames_folder
from reduce.campaign.intake import Intake, KnownFrame
from reduce.campaign.sequences import ASTROMETRIC
from reduce.campaign.settings_file import SETTINGS_FILE, stamp_of
from reduce.campaign.targets import TargetError
from reduce.field.standards import read_standards
from reduce.logbook.store import Logbook
from reduce.plain_text import PlainError, clean_text
from reduce.records import BANDS, Target
from reduce.records import Sequence as ComparisonSequence
from reduce.settings import Settings, SettingsError, read_settings

FAR_DEG = 1.0
"""No field of a telescope that takes single supernovae is wider (common practice)."""


class CampaignError(PlainError):
    """A campaign cannot be made, opened or asked this."""


def refuse_reference(target: Target, frames_folder: Path) -> None:
    """Refuse, in one sentence, a reference folder that holds the frames themselves."""
    if target.reference_folder and frames_folder.resolve().is_relative_to(target.reference_folder):
        shown = clean_text(target.reference_folder, 300)
        raise CampaignError(f"The reference folder {shown} holds the frames folder: no frame would be science.")


class Known:
    """The facts of one campaign, read from its folder and logbook."""

    def __init__(self, folder: Path, book: Logbook, settings: Settings) -> None:
        self.folder, self.book, self.settings = folder, book, settings
        self.settings_trouble = ""
        self._settings_stamp = stamp_of(folder / SETTINGS_FILE)
        self._intake: Intake | None = None

    def targets(self) -> list[Target]:
        """What is followed."""
        return self.book.targets()

    def target(self, name: str | None) -> Target:
        """The target of this name (case and blanks do not matter), or the first when no name is given."""
        targets = self.targets()
        if name is None:
            return targets[0]
        for target in targets:
            if target.name.casefold().replace(" ", "") == name.casefold().replace(" ", ""):
                return target
        known = ", ".join(target.name for target in targets)
        raise TargetError(f"There is no target {clean_text(name)!r}; there is {known}.")

    def sequence(self) -> ComparisonSequence:
        """The comparison sequence in force."""
        sequence = self.book.current_sequence()
        if sequence is None:
            raise CampaignError(f"{self.folder} has no comparison sequence.")
        return sequence

    def astrometric(self) -> ComparisonSequence:
        """The stars by which the field is recognised: an older sequence's, as long as a newer one shares them."""
        return self.book.sequence_by_id(self.book.setting(ASTROMETRIC) or self.book.sequence_id()) or self.sequence()

    @cached_property
    def standards(self) -> ComparisonSequence:
        """Published standard stars, and the observer's own beside them."""
        return read_standards(self.folder)

    def sequence_notes(self) -> list[str]:
        """What an observer should know of the comparison sequence."""
        stars = self.sequence()
        counts = {band: int((stars.mag[band] == stars.mag[band]).sum()) for band in BANDS if band in stars.mag}
        shown = ", ".join(f"{band} {n}" for band, n in counts.items())
        notes = [f"Comparison sequence of {len(stars)} stars ({shown})."]
        for target in self.targets():
            apart = min(
                separation_deg(target.ra_deg, target.dec_deg, float(ra), float(dec))
                for ra, dec in zip(stars.ra_deg, stars.dec_deg, strict=True)
            )
            if apart > FAR_DEG:
                notes.append(
                    f"{target.name} lies {apart:.1f} degrees from the nearest comparison star: compare both positions, "
                    "and whether right ascensions are in degrees."
                )
        return notes

    @property
    def frames_folder(self) -> Path:
        """Where frames land."""
        return frames_folder(self.book)

    def look_at_settings(self) -> bool:
        """Read observatory.toml again when it was changed; True when other settings are in force now.

        A file that cannot be used changes nothing; `settings_trouble` says what is wrong with it.
        """
        path = self.folder / SETTINGS_FILE
        stamp = stamp_of(path)
        if stamp == self._settings_stamp:
            return False
        self._settings_stamp = stamp
        try:
            settings = read_settings(path)
        except SettingsError as error:
            self.settings_trouble = f"{error} The settings before are in force."
            return False
        self.settings_trouble = ""
        if settings == self.settings:
            return False
        self.settings = settings
        self.intake.use_settings(settings)
        return True

    def inputs(self) -> tuple[object, ...]:
        """What people say beside decisions: another value means that frames, or what follows of them, want work."""
        book = self.book
        return self.settings, tuple(self.targets()), book.sequence_id(), book.setting(ASTROMETRIC), self.frames_folder

    @property
    def reference_folders(self) -> tuple[Path, ...]:
        """Frames in them are never science."""
        return tuple(Path(t.reference_folder) for t in self.targets() if t.reference_folder)

    def missing_settings(self) -> list[str]:
        """Settings without which something is left undone, one sentence each."""
        found = []
        if self.settings.site is None:
            found.append(
                f"{SETTINGS_FILE} names no [site]: airmass, twilight, extinction and the light-travel time across "
                "the Earth are left out."
            )
        elif self.settings.telescope.aperture_m is None:
            found.append(f"{SETTINGS_FILE} gives no telescope aperture_m: scintillation is left out of the errors.")
        return found

    def known_frames(self) -> list[KnownFrame]:
        """Every readable frame of the logbook, by time."""
        return self.intake.known_frames()

    def unused_files(self) -> list[str]:
        """One sentence when files were read that are neither light nor calibration frames."""
        names = [clean_text(frame.path.name) for frame in self.known_frames() if frame.info.kind == "unknown"]
        if not names:
            return []
        files_are = "file is" if len(names) == 1 else "files are"
        return [
            f"{len(names)} {files_are} not used, being neither light nor calibration frames by header or name "
            f"({names[0]}{', …' if len(names) > 1 else ''}); fadeline inspect says why."
        ]

    @property
    def intake(self) -> Intake:
        """The campaign's files, in the folders that are named now."""
        if self._intake is None:
            self._intake = Intake(
                self.book, self.settings, self.frames_folder, self.reference_folders, self.folder / "masters",
                standards=self.standards,
            )  # fmt: skip
        self._intake.folder, self._intake.reference_folders = self.frames_folder, self.reference_folders
        self._intake.past_reference_folders = tuple(map(Path, sorted(self.book.reference_folders_ever())))
        return self._intake

    def wanted_recipes(self) -> dict[str, str]:
        """Frame id → digest of the recipe it should have, with the masters that stand now."""
        return self.intake.wanted_recipes(self.known_frames(), tuple(self.targets()), self.astrometric())

    def detector_sentences(self) -> list[str]:
        """What flats and biases measured of the detector otherwise than it is stated."""
        return self.intake.detector_sentences(self.known_frames())

    def calibration_sentences(self) -> tuple[tuple[str, ...], list[str]]:
        """One sentence per kind of master there is; one per kind that measured lights lack."""
        return self.intake.calibration_sentences(self.known_frames())
