"""Invented records for the tests of the logbook."""

from __future__ import annotations

import hashlib
import itertools
from datetime import UTC, datetime, timedelta

import numpy as np

from reduce.logbook.host_light import HostRow
from reduce.records import (
    N_RADII,
    STAR_DTYPE,
    BudgetLine,
    Caution,
    Estimate,
    FieldSolution,
    FitCurve,
    FitPoint,
    FrameInfo,
    HostLight,
    Measured,
    Point,
    Quality,
    Sequence,
    Target,
)


def ticking_clock():
    start, count = datetime(2026, 3, 1, 20, 0, tzinfo=UTC), itertools.count()
    return lambda: start + timedelta(seconds=next(count))


def counting_random():
    count = itertools.count(1)
    return lambda n: next(count).to_bytes(n, "big")


def no_mounts() -> str:
    return "rootfs / ext4 rw 0 0\n"


def frame_id(n: int) -> str:
    return hashlib.sha256(str(n).encode()).hexdigest()


def info(n: int = 0, band: str = "V") -> FrameInfo:
    return FrameInfo(
        kind="light", band=band, filter_name="Johnson V", object_name="SN demo", camera="cam",
        mjd_mid=61000.0 + n / 1000,
        exposure_s=60.0, ra_deg=150.0, dec_deg=None, scale_arcsec=1.2, gain_e_per_adu=1.5, read_noise_e=8.0,
        saturation_adu=60000.0, nx=512, ny=510, binning=(2, 2), notes=("gain guessed",),
    )  # fmt: skip


def stars(n_stars: int, seed: int = 1) -> np.ndarray:
    rng = np.random.default_rng(seed)
    table = np.zeros(n_stars, STAR_DTYPE)
    for name in ("ra_deg", "dec_deg", "x_px", "y_px", "sky_e_px"):
        table[name] = rng.normal(100, 10, n_stars)
    for name in ("flux_e", "flux_err_e", "area_px"):
        table[name] = rng.normal(1000, 100, (n_stars, N_RADII))
    table["target"][:1] = "SN demo"
    return table


def measured(n: int = 0, recipe: str = "r1", n_stars: int = 5, stamps: bytes = b"") -> Measured:
    return Measured(
        frame=frame_id(n), recipe=recipe, outcome="measured", reason="", info=info(n),
        bjd_tdb=2461000.5 + n / 1000,
        quality=Quality(3.1, 1.1, 0.2, 120.5, 11.0, n_stars, 0, 60.0, 1.3, 0.002, None, True),
        solution=FieldSolution((150.0, 20.0), (255.5, 254.5), ((-3e-4, 1e-6), (1e-6, 3e-4)), 40, 0.12),
        stars=stars(n_stars, n), growth_mag=np.linspace(-0.5, 0, 9), growth_err_mag=np.full(9, np.nan),
        stamps=stamps, seconds=0.5,
    )  # fmt: skip


def sequence(shift: float = 0.0) -> Sequence:
    return Sequence(
        name="field", ids=("s1", "s2"), ra_deg=np.array([150.0, 150.1]), dec_deg=np.array([20.0, 20.1]),
        mag={"V": np.array([12.0 + shift, 13.0]), "B": np.array([12.5, np.nan])},
        mag_err={"V": np.array([0.01, 0.02]), "B": np.array([0.01, np.nan])},
    )  # fmt: skip


def target(z: float | None = 0.01) -> Target:
    return Target("SN demo", "type_ia", 150.0, 20.0, z=z, ebv_mw=0.03)


def host_row(inputs: str = "i", rows: int = 1, note: str = "seen") -> HostRow:
    light = HostLight("reference", 12.5, (note,))
    return HostRow(frame_id(0), "r1", "SN Test", inputs, light, stars(5)[:rows])


def estimate(mu: float | None = 33.0) -> Estimate:
    return Estimate(
        target="SN demo", kind="type_ia", mu=mu, mu_err=0.15, mu_err_fit=0.1, t_max=61010.0, t_max_err=0.2,
        dm15=1.1,
        dm15_err=0.05, e_host=0.05, e_host_err=0.03, chi2=20.0, n=25, verdict="μ stands", scale="H0 = 73.04",
        warnings=(Caution("late", "first point 3 d after maximum"),),
        budget=(BudgetLine("fit", 0.1), BudgetLine("zp", 0.05, "x")),
        curves=(FitCurve("V", np.array([1.0, 2.0]), np.array([15.0, np.nan]), np.array([0.1, 0.2])),),
        points=(FitPoint("2026-03-01", "V", 61000.0, -3.0, 0.01, 0.02, False),), peak_mag={"B": 15.0},
    )  # fmt: skip


def imported_point(night: int = 0, source: str = "Beacon Hill") -> Point:
    when = f"2026-03-{night + 1:02d} {source}"
    return Point(
        star="SN demo", file=None, night=when, band="V", mjd=61100.25 + night, bjd_tdb=None, mag=15.2, err=0.02,
        err_night=None, err_band=None, flux=8317.6, flux_err=153.2, state="kept", flags=("imported",),
        zp_group=f"{source}/V/{when}", source=source,
    )  # fmt: skip
