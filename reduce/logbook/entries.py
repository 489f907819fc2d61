"""The report of one night in plain text."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence

from reduce.plain_text import clean_text
from reduce.records import BANDS
from reduce.views import FrameRow, LogRow


def night_report(
    night: str,
    frames: Sequence[FrameRow],
    verdicts: Mapping[str, int],
    rows: Sequence[LogRow],
    observatory: str = "",
) -> str:
    """Frames per band, verdicts and the log of one night, ready to paste into a mail.

    Parameters
    ----------
    night
        As the rows name it.
    frames, rows
        Frames and log lines; those of other nights are left out.
    verdicts
        Words kept, doubtful, dropped → number of frames.
    """
    place = f", {clean_text(observatory)}" if observatory else ""
    title = f"Night of {clean_text(night)}{place}"
    lines = [title, "=" * len(title), ""]
    mine = [row for row in frames if row.night == night and row.kind == "light"]
    counts = Counter(row.band or "no band" for row in mine)
    order = [band for band in (*BANDS, *sorted(set(counts) - set(BANDS))) if counts[band]]
    exposure = {band: sum(row.exposure_s or 0.0 for row in mine if (row.band or "no band") == band) for band in order}
    lines += [f"  {clean_text(band):8}{counts[band]:5d} frames{exposure[band]:9.0f} s" for band in order]
    lines += [] if order else ["  no frames"]
    told = [f"{verdicts[word]} {clean_text(word)}" for word in verdicts if verdicts[word]]
    lines += ["", "Verdicts: " + (", ".join(told) if told else "none yet")]
    written = [(row.at, row.who, row.target, row.body) for row in rows if row.night == night]
    if written:
        lines += ["", "Log"]
        lines += ["  " + "  ".join(clean_text(cell, 2000) for cell in cells) for cells in written]
    return "\n".join(line.rstrip() for line in lines) + "\n"
