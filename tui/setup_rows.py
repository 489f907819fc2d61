"""Everything that Setup shows, row by row: what it is called, how it stands, and how it is asked for."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from tui.widgets.path_input import Wanted

if TYPE_CHECKING:
    from reduce.records import Target
    from reduce.views import FilterRow, SetupView, Snapshot

NEW_TARGET = "new target"
BAND_WORDS = {
    "B": "B  Landolt's blue",
    "V": "V  Landolt's visual",
    "R": "R  Landolt's (Cousins) red",
    "I": "I  Landolt's (Cousins) infrared",
    "g": "g  SDSS green",
    "r": "r  SDSS red",
    "i": "i  SDSS near infrared",
}
KIND_WORDS = {"type_ia": "type Ia supernova", "cepheid": "Cepheid", "rr_lyrae": "RR Lyrae star", "other": "other"}
UNSET = "–"


@dataclass(frozen=True, slots=True)
class SetupRow:
    """One thing that can be set."""

    subject: str
    """See `tui.desk.Desk.change_setup`."""
    section: str
    label: str
    value: str
    """As it stands, as it would be typed; "" where nothing is set."""
    help: str
    wanted: Wanted = ""
    choices: tuple[tuple[str, str], ...] = ()
    """(value, words); empty: it is typed."""
    remark: str = ""
    """Shown beside the value."""


SETTINGS = (
    ("Site", "site.position", "latitude, longitude, height", "Degrees north, degrees east, metres: 43.5, -5.2, 620."),
    ("Site", "site.name", "name", "Shown on exports."),
    ("Telescope", "telescope.name", "name", "Yours to choose."),
    ("Telescope", "telescope.aperture_m", "aperture, m", "Enters the scintillation noise."),
    ("Telescope", "telescope.scintillation_coefficient", "scintillation", "1.5 is typical of good sites."),
    ("Camera", "camera.name", "name", "Used where a header names no camera."),
    ("Camera", "camera.scale_arcsec", "arcsec per pixel", "Unbinned; where headers are silent. Finds the field."),
    ("Camera", "camera.gain_e_per_adu", "gain, e⁻/ADU", "Electrons per ADU, not the camera's gain setting."),
    ("Camera", "camera.read_noise_e", "read noise, e⁻", "Where headers are silent."),
    ("Camera", "camera.dark_e_per_s", "dark, e⁻/s", "Dark current, for frames without darks."),
    ("Camera", "camera.saturation_adu", "saturation, ADU", "Raw level at which pixels are full."),
    ("Camera", "camera.linear_limit_adu", "linear to, ADU", "Raw level above which the response bends by 1 %."),
    ("Camera", "camera.overrides_header", "wins over headers", "yes: gain, read noise, saturation here beat headers."),
    ("Camera", "camera.fringe_bands", "fringes in bands", "Of a thinned detector: I, for example."),
    ("Kinds", "frames.light", "lights are called", "Where headers do not say: patterns of names, lights/*"),
    ("Kinds", "frames.bias", "biases are called", "Where headers do not say: *_bias_*, bias/*"),
    ("Kinds", "frames.dark", "darks are called", "Where headers do not say: *_dark_*, darks/*"),
    ("Kinds", "frames.flat", "flats are called", "Where headers do not say: *_flat_*, flats/*"),
    ("Distance", "distance.h0", "H0, km/s/Mpc", "Scale of type Ia distances; nothing: that of the model."),
    ("Distance", "distance.m_b", "M_B", "Of a calibrated type Ia at Δm15 = 1.1 without host dust; goes before H0."),
    ("Planning", "planning.lowest_altitude_deg", "lowest altitude, °", "Nothing is planned below."),
    ("Planning", "planning.sun_altitude_deg", "Sun below, °", "Targets are planned while the Sun is lower."),
    ("Planning", "planning.moon_separation_deg", "Moon farther than, °", "Nothing is planned nearer to the Moon."),
    ("Planning", "planning.slew_s", "slew, s", "Slewing and settling, once a target and night."),
    ("Planning", "planning.filter_s", "filter change, s", "Once a band."),
    ("Planning", "planning.readout_s", "readout, s", "Once a frame."),
    ("Planning", "planning.longest_exposure_s", "longest exposure, s", "Of one frame."),
    ("Planning", "planning.cadence_d", "cadence, d", "A target is due when its last point is older."),
    ("Planning", "planning.mu_err_goal", "goal for μ, mag", "An error of μ that is good enough."),
)
"""Section, key of observatory.toml, label, help."""
YES_NO = (("yes", "yes"), ("no", "no"))


def setup_rows(snapshot: Snapshot) -> list[SetupRow]:
    """All rows, in the order in which a campaign is set up."""
    setup = snapshot.setup
    rows = [
        SetupRow(
            "frames folder", "Frames", "folder", setup.frames_folder, "Where frames land; tab completes.", "folder"
        ),
        *(_filter_row(row) for row in setup.filters),
    ]
    for view in snapshot.targets:
        rows += _target_rows(view.target)
    rows.append(SetupRow(NEW_TARGET, "Target", "one more target", "", "Enter asks for its name and position."))
    rows.append(
        SetupRow(
            "sequence", "Stars", "comparison stars", "",
            "Enter a CSV file with id,ra,dec,B,B_err,V,… to put other stars in force; tab completes.",
            "csv", remark=" ".join(setup.sequence_notes),
        )
    )  # fmt: skip
    rows += [_setting_row(setup.settings, *row) for row in SETTINGS]
    return rows + _photometry_rows(setup) + _other_rows(setup.settings)


def _filter_row(row: FilterRow) -> SetupRow:
    n = f"{row.n_frames} frames" + (", as you said" if row.named else "" if row.band else ", cannot be measured")
    choices = (*BAND_WORDS.items(), ("", "as its name says, or none"))
    words = "The band that this filter of the headers stands for."
    return SetupRow(
        f"setting:filters.{row.name}", "Filters", row.name, row.band or "", words, choices=choices, remark=n
    )


def _target_rows(target: Target) -> list[SetupRow]:
    name = target.name
    position = f"{target.ra_deg:.12g}, {target.dec_deg:.12g}"
    host = "" if target.host_ra_deg is None else f"{target.host_ra_deg:.12g}, {target.host_dec_deg:.12g}"
    reddening = "" if target.ebv_mw is None else f"{target.ebv_mw:g}, {target.ebv_scale}"
    z = "" if target.z is None else f"{target.z:g}"
    facts = (
        ("position", "RA, Dec", position, "Degrees, or hh:mm:ss, dd:mm:ss (ICRS). Frames are measured again.", ""),
        ("z", "redshift", z, "Heliocentric.", ""),
        (
            "ebv_mw",
            "Milky Way E(B−V)",
            reddening,
            "With its scale: 0.021, SF11 (×0.86, the default) or 0.021, SFD.",
            "",
        ),
        ("spectrum", "spectroscopic type", target.spectroscopic_type or "", "Ia, for example, if it was taken.", ""),
        ("host", "host's centre", host, "RA, Dec of the galaxy; its light is then taken off.", ""),
        ("reference", "reference folder", target.reference_folder or "", "Frames without the target.", "folder"),
    )
    return [
        SetupRow(f"target:{name}:{fact}", name, label, value, words, "folder" if wanted else "")
        for fact, label, value, words, wanted in facts
    ]


def _setting_row(settings: Mapping[str, str], section: str, key: str, label: str, words: str) -> SetupRow:
    choices = YES_NO if key == "camera.overrides_header" else ()
    return SetupRow(f"setting:{key}", section, label, settings.get(key, ""), words, choices=choices)


def _other_rows(settings: Mapping[str, str]) -> list[SetupRow]:
    """Settings that have no words of their own here are shown under their own names."""
    known = {key for _, key, _, _ in SETTINGS}
    return [
        SetupRow(f"setting:{key}", key.partition(".")[0].capitalize(), key.partition(".")[2].replace("_", " "), value,
                 f"{key} in observatory.toml.")
        for key, value in settings.items()
        if key not in known and key.partition(".")[0] not in ("filters", "photometry", "site")
    ]  # fmt: skip


def _photometry_rows(setup: SetupView) -> list[SetupRow]:
    """Of each band that filters stand for."""
    bands = [band for band in BAND_WORDS if band in {row.band for row in setup.filters}]
    kinds = (
        ("aperture_fwhm", "aperture", "Radius in FWHM, 0 for the PSF; nothing: chosen by signal-to-noise."),
        ("second_order_extinction", "extinction k″", "mag per airmass per mag of colour; −0.03 in B, common practice."),
        ("colour_terms", "colour term", "Used when the comparison stars cannot give one."),
    )
    return [
        SetupRow(f"setting:photometry.{key}.{band}", "Photometry", f"{label} {band}",
                 setup.settings.get(f"photometry.{key}.{band}", ""), words)
        for key, label, words in kinds
        for band in bands
    ]  # fmt: skip
