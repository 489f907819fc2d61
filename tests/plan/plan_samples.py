"""A telescope and a night that plans are tried on."""

from reduce.plan.exposure import BandNoise, Conditions, TelescopeNoise
from reduce.plan.hours import Hours
from reduce.plan.tonight import next_night
from reduce.views import TargetNight


def telescope(**changes: object) -> TelescopeNoise:
    """0.4 m: about 200 e-/s of a star of magnitude 16 in V."""
    zero_point = {"B": 21.3, "V": 21.6, "R": 21.5, "I": 21.0}
    bands = {
        band: BandNoise(value, 0.2, 10.0 ** (-0.4 * (20.5 - value)), 0.004, 0.01, 120.0, 30)
        for band, value in zero_point.items()
    }
    fields = {
        "bands": bands, "scale_arcsec": 1.0, "fwhm_arcsec": 2.5, "read_noise_e": 8.0, "dark_e_s_px": 0.05,
        "saturation_e": 90000.0, "aperture_m": 0.4, "height_m": 800.0, "scintillation_coefficient": 1.5,
    }  # fmt: skip
    return TelescopeNoise(**{**fields, **changes})


HIGH = Conditions(1.1, 65.0)


def dark_hours(night: str, mjd: float, n: int = 1) -> list[Hours]:
    """One good hour on each of n nights."""
    return [Hours(next_night(night, k), (mjd + k,), (HIGH,)) for k in range(n)]


def good_night(mjd: float) -> TargetNight:
    return TargetNight((65.0,), (mjd - 0.1, mjd + 0.1), "", mjd, 1.1, 90.0, 120.0, "due: last point 3.0 d ago", True)
