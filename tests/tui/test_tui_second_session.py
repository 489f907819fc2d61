"""Two sessions on one logbook: what one writes the other sees at its next look, and the looks are close together."""

from pathlib import Path

from reduce.logbook.store import Logbook
from tui.app import POLL_S, SLOW_POLL_S
from tui.live import LiveDesk

LIMIT_S = 2.0


def test_another_session_sees_at_once_that_something_was_written(tmp_path: Path) -> None:
    Logbook.create(tmp_path).close()
    one, two = LiveDesk(tmp_path), LiveDesk(tmp_path)
    try:
        for write in (
            lambda: one.note("", "Dew on the corrector."),
            lambda: one.decide("frames:" + "a" * 64 + "," + "b" * 64, "state", "drop"),
            one.undo,
        ):
            seen = two.stamp()
            write()
            assert two.stamp() > seen
            assert two.stamp() == one.stamp()
        assert two.search_log("corrector")[0].body == "Dew on the corrector."
    finally:
        one.close()
        two.close()


def test_looks_leave_time_for_the_picture_within_two_seconds() -> None:
    assert POLL_S <= 0.25 * LIMIT_S
    assert SLOW_POLL_S < LIMIT_S
