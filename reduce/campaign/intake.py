"""From folders to known frames: what landed, what each file is, which masters there are, what wants measuring."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Mapping
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

from reduce.campaign.twins import stand_ins
from reduce.field.standards import standard_field
from reduce.frames.arrival import Stamp, completeness, ends_in_zeros, refuse_future, scan
from reduce.frames.detector_check import disagreements, stated_of
from reduce.frames.master_plans import plan_masters
from reduce.frames.master_sets import ChosenMasters, Master, MasterPlan, choose_masters
from reduce.frames.masters import build_master, standing_master
from reduce.frames.reader import frame_id, open_frame
from reduce.frames.treated import without_done
from reduce.logbook.store import Logbook
from reduce.logbook.store import Master as MasterRow
from reduce.pipeline import KnownCamera, Recipe
from reduce.plain_text import clean_text
from reduce.records import FrameError, FrameInfo, Sequence, Target
from reduce.settings import Settings

STILL_WRITING_S = 30.0
"""A file that is short and was touched this recently is still being written; later it is cut short."""
RESTED_S = 4.0
"""A whole file that was touched this recently must look the same twice and not end in zeros: some writers reserve the
size first, and some file systems keep times to the second only.
"""
CALIBRATION = ("bias", "dark", "flat")


@dataclass(frozen=True, slots=True)
class KnownFrame:
    """One readable file of the campaign."""

    id: str
    path: Path
    info: FrameInfo
    is_reference: bool = False
    """Lies in a folder of frames without the target: never science, but measured like the others."""
    same_as: str = ""
    """File name of another frame of the same exposure, which is used in its place."""


@dataclass
class Intake:
    """The campaign's files, as they lie in the folders and as the logbook knows them."""

    book: Logbook
    settings: Settings
    folder: Path
    reference_folders: tuple[Path, ...]
    masters_folder: Path
    standards: Sequence | None = None
    """Published standard stars; a frame that points at them is measured on them."""
    past_reference_folders: tuple[Path, ...] = ()
    """Named once, perhaps no more: what lies there, outside the frames folder, is never science."""
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
        masters = self.masters_folder.resolve()  # a campaign may lie in its own frames folder
        found = {
            path: stamp
            for folder in (self.folder, *self.reference_folders)
            for path, stamp in scan(folder).items()
            if not path.is_relative_to(masters)
        }
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
                self._take(path, stamp, now_s())
                self._taken[path] = stamp
                changed = True
        self._seen = found
        return changed

    def use_settings(self, settings: Settings) -> None:
        """Other settings: what each header means is asked again, and what could not be read is tried again."""
        self.settings = settings
        self._infos.clear()
        self._masters.clear()
        self._taken = {path: stamp for path, stamp in self._taken.items() if path not in self.book.problems()}

    def _is_reference(self, path: Path) -> bool:
        return any(path.is_relative_to(folder) for folder in self.reference_folders)

    def _is_past_reference(self, path: Path) -> bool:
        past = any(path.is_relative_to(folder) for folder in self.past_reference_folders)
        return past and not path.is_relative_to(self.folder) and not self._is_reference(path)

    def _is_settled(self, path: Path, stamp: Stamp, now_s: float) -> bool:
        """Whether the file can be taken now; `waiting` says why not."""
        age_s = now_s - stamp[1] / 1e9
        if 0 <= age_s < STILL_WRITING_S and (lacks := completeness(path)) is not None:
            self.waiting[path] = f"it is still being written: {lacks}"
            return False
        if 0 <= age_s < RESTED_S and self._seen and (self._seen.get(path) != stamp or ends_in_zeros(path)):
            self.waiting[path] = "it has just landed."
            return False
        return True

    def _take(self, path: Path, stamp: Stamp, now_s: float) -> None:
        try:
            opened = open_frame(path, self.settings)
            refuse_future(opened.info, now_s)
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
        places = self.book.known_locations()
        references = {place.frame for path, place in places.items() if self._is_reference(path)}
        for path, place in places.items():
            if self._is_past_reference(path):
                continue
            if place.frame in found and found[place.frame].path.exists():
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
                found[place.frame] = KnownFrame(place.frame, path, info, place.frame in references)
        frames = self._counted_once(list(found.values()))
        return sorted(frames, key=lambda frame: (frame.info.mjd_mid or 0.0, frame.id))

    def _counted_once(self, frames: list[KnownFrame]) -> list[KnownFrame]:
        """The frames, those marked that another file of the same exposure stands for."""
        masters: list[Master] | None = None

        def can_be_calibrated(info: FrameInfo) -> bool:
            nonlocal masters
            if masters is None:
                masters = self.standing_masters(frames)
            chosen = self.chosen(info, masters)
            return chosen.flat is not None and (chosen.bias is not None or chosen.dark is not None)

        used = stand_ins(frames, can_be_calibrated)
        return [
            replace(frame, same_as=clean_text(used[frame.id].path.name)) if frame.id in used else frame
            for frame in frames
        ]

    def _remembered(self) -> dict[str, FrameInfo]:
        """What the logbook knows of frames without their files: lights measured, calibration frames in a master."""
        infos = {row.frame: row.info for row in self.book.newest_reductions() if row.info is not None}
        for row in self.book.masters():
            if row.kind in CALIBRATION:  # a shutter map is made of flats, which their own master names
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
        fringe_bands = self.settings.camera.fringe_bands
        calibration = [
            (f.id, f.path, f.info)
            for f in frames
            if f.info.kind in CALIBRATION or (f.info.kind == "light" and f.info.band in fringe_bands and not f.same_as)
        ]
        there = {id_ for id_, path, _ in calibration if path.exists()}
        site = self.settings.site
        longitude_deg = site.longitude_deg if site is not None else 0.0
        planned = plan_masters(calibration, longitude_deg, fringe_bands)
        if len(there) == len(calibration):
            return planned
        built = {(row.kind, frozenset(row.inputs)) for row in self.book.masters()}
        for plan in planned:
            ids = {frame.id for frame in plan.inputs}
            if (plan.kind, frozenset(ids)) in built:
                there |= ids
        return plan_masters((row for row in calibration if row[0] in there), longitude_deg, fringe_bands)

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
        """How a frame is to be measured with these masters: on its targets, or on the standards that it points at."""
        standards = standard_field(info, self.standards, astrometric) if self.standards is not None else None
        if standards is not None:
            return Recipe(self.settings, self.chosen(info, masters), (), standards)
        return Recipe(self.settings, self.chosen(info, masters), targets, astrometric)

    def chosen(self, info: FrameInfo, masters: Iterable[Master]) -> ChosenMasters:
        """Masters for one frame; none for a step that was done before it came."""
        return without_done(info, choose_masters(info, masters))

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
            key = (*recipe.masters.digests(), recipe.camera, recipe.astrometric.ids)
            if key not in digests:
                digests[key] = recipe.digest()
            return recipe, digests[key]

        found = {}
        for frame in frames:
            if frame.info.kind != "light" or frame.same_as:
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
        plans, masters = self.plans(frames), self.standing_masters(frames)
        standing = tuple(
            f"{plan.kind} {plan.band or ''}".strip()
            + (f" {plan.exposure_s:g} s" if plan.kind == "dark" and plan.exposure_s else "")
            + f": {len(plan.inputs)} frames, {'ready' if self._stands(plan, masters) else 'not built'}."
            for plan in plans
        )
        standing = (*standing, *self._detector_sentences(plans, masters))
        missing: dict[str, None] = {}
        for frame in frames:
            if frame.info.kind != "light" or not (frame.info.band or frame.info.filter_name):
                continue  # without a filter it cannot be measured, and no flat would help
            if frame.same_as or frame.info.calibrated:
                continue
            chosen = self.chosen(frame.info, masters)
            band = frame.info.band or clean_text(frame.info.filter_name)
            if chosen.flat is None:
                missing[f"no flat in {band}"] = None
            if chosen.bias is None and chosen.dark is None:
                missing["no bias and no dark"] = None
        return standing, list(missing)

    def detector_sentences(self, frames: Iterable[KnownFrame]) -> list[str]:
        """What flats and biases measured otherwise than headers or settings state it."""
        frames = list(frames)
        return self._detector_sentences(self.plans(frames), self.standing_masters(frames))

    def _detector_sentences(self, plans: Iterable[MasterPlan], masters: Iterable[Master]) -> list[str]:
        planned = {(plan.kind, frozenset(frame.id for frame in plan.inputs)): plan for plan in plans}
        said: dict[str, None] = {}
        for master in masters:
            plan = planned.get((master.kind, frozenset(master.inputs)))
            if plan is not None and master.detector is not None:
                stated = stated_of(plan.inputs[0].info, self.settings)
                said |= dict.fromkeys(disagreements(clean_text(plan.label), master.detector, stated))
        return list(said)

    @staticmethod
    def _stands(plan: MasterPlan, masters: Iterable[Master]) -> bool:
        ids = {frame.id for frame in plan.inputs}
        return any(master.kind == plan.kind and set(master.inputs) == ids for master in masters)


def _info_of_inputs(content: Mapping[str, Any]) -> FrameInfo:
    """What the inputs of a master have in common, from the master's row."""
    signature = content["signature"]
    return FrameInfo(
        kind=content["kind"], band=content["band"], filter_name=content["filter_name"], object_name="",
        camera=signature["camera"], mjd_mid=content.get("mjd"), exposure_s=content["exposure_s"],
        ra_deg=None, dec_deg=None,
        scale_arcsec=None, gain_e_per_adu=signature["gain_e_per_adu"], read_noise_e=None, saturation_adu=None,
        nx=signature["nx"], ny=signature["ny"], binning=tuple(signature["binning"]),
        temperature_c=content["temperature_c"], window=_pair(signature.get("window")),
        overscan=signature.get("overscan", False),
    )  # fmt: skip


def _pair(value: Any) -> tuple[int, int] | None:
    return None if value is None else (int(value[0]), int(value[1]))
