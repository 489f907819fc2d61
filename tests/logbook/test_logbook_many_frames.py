"""One decision about many frames: the newest word on each frame counts, and one undo takes all of it back."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.logbook.database import LogbookError
from reduce.logbook.decisions import STATE, Decision, choices_from, frame_subject, frames_subject

FRAMES = ("a", "b", "c", "d")


def test_one_undo_brings_back_what_each_frame_had_before(logbook):
    logbook.decide(frame_subject("b"), STATE, "kept", "", "ann")
    logbook.decide(frames_subject(["a", "b", "c"]), STATE, "dropped", "cloud", "ann")
    assert logbook.choices().frame_states == dict.fromkeys("abc", "dropped")
    logbook.decide(frame_subject("c"), STATE, "kept", "", "bob")
    assert logbook.choices().frame_states == {"a": "dropped", "b": "dropped", "c": "kept"}
    logbook.undo("bob")
    assert logbook.undo("bob") == "taken back: 3 frames dropped (a to c)"
    assert logbook.choices().frame_states == {"b": "kept"}
    assert [row.kind for row in logbook.log()] == ["decision"] * 3 + ["undo"] * 2


def test_as_judged_by_the_program_clears_what_was_decided_before(logbook):
    logbook.decide(frame_subject("a"), STATE, "dropped", "", "ann")
    logbook.decide(frames_subject(["a", "b"]), STATE, "", "", "ann")
    assert logbook.choices().frame_states == {}
    assert logbook.can_undo() == "2 frames as judged by the program (a to b)"


@pytest.mark.parametrize(("subject", "value"), [(frames_subject([]), "kept"), (frames_subject(["a"]), "lost")])
def test_a_decision_about_no_frame_or_with_no_meaning_is_refused(logbook, subject, value):
    with pytest.raises(LogbookError):
        logbook.decide(subject, STATE, value, "", "ann")
    assert logbook.log() == []


@given(st.lists(st.tuples(st.sets(st.sampled_from(FRAMES), min_size=1), st.sampled_from(["kept", "dropped", ""]))))
def test_the_last_word_on_each_frame_counts(said):
    decided = [
        Decision(str(k), frames_subject(sorted(frames)) if len(frames) > 1 else frame_subject(*frames), STATE, value,
                 "", "ann", "now")
        for k, (frames, value) in enumerate(said)
    ]  # fmt: skip
    want = {f: next((v for frames, v in reversed(said) if f in frames), "") for f in FRAMES}
    assert choices_from(decided).frame_states == {f: v for f, v in want.items() if v}


def test_notes_and_estimates_leave_what_light_curves_rest_on(logbook):
    before, all_before = logbook.measured_stamp(), logbook.stamp()
    logbook.note("", "Wind from the north.", "ann")
    assert logbook.measured_stamp() == before
    assert logbook.stamp() > all_before
    logbook.decide(frame_subject("a"), STATE, "kept", "", "ann")
    assert logbook.measured_stamp() > before
