"""The night ahead for all targets of a campaign, from its logbook and settings."""

from __future__ import annotations

from typing import TYPE_CHECKING

from reduce.almanac.sky import moon, moons
from reduce.almanac.times import night_of
from reduce.curve.light_curve import to_light_curve
from reduce.plain_text import PlainError
from reduce.plan.exposure import TelescopeNoise
from reduce.plan.forecast import solved_curve
from reduce.plan.hours import Hours, hours
from reduce.plan.pulsator import pulsator_plan
from reduce.plan.supernova import supernova_plan
from reduce.plan.telescope import telescope_noise
from reduce.plan.tonight import NightSky, next_night, night_sky, safety_cautions, target_night, track, twilights
from reduce.records import Point, Target
from reduce.settings import Site
from reduce.views import Plan, TargetNight, TargetPlan

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign

NIGHTS_AHEAD = 40
LATER_STEP_D = 30.0 / 1440.0
"""Hours of coming nights are looked at in these steps."""


def make_plan(campaign: Campaign, now_mjd: float) -> Plan:
    """The night that runs at a time in UTC, or comes next.

    Raises
    ------
    PlainError
        The settings name no site.
    """
    site = campaign.settings.site
    if site is None:
        raise PlainError("A plan needs the site: write [site] with latitude_deg and longitude_deg in observatory.toml.")
    night = night_of(now_mjd, site.longitude_deg)
    sky = night_sky(night, site)
    if now_mjd > sky.mjd[-1]:  # the morning after: what matters is the night to come
        night = next_night(night)
        sky = night_sky(night, site)
    limits = campaign.settings.planning
    targets = campaign.targets()
    points = {target.name: [p for p in campaign.curve_points() if p.star == target.name] for target in targets}
    nights = {t.name: target_night(t, sky, site, limits, points[t.name], now_mjd) for t in targets}
    noise = telescope_noise(campaign.measured(), campaign.solution(), campaign.settings)
    ahead = [night_sky(next_night(night, k), site, LATER_STEP_D) for k in range(1, NIGHTS_AHEAD)]
    plans = tuple(
        _target_plan(campaign, target, nights[target.name], points[target.name], noise, (sky, *ahead), now_mjd, site)
        for target in targets
    )
    over_site = moons(sky.mjd, targets[0].ra_deg, targets[0].dec_deg, site)
    return Plan(
        night=night,
        now_mjd=now_mjd,
        mjd=tuple(sky.mjd.tolist()),
        sun_altitude_deg=tuple(sky.sun_altitude_deg.tolist()),
        moon_altitude_deg=tuple(one.altitude_deg for one in over_site),
        moon_illumination=moon(sky.middle, targets[0].ra_deg, targets[0].dec_deg, site).illumination,
        twilight=twilights(night, site),
        targets=plans,
        cautions=safety_cautions(list(nights.items())),
        notes=_notes(noise),
    )


def _target_plan(
    campaign: Campaign,
    target: Target,
    night: TargetNight,
    points: list[Point],
    noise: TelescopeNoise | None,
    skies: tuple[NightSky, ...],
    now_mjd: float,
    site: Site,
) -> TargetPlan:
    limits = campaign.settings.planning
    if noise is None:
        return TargetPlan(target, night, "no advice yet: no frame with a zero point tells how good the telescope is.")
    if target.kind == "other":
        return TargetPlan(target, night, f"{night.due}; no distance relation for this kind, so no advice.")
    when: list[Hours] = []
    for k, sky in enumerate(skies if target.kind == "type_ia" else skies[:1]):
        when.append(hours(sky, track(target, sky, site, limits), now_mjd if k == 0 else -1e9))
    if target.kind == "type_ia":
        known = [point for point in points if point.mjd <= now_mjd]
        solved = solved_curve(to_light_curve(known), target)
        estimate = campaign.estimate(target.name) if solved is not None and len(known) == len(points) else None
        return supernova_plan(target, night, solved, estimate, known, noise, when, limits)
    return pulsator_plan(target, night, campaign.estimate(target.name), points, noise, when, limits)


def _notes(noise: TelescopeNoise | None) -> tuple[str, ...]:
    if noise is None:
        return ()
    parts = ", ".join(f"{band} {one.zero_point:.2f}" for band, one in noise.bands.items())
    frames = sum(one.n_frames for one in noise.bands.values())
    notes = [
        f"Noise model from {frames} frames: zero points {parts}; seeing {noise.fwhm_arcsec:.1f}″ at the zenith, "
        f"read-out {noise.read_noise_e:.1f} e⁻."
    ]
    if noise.aperture_m is None:
        notes.append("Scintillation is left out: observatory.toml gives no telescope aperture_m.")
    return tuple(notes)
