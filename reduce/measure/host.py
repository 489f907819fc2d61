"""A target without the light of its host: a reference is matched to the frame's blur and taken off.

After Alard & Lupton 1998 (ApJ 503, 325), on stamps alone: the sharper of frame and reference is convolved to the blur
of the other, with a kernel found from the stars and from the host itself outside the target. What is left at the
target's position is weighed with the frame's point-spread function.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from reduce.measure.blur import BlurMatch, Matched, Side
from reduce.measure.forced import difference, forced_flux, ladder
from reduce.measure.psf import Psf, stamp_psf
from reduce.measure.reference import Reference
from reduce.measure.scene import Scene, pair, scene_of
from reduce.measure.stamps import StampPack
from reduce.records import Image

NO_STAMP = "The stamp of the target is missing; measure the frame again."
NO_PSF = "The frame has too few stars for a point-spread function."
NO_PIXELS = "Too few usable pixels are left at the target."

SHALLOW = 0.7
"""Noise of the matched reference over that of the frame, from which it is called shallow."""


@dataclass(frozen=True, slots=True)
class HostFree:
    """A target's row of one frame, measured without its host."""

    row: Any
    """STAR_DTYPE, of shape ()."""
    method: Literal["reference", "mirrored", "bent annulus"]
    common_err_e: float
    """Error that all nights share (noise of the reference, or of the method): not in the row's errors."""
    kernel_sum: float
    """Light on the frame over light on the reference."""
    scale_err: float
    """Relative error of that."""
    chi2: float
    """Reduced, of the kernel's fit; NaN where none was made."""
    n_stars: int
    convolved: Side | Literal[""]
    host_e: float
    """Host light that was under the weighted sum, in the same units as the flux."""
    colour_pairs: tuple[tuple[float, float, float, float], ...] = ()
    """Stars used: right ascension, declination, flux ratio to the kernel's scale, its error."""
    notes: tuple[str, ...] = ()


def subtract(pack: StampPack, row: NDArray[Any], reference: Reference, psf: Psf | None = None) -> HostFree | str:
    """The target's row, measured on the difference of frame and reference.

    Parameters
    ----------
    pack
        Stamps of the frame.
    row
        The target's STAR_DTYPE row of the frame.
    reference
        From `stack_reference`, of the same band.
    psf
        Of the frame; None: taken from the pack's stars.

    Returns
    -------
    HostFree or str
        A sentence says why it cannot be done.
    """
    matched = _match(pack, row, reference, psf)
    return matched if isinstance(matched, str) else _measure(matched, row, reference)


@dataclass(frozen=True, slots=True)
class Residue:
    """What is left of a target's surroundings, for looking at."""

    light_e: Image
    """(ny, nx) frame minus reference at one blur; NaN where a pixel is not usable."""
    x0: int
    """Column of the frame where it begins."""
    y0: int


def residue(pack: StampPack, row: NDArray[Any], reference: Reference) -> Residue | str:
    """The difference that `subtract` measures, as an image; a sentence where there is none."""
    matched = _match(pack, row, reference, None)
    if isinstance(matched, str):
        return matched
    left = difference(matched.scene, row, matched.psf, matched.blur, matched.found)
    x0, y0 = matched.blur.target_window[:2]
    return Residue(np.where(left.good, left.light, np.nan).astype(np.float32), x0, y0)


@dataclass(frozen=True, slots=True)
class _Match:
    scene: Scene
    psf: Psf
    blur: BlurMatch
    found: Matched


def _match(pack: StampPack, row: NDArray[Any], reference: Reference, psf: Psf | None) -> _Match | str:
    scene = scene_of(pack, str(row["target"]))
    psf = psf if psf is not None else stamp_psf(pack)
    if scene is None:
        return NO_STAMP
    if psf is None:
        return NO_PSF
    pairing = pair(scene, reference.scene)
    if not pairing.pairs:
        return "The frame shares no usable star with the reference."
    match = BlurMatch(scene, reference.scene, pairing)
    found = match.solve()
    if found is None:
        return "The reference does not cover the surroundings of the target."
    return _Match(scene, psf, match, found)


def _measure(matched: _Match, row: NDArray[Any], reference: Reference) -> HostFree | str:
    match, found = matched.blur, matched.found
    left = difference(matched.scene, row, matched.psf, match, found)
    flux = forced_flux(left)
    if flux is None:
        return NO_PIXELS
    notes = list(reference.notes) + list(found.notes)
    common = flux.other_err_e
    if common > SHALLOW * flux.err_e:
        notes.append(
            "The reference is not much deeper than this frame: its own noise is "
            f"{common / flux.err_e:.1f} times the frame's, and is the same in every night."
        )
    new = row.copy()
    new["psf_flux_e"], new["psf_flux_err_e"] = flux.flux_e, flux.err_e
    new["psf_chi2"], new["psf_rejected"], new["psf_flags"] = flux.chi2, min(flux.n_rejected, 65535), flux.flags
    ladder(new, left, flux, match.scene.scale_arcsec)
    kernel = float((found.coefficient * match.basis.images().sum(axis=(1, 2))).sum())
    return HostFree(
        row=new, method="reference", common_err_e=common,
        kernel_sum=kernel if match.side == "reference" else 1.0 / kernel, scale_err=found.scale_err, chi2=found.chi2,
        n_stars=len(found.stars), convolved=match.side, host_e=flux.host_e, colour_pairs=found.stars,
        notes=tuple(notes),
    )  # fmt: skip
