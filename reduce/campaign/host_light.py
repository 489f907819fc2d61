"""Targets on galaxies: the way their host's light is taken off, and the work that takes.

The frames' own measurements stay as they are; what is made here stands beside them in the logbook and can be made
again from the stored stamps whenever a reference, a host's position or a choice changes: no frame is read for it.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from reduce.logbook.host_light import HostRow
from reduce.records import STAR_DTYPE, Choices, HostLight, HostMethod, Measured, Target
from reduce.records import Sequence as ComparisonSequence

if TYPE_CHECKING:
    from reduce.logbook.store import Logbook
    from reduce.measure.host import HostFree
    from reduce.measure.psf import Psf
    from reduce.measure.reference import Reference
    from reduce.measure.stamps import StampPack

HOST_VERSION = 3
"""Raise it when the same stamps would give other numbers."""
FARTHEST_ARCSEC = 40.0
"""A galaxy whose centre is farther from the target is not on its stamp: the bent annulus of its outskirts serves."""
Key = tuple[str, str, str, str]
"""Frame, recipe, target, digest of the plan."""


@dataclass(frozen=True, slots=True, eq=False)
class HostPlan:
    """One way for a target in one band; two plans of one digest give the same numbers."""

    target: Target
    method: HostMethod
    references: tuple[Measured, ...] = ()
    """Reference frames in this band, by time."""

    @property
    def digest(self) -> str:
        """SHA-256 of everything but the frame's own stamps."""
        target, frames = self.target, [[row.frame, row.recipe] for row in self.references]
        place = [target.ra_deg, target.dec_deg, target.host_ra_deg, target.host_dec_deg]
        text = json.dumps([HOST_VERSION, self.method, place, frames])
        return hashlib.sha256(text.encode()).hexdigest()


Plans = Mapping[tuple[str, str], tuple[HostPlan, ...]]
"""(target, band) → the ways that are tried; the surest that works on most frames is taken for all of them."""


@dataclass(frozen=True, slots=True)
class HostTask:
    """One target on one frame; travels to a worker process."""

    key: Key
    plan: HostPlan
    star: NDArray[Any]
    """(1,) the target's row as measured on the frame."""
    days: tuple[float, float]
    """First and last day on which the campaign's targets were followed, MJD."""
    stars: NDArray[np.float64]
    """(3, n) right ascension, declination and colour of the comparison stars."""
    stamps: bytes
    reference: Reference | None


def host_plans(
    targets: Iterable[Target], choices: Choices, references: Sequence[Measured], bands: Iterable[str]
) -> Plans:
    """What targets want beyond the frames' own measurements.

    Parameters
    ----------
    references
        Measured frames of the reference folders; those that a person dropped are left out.
    """
    usable = [
        row for row in references if row.outcome == "measured" and choices.frame_states.get(row.frame) != "dropped"
    ]
    plans = {}
    for target in targets:
        for band in sorted(set(bands)):
            mine = tuple(row for row in usable if _band(row) == band and _has(row, target.name))
            if found := _plans(target, choices.host_methods.get(target.name), mine):
                plans[target.name, band] = found
    return plans


def _plans(target: Target, chosen: HostMethod | None, references: tuple[Measured, ...]) -> tuple[HostPlan, ...]:
    if chosen in (None, "reference") and references:
        return (HostPlan(target, "reference", references),)
    if target.host_arcsec is None or target.host_arcsec > FARTHEST_ARCSEC or chosen == "annulus":
        return ()
    ways: tuple[HostMethod, ...] = ("mirrored", "bent annulus")
    return tuple(HostPlan(target, way) for way in ways if chosen not in ways or chosen == way)


def _band(row: Measured) -> str:
    return (row.info.band if row.info is not None else None) or ""


def _has(row: Measured, target: str) -> bool:
    return bool(((row.stars["role"] == 1) & (row.stars["target"] == target)).any())


def _wanted(rows: Iterable[Measured], plans: Plans) -> Iterable[tuple[Measured, int, HostPlan, Key]]:
    """Frame, index of the target's row, and a way with the key of what it is to give."""
    digests = {plan: plan.digest for group in plans.values() for plan in group}
    for row in rows:
        for k in np.flatnonzero(row.stars["role"] == 1):
            name = str(row.stars["target"][k])
            for plan in plans.get((name, _band(row)), ()):
                yield row, int(k), plan, (row.frame, row.recipe, name, digests[plan])


