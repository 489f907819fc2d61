"""The difference of a frame and its reference about a target, made from the stored stamps."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from reduce.campaign.host_light import host_plans
from reduce.plain_text import PlainError

if TYPE_CHECKING:
    from reduce.campaign.door import Campaign
    from reduce.measure.host import Residue


class DifferenceError(PlainError):
    """There is no difference image, and why."""


def difference_image(campaign: Campaign, frame: str, target: str) -> Residue:
    """What is left of a frame about a target when the reference is taken off.

    Raises
    ------
    DifferenceError
        There is no reference in the band of the frame, or the two cannot be matched.
    """
    from reduce.measure.host import residue
    from reduce.measure.reference import stack_reference
    from reduce.measure.stamps import unpack

    row = next((row for row in campaign.measured() if row.frame == frame), None)
    if row is None or row.info is None:
        raise DifferenceError("This frame was not measured, so there is no difference image.")
    stars = row.stars[(row.stars["role"] == 1) & (row.stars["target"] == target)]
    if not len(stars):
        raise DifferenceError(f"{target} was not measured on this frame, so there is no difference image.")
    band = row.info.band or ""
    choices = replace(campaign.book.choices(), host_methods={target: "reference"})
    plans = host_plans([campaign.target(target)], choices, campaign.reference_rows(), [band])
    references = [ref for plan in plans.get((target, band), ()) for ref in plan.references]
    if not references:
        raise DifferenceError(f"{target} has no measured reference frame in band {band}, so there is no difference.")
    packs = [(unpack(campaign.book.stamps(ref.frame, ref.recipe)), 1.0) for ref in references]
    reference = stack_reference(packs, target)
    stamps = campaign.book.stamps(row.frame, row.recipe)
    if reference is None or not stamps:
        raise DifferenceError("Frame or reference has no stamps of the target; fadeline reduce measures them again.")
    as_measured = np.array(stars[0])
    as_measured["psf_dx_px"] = as_measured["psf_dy_px"] = 0.0
    found = residue(unpack(stamps), as_measured, reference)
    if isinstance(found, str):
        raise DifferenceError(found)
    return found
