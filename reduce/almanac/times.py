"""Times of an exposure: mid-exposure, Julian dates, light time to the Sun and the barycentre, the night's name.

Everything is computed from tables inside the ERFA library (the SOFA routines): nothing is downloaded, no table goes
out of date and nothing warns, years after release. What is left out is small and stated: UT1 is taken as UTC (at most
0.9 s of Earth rotation, 1.4 µs of light time), and a leap second announced after the library was made is missed (1 s).
"""

from __future__ import annotations

from datetime import date
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from reduce.records import Floats

if TYPE_CHECKING:
    from reduce.settings import Site

MJD_ZERO_JD = 2400000.5
SECONDS_PER_DAY = 86400.0
TT_MINUS_TAI_S = 32.184
LIGHT_TIME_AU_S = 499.004783836
"""Light time over one astronomical unit; IAU 2012 au and the defined speed of light."""
METRES_PER_AU = 149597870700.0
_ORDINAL_OF_MJD_ZERO = date(1858, 11, 17).toordinal()


def mid_exposure_mjd(start_mjd: float, exposure_s: float) -> float:
    """MJD of the middle of an exposure that began at ``start_mjd`` and lasted ``exposure_s``."""
    return start_mjd + exposure_s / 2.0 / SECONDS_PER_DAY


def mjd_to_jd(mjd: ArrayLike) -> Floats:
    """Julian date of a modified Julian date, same time scale."""
    return np.asarray(mjd, dtype=np.float64) + MJD_ZERO_JD


def tai_minus_utc_s(mjd_utc: ArrayLike) -> Floats:
    """Leap seconds, s; before 1972 the step of that year without its drift (good to half a second)."""
    import erfa

    table = erfa.leap_seconds.get()
    starts = [date(int(row["year"]), int(row["month"]), 1).toordinal() - _ORDINAL_OF_MJD_ZERO for row in table]
    values = np.concatenate([[0.0], table["tai_utc"]])
    return np.asarray(values[np.searchsorted(starts, np.asarray(mjd_utc, dtype=np.float64), side="right")], np.float64)


def tt_minus_utc_s(mjd_utc: ArrayLike) -> Floats:
    """Terrestrial Time minus UTC, s: leap seconds + 32.184 s."""
    return tai_minus_utc_s(mjd_utc) + TT_MINUS_TAI_S


def light_time_s(
    mjd_utc: ArrayLike,
    ra_deg: float,
    dec_deg: float,
    site: Site | None,
    kind: Literal["barycentric", "heliocentric"] = "barycentric",
) -> Floats:
    """Light time ``r · n / c`` in s, added to a time on Earth; positive when the Earth is nearer the star.

    Parameters
    ----------
    mjd_utc
        Scalar or array.
    ra_deg, dec_deg
        ICRS.
    site
        The observer; None means the centre of the Earth, wrong by at most 21 ms.
    kind
        To the barycentre of the Solar System or to the centre of the Sun.

    Returns
    -------
    ndarray
        Of the shape of ``mjd_utc``. Earth by Moisson & Bretagnon as in SOFA ``epv00`` (a few km, 0.02 ms).
    """
    import erfa

    mjd = np.asarray(mjd_utc, dtype=np.float64)
    tt = mjd + tt_minus_utc_s(mjd) / SECONDS_PER_DAY
    heliocentric, barycentric = erfa.epv00(MJD_ZERO_JD, tt)
    earth_au = (barycentric if kind == "barycentric" else heliocentric)["p"]
    if site is not None:
        earth_au = earth_au + _observer_au(mjd, tt, site)
    star = erfa.s2c(np.radians(ra_deg), np.radians(dec_deg))
    return np.asarray(earth_au @ star * LIGHT_TIME_AU_S, dtype=np.float64)


def _observer_au(mjd: Floats, tt: Floats, site: Site) -> NDArray[Any]:
    """Observer from the centre of the Earth along ICRS axes, au; UT1 = UTC, polar motion left out (15 m)."""
    import erfa

    rotation = erfa.era00(MJD_ZERO_JD, mjd)
    place = erfa.pvtob(
        np.radians(site.longitude_deg), np.radians(site.latitude_deg), site.height_m, 0.0, 0.0, 0.0, rotation
    )["p"]
    to_intermediate = erfa.c2i06a(MJD_ZERO_JD, tt)
    return np.asarray(np.einsum("...ji,...j->...i", to_intermediate, place) / METRES_PER_AU)


def bjd_tdb(mjd_utc: ArrayLike, ra_deg: float, dec_deg: float, site: Site | None) -> Floats:
    """Barycentric Julian date in TDB (Eastman, Siverd & Gaudi 2010, PASP 122, 935).

    Parameters are those of `light_time_s`; without a site the time is that at the centre of the Earth, at most 21 ms
    off. Good to 0.1 ms otherwise (a double holds a Julian date to 0.04 ms).
    """
    import erfa

    mjd = np.asarray(mjd_utc, dtype=np.float64)
    tt = mjd + tt_minus_utc_s(mjd) / SECONDS_PER_DAY
    tdb_minus_tt_s = erfa.dtdb(MJD_ZERO_JD, tt, np.mod(mjd, 1.0), 0.0, 0.0, 0.0)
    late_s = tt_minus_utc_s(mjd) + tdb_minus_tt_s + light_time_s(mjd, ra_deg, dec_deg, site)
    return mjd_to_jd(mjd + late_s / SECONDS_PER_DAY)


def hjd_utc(mjd_utc: ArrayLike, ra_deg: float, dec_deg: float, site: Site | None) -> Floats:
    """Heliocentric Julian date in UTC, for comparison with older tables; parameters as `light_time_s`."""
    mjd = np.asarray(mjd_utc, dtype=np.float64)
    return mjd_to_jd(mjd + light_time_s(mjd, ra_deg, dec_deg, site, "heliocentric") / SECONDS_PER_DAY)


def night_of(mjd: float, longitude_deg: float | None) -> str:
    """ISO date of the evening a night began: the local date at the local noon before.

    Parameters
    ----------
    mjd
        UTC.
    longitude_deg
        East positive; None counts as Greenwich.
    """
    east = ((longitude_deg or 0.0) + 180.0) % 360.0 - 180.0
    return date.fromordinal(_ORDINAL_OF_MJD_ZERO + int(np.floor(mjd + east / 360.0 - 0.5))).isoformat()
