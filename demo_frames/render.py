"""Render the invented campaign: python -m demo_frames.render DIR --seed N [--scatter]."""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np

from demo_frames.detector import Raw, make_detector
from demo_frames.files_on_disk import header, observatory_toml, write_comparison, write_frame
from demo_frames.light_frame import Conditions, Scene, colour, draw_conditions, host_position, take_light
from demo_frames.scenario import Scenario, read_scenario
from demo_frames.schedule import SECONDS_PER_DAY, Exposure, all_exposures, frame_path
from demo_frames.star_field import StarField, draw_star_field
from demo_frames.supernova import draw_supernova
from demo_frames.truth import FrameTruth, StarTruth, Truth, read_truth, write_truth

__all__ = ["Truth", "read_truth", "render"]

UNIX_EPOCH_MJD = 40587.0
OTHER_FIELD = 1_000_003
"""Added to the seed for the stars of the frame that shows another field."""


def make_scene(scenario: Scenario, seed: int, scatter: bool) -> Scene:
    """Draw everything that stands still during the campaign."""
    rng = np.random.default_rng([seed, 4])
    return Scene(
        scenario=scenario,
        stars=draw_star_field(scenario, seed),
        other_stars=draw_star_field(scenario, seed + OTHER_FIELD),
        supernova=draw_supernova(scenario, seed, scatter),
        detector=make_detector(scenario.camera, tuple(scenario.bands), seed),
        night_zero_point=rng.normal(0.0, scenario.sky.night_zero_point_rms, len(scenario.nights)),
    )


def render(
    folder: Path, seed: int = 1, scatter: bool = False, progress: Callable[[int, int], None] | None = None
) -> Truth:
    """Write frames, comparison sequence, settings and truth into ``folder``; the same seed, the same bytes.

    Parameters
    ----------
    folder
        Is made when missing; gets ``frames/``, ``comparison.csv``, ``observatory.toml`` and ``truth.json``.
    seed
        Not negative: stars, detector, weather, noise and supernova are drawn from it.
    scatter
        Let the supernova differ from the model's mean as real ones do.
    progress
        Called with the number of frames written and of all frames.
    """
    scenario = read_scenario()
    scene = make_scene(scenario, seed, scatter)
    exposures = all_exposures(scenario)
    folder.mkdir(parents=True, exist_ok=True)
    write_comparison(folder / "comparison.csv", scene.stars)
    (folder / "observatory.toml").write_text(observatory_toml(scenario), encoding="utf-8")
    frames: list[FrameTruth] = []
    for count, exposure in enumerate(exposures, start=1):
        # A stream of its own for every frame: none depends on how many numbers another has drawn.
        rng = np.random.default_rng([seed, 5, count])
        path = frame_path(scenario, exposure)
        if exposure.kind == "light":
            now = draw_conditions(scene, exposure, rng)
            raw = take_light(scene, exposure, now, rng)
            claimed = _claimed(scenario, now, rng)
            frames.append(_frame_truth(scene, exposure, now, path))
        else:
            raw, claimed = _take_calibration(scene, exposure, rng), (0.0, 0.0)
        cards = header(scenario, exposure, claimed, rng)
        write_frame(folder / "frames" / path, raw, cards, exposure.fault.name if exposure.fault else "")
        written = (exposure.start_mjd - UNIX_EPOCH_MJD) * SECONDS_PER_DAY + exposure.exposure_s
        os.utime(folder / "frames" / path, (written, written))
        if progress:
            progress(count, len(exposures))
    truth = _truth(scene, seed, scatter, tuple(frames))
    write_truth(folder, truth)
    return truth


def _take_calibration(scene: Scene, exposure: Exposure, rng: np.random.Generator) -> Raw:
    if exposure.kind == "bias":
        return scene.detector.bias(rng)
    if exposure.kind == "dark":
        return scene.detector.dark(exposure.exposure_s, rng)
    camera, band = scene.scenario.camera, exposure.band or ""
    level_adu = scene.scenario.bands[band].flat_level * camera.saturation_adu * rng.uniform(0.7, 1.08)
    light_e = np.full((camera.ny, camera.nx), level_adu * camera.gain_e_per_adu)
    return scene.detector.expose(light_e, band, exposure.exposure_s, rng)


def _claimed(scenario: Scenario, now: Conditions, rng: np.random.Generator) -> tuple[float, float]:
    east, north = rng.normal(0.0, scenario.sky.pointing_error_arcsec / 3600.0, 2)
    pointing = now.pointing
    return pointing.ra_deg + east / np.cos(np.radians(pointing.dec_deg)), pointing.dec_deg + north


def _frame_truth(scene: Scene, exposure: Exposure, now: Conditions, path: str) -> FrameTruth:
    fault, band = exposure.fault, exposure.band or ""
    seen = fault is None or (fault.name != "another field" and fault.expected != "unreadable")
    mags = scene.target_mags(exposure)
    return FrameTruth(
        file=path.rpartition("/")[2],
        path=path,
        night=scene.scenario.nights[exposure.night].evening.isoformat(),
        band=band,
        mjd_mid=exposure.mjd_mid,
        exposure_s=exposure.exposure_s,
        airmass=now.airmass,
        fwhm_px=now.fwhm_px,
        pointing_ra_deg=now.pointing.ra_deg,
        pointing_dec_deg=now.pointing.dec_deg,
        rotation_deg=now.pointing.rotation_deg,
        true_mag=mags[band] if seen else None,
        colour=colour(band, mags) if seen else None,
        zero_point=now.zero_point,
        expected=fault.expected if fault else "kept",
        fault=fault.name if fault else "",
    )


def _truth(scene: Scene, seed: int, scatter: bool, frames: tuple[FrameTruth, ...]) -> Truth:
    target, supernova = scene.scenario.supernova, scene.supernova
    host_ra_deg, host_dec_deg = host_position(scene.scenario)
    return Truth(
        seed=seed, scatter=scatter, target=target.name, kind="type_ia",
        ra_deg=target.ra_deg, dec_deg=target.dec_deg, z=supernova.z,
        ebv_mw=supernova.ebv_mw, ebv_scale=target.ebv_scale,
        host_ra_deg=host_ra_deg, host_dec_deg=host_dec_deg,
        mu_true=supernova.mu, t_max=supernova.t_max, dm15=supernova.dm15, e_host=supernova.e_host,
        frames=frames, stars=_star_truths(scene.stars),
    )  # fmt: skip


def _star_truths(stars: StarField) -> tuple[StarTruth, ...]:
    return tuple(
        StarTruth(
            star, float(stars.ra_deg[k]), float(stars.dec_deg[k]),
            {band: float(mags[k]) for band, mags in stars.mag.items()},
        )
        for k, star in enumerate(stars.ids)
    )  # fmt: skip


def main() -> None:
    """Render from the command line; progress goes to standard error."""
    parser = argparse.ArgumentParser(prog="python -m demo_frames.render", description="Render the invented campaign.")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--scatter", action="store_true")
    asked = parser.parse_args()

    def show(done: int, n: int) -> None:
        print(f"\rframe {done} of {n}", end="" if done < n else "\n", file=sys.stderr, flush=True)

    render(asked.folder, asked.seed, asked.scatter, show)


if __name__ == "__main__":
    main()
