"""Light curves for the tests of the distance room: of the model itself with noise, and of real supernovae."""

import numpy as np

from reduce.candles.model import type_ia_model
from reduce.records import LightCurve, Target


def light_curve(mjd, band, mag, err, err_night=0.0, err_band=np.nan, flux=None, flux_err=None, night=None):
    """A LightCurve from sequences; fluxes follow from the magnitudes where none are given."""
    mjd, mag, err = (np.asarray(values, float) for values in (mjd, mag, err))
    derived = 10.0 ** (-0.4 * (mag - 25.0))
    return LightCurve(
        mjd=mjd,
        band=np.array(list(band), dtype="U2"),
        mag=mag,
        err=err,
        err_night=np.broadcast_to(np.asarray(err_night, float), mjd.shape).copy(),
        err_band=np.broadcast_to(np.asarray(err_band, float), mjd.shape).copy(),
        flux=derived if flux is None else np.asarray(flux, float),
        flux_err=derived * err / 1.0857 if flux_err is None else np.asarray(flux_err, float),
        night=np.array([str(int(t)) for t in mjd]) if night is None else np.asarray(night),
    )


def model_mag(band, mjd, *, mu, t_max, dm15, e_host, z, ebv_mw):
    """The model's magnitudes written out from its equation, without the code of the fit."""
    model = type_ia_model()
    phase = (np.asarray(mjd, float) - t_max) / (1.0 + z)
    template = model.splines[band](phase, np.full(phase.shape, dm15), grid=False)
    dust = (model.host_coefficients[band][0] + z * model.host_coefficients[band][1]) * e_host
    k = model.k_splines[band](np.full(phase.shape, z), phase, grid=False)
    milky_way = model.mw_coefficients[band] * ebv_mw
    return mu + float(model.absolute_mag(band, dm15)) + template + k + dust + milky_way


PHASES = np.arange(-8.0, 45.0, 3.0)


def simulated(truth, bands="BVRI", phases=PHASES, err=0.02, noise=None, **errors):
    """Points of the model at ``phases`` in every band; ``noise`` is a generator or None for none."""
    mjd, band, mag = [], [], []
    for name in bands:
        times = truth["t_max"] + np.asarray(phases) * (1.0 + truth["z"])
        values = model_mag(name, times, **truth)
        mjd.extend(times)
        band.extend(name for _ in times)
        mag.extend(values if noise is None else values + noise.normal(0.0, err, len(times)))
    return light_curve(mjd, band, mag, np.full(len(mjd), err), **errors)


def taken(curve, rows):
    """The rows of a light curve in the order given."""
    columns = {name: getattr(curve, name) for name in LightCurve.__slots__}
    return LightCurve(**{name: None if values is None else values[rows] for name, values in columns.items()})


def joined(one, two):
    """The points of both."""
    names = [name for name in LightCurve.__slots__ if getattr(one, name) is not None]
    both = {name: np.concatenate([getattr(one, name), getattr(two, name)]) for name in names}
    return LightCurve(**both)


def target(z=0.02, ebv_mw=0.03, scale="SF11", spectroscopic_type="Ia"):
    return Target("Lantern 7", "type_ia", 150.0, -12.0, z, ebv_mw, scale, spectroscopic_type)


TRUTH = {"mu": 34.6, "t_max": 60123.4, "dm15": 1.12, "e_host": 0.15, "z": 0.02, "ebv_mw": 0.03}


def real_curve(rows):
    """Target and light curve of rows of the public photometry."""
    mjd, mag, err = (np.array([float(row[column]) for row in rows]) for column in ("mjd", "mag", "err"))
    z, ebv_mw = float(rows[0]["zhel"]), float(rows[0]["mwebv"])
    curve = light_curve(mjd, [row["band"] for row in rows], mag, err)
    return Target(rows[0]["name"], "type_ia", np.nan, np.nan, z, ebv_mw, spectroscopic_type="Ia"), curve
