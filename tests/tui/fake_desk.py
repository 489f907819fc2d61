"""An invented campaign on a desk that lives in memory: for tests of the app and to look at its screens."""

from __future__ import annotations

import asyncio
import math
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import numpy as np
from invented_plan import invented_plan

from reduce.measure.profile import radial_profile
from reduce.plain_text import PlainError
from reduce.records import (
    LADDER_FWHM,
    BudgetLine,
    Caution,
    ColourTerm,
    Estimate,
    FieldSolution,
    FitCurve,
    FitPoint,
    FrameZeroPoint,
    Point,
    StarResult,
    Target,
)
from reduce.views import (
    STEPS,
    AfterSlew,
    BandProgress,
    EstimateRow,
    FilterRow,
    FrameRow,
    LogRow,
    Plan,
    RadialProfile,
    SequenceStar,
    SetupView,
    Snapshot,
    StarReading,
    Step,
    TargetView,
)
from tui.preview_image import Laid, PreviewImage, Window, pasted, shrink

BANDS = ("B", "V", "R", "I")
T_MAX = 63000.3
PEAK = {"B": 15.42, "V": 15.31, "R": 15.28, "I": 15.55}
FIRST_NIGHT = 62991
N_NIGHTS = 12
HOSTILE = "[bold]Vesna[/] \x1b[31m=1+1"


def shape(band: str, phase: np.ndarray) -> np.ndarray:
    """An invented smooth bump, in magnitudes below maximum."""
    width = {"B": 11.0, "V": 13.0, "R": 15.0, "I": 17.0}[band]
    return 1.6 * (1.0 - np.exp(-0.5 * (phase / width) ** 2))


def night_name(mjd: int) -> str:
    """Evening date; 2031-05-13 is MJD 62999."""
    day = mjd - 62999 + 13
    return f"2031-05-{day:02d}" if day > 0 else f"2031-04-{30 + day:02d}"


def invented_points(name: str, nights: int, seed: int) -> tuple[Point, ...]:
    """One point a night and band; the first night is a limit, one point is doubtful."""
    rng = np.random.default_rng(seed)
    points = []
    for k in range(nights):
        for j, band in enumerate(BANDS):
            mjd = FIRST_NIGHT + k * 2 + 0.86 + 0.01 * j
            true = PEAK[band] + float(shape(band, np.array([mjd - T_MAX]))[0])
            err = 0.012 + 0.01 * float(rng.random())
            mag = true + err * float(rng.standard_normal())
            limit = k == 0 and band == "I"
            flux = 10 ** (-0.4 * (mag - 25))
            points.append(
                Point(
                    star=name,
                    file=None,
                    night=night_name(int(mjd)),
                    band=band,
                    mjd=mjd,
                    bjd_tdb=mjd + 2400000.5008,
                    mag=None if limit else mag,
                    err=None if limit else err,
                    err_night=0.008,
                    err_band=0.02,
                    flux=120.0 if limit else flux,
                    flux_err=900.0 if limit else flux * err / 1.0857,
                    state="limit" if limit else "doubtful" if (k, band) == (5, "R") else "kept",
                    n_frames=2,
                )
            )
    return tuple(points)


