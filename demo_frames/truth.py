"""What was rendered: the truth that a reduction is held against."""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from demo_frames.scenario import Expected
from reduce.records import ReddeningScale, TargetKind

TRUTH_FILE = "truth.json"


@dataclass(frozen=True, slots=True)
class FrameTruth:
    """One light frame; ``file`` is the name without folder, ``path`` is relative to ``frames``."""

    file: str
    path: str
    night: str
    band: str
    mjd_mid: float
    exposure_s: float
    airmass: float
    fwhm_px: float
    pointing_ra_deg: float
    pointing_dec_deg: float
    rotation_deg: float
    true_mag: float | None
    """Standard magnitude of the target; None where the target is not on a readable frame."""
    colour: float | None
    """True colour of the target that the band's colour term multiplies."""
    zero_point: float
    """With extinction and cloud: standard = -2.5 log10(e-/s) + this + (colour term - k" X) colour."""
    expected: Expected
    fault: str


@dataclass(frozen=True, slots=True)
class StarTruth:
    """One comparison star with its true magnitudes."""

    id: str
    ra_deg: float
    dec_deg: float
    mag: dict[str, float]


@dataclass(frozen=True, slots=True)
class Truth:
    """The whole campaign."""

    seed: int
    scatter: bool
    target: str
    kind: TargetKind
    ra_deg: float
    dec_deg: float
    z: float
    ebv_mw: float
    ebv_scale: ReddeningScale
    host_ra_deg: float
    host_dec_deg: float
    mu_true: float
    t_max: float
    dm15: float
    e_host: float
    frames: tuple[FrameTruth, ...]
    stars: tuple[StarTruth, ...]


def write_truth(folder: Path, truth: Truth) -> None:
    """Write ``truth.json``."""
    (folder / TRUTH_FILE).write_text(json.dumps(asdict(truth), indent=1) + "\n", encoding="utf-8")


def read_truth(folder: Path) -> Truth:
    """The truth of the campaign rendered into ``folder``."""
    raw: dict[str, Any] = json.loads((folder / TRUTH_FILE).read_text(encoding="utf-8"))
    frames = tuple(FrameTruth(**row) for row in raw.pop("frames"))
    stars = tuple(StarTruth(**row) for row in raw.pop("stars"))
    return Truth(frames=frames, stars=stars, **raw)