def without_hosts(rows: Iterable[Measured], plans: Plans, book: Logbook) -> tuple[list[Measured], set[str]]:
    """Frames with the targets' rows that are free of their hosts, and those frames where that is still to be done."""
    rows = list(rows)
    stored = book.host_rows({plan.digest for group in plans.values() for plan in group}) if plans else {}
    missing: set[str] = set()
    found: dict[tuple[str, str], dict[HostPlan, list[tuple[str, int, HostRow]]]] = {}
    for row, k, plan, key in _wanted(rows, plans):
        if key in stored:
            found.setdefault((key[2], _band(row)), {}).setdefault(plan, []).append((row.frame, k, stored[key]))
        else:
            missing.add(row.frame)
    replaced = {row.frame: row for row in rows}
    for group in found.values():
        for frame, k, made in min(group.values(), key=_unsureness):
            now = replaced[frame]
            stars = now.stars
            if len(made.star):
                stars = stars.copy()
                stars[k] = made.star[0]
            host_light = {**now.host_light, made.target: made.host_light}
            replaced[frame] = replace(now, stars=stars, host_light=host_light)
    return [replaced[row.frame] for row in rows], missing


def _unsureness(made: list[tuple[str, int, HostRow]]) -> float:
    """Median error of the flux relative to the light of the frame's own measurement; frames that failed count."""
    errors = [
        float(np.hypot(row.host_light.common_err_e, row.star["psf_flux_err_e"][0])) if len(row.star) else np.inf
        for _, _, row in made
    ]
    return float(np.median(errors))


def host_tasks(rows: Iterable[Measured], plans: Plans, sequence: ComparisonSequence, book: Logbook) -> list[HostTask]:
    """What is still to be done, by frame."""
    from reduce.measure.reference import stack_reference
    from reduce.measure.stamps import unpack
    from reduce.standard.colour import catalogue_colour

    rows = list(rows)
    done = book.host_rows_done() if plans else set()
    days = [row.info.mjd_mid for row in rows if row.info is not None and row.info.mjd_mid is not None]
    stacks: dict[str, Reference | None] = {}
    tasks = []
    for row, k, plan, key in _wanted(rows, plans):
        if key in done:
            continue
        if plan.references and key[3] not in stacks:
            packs = [(unpack(book.stamps(ref.frame, ref.recipe)), 1.0) for ref in plan.references]
            stacks[key[3]] = stack_reference(packs, plan.target.name)
        colour = catalogue_colour(sequence, _band(row))
        stamps = book.stamps(row.frame, row.recipe)
        stars = np.array([sequence.ra_deg, sequence.dec_deg, colour])
        tasks.append(
            HostTask(key, plan, row.stars[k : k + 1], (min(days), max(days)), stars, stamps, stacks.get(key[3]))
        )
    return tasks


def refused(task: HostTask, why: str) -> HostRow:
    """The row that says why it could not be done; the frame's own measurement stands."""
    as_measured: HostMethod = "annulus" if task.plan.target.host_arcsec is None else "bent annulus"
    return HostRow(*task.key, HostLight(as_measured, 0.0, (why,), taken_off=False), task.star[:0])


def free_of_host(task: HostTask) -> HostRow:
    """What a worker does: the target's row without its host's light; an empty row when that cannot be done."""
    from reduce.measure.psf import stamp_psf
    from reduce.measure.stamps import unpack

    if not task.stamps:
        return refused(task, "The frame has no stamps; measure it again.")
    pack = unpack(task.stamps)
    psf = stamp_psf(pack)
    found = _subtracted(task, pack, psf) if task.plan.method == "reference" else _without_reference(task, pack, psf)
    if isinstance(found, str):
        return refused(task, found)
    star = np.zeros(1, STAR_DTYPE)
    star[0] = found.row
    star["psf_dx_px"] = star["psf_dy_px"] = 0.0  # of the light with the host
    return HostRow(*task.key, HostLight(found.method, found.common_err_e, found.notes), star)


def _subtracted(task: HostTask, pack: StampPack, psf: Psf | None) -> HostFree | str:
    from reduce.measure.host import subtract
    from reduce.measure.reference import band_note, supernova_light_note

    if task.reference is None:
        return "The reference frames hold no stamp of the target."
    found = subtract(pack, task.star[0], task.reference, psf)
    if isinstance(found, str):
        return found
    taken = [row.info.mjd_mid for row in task.plan.references if row.info is not None and row.info.mjd_mid is not None]
    notes = (supernova_light_note(task.days, taken), band_note(found.colour_pairs, *task.stars))
    return replace(found, notes=(*found.notes, *(note for note in notes if note)))


def _without_reference(task: HostTask, pack: StampPack, psf: Psf | None) -> HostFree | str:
    from reduce.measure.host_annulus import annulus_host
    from reduce.measure.mirror import mirror_host

    host_ra, host_dec = task.plan.target.host_ra_deg, task.plan.target.host_dec_deg
    if host_ra is None or host_dec is None:
        return "The host's centre is not known."
    way = mirror_host if task.plan.method == "mirrored" else annulus_host
    return way(pack, task.star[0], host_ra, host_dec, psf)