def invented_estimate(name: str, points: tuple[Point, ...]) -> Estimate:
    """An estimate that follows the points: excluding one moves the modulus."""
    used = [p for p in points if p.state == "kept" and p.mag is not None]
    if len(used) < 8:
        return Estimate(
            name,
            "type_ia",
            None,
            None,
            None,
            None,
            None,
            None,
            None,
            None,
            None,
            None,
            len(used),
            "cannot tell yet: only one night, maximum may be before or after it",
            "H0 = 73.04 km/s/Mpc",
        )
    residual = [p.mag - PEAK[p.band] - float(shape(p.band, np.array([p.mjd - T_MAX]))[0]) for p in used]
    mu = 34.512 + float(np.mean(residual))
    grid = np.linspace(FIRST_NIGHT - 2.0, FIRST_NIGHT + 40.0, 120)
    curves = tuple(FitCurve(b, grid, PEAK[b] + shape(b, grid - T_MAX), np.full(120, 0.05)) for b in BANDS)
    budget = (
        BudgetLine("intrinsic scatter", 0.110),
        BudgetLine("decline rate and time of maximum", 0.031, "a note that needs more than one line"),
        BudgetLine("host dust", 0.052),
        BudgetLine("photons", 0.006),
    )
    return Estimate(
        target=name,
        kind="type_ia",
        mu=mu,
        mu_err=math.sqrt(sum(line.mag**2 for line in budget)),
        mu_err_fit=0.061,
        t_max=T_MAX,
        t_max_err=0.21,
        dm15=1.073,
        dm15_err=0.024,
        e_host=0.083,
        e_host_err=0.031,
        chi2=41.7,
        n=len(used),
        verdict="μ stands",
        scale="H0 = 73.04 km/s/Mpc (Cepheid anchor of the model)",
        warnings=(Caution("type_assumed", "the target carries no spectroscopic type"),),
        budget=budget,
        curves=curves,
        points=tuple(
            FitPoint(p.night, p.band, p.mjd, p.mjd - T_MAX, r, p.err or 0.0, abs(r) > 0.06)
            for p, r in zip(used, residual, strict=True)
        ),
        peak_mag=PEAK,
    )


