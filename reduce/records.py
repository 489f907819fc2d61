"""What travels between rooms: small frozen dataclasses of floats and arrays, units in the field names.

Conventions, valid everywhere in the project:

- pixel coordinates are 0-based, (0, 0) is the centre of the first pixel, x runs along the second array axis;
- angles are degrees, positions ICRS; times are MJD in UTC at mid-exposure unless the name says otherwise;
- fluxes are electrons of one exposure (``_e``) unless the name says otherwise; ``flux`` of a point is on
  zero point 25: ``flux = 10**(-0.4 (mag - 25))``;
- instrumental magnitude is ``-2.5 log10(flux_e / exposure_s)``; a zero point is added to it;
- an unknown number is ``None`` in a record, NaN in an array, ``null`` in JSON: never 0.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntFlag
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from reduce.plain_text import PlainError

Floats = NDArray[np.float64]
Image = NDArray[np.float32]
Mask = NDArray[np.uint8]

FrameKind = Literal["light", "bias", "dark", "flat", "unknown"]
CalibrationStep = Literal["bias", "dark", "flat"]
FrameState = Literal["kept", "doubtful", "dropped"]
PointState = Literal["kept", "doubtful", "dropped", "excluded", "limit"]
StarWord = Literal["used", "spare", "set aside"]
TargetKind = Literal["type_ia", "cepheid", "rr_lyrae", "other"]
ReddeningScale = Literal["SF11", "SFD"]
HostMethod = Literal["annulus", "bent annulus", "mirrored", "reference"]
"""How the light of a target's host is taken off: with the sky of the annulus about it, of one that follows the
curved light of a galaxy, with the host's own other side, or with a reference without the target."""

BANDS = ("B", "V", "R", "I", "g", "r", "i")
"""Bands with a standard system: B V R I Landolt (Vega-like), g r i SDSS (AB)."""

COLOUR_OF_BAND: Mapping[str, tuple[str, str]] = {
    "B": ("B", "V"), "V": ("B", "V"), "R": ("V", "R"), "I": ("V", "I"),
    "g": ("g", "r"), "r": ("g", "r"), "i": ("r", "i"),
}  # fmt: skip
"""Colour index (blue band, red band) that the colour term of each band multiplies."""

FLUX_ZERO_POINT = 25.0


class FrameError(PlainError):
    """A file that cannot be used; the message is one sentence: what is wrong and what to do."""


# ---- frames ----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class FrameInfo:
    """What was understood of one file's header. Positions are where the telescope *claims* to point."""

    kind: FrameKind
    band: str | None
    """Standard band letter after the filter table, or None when the filter has no standard band."""
    filter_name: str
    """The filter as the header spells it, escaped."""
    object_name: str
    camera: str
    mjd_mid: float | None
    exposure_s: float | None
    ra_deg: float | None
    dec_deg: float | None
    scale_arcsec: float | None
    """Pixel scale as binned, arcsec per pixel."""
    gain_e_per_adu: float | None
    read_noise_e: float | None
    saturation_adu: float | None
    nx: int
    ny: int
    binning: tuple[int, int] = (1, 1)
    temperature_c: float | None = None
    extension: int = 0
    """HDU that holds the image."""
    chip: str = ""
    """Which detector of a mosaic, where the header says so."""
    calibrated: tuple[CalibrationStep, ...] = ()
    """What was done to the pixels before they came here; it is not done again."""
    notes: tuple[str, ...] = ()
    """Sentences on what was guessed or ignored."""
    window: tuple[int, int] | None = None
    """Column and row of the detector, 0-based and as binned, where the image begins; None: the header does not say."""
    overscan: bool = False
    """The file holds an overscan; it is subtracted line by line before anything else."""
    pedestal_adu: float | None = None
    """Constant that a program left in the image when it subtracted the bias: such a frame needs no bias any more."""


class PixelFlag(IntFlag):
    """Bits of a calibrated image's mask."""

    SATURATED = 1
    BAD = 2
    """Dead or hot pixel, or outside the flat's trusted range."""
    NOT_FINITE = 4


