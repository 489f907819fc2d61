"""Points of the comparison stars themselves: the check of a night that needs no target."""

from __future__ import annotations

import numpy as np

from reduce.curve.limits import magnitude, magnitude_err
from reduce.records import FLUX_ZERO_POINT, Point, Sequence
from reduce.standard.colour import catalogue_colour
from reduce.standard.solve import StandardSolution


def star_points(solution: StandardSolution, sequence: Sequence) -> tuple[Point, ...]:
    """One point for every comparison star on every frame that measured it, by time, band and star.

    Stars without a catalogue colour are left in the camera's natural system and flagged so.
    """
    points = []
    for system in solution.systems:
        colour = catalogue_colour(sequence, system.band)
        for solved in system.frames:
            frame = solved.stars
            mags, errs = frame.mag[:, system.radius], frame.mag_err[:, system.radius]
            for k in np.flatnonzero(np.isfinite(mags)):
                known = bool(np.isfinite(colour[k]))
                natural = float(mags[k]) + solved.zp_mag + float(solved.star_shift_mag[k])
                mag = natural + (solved.coefficient * float(colour[k]) if known else 0.0)
                flux = 10 ** (-0.4 * (mag - FLUX_ZERO_POINT))
                flux_err = flux * float(errs[k]) * np.log(10) / 2.5
                points.append(
                    Point(
                        star=sequence.ids[k],
                        file=frame.frame,
                        night=frame.night,
                        band=system.band,
                        mjd=frame.mjd,
                        bjd_tdb=None,
                        mag=magnitude(flux),
                        err=magnitude_err(flux, flux_err),
                        err_night=solved.zp_err_mag,
                        err_band=system.sequence_err_mag,
                        flux=flux,
                        flux_err=flux_err,
                        state=solved.verdict.state,
                        flags=() if known else ("colour unknown",),
                        zp_group=frame.zp_group,
                        natural_mag=natural,
                    )
                )
    return tuple(sorted(points, key=lambda point: (point.mjd, point.band, point.star)))
