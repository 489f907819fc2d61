"""What a screen shows as text, text goldens, and waiting for the app instead of for the clock."""

import os
from difflib import unified_diff
from pathlib import Path

from textual.pilot import Pilot

from tui.app import FadelineApp

GOLDENS = Path(__file__).parent / "goldens"
SIZES = ((80, 24), (160, 48))


def screen_text(app: FadelineApp) -> str:
    strips = app.screen._compositor.render_strips()
    return "\n".join("".join(segment.text for segment in strip).rstrip() for strip in strips) + "\n"


def check_golden(name: str, text: str) -> None:
    """Compare with goldens/NAME.txt; UPDATE_GOLDENS=1 writes it anew: read the difference."""
    path = GOLDENS / f"{name}.txt"
    if os.environ.get("UPDATE_GOLDENS"):
        path.parent.mkdir(exist_ok=True)
        path.write_text(text, encoding="utf-8")
    assert path.exists(), f"{path} is missing: run once with UPDATE_GOLDENS=1 and read it"
    agreed = path.read_text(encoding="utf-8")
    difference = unified_diff(agreed.splitlines(), text.splitlines(), "agreed", "now", lineterm="")
    assert text == agreed, "\n".join(difference)


async def settle(pilot: Pilot[None]) -> None:
    """Until decisions are written, the newest snapshot is drawn and pictures are there."""
    app = pilot.app
    assert isinstance(app, FadelineApp)
    for _ in range(400):
        await pilot.pause()
        busy = [w for w in app.workers if w.group != "follow" and not w.is_finished]
        if busy:
            await app.workers.wait_for_complete(busy)
        elif app.snapshot is not None and app.snapshot.stamp == app.desk.now.stamp and not app._nudge.is_set():
            await pilot.pause()
            return
    raise AssertionError("the app never settled")
