"""The whole campaign at one moment, as the faces show it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from reduce.almanac.sky import separation_deg
from reduce.almanac.times import night_of
from reduce.campaign.after_slew import after_slew
from reduce.campaign.alerts import alerts_of
from reduce.campaign.frames_folder import gone_sentence
from reduce.campaign.setup import setup_view
from reduce.campaign.steps import steps_of
from reduce.field.wcs import pixel_to_sky, sky_to_pixel
from reduce.frames.arrival import UNIX_EPOCH_MJD
from reduce.plain_text import clean_text
from reduce.records import STAR_DTYPE, FieldSolution, Measured, Point, Solution, Target
from reduce.records import Sequence as ComparisonSequence
from reduce.settings import Settings
from reduce.views import FrameRow, SequenceStar, Snapshot, TargetView

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign
    from reduce.campaign.intake import KnownFrame


def take_snapshot(campaign: Campaign) -> Snapshot:
    """One immutable picture; reads the logbook only, never a frame."""
    campaign.look_at_settings()
    stamp = campaign.book.stamp()
    solution = campaign.solution()
    sequence = campaign.sequence()
    rows = frame_rows(campaign, solution)
    lights = [row for row in rows if row.kind == "light" and not row.of_standards]
    unreadable = sum(row.outcome == "unreadable" for row in rows)
    calibration, missing = campaign.calibration_sentences()
    setup, gone = setup_view(campaign), gone_sentence(campaign.book)
    views = []
    for target in campaign.targets():
        nights = tuple(campaign.curve(target.name))
        estimate = campaign.estimate(target.name)
        steps, sentence, screen = steps_of(target, lights, unreadable, missing, nights, estimate)
        if gone:
            sentence, screen = gone, "Setup"
        views.append(
            TargetView(
                target=target,
                steps=steps,
                next_sentence=sentence,
                estimate=estimate,
                night_points=nights,
                frame_points=tuple(campaign.curve(target.name, per_frame=True)),
                history=tuple(campaign.book.history(target.name)),
                next_screen=screen,
            )
        )
    return Snapshot(
        folder=str(campaign.folder),
        observatory=clean_text(campaign.settings.site.name) if campaign.settings.site is not None else "",
        stamp=stamp,
        targets=tuple(views),
        frames=rows,
        calibration=calibration,
        colour_terms=solution.colour_terms,
        stars=solution.stars,
        sequence=tuple(
            SequenceStar(
                name,
                float(sequence.ra_deg[k]),
                float(sequence.dec_deg[k]),
                {band: float(mag[k]) for band, mag in sequence.mag.items() if np.isfinite(mag[k])},
            )
            for k, name in enumerate(sequence.ids)
        ),
        log=tuple(campaign.book.log(limit=500)),
        can_undo=campaign.book.can_undo(),
        setup=setup,
        after_slew=after_slew(lights, {str(band): goal for band, goal in campaign.settings.planning.snr_goal.items()}),
        alerts=alerts_of(lights, campaign.settings.planning.lowest_altitude_deg),
        notes=(
            *((setup.trouble,) if setup.trouble else ()),
            *campaign.missing_settings(),
            *campaign.unused_files(),
            *((campaign.book.notice,) if campaign.book.notice else ()),
        ),
    )


def frame_rows(campaign: Campaign, solution: Solution) -> tuple[FrameRow, ...]:
    """Every file of the campaign by time; one that cannot be read stands where it was last written."""
    measured = {row.frame: row for row in (*campaign.measured(), *campaign.reference_rows())}
    wanted, host_missing = campaign.wanted_recipes(), campaign.frames_with_host()
    points: dict[str, list[Point]] = {}
    for point in solution.frame_points:
        points.setdefault(point.file or "", []).append(point)
    of_standards = campaign.calibrated().of_standards
    maker = _RowMaker(campaign.settings, campaign.targets(), campaign.sequence(), solution)
    rows: list[tuple[float, FrameRow]] = []

    def add(row: FrameRow, mjd: float) -> None:
        rows.append((mjd, row))

    for frame in campaign.known_frames():
        if frame.info.kind in ("bias", "dark", "flat"):
            add(maker.calibration(frame), frame.info.mjd_mid or 0.0)
        elif frame.same_as:
            add(maker.not_used(frame), frame.info.mjd_mid or 0.0)
        elif frame.info.kind == "light":
            row = measured.get(frame.id)
            stale = (row is not None and row.recipe != wanted.get(frame.id, row.recipe)) or frame.id in host_missing
            light = maker.light(frame, row, stale, points.get(frame.id, ()))
            add(replace(light, of_standards=frame.id in of_standards), frame.info.mjd_mid or 0.0)
    for path, problem in campaign.book.problems().items():
        add(maker.problem(path, problem.sentence), UNIX_EPOCH_MJD + problem.mtime_ns / 86400e9)
    return tuple(row for _, row in sorted(rows, key=lambda item: (item[0], item[1].path)))


class _RowMaker:
    def __init__(
        self,
        settings: Settings,
        targets: Sequence[Target],
        sequence: ComparisonSequence,
        solution: Solution,
    ) -> None:
        self.settings, self.targets, self.sequence, self.solution = settings, targets, sequence, solution
        self.longitude = settings.site.longitude_deg if settings.site is not None else None

    def _night(self, mjd: float | None) -> str:
        return "" if mjd is None else night_of(mjd, self.longitude)

    def calibration(self, frame: KnownFrame) -> FrameRow:
        """A bias, dark or flat."""
        info = frame.info
        return FrameRow(
            id=frame.id, file=clean_text(frame.path.name), path=str(frame.path), kind=info.kind, band=info.band,
            mjd=info.mjd_mid, night=self._night(info.mjd_mid), exposure_s=info.exposure_s, outcome="calibration",
            state=None, reason="", provisional=False, by_person=False,
        )  # fmt: skip

    def not_used(self, frame: KnownFrame) -> FrameRow:
        """A light whose exposure another file stands for."""
        return replace(
            self.calibration(frame), outcome="not used", state="dropped",
            reason=f"not used: the same exposure as {frame.same_as}",
        )  # fmt: skip

    def problem(self, path: Path, sentence: str) -> FrameRow:
        """A file that cannot be used."""
        return FrameRow(
            id=str(path), file=clean_text(path.name), path=str(path), kind="unknown", band=None, mjd=None, night="",
            exposure_s=None, outcome="unreadable", state="dropped", reason=sentence, provisional=False,
            by_person=False,
        )  # fmt: skip

    def light(self, frame: KnownFrame, row: Measured | None, stale: bool, points: Iterable[Point]) -> FrameRow:
        """A science or reference frame, measured or waiting."""
        info = frame.info
        verdict = self.solution.verdicts.get(frame.id)
        quality, solution = (row.quality, row.solution) if row is not None else (None, None)
        stars = row.stars if row is not None else np.zeros(0, STAR_DTYPE)
        here = stars[stars["role"] == 1]
        names = tuple(str(name) for name in here["target"])
        scale = solution.scale_arcsec if solution is not None else None
        offset = pixel = None
        if solution is not None:
            offset = self._offset_arcmin(solution, info.nx, info.ny)
            pixel = self._pixels(solution, info.nx, info.ny)
        saturation = info.saturation_adu or self.settings.camera.saturation_adu
        peak = float(np.nanmax(here["peak_adu"])) if len(here) else None
        return FrameRow(
            id=frame.id,
            file=clean_text(frame.path.name),
            path=str(frame.path),
            kind="reference" if frame.is_reference else "light",
            band=info.band,
            mjd=info.mjd_mid,
            night=self._night(info.mjd_mid),
            exposure_s=info.exposure_s,
            outcome=row.outcome if row is not None else "waiting",
            state=verdict.state if verdict is not None else None,
            reason="; ".join(verdict.reasons) if verdict is not None else "",
            provisional=stale,
            by_person=verdict.by_person if verdict is not None else False,
            targets=names,
            airmass=quality.airmass if quality is not None else None,
            fwhm_arcsec=quality.fwhm_px * scale if quality is not None and scale is not None else None,
            elongation=quality.elongation if quality is not None else None,
            sky_e_px=quality.sky_e_px if quality is not None else None,
            n_stars=quality.n_detected if quality is not None else None,
            peak_fraction=peak / saturation if peak is not None and saturation else None,
            peak_adu=peak,
            limit_adu=self.settings.camera.linear_limit_adu or saturation,
            notes=row.info.notes if row is not None and row.info is not None else info.notes,
            snr={point.star: point.flux / point.flux_err for point in points if point.flux_err > 0},
            offset_arcmin=offset,
            rotation_deg=solution.rotation_deg if solution is not None else None,
            scale_arcsec=scale,
            zero_point=self.solution.zero_points.get(frame.id),
            pixel=pixel or {},
            growth_mag=tuple(float(value) for value in row.growth_mag) if row is not None else (),
            solution=solution,
        )

    def _offset_arcmin(self, solution: FieldSolution, nx: int, ny: int) -> float | None:
        """Distance of the field's centre from the nearest target."""
        ra, dec = pixel_to_sky(solution, np.array([(nx - 1) / 2]), np.array([(ny - 1) / 2]))
        distances = [separation_deg(float(ra[0]), float(dec[0]), t.ra_deg, t.dec_deg) for t in self.targets]
        return min(distances) * 60 if distances else None

    def _pixels(self, solution: FieldSolution, nx: int, ny: int) -> Mapping[str, tuple[float, float]]:
        """Where targets and comparison stars stand on the frame."""
        names = [target.name for target in self.targets] + list(self.sequence.ids)
        ra = np.concatenate([[target.ra_deg for target in self.targets], self.sequence.ra_deg])
        dec = np.concatenate([[target.dec_deg for target in self.targets], self.sequence.dec_deg])
        x, y = sky_to_pixel(solution, ra, dec)
        on = (x > -0.5) & (x < nx - 0.5) & (y > -0.5) & (y < ny - 0.5)
        return {names[k]: (round(float(x[k]), 2), round(float(y[k]), 2)) for k in np.flatnonzero(on)}