@dataclass(frozen=True, slots=True)
class CalibratedImage:
    """A frame in electrons with its noise model.

    ``variance_e2`` is read noise, dark and master noise per pixel *without* the photon noise of what the frame
    itself holds; ``measure.noise`` completes it.
    """

    data_e: Image
    variance_e2: Image
    """(ny, nx) electrons²: read noise², rounding, dark current, noise of the masters; no photons of sky or star."""
    mask: Mask
    """(ny, nx) PixelFlag bits."""
    flat_used: bool
    gain_e_per_adu: float
    read_noise_e: float
    saturation_e: float
    """Level above which a raw pixel is flagged, in electrons before the flat."""
    relative_flat_error: float = 0.0
    """Photon noise of the master flat per pixel, as a fraction of the signal."""
    sensitivity: Image | None = None
    """(ny, nx) flat that the light was divided by: an electron of ``data_e`` has 1/sensitivity electrons² of photon
    noise. None: 1 everywhere."""
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Detections:
    """Stars found in one image, brightest first; all arrays of shape (n,)."""

    x_px: Floats
    y_px: Floats
    flux_e: Floats
    """Background-subtracted flux of the detection aperture; for ranking, not for photometry."""
    peak_e: Floats
    fwhm_px: Floats
    elongation: Floats
    """Ratio of the axes of the second moments, ≥ 1."""
    position_angle_deg: Floats
    """Of the major axis, from +x towards +y, in [0, 180)."""
    saturated: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.x_px)


@dataclass(frozen=True, slots=True)
class FieldSolution:
    """A gnomonic (TAN) plate solution: ``(xi, eta) = cd · (pixel - crpix)`` in degrees about ``crval``."""

    crval_deg: tuple[float, float]
    crpix_px: tuple[float, float]
    """0-based."""
    cd_deg: tuple[tuple[float, float], tuple[float, float]]
    n_matched: int
    rms_px: float

    @property
    def scale_arcsec(self) -> float:
        """Geometric mean pixel scale."""
        (a, b), (c, d) = self.cd_deg
        return float(abs(a * d - b * c) ** 0.5 * 3600.0)

    @property
    def mirrored(self) -> bool:
        """True when the determinant is positive: east is not to the left of north."""
        (a, b), (c, d) = self.cd_deg
        return a * d - b * c > 0

    @property
    def rotation_deg(self) -> float:
        """Position angle of the +y axis, north through east, in [0, 360)."""
        (_, b), (_, d) = self.cd_deg
        return float(np.degrees(np.arctan2(b, d)) % 360.0)


class StarFlag(IntFlag):
    """Bits of ``flags`` of one measured star."""

    SATURATED = 1
    BAD_PIXEL = 2
    EDGE = 4
    CROWDED = 8
    COSMIC_RAY = 16
    NO_CENTROID = 32
    """The forced position was used."""
    NON_LINEAR = 64
    TRAIL = 128
    """A satellite or an aeroplane crossed it."""
    RESIDUAL_IMAGE = 256
    """A saturated star stood here on the frame before."""


LADDER_FWHM = (0.6, 0.8, 1.0, 1.25, 1.5, 2.0, 2.5, 3.0, 4.0)
"""Aperture radii in units of the frame's FWHM."""
LADDER_ARCSEC = (3.0, 4.5, 6.0, 9.0)
"""Aperture radii fixed on the sky, for nights whose seeing changes within a frame set."""
N_RADII = len(LADDER_FWHM) + len(LADDER_ARCSEC)
PSF_COLUMN = N_RADII
"""Where fluxes through all radii stand side by side with the PSF flux, it is the last."""

