"""From folders to known frames: what landed, what each file is, which masters there are, what wants measuring."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Mapping
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

from reduce.frames.arrival import Stamp, completeness, scan
from reduce.frames.master_sets import ChosenMasters, Master, MasterPlan, choose_masters, plan_masters
from reduce.frames.masters import build_master, standing_master
from reduce.frames.reader import frame_id, open_frame
from reduce.logbook.store import Logbook
from reduce.logbook.store import Master as MasterRow
from reduce.pipeline import KnownCamera, Recipe
from reduce.plain_text import clean_text
from reduce.records import FrameError, FrameInfo, Sequence, Target
from reduce.settings import Settings

STILL_WRITING_S = 30.0
"""A file that is short and was touched this recently is still being written; later it is cut short."""
RESTED_S = 4.0
"""A whole file that was touched this recently must look the same twice: some writers reserve the size first."""
CALIBRATION = ("bias", "dark", "flat")


@dataclass(frozen=True, slots=True)
class KnownFrame:
    """One readable file of the campaign."""

    id: str
    path: Path
    info: FrameInfo


@dataclass
class Intake:
    """The campaign's files, as they lie in the folders and as the logbook knows them."""

    book: Logbook
    settings: Settings
    folder: Path
    reference_folders: tuple[Path, ...]
    masters_folder: Path
    waiting: dict[Path, str] = field(default_factory=dict)
    """File still being written → how far it is."""
    refused: dict[str, str] = field(default_factory=dict)
    """Master that could not be made → why."""
    just_refused: set[Path] = field(default_factory=set)
    """Files that the last look found unusable."""
    _taken: dict[Path, Stamp] = field(default_factory=dict)
    _seen: dict[Path, Stamp] = field(default_factory=dict)
    _infos: dict[tuple[Path, int, int], FrameInfo | None] = field(default_factory=dict)
    _masters: dict[str, Master] = field(default_factory=dict)

    # ---- files -------------------------------------------------------------------------------------------

    def look(
        self,
        progress: Callable[[str], None],
        should_stop: Callable[[], bool] = lambda: False,
        now_s: Callable[[], float] = time.time,
    ) -> bool:
        """Take what has landed or changed into the logbook; True when something did."""
        known = self.book.known_locations()
        found = {path: stamp for path, stamp in scan(self.folder).items() if not self._is_reference(path)}
        changed = False
        self.just_refused = set()
        self.waiting = {path: why for path, why in self.waiting.items() if path in found}
        self._taken = {path: stamp for path, stamp in self._taken.items() if path in found}
        for path in self.book.problems().keys() - found.keys():
            self.book.add_problem(path, 0, 0, "")
            changed = True
        for n, (path, stamp) in enumerate(found.items(), 1):
            if should_stop():
                break
            if self._taken.get(path) == stamp:
                continue
            if n % 20 == 0:
                progress(f"looking at file {n} of {len(found)}")
            place = known.get(path)
            if place is not None and (place.size, place.mtime_ns) == stamp:
                self._taken[path] = stamp
            elif self._is_settled(path, stamp, now_s()):
                self.waiting.pop(path, None)
                self._take(path, stamp)
                self._taken[path] = stamp
                changed = True
        self._seen = found
        return changed

    def _is_reference(self, path: Path) -> bool:
        return any(path.is_relative_to(folder) for folder in self.reference_folders)

    def _is_settled(self, path: Path, stamp: Stamp, now_s: float) -> bool:
        """Whether the file can be taken now; `waiting` says why not."""
        age_s = now_s - stamp[1] / 1e9
        if 0 <= age_s < STILL_WRITING_S and (lacks := completeness(path)) is not None:
            self.waiting[path] = f"it is still being written: {lacks}"
            return False
        if 0 <= age_s < RESTED_S and self._seen.get(path) != stamp and self._seen:
            self.waiting[path] = "it has just landed."
            return False
        return True

    def _take(self, path: Path, stamp: Stamp) -> None:
        try:
            opened = open_frame(path, self.settings)
            frame = frame_id(path)
        except FrameError as error:
            self.book.add_problem(path, *stamp, str(error))
            self.just_refused.add(path)
            return
        self.book.add_frame(frame, opened.header)
        self.book.add_location(frame, path, *stamp)
        self.book.add_problem(path, *stamp, "")
        self._infos[path, *stamp] = opened.info

    def known_frames(self) -> list[KnownFrame]:
        """Every frame of the logbook by time and id; a copy counts once.

        Of a frame's paths the one seen first stands for it, or after a move the first where it still lies.
        """
        found: dict[str, KnownFrame] = {}
        remembered: dict[str, FrameInfo] | None = None
        for path, place in self.book.known_locations().items():
            if self._is_reference(path) or (place.frame in found and found[place.frame].path.exists()):
                continue
            if place.frame in found and not path.exists():
                continue
            key = (path, place.size, place.mtime_ns)
            if key not in self._infos:
                self._infos[key] = self._read_info(path)
            info = self._infos[key]
            if info is None:
                if remembered is None:
                    remembered = self._remembered()
                info = remembered.get(place.frame)
            if info is not None:
                found[place.frame] = KnownFrame(place.frame, path, info)
        return sorted(found.values(), key=lambda frame: (frame.info.mjd_mid or 0.0, frame.id))

    def _remembered(self) -> dict[str, FrameInfo]:
        """What the logbook knows of frames without their files: lights measured, calibration frames in a master."""
        infos = {row.frame: row.info for row in self.book.newest_reductions() if row.info is not None}
        for row in self.book.masters():
            infos |= dict.fromkeys(row.inputs, _info_of_inputs(row.content))
        return infos

    def _read_info(self, path: Path) -> FrameInfo | None:
        """What the file's header says now; None when the file is gone or no longer whole."""
        try:
            return open_frame(path, self.settings).info
        except FrameError:
            return None

    # ---- masters -----------------------------------------------------------------------------------------

    def plans(self, frames: Iterable[KnownFrame]) -> list[MasterPlan]:
        """Masters that the calibration frames make, bias before dark before flat.

        Frames whose files are gone count as long as the master made of them and the others stands.
        """
        calibration = [(f.id, f.path, f.info) for f in frames if f.info.kind in CALIBRATION]
        there = {id_ for id_, path, _ in calibration if path.exists()}
        planned = plan_masters(calibration)
        if len(there) == len(calibration):
            return planned
        built = {(row.kind, frozenset(row.inputs)) for row in self.book.masters()}
        for plan in planned:
            ids = {frame.id for frame in plan.inputs}
            if (plan.kind, frozenset(ids)) in built:
                there |= ids
        return plan_masters(row for row in calibration if row[0] in there)

    def build_masters(
        self,
        frames: Iterable[KnownFrame],
        progress: Callable[[str], None],
        should_stop: Callable[[], bool] = lambda: False,
    ) -> list[Master]:
        """All masters, built where they do not stand yet; `refused` says which could not be made and why."""
        masters: list[Master] = []
        self.refused = {}
        for plan in self.plans(frames):
            if should_stop():
                break
            progress(f"master {clean_text(plan.label)} of {len(plan.inputs)} frames")
            try:
                master = build_master(plan, masters, self.masters_folder, self.settings)
            except FrameError as error:
                self.refused[plan.label] = str(error)
                continue
            masters.append(master)
            content = {key: value for key, value in asdict(master).items() if key not in ("path", "inputs")}
            self.book.add_master(MasterRow(master.digest, master.kind, content, master.inputs))
        return masters

    def standing_masters(self, frames: Iterable[KnownFrame]) -> list[Master]:
        """Those of the planned masters that have been built."""
        built = {row.digest for row in self.book.masters()}
        masters: list[Master] = []
        for plan in self.plans(frames):
            master = standing_master(plan, masters, self.masters_folder, self._masters)
            if master is not None and master.digest in built:
                self._masters[master.digest] = master
                masters.append(master)
        return masters

    # ---- lights ------------------------------------------------------------------------------------------

    def recipe(
        self, info: FrameInfo, masters: Iterable[Master], targets: tuple[Target, ...], astrometric: Sequence
    ) -> Recipe:
        """How a frame is to be measured with these masters."""
        return Recipe(self.settings, self.chosen(info, masters), targets, astrometric)

    def chosen(self, info: FrameInfo, masters: Iterable[Master]) -> ChosenMasters:
        """Masters for one frame."""
        return choose_masters(info, masters)

    def recipes(
        self,
        frames: Iterable[KnownFrame],
        masters: Iterable[Master],
        targets: tuple[Target, ...],
        astrometric: Sequence,
    ) -> dict[str, tuple[Recipe, str]]:
        """Light frame → how it is to be measured with these masters, and the digest of that.

        A frame that was not recognised is tried again when another frame has shown its camera's scale and parity.
        """
        masters = list(masters)
        lost = self.book.unrecognised()
        digests: dict[tuple[object, ...], str] = {}

        def with_digest(recipe: Recipe) -> tuple[Recipe, str]:
            key = (*recipe.masters.digests(), recipe.camera)
            if key not in digests:
                digests[key] = recipe.digest()
            return recipe, digests[key]

        found = {}
        for frame in frames:
            if frame.info.kind != "light":
                continue
            recipe, digest = with_digest(self.recipe(frame.info, masters, targets, astrometric))
            if (frame.id, digest) in lost and (first := self.book.first_solution(frame.info)) is not None:
                camera = KnownCamera(round(first.scale_arcsec, 4), first.mirrored)
                recipe, digest = with_digest(replace(recipe, camera=camera))
            found[frame.id] = recipe, digest
        return found

    def wanted_recipes(
        self, frames: Iterable[KnownFrame], targets: tuple[Target, ...], astrometric: Sequence
    ) -> dict[str, str]:
        """Light frame → digest of the recipe it should have, with the masters that stand."""
        frames = list(frames)
        recipes = self.recipes(frames, self.standing_masters(frames), targets, astrometric)
        return {frame: digest for frame, (_, digest) in recipes.items()}

    def calibration_sentences(self, frames: Iterable[KnownFrame]) -> tuple[tuple[str, ...], list[str]]:
        """One sentence a master, and one a kind of master that light frames lack."""
        frames = list(frames)
        masters = self.standing_masters(frames)
        standing = tuple(
            f"{plan.kind} {plan.band or ''}".strip()
            + (f" {plan.exposure_s:g} s" if plan.kind == "dark" and plan.exposure_s else "")
            + f": {len(plan.inputs)} frames, {'ready' if self._stands(plan, masters) else 'not built'}."
            for plan in self.plans(frames)
        )
        missing: dict[str, None] = {}
        for frame in frames:
            if frame.info.kind != "light" or not (frame.info.band or frame.info.filter_name):
                continue  # without a filter it cannot be measured, and no flat would help
            chosen = self.chosen(frame.info, masters)
            band = frame.info.band or clean_text(frame.info.filter_name)
            if chosen.flat is None:
                missing[f"no flat in {band}"] = None
            if chosen.bias is None and chosen.dark is None:
                missing["no bias and no dark"] = None
        return standing, list(missing)

    @staticmethod
    def _stands(plan: MasterPlan, masters: Iterable[Master]) -> bool:
        ids = {frame.id for frame in plan.inputs}
        return any(master.kind == plan.kind and set(master.inputs) == ids for master in masters)


def _info_of_inputs(content: Mapping[str, Any]) -> FrameInfo:
    """What the inputs of a master have in common, from the master's row."""
    signature = content["signature"]
    return FrameInfo(
        kind=content["kind"], band=content["band"], filter_name=content["filter_name"], object_name="",
        camera=signature["camera"], mjd_mid=None, exposure_s=content["exposure_s"], ra_deg=None, dec_deg=None,
        scale_arcsec=None, gain_e_per_adu=signature["gain_e_per_adu"], read_noise_e=None, saturation_adu=None,
        nx=signature["nx"], ny=signature["ny"], binning=tuple(signature["binning"]),
        temperature_c=content["temperature_c"],
    )  # fmt: skip
