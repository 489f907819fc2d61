"""Several files of one exposure: a raw frame and its calibrated copy, or copies with other headers, count once."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from reduce.almanac.sky import separation_deg
from reduce.almanac.times import SECONDS_PER_DAY
from reduce.records import FrameInfo

if TYPE_CHECKING:
    from reduce.campaign.intake import KnownFrame

SAME_TIME_S = 0.5
"""Between mid-exposures: a camera cannot begin another exposure so soon unless its exposures are as short."""
SAME_POINTING_DEG = 0.2
"""Two telescopes may carry cameras of one name; so may the position in a header be refined afterwards."""


def stand_ins(frames: Sequence[KnownFrame], can_be_calibrated: Callable[[FrameInfo], bool]) -> dict[str, KnownFrame]:
    """Id of a frame that is not to be counted → the frame of the same exposure that is.

    A raw frame is preferred when masters stand for it, else a calibrated one; of several alike, the first.

    Parameters
    ----------
    frames
        In the order of first sight.
    can_be_calibrated
        Whether flat and bias or dark stand for a raw frame.
    """
    found: dict[str, KnownFrame] = {}
    for same in _exposures(frames):
        raw = [frame for frame in same if not frame.info.calibrated]
        calibrated = sorted((f for f in same if f.info.calibrated), key=lambda frame: -len(frame.info.calibrated))
        used = raw[0] if raw and (not calibrated or can_be_calibrated(raw[0].info)) else calibrated[0]
        found |= {frame.id: used for frame in same if frame is not used}
    return found


def _exposures(frames: Sequence[KnownFrame]) -> list[list[KnownFrame]]:
    """Groups of two or more files of one exposure, each in the order given."""
    alike: dict[tuple[object, ...], list[KnownFrame]] = defaultdict(list)
    for frame in frames:
        info = frame.info
        if info.kind == "light" and info.mjd_mid is not None and (info.exposure_s or 0.0) > 2 * SAME_TIME_S:
            key = info.camera, info.chip, round(info.exposure_s or 0.0, 2), info.band or info.filter_name
            alike[(*key, frame.is_reference)].append(frame)
    groups: list[list[KnownFrame]] = []
    for members in alike.values():
        order = {frame.id: k for k, frame in enumerate(members)}
        run: list[list[KnownFrame]] = []
        for frame in sorted(members, key=lambda frame: (frame.info.mjd_mid, frame.id)):
            group = next((group for group in reversed(run[-4:]) if _is_same(group[0].info, frame.info)), None)
            if group is None:
                run.append([frame])
            else:
                group.append(frame)
        groups += [sorted(group, key=lambda frame: order[frame.id]) for group in run if len(group) > 1]
    return groups


def _is_same(one: FrameInfo, other: FrameInfo) -> bool:
    """Whether two frames of one camera, filter and exposure time show the same exposure."""
    assert one.mjd_mid is not None
    assert other.mjd_mid is not None
    if abs(one.mjd_mid - other.mjd_mid) * SECONDS_PER_DAY > SAME_TIME_S:
        return False
    if bool(one.calibrated) == bool(other.calibrated) and (one.nx, one.ny) != (other.nx, other.ny):
        return False
    if one.ra_deg is None or one.dec_deg is None or other.ra_deg is None or other.dec_deg is None:
        return True
    return separation_deg(one.ra_deg, one.dec_deg, other.ra_deg, other.dec_deg) < SAME_POINTING_DEG