STAR_DTYPE = np.dtype([
    ("role", "u1"),              # 0 field star, 1 target (forced position)
    ("target", "U64"),           # target's name, '' for field stars
    ("ra_deg", "f8"), ("dec_deg", "f8"),
    ("x_px", "f8"), ("y_px", "f8"),
    ("fwhm_px", "f4"), ("elongation", "f4"),
    ("peak_adu", "f4"),          # highest raw pixel within 1.5 FWHM
    ("sky_e_px", "f8"), ("sky_sigma_e_px", "f8"), ("sky_err_e_px", "f8"), ("sky_n_px", "f8"),
    ("flux_e", "f8", (N_RADII,)),
    ("flux_err_e", "f8", (N_RADII,)),   # full CCD noise; scintillation is added by solve
    ("area_px", "f8", (N_RADII,)),
    ("flags", "u4", (N_RADII,)),        # StarFlag bits that hold for each radius
    ("psf_flux_e", "f8"), ("psf_flux_err_e", "f8"),   # weighted sum under the frame's PSF; error 0: not measured
    ("psf_dx_px", "f4"), ("psf_dy_px", "f4"),         # how far the light lies from x_px, y_px; the flux is that there
    ("psf_chi2", "f4"),                 # reduced, of the pixels that were not rejected
    ("psf_rejected", "u2"),             # pixels left out within the fit's radius
    ("psf_flags", "u4"),                # StarFlag bits that hold for the fit
])  # fmt: skip
"""One measured star of one frame; the documented, packed form that the logbook stores."""


@dataclass(frozen=True, slots=True)
class Quality:
    """Figures of one frame that verdicts are made of."""

    fwhm_px: float
    elongation: float
    trail_agreement: float
    """0…1: how far the position angles of the stars agree (length of the mean doubled-angle vector)."""
    sky_e_px: float
    sky_sigma_e_px: float
    n_detected: int
    n_saturated: int
    exposure_s: float
    airmass: float | None
    scintillation: float
    """Expected fractional flux rms (Osborn et al. 2015); 0 when the telescope is not configured."""
    sun_altitude_deg: float | None
    flat_used: bool
    n_trails: int = 0
    """Satellites and aeroplanes."""
    sky_gradient: float | None = None
    """Change of the sky from one side of the frame to the other, as a fraction of its level."""
    saturated_px: tuple[tuple[float, float], ...] = ()
    """Positions of the brightest saturated detections: where the next frame may hold a residual image."""


@dataclass(frozen=True, slots=True)
class HostLight:
    """How the light of a target's host was taken off one frame."""

    method: HostMethod
    common_err_e: float = 0.0
    """Error of the target's flux that all frames of a band share, electrons."""
    notes: tuple[str, ...] = ()
    """Sentences on what was noticed."""
    taken_off: bool = True
    """False when it could not be done, as the notes say: the frame's own measurement stands."""


@dataclass(frozen=True, slots=True)
class Measured:
    """All that one frame gives, for ever: pixels end here.

    ``outcome`` is "measured" (``stars`` holds the measurements), "no match" (readable, but the field could not
    be identified) or "unreadable" (``reason`` says why in one sentence).
    """

    frame: str
    """SHA-256 of the file."""
    recipe: str
    outcome: Literal["measured", "no match", "unreadable"]
    reason: str
    info: FrameInfo | None = None
    bjd_tdb: float | None = None
    """Barycentric for the field centre; points get their own target's time."""
    quality: Quality | None = None
    solution: FieldSolution | None = None
    stars: NDArray[Any] = field(default_factory=lambda: np.zeros(0, STAR_DTYPE))
    growth_mag: Floats = field(default_factory=lambda: np.full(len(LADDER_FWHM), np.nan))
    """Aperture correction to the largest FWHM radius, added to a magnitude (negative)."""
    growth_err_mag: Floats = field(default_factory=lambda: np.full(len(LADDER_FWHM), np.nan))
    stamps: bytes = b""
    """Compressed stamp pack (measure.stamps)."""
    seconds: float = 0.0
    host_light: Mapping[str, HostLight] = field(default_factory=dict)
    """Target → how its row of ``stars`` was freed of its host's light; absent: as measured on the frame."""


# ---- field and targets -----------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Sequence:
    """A comparison sequence: catalogue magnitudes of the stars of one field. Arrays of shape (n,)."""

    name: str
    ids: tuple[str, ...]
    ra_deg: Floats
    dec_deg: Floats
    mag: Mapping[str, Floats]
    """Band letter → magnitudes, NaN where the catalogue has none."""
    mag_err: Mapping[str, Floats]

    def __len__(self) -> int:
        return len(self.ids)


