"""The sky over the invented observatory: altitude, airmass, moonlight, scintillation."""

from __future__ import annotations

import math

from demo_frames.scenario import BandScene, SiteScene, TelescopeScene

MJD_J2000 = 51544.5
NEW_MOON_MJD = 51549.76
"""2000 January 6, 18:14 UT, a new Moon."""
SYNODIC_MONTH_D = 29.530589


def altitude_deg(mjd: float, ra_deg: float, dec_deg: float, site: SiteScene) -> float:
    """True altitude, from mean sidereal time and first-order precession; good to an arcminute."""
    days = mjd - MJD_J2000
    years = days / 365.25
    ra, dec = math.radians(ra_deg), math.radians(dec_deg)
    # Annual precession m = 46.12", n = 20.04" (IAU 1976, rounded).
    ra += math.radians(years * (46.12 + 20.04 * math.sin(ra) * math.tan(dec)) / 3600.0)
    dec += math.radians(years * 20.04 * math.cos(math.radians(ra_deg)) / 3600.0)
    sidereal = math.radians(280.46061837 + 360.98564736629 * days + site.longitude_deg)
    latitude = math.radians(site.latitude_deg)
    sine = math.sin(latitude) * math.sin(dec) + math.cos(latitude) * math.cos(dec) * math.cos(sidereal - ra)
    return math.degrees(math.asin(sine))


def airmass(altitude: float) -> float:
    """Young & Irvine (1967): sec z (1 - 0.0012 (sec² z - 1)), z the true zenith distance."""
    secant = 1.0 / math.sin(math.radians(altitude))
    return secant * (1.0 - 0.0012 * (secant**2 - 1.0))


def moon_illumination(mjd: float) -> float:
    """Illuminated fraction from the mean lunation, 0 to 1."""
    return 0.5 * (1.0 - math.cos(2.0 * math.pi * (mjd - NEW_MOON_MJD) / SYNODIC_MONTH_D))


def sky_mag(mjd: float, band: BandScene) -> float:
    """Sky, mag per square arcsec: dark, and brighter with the lit part of the Moon."""
    return band.dark_sky - band.moon_sky * moon_illumination(mjd)


def scintillation(telescope: TelescopeScene, site: SiteScene, x: float, exposure_s: float) -> float:
    """Relative rms of a flux, Osborn et al. 2015 (MNRAS 452, 1707)."""
    variance = 1e-5 * telescope.scintillation_coefficient**2 * telescope.aperture_m ** (-4.0 / 3.0)
    variance *= x**3 / exposure_s * math.exp(-2.0 * site.height_m / 8000.0)
    return math.sqrt(variance)