def invented_frames(name: str, other: str) -> list[FrameRow]:
    """96 light frames, two files that could not be used and two masters."""
    frames = []
    rng = np.random.default_rng(5)
    for k in range(N_NIGHTS):
        for j in range(8):
            band, mjd = BANDS[j // 2], FIRST_NIGHT + 2 * k + 0.86 + 0.005 * j
            bad = (k, j) == (5, 4)
            file = f"n{k:02d}_{band}_{j % 2}.fits"
            frames.append(
                FrameRow(
                    id=f"{k:02d}{j}" + "a" * 61,
                    file=file,
                    path=f"/frames/{file}",
                    kind="light",
                    band=band,
                    mjd=mjd,
                    night=night_name(int(mjd)),
                    exposure_s=120.0,
                    outcome="measured",
                    state="doubtful" if bad else "kept",
                    reason="trailed: elongation 1.62, most stars agree on one direction" if bad else "",
                    provisional=k == N_NIGHTS - 1 and j > 5,
                    by_person=False,
                    targets=(name if k % 4 else other,) if j == 7 else (name,),
                    airmass=1.1 + 0.05 * j,
                    fwhm_arcsec=2.4 + float(rng.random()),
                    elongation=1.62 if bad else 1.05 + 0.1 * float(rng.random()),
                    sky_e_px=310.0 + 4 * k,
                    n_stars=142 - k,
                    peak_fraction=0.31,
                    snr={name: 88.0 + k},
                    offset_arcmin=0.4,
                    rotation_deg=179.8,
                    scale_arcsec=0.763,
                    zero_point=FrameZeroPoint("f", band, 22.413, 0.006, 9, 1.1, 0.012, 0.002, 1.5),
                    pixel={name: (260.0, 250.0), "C1": (120.0, 400.0), "C2": (400.0, 130.0)},
                    growth_mag=tuple(-0.9 * math.exp(-1.7 * r) for r in LADDER_FWHM),
                    solution=FieldSolution((188.91, 12.04), (256.0, 256.0), ((-2.1e-4, 0.0), (0.0, 2.1e-4)), 40, 0.1),
                )
            )
    empty = {"band": None, "mjd": None, "night": "", "exposure_s": None, "state": None, "provisional": False}
    frames.append(
        FrameRow(
            id="z1",
            file="half.fits",
            path="/frames/half.fits",
            kind="light",
            outcome="unreadable",
            reason="half.fits holds 4196160 of 8392320 bytes: copy it again.",
            by_person=False,
            **empty,
        )
    )
    frames.append(
        FrameRow(
            id="z2",
            file="cloud.fits",
            path="/frames/cloud.fits",
            kind="light",
            outcome="no match",
            reason="only 3 stars were found: clouds, or the cover is closed.",
            by_person=False,
            **empty,
        )
    )
    for kind in ("bias", "flat"):
        frames.append(
            FrameRow(
                id=kind,
                file=f"{kind}_01.fits",
                path=f"/frames/{kind}_01.fits",
                kind=kind,
                outcome="calibration",
                reason="",
                by_person=False,
                **empty,
            )
        )
    return frames


def invented_stars() -> tuple[StarResult, ...]:
    """Eleven comparison stars in four bands."""
    rng = np.random.default_rng(9)
    stars = []
    for band in BANDS:
        for i in range(1, 12):
            odd = i == 7
            stars.append(
                StarResult(
                    star=f"C{i}",
                    band=band,
                    word="set aside" if odd else "spare" if i > 9 else "used",
                    reason="varies by 0.21 mag from night to night" if odd else "fainter than needed" if i > 9 else "",
                    catalogue_mag=12.8 + 0.31 * i,
                    residual_mag=0.21 if odd else 0.012 * float(rng.standard_normal()),
                    rms_mag=0.11 if odd else 0.010 + 0.002 * i,
                    n_frames=24,
                    colour=0.35 + 0.09 * i,
                )
            )
    return tuple(stars)


def invented_steps(mu: str) -> tuple[Step, ...]:
    """A target that is nearly done."""
    details = ("96 frames", "all masters found", "96 frames recognised", "1 doubtful frame", "12 nights", mu)
    states = ("done", "done", "done", "wants you", "done", "done")
    return tuple(Step(n, s, d) for n, s, d in zip(STEPS, states, details, strict=True))


def invented_snapshot(name: str = "Vesna 7") -> Snapshot:
    """Three targets: a well observed one, a young one and a pulsating star without a modulus."""
    points = invented_points(name, N_NIGHTS, 1)
    young = invented_points("Liskova 2", 1, 2)
    history = [
        EstimateRow(
            f"2031-05-{5 + k:02d}T23:10:00",
            34.512 + 0.3 / (k + 1) * (-1) ** k,
            0.13 + 0.4 / (k + 1),
            T_MAX,
            1.07,
            0.08,
            40.0,
            4 * k + 4,
            "first estimate" if k == 0 else "new night",
        )
        for k in range(9)
    ]
    estimate = invented_estimate(name, points)
    waiting = tuple(Step(n, "waiting", "") for n in STEPS)
    views = (
        TargetView(
            target=Target(name, "type_ia", 188.91, 12.04, z=0.0181, ebv_mw=0.021),
            steps=invented_steps("μ = 34.51 ± 0.13"),
            next_sentence="1 doubtful frame: keep or drop it (n05_R_0.fits: trailed: elongation 1.62, "
            "most stars agree on one direction)",
            estimate=estimate,
            night_points=points,
            frame_points=(),
            history=tuple(history),
            next_screen="Frames",
        ),
        TargetView(
            target=Target("Liskova 2", "type_ia", 189.1, 12.1, z=0.02, spectroscopic_type="Ia"),
            steps=(Step("Frames", "done", "2 frames"), *waiting[1:]),
            next_sentence="cannot tell yet: only one night, maximum may be before or after it",
            estimate=invented_estimate("Liskova 2", young[:4]),
            night_points=young,
            frame_points=(),
            history=(),
            next_screen="Distance",
        ),
        TargetView(
            target=Target("Korab b", "rr_lyrae", 189.2, 11.9),
            steps=waiting,
            next_sentence="Waiting for frames.",
            estimate=None,
            night_points=(),
            frame_points=(),
            history=(),
            next_screen="Frames",
        ),
    )
    log = (
        LogRow(
            "1",
            "2031-05-05T21:00:11",
            "mira",
            name,
            "2031-05-05",
            "note",
            "Thin cirrus in the west, dome open.",
        ),
        LogRow("2", "2031-05-05T23:10:00", "fadeline", name, "2031-05-05", "event", "First estimate."),
        LogRow("3", "2031-05-09T22:41:57", "mira", name, "2031-05-09", "decision", "Set C7 aside: it varies."),
    )
    return Snapshot(
        folder="/campaign",
        observatory="Hrib observatory",
        stamp=1,
        targets=views,
        frames=tuple(invented_frames(name, "Liskova 2")),
        calibration=(
            "Bias: 25 frames of 2031-05-05.",
            "Dark: missing, the dark current of the settings is used.",
            "Flats B V R I: 11 frames each.",
        ),
        colour_terms=tuple(ColourTerm("kamera", b, 0.041, 0.007, 0.8, 9, True) for b in BANDS),
        stars=invented_stars(),
        sequence=tuple(SequenceStar(f"C{i}", 188.85 + 0.01 * i, 12.1 - 0.01 * i, {"V": 12.8}) for i in range(1, 12)),
        log=log,
        notes=("Flats of the last night are missing: take them at dawn.",),
        setup=invented_setup(),
        after_slew=AfterSlew(
            frame="117" + "a" * 61,
            file="n11_I_1.fits",
            target=name,
            band="I",
            outcome="measured",
            reason="",
            offset_arcmin=0.4,
            rotation_deg=179.8,
            peak_adu=16120.0,
            limit_adu=52000.0,
            too_bright=False,
            bands=(
                *(BandProgress(band, 2, 140.0, 50.0) for band in "BVR"),
                BandProgress("I", 1, 31.2, 50.0),
            ),
            advice="go on in I: about 2 more like this",
        ),
    )


def invented_setup() -> SetupView:
    """A site, a camera and a filter that has no band."""
    filters = (*(FilterRow(band, band, 24, False) for band in BANDS), FilterRow("Slot 5", None, 3, False))
    settings = {
        "site.position": "46.2, 14.5, 410",
        "site.name": "Hrib observatory",
        "telescope.aperture_m": "0.3",
        "camera.name": "kamera",
        "camera.overrides_header": "no",
    }
    notes = ("Comparison sequence of 11 stars (B 11, V 11, R 11, I 11).",)
    return SetupView(settings, "/frames", "", filters, "comparison", notes)


class FakeDesk:
    """A `tui.desk.Desk` in memory. ``refuse`` makes the next call of that name fail with its sentence."""

    def __init__(self, snapshot: Snapshot | None = None) -> None:
        self.folder = Path("/campaign")
        self.now = snapshot or invented_snapshot()
        self.decisions: list[tuple[str, str, str]] = []
        self.undone: list[Snapshot] = []
        self.refuse: dict[str, Exception] = {}
        self.snapshots_made = 0
        self.previews: list[tuple[str, Window | None, str]] = []
        self.plans_made = 0
        self.changes: list[tuple[str, str]] = []
        self.added: list[dict[str, str]] = []

    def _maybe_refuse(self, name: str) -> None:
        if name in self.refuse:
            raise self.refuse.pop(name)

    def stamp(self) -> int:
        self._maybe_refuse("stamp")
        return self.now.stamp

    async def snapshot(self) -> Snapshot:
        self._maybe_refuse("snapshot")
        self.snapshots_made += 1
        return self.now

    async def plan(self) -> Plan:
        self._maybe_refuse("plan")
        self.plans_made += 1
        return invented_plan(self.now)

    def change(self, **changes: object) -> None:
        """A new snapshot with these fields."""
        self.now = replace(self.now, stamp=self.now.stamp + 1, **changes)

    def decide(self, subject: str, aspect: str, value: str, reason: str = "") -> None:
        self._maybe_refuse("decide")
        self.decisions.append((subject, aspect, value))
        self.undone.append(self.now)
        kind, _, rest = subject.partition(":")
        if kind in ("frame", "frames"):
            state = "kept" if value == "keep" else "dropped"
            self.change(frames=tuple(
                replace(f, state=state, by_person=True) if f.id in rest.split(",") else f for f in self.now.frames
            ))  # fmt: skip
        elif kind == "star":
            self.change(stars=tuple(
                replace(s, word="set aside" if value == "set aside" else "used") if s.star == rest else s
                for s in self.now.stars
            ))  # fmt: skip
        elif kind == "point":
            self._exclude(rest, "excluded" if value == "yes" else "kept")
        else:
            self.change()

    def _exclude(self, rest: str, state: str) -> None:
        name, night, band = rest.rsplit(":", 2)
        view = next(v for v in self.now.targets if v.target.name == name)
        points = tuple(replace(p, state=state) if (p.night, p.band) == (night, band) else p for p in view.night_points)
        estimate = invented_estimate(name, points)
        row = replace(view.history[-1], mu=estimate.mu, mu_err=estimate.mu_err, why=f"{state} point")
        changed = replace(view, night_points=points, estimate=estimate, history=(*view.history, row))
        self.change(targets=tuple(changed if v is view else v for v in self.now.targets))

    def undo(self) -> str:
        if not self.undone:
            return ""
        before = self.undone.pop()
        self.now = replace(before, stamp=self.now.stamp + 1)
        subject, aspect, value = self.decisions.pop()
        return f"{subject} {aspect} {value}"

    def note(self, target: str, body: str) -> None:
        self._maybe_refuse("note")
        row = LogRow(str(len(self.now.log) + 1), "2031-05-28T01:00:00", "mira", target, "2031-05-27", "note", body)
        self.change(log=(*self.now.log, row))

    def search_log(self, text: str) -> tuple[LogRow, ...]:
        self._maybe_refuse("search_log")
        return tuple(row for row in self.now.log if text.lower() in row.body.lower())

    async def change_setup(self, subject: str, typed: str) -> str:
        self._maybe_refuse("change_setup")
        self.changes.append((subject, typed))
        kind, _, key = subject.partition(":")
        if kind == "setting":
            settings = {**self.now.setup.settings, key: typed}
            filters = tuple(
                replace(row, band=typed or None, named=True) if key == f"filters.{row.name}" else row
                for row in self.now.setup.filters
            )
            self.change(setup=replace(self.now.setup, settings=settings, filters=filters))
        return f"{subject}: {typed}"

    async def add_target(self, facts: Mapping[str, str]) -> str:
        self._maybe_refuse("add_target")
        self.added.append(dict(facts))
        return f"{facts['name']} is followed from now on."

    async def preview(
        self, path: str, nx: int, ny: int, window: Window | None = None, laid: Laid | None = None
    ) -> PreviewImage:
        if "half" in path:
            raise PlainError("half.fits holds 4196160 of 8392320 bytes: copy it again.")
        await asyncio.sleep(0)
        self.previews.append((path, window, laid.path if laid is not None else ""))
        return shrink(invented_sky() if laid is None else invented_sky()[::-1], nx, ny, window)

    async def difference(
        self, frame: str, target: str, size: tuple[int, int], nx: int, ny: int, window: Window | None = None
    ) -> PreviewImage:
        self._maybe_refuse("difference")
        self.previews.append((frame, window, "difference"))
        return shrink(pasted(invented_sky()[200:300, 200:300], 200, 200, size), nx, ny, window)

    async def star_readings(self, frame: str) -> tuple[StarReading, ...]:
        self._maybe_refuse("star_readings")
        return invented_readings(self.now.targets[0].target.name)

    async def profile(self, path: str, x_px: float, y_px: float, radius_px: float) -> RadialProfile:
        return radial_profile(invented_sky(), x_px, y_px, radius_px)

    def close(self) -> None:
        self.refuse.clear()


def invented_readings(name: str) -> tuple[StarReading, ...]:
    """The target, two comparison stars and one without a name."""
    growth = tuple(0.9 * math.exp(-1.7 * r) for r in LADDER_FWHM)
    places = {name: (260.0, 250.0), "C1": (120.0, 400.0), "C2": (400.0, 130.0), "": (300.4, 301.2)}
    return tuple(
        StarReading(
            star, star == name, x, y, 15.2 + 0.4 * k, 0.01 + 0.01 * k, 90.0 - 20 * k, 4213.0, 2.9, 1.06,
            ("saturated",) if star == "C2" else (), growth,
        )
        for k, (star, (x, y)) in enumerate(places.items())
    )  # fmt: skip


def invented_sky() -> np.ndarray:
    """512 × 512 pixels of noise and stars."""
    rng = np.random.default_rng(3)
    image = rng.normal(300.0, 12.0, (512, 512)).astype(np.float32)
    x_grid, y_grid = np.arange(512.0), np.arange(512.0)
    named = [(260.0, 250.0, 4.6), (120.0, 400.0, 5.2), (400.0, 130.0, 5.0), (300.4, 301.2, 4.3)]
    for x, y, size in [*named, *((*rng.uniform(10, 502, 2), rng.uniform(3.3, 5.8)) for _ in range(90))]:
        flux = 10**size
        star = np.exp(-((y_grid - y) ** 2) / 12.5)[:, None] * np.exp(-((x_grid - x) ** 2) / 12.5)[None, :]
        image += (flux / 39.0 * star).astype(np.float32)
    return image