@dataclass(frozen=True, slots=True)
class Target:
    """What is followed. ``ebv_mw`` None means the Milky Way's reddening is unknown, not that it is zero."""

    name: str
    kind: TargetKind
    ra_deg: float
    dec_deg: float
    z: float | None = None
    """Heliocentric redshift."""
    ebv_mw: float | None = None
    ebv_scale: ReddeningScale = "SF11"
    """SF11: recalibrated (×0.86) Schlafly & Finkbeiner scale; SFD: the unscaled 1998 map."""
    spectroscopic_type: str | None = None
    host_ra_deg: float | None = None
    host_dec_deg: float | None = None
    reference_folder: str | None = None
    metallicity_dex: float | None = None
    """[O/H] or [Fe/H] of a Cepheid, [Fe/H] of an RR Lyrae star, relative to the Sun."""
    metallicity_err: float | None = None
    relation: str | None = None
    """Name of the period–luminosity calibration; None: the default one of the kind."""

    @property
    def host_arcsec(self) -> float | None:
        """Distance from the centre of its host galaxy, as far as the observer said where that is."""
        if self.host_ra_deg is None or self.host_dec_deg is None:
            return None
        east = (self.host_ra_deg - self.ra_deg + 180.0) % 360.0 - 180.0
        north = self.host_dec_deg - self.dec_deg
        return round(3600.0 * float(np.hypot(east * np.cos(np.radians(self.dec_deg)), north)), 2)


@dataclass(frozen=True, slots=True)
class Choices:
    """What people decided; solve() applies it to stored measurements."""

    aperture_fwhm: Mapping[str, float] = field(default_factory=dict)
    """Band → radius in FWHM, one of LADDER_FWHM, or 0 for the PSF; absent: chosen by signal-to-noise."""
    stars_set_aside: frozenset[str] = frozenset()
    """Sequence ids."""
    frame_states: Mapping[str, FrameState] = field(default_factory=dict)
    """Frame id → state forced by a person."""
    excluded_points: frozenset[tuple[str, str, str]] = frozenset()
    """(target, night, band)."""
    host_methods: Mapping[str, HostMethod] = field(default_factory=dict)
    """Target → method; absent: the best that its reference and its host's position allow."""
    second_order_extinction: Mapping[str, float] = field(default_factory=dict)
    """Band → k″ in mag per airmass per mag of colour, from the settings."""


# ---- solved values: a cache, never a fact ----------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class FrameZeroPoint:
    """The zero point of one frame in the joint solution of its band."""

    frame: str
    band: str
    zp_mag: float
    """Added to -2.5 log10(e-/s)."""
    zp_err_mag: float
    n_stars: int
    chi2_dof: float
    rms_mag: float
    slope_diagnostic: float
    """Residual colour slope of this frame alone; a diagnostic, never applied. NaN with too few stars."""
    aperture_fwhm: float
    """Radius; 0: under the PSF."""


@dataclass(frozen=True, slots=True)
class ColourTerm:
    """Colour term of one camera and band, fixed for all its frames: m = m_inst + zp + term · colour."""

    camera: str
    band: str
    term: float
    term_err: float
    colour_mean: float
    """Weighted mean colour of the comparison stars: where the term's error does not matter."""
    n_stars: int
    fitted: bool
    """False when the colour range was too small and the settings' value (or 0) is used with a wide error."""


@dataclass(frozen=True, slots=True)
class StarResult:
    """One comparison star in one band after the joint solution."""

    star: str
    band: str
    word: StarWord
    reason: str
    catalogue_mag: float
    residual_mag: float
    """Mean measured - catalogue over all kept frames."""
    rms_mag: float
    n_frames: int
    colour: float


@dataclass(frozen=True, slots=True)
class FrameVerdict:
    """kept, doubtful or dropped, with the reasons in plain sentences (empty when kept)."""

    frame: str
    state: FrameState
    reasons: tuple[str, ...]
    by_person: bool = False


@dataclass(frozen=True, slots=True)
class Point:
    """One magnitude of one star: of a frame (``file`` set) or of a night (``file`` None)."""

    star: str
    file: str | None
    night: str
    band: str
    mjd: float
    bjd_tdb: float | None
    mag: float | None
    err: float | None
    err_night: float | None
    err_band: float | None
    flux: float
    flux_err: float
    state: PointState
    flags: tuple[str, ...] = ()
    host_method: HostMethod = "annulus"
    zp_group: str = ""
    """camera/band/night."""
    provisional: bool = False
    n_frames: int = 1
    natural_mag: float | None = None
    """Without colour term, in the camera's own system."""
    source: str = ""
    """Another observatory that measured it; empty: our own frames."""
    passbands_known: bool = False
    """Corrected for the passbands with a supernova's spectrum, and not by colour terms of stars alone."""


@dataclass(frozen=True, slots=True)
class Solution:
    """All that follows from the stored measurements and the choices."""

    verdicts: Mapping[str, FrameVerdict]
    zero_points: Mapping[str, FrameZeroPoint]
    colour_terms: tuple[ColourTerm, ...]
    stars: tuple[StarResult, ...]
    frame_points: tuple[Point, ...]
    """Per frame, of targets."""
    night_points: tuple[Point, ...]
    """Per target, night and band."""
    star_points: tuple[Point, ...] = ()
    """Per frame, of comparison stars; only when asked for."""
    notes: tuple[str, ...] = ()


# ---- estimates -------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class BudgetLine:
    """One component of the error of μ; the squares add up to mu_err²."""

    component: str
    mag: float
    note: str = ""


@dataclass(frozen=True, slots=True)
class Caution:
    """A named warning with its evidence in one sentence."""

    name: str
    evidence: str
    doubts_type: bool = False
    """It speaks against the kind of object that was assumed, and not only of poor data."""


@dataclass(frozen=True, slots=True)
class Posterior:
    """The distribution of the fitted parameters, all errors included; μ on the scale of the estimate."""

    parameters: tuple[str, ...]
    probabilities: tuple[float, ...]
    quantiles: tuple[tuple[float, ...], ...]
    """A row of quantiles for each parameter."""
    correlation: tuple[tuple[float, ...], ...]


@dataclass(frozen=True, slots=True)
class SourceOffset:
    """Zero-point offset of another observatory's points in one band: what its magnitudes are too faint by."""

    source: str
    band: str
    mag: float
    err: float
    prior_mag: float
    """Width of the prior that the offset was fitted with."""
    n: int


@dataclass(frozen=True, slots=True)
class HubbleModulus:
    """What the redshift alone says of the modulus; shown beside a distance, never mixed in."""

    mu: float
    mu_err: float
    """Of peculiar velocities."""
    z: float
    frame: str
    """"CMB", or "heliocentric" where the position is unknown."""


@dataclass(frozen=True, slots=True)
class FitCurve:
    """The fitted model in one band, for drawing: arrays of one shape."""

    band: str
    mjd: Floats
    mag: Floats
    sigma_mag: Floats


@dataclass(frozen=True, slots=True)
class FitPoint:
    """One point as the fit saw it."""

    night: str
    band: str
    mjd: float
    phase_d: float
    residual_mag: float
    sigma_mag: float
    rejected: bool
    source: str = ""
    """Another observatory; empty: own."""


@dataclass(frozen=True, slots=True)
class PeriodAlias:
    """One period that the series allows."""

    period_d: float
    probability: float
    """Of all periods searched; they sum to 1 with the ones not listed."""
    note: str = ""
    """How it comes from the most probable one, e.g. "1/d alias"; empty: the most probable one itself."""


@dataclass(frozen=True, slots=True)
class BandMean:
    """What a band's folded light curve says."""

    band: str
    mag: float
    """Intensity mean, as observed."""
    err: float
    """Without the band's zero point."""
    err_band: float
    """Shared by all nights."""
    amplitude_mag: float
    """Peak to peak."""
    n: int
    order: int
    """Harmonics of the Fourier fit."""
    largest_gap: float
    """Of phase."""
    covered: bool
    """False: too few points or too large a gap, so that the other bands and the common shape had to help."""
    r21: float | None = None
    phi21: float | None = None
    """φ2 − 2 φ1 of a cosine series, 0 to 2π."""


@dataclass(frozen=True, slots=True)
class ApparentModulus:
    """Distance modulus from one band, or from the reddening-free index, by the named relation."""

    band: str
    """A band letter, or "W" for the Wesenheit index of V and I."""
    mag: float
    err: float
    relation: str
    note: str = ""


@dataclass(frozen=True, slots=True)
class Pulsation:
    """What a Cepheid's or RR Lyrae star's light curve says beside the distance."""

    period_d: float
    period_err_d: float
    mode: str
    """``fundamental``, "first overtone", "RRab", "RRc"; with "assumed" where the light curve cannot tell."""
    epoch_bjd: float
    """Time of maximum light, near the middle of the series; phase 0."""
    coverage: float
    """Fraction of the period that has a point within 0.05, in the best covered band."""
    aliases: tuple[PeriodAlias, ...] = ()
    means: tuple[BandMean, ...] = ()
    moduli: tuple[ApparentModulus, ...] = ()
    relation: str = ""
    """Name of the calibration μ stands on."""
    provenance: str = ""
    """Its publication, and how far its numbers were checked."""


@dataclass(frozen=True, slots=True)
class Estimate:
    """What the light curve says now. ``mu`` is None when the data cannot tell yet; ``verdict`` says why."""

    target: str
    kind: TargetKind
    mu: float | None
    mu_err: float | None
    mu_err_fit: float | None
    """Without the grey intrinsic scatter."""
    t_max: float | None
    t_max_err: float | None
    dm15: float | None
    dm15_err: float | None
    e_host: float | None
    e_host_err: float | None
    chi2: float | None
    n: int
    verdict: str
    """One sentence: "μ stands", or why the data cannot tell yet."""
    scale: str
    """The absolute scale μ stands on, e.g. "H0 = 73.04 km/s/Mpc (Cepheid anchor of the model)"."""
    warnings: tuple[Caution, ...] = ()
    budget: tuple[BudgetLine, ...] = ()
    curves: tuple[FitCurve, ...] = ()
    points: tuple[FitPoint, ...] = ()
    peak_mag: Mapping[str, float] = field(default_factory=dict)
    """Band → fitted apparent magnitude at B maximum, as observed (reddened)."""
    pulsation: Pulsation | None = None
    """Of Cepheids and RR Lyrae stars."""
    posterior: Posterior | None = None
    priors: tuple[str, ...] = ()
    """A sentence for each prior: what it is, or that it is switched off."""
    offsets: tuple[SourceOffset, ...] = ()
    hubble: HubbleModulus | None = None
    distance_mpc: tuple[float, float, float] | None = None
    """Luminosity distance with its upper and its lower error, the 1 σ interval of μ."""


@dataclass(frozen=True, slots=True)
class LightCurve:
    """Input of a fit: points of one object, arrays of shape (n,), standard system, not dereddened.

    ``mag`` is NaN for non-detections, which carry ``flux`` and ``flux_err`` on zero point 25.
    """

    mjd: Floats
    band: NDArray[np.str_]
    mag: Floats
    err: Floats
    """Independent error."""
    err_night: Floats
    """Shared by the points of one band and night."""
    err_band: Floats
    """Shared by all points of a band; NaN: not stated, the model's default is used."""
    flux: Floats
    flux_err: Floats
    night: NDArray[np.str_]
    bjd_tdb: Floats | None = None
    """Barycentric times, NaN where unknown; phases of short periods need them: the Earth's orbit moves UTC by 8 min."""
    source: NDArray[np.str_] | None = None
    """Other observatories by name, empty for own points; each has zero points of its own. None: all are own."""
    by_colour_terms: NDArray[np.bool_] | None = None
    """Brought to the standard system by colour terms of stars alone, passbands unknown: a supernova's spectrum then
    leaves an error in every band. None: no point was."""

    def __len__(self) -> int:
        return len(self.mjd)
