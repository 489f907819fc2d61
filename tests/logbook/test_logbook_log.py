"""Decisions, undo, notes, search: what people add to the logbook."""

import json
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from logbook_samples import frame_id, no_mounts

from reduce.logbook.database import LogbookError
from reduce.logbook.decisions import (
    APERTURE,
    EXCLUDED,
    SET_ASIDE,
    STATE,
    Decision,
    band_subject,
    choices_from,
    frame_subject,
    point_subject,
    star_subject,
)  # fmt: skip
from reduce.logbook.entries import night_report
from reduce.logbook.store import Logbook
from reduce.records import Choices
from reduce.views import FrameRow


def test_decisions_add_up_to_choices(logbook):
    logbook.decide(frame_subject("f1"), STATE, "dropped", "trailed", "ann")
    logbook.decide(frame_subject("f2"), STATE, "doubtful", "", "ann")
    logbook.decide(frame_subject("f1"), STATE, "kept", "good after all", "bob")
    logbook.decide(star_subject("s1"), SET_ASIDE, "yes", "variable", "ann")
    logbook.decide(star_subject("s2"), SET_ASIDE, "yes", "", "ann")
    logbook.decide(star_subject("s2"), SET_ASIDE, "", "", "ann")
    logbook.decide(band_subject("B"), APERTURE, "1.5", "", "ann")
    logbook.decide(point_subject('SN "x"|y', "2026-03-01", "V"), EXCLUDED, "yes", "", "ann")
    assert logbook.choices() == Choices(
        aperture_fwhm={"B": 1.5},
        stars_set_aside=frozenset({"s1"}),
        frame_states={"f1": "kept", "f2": "doubtful"},
        excluded_points=frozenset({('SN "x"|y', "2026-03-01", "V")}),
    )


@pytest.mark.parametrize(
    ("subject", "aspect", "value", "match"),
    [
        (frame_subject("f"), STATE, "lost", "not one of kept, doubtful, dropped"),
        (band_subject("V"), APERTURE, "7", "not one of 0, 0.6"),
        (band_subject("u"), APERTURE, "1.5", "not one of the bands"),
        (star_subject("s"), STATE, "kept", "a star has no state"),
        ("f1", STATE, "kept", "subject"),
        ("3", STATE, "kept", "thing has no"),
    ],
)
def test_a_decision_that_means_nothing_is_refused(logbook, subject, aspect, value, match):
    with pytest.raises(LogbookError, match=match):
        logbook.decide(subject, aspect, value, "", "ann")
    assert logbook.log() == []


def test_undo_takes_back_one_after_the_other_by_new_rows(logbook):
    logbook.add_frame(frame_id(0), {})
    logbook.add_location(frame_id(0), Path("/data/a.fits"), 1, 1)
    assert logbook.can_undo() == ""
    assert logbook.undo("ann") == ""
    logbook.decide(frame_subject(frame_id(0)), STATE, "dropped", "clouds", "ann")
    logbook.decide(frame_subject(frame_id(0)), STATE, "kept", "", "ann")
    assert logbook.can_undo() == "frame a.fits kept"
    assert logbook.undo("bob") == "taken back: frame a.fits kept"
    assert logbook.choices().frame_states == {frame_id(0): "dropped"}
    assert logbook.can_undo() == "frame a.fits dropped"
    logbook.undo("bob")
    assert logbook.choices() == Choices()
    assert logbook.undo("bob") == ""
    assert [row.kind for row in logbook.log()] == ["decision", "decision", "undo", "undo"]
    assert logbook.log()[0].body == "frame a.fits dropped: clouds"


def test_a_decision_after_an_undo_counts(logbook):
    for value in ("dropped", "kept"):
        logbook.decide(frame_subject("f"), STATE, value, "", "ann")
        logbook.undo("ann")
    logbook.decide(frame_subject("f"), STATE, "doubtful", "", "ann")
    assert logbook.choices().frame_states == {"f": "doubtful"}


MOVES = st.lists(
    st.one_of(st.just("undo"), st.tuples(st.sampled_from("abc"), st.sampled_from(["kept", "dropped", ""])))
)


@given(MOVES)
def test_undo_is_the_inverse_of_deciding(moves):
    import tempfile

    with tempfile.TemporaryDirectory() as folder, Logbook.create(Path(folder), mounts=no_mounts) as book:
        stack = []
        for move in moves:
            if move == "undo":
                assert bool(book.undo("ann")) == bool(stack)
                stack = stack[:-1]
            else:
                book.decide(frame_subject(move[0]), STATE, move[1], "", "ann")
                stack.append(move)
        assert book.choices().frame_states == {frame: state for frame, state in dict(stack).items() if state}


def test_notes_are_cleaned_found_and_filtered(logbook):
    row = logbook.note("SN demo", "thin cirrus\x1b[2J after\nmidnight \u202eabc", "ann\x07", "2026-03-01")
    assert row.body == "thin cirrus·[2J after midnight ·abc"
    assert row.who == "ann·"
    logbook.note("other", "wind from the north", "bob", "2026-03-02", kind="event")
    logbook.decide(point_subject("SN demo", "2026-03-01", "V"), EXCLUDED, "yes", "cirrus", "ann")
    assert [r.kind for r in logbook.log()] == ["note", "event", "decision"]
    assert logbook.log()[0] == row
    assert len(logbook.log(search="cirr")) == 2
    assert len(logbook.log(search="CIRRUS midnight")) == 1
    assert len(logbook.log(search="bob")) == 1
    assert len(logbook.log(search="  ")) == 3
    assert [r.target for r in logbook.log(target="other")] == ["other"]
    assert len(logbook.log(night="2026-03-01")) == 2
    assert len(logbook.log(kind="event", search="wind")) == 1
    assert [r.kind for r in logbook.log(limit=1)] == ["decision"]
    with pytest.raises(LogbookError, match="empty"):
        logbook.note("SN demo", " \n ", "ann")


@pytest.mark.parametrize(
    "search", ['"', "a OR b", "NEAR(", "*", "-x", "body:", "'; DROP TABLE entry; --", "^", "(", "x\x00y"]
)
def test_a_search_is_words_never_a_query_language(logbook, search):
    logbook.note("t", "b is here", "ann")
    assert logbook.log(search=search) == []


@given(st.text(min_size=1, max_size=40))
def test_whatever_is_noted_can_be_searched_for_and_holds_no_control(text):
    import tempfile
    import unicodedata

    with tempfile.TemporaryDirectory() as folder, Logbook.create(Path(folder), mounts=no_mounts) as book:
        try:
            row = book.note("t", text, "ann")
        except LogbookError:
            assert not text.split()
            return
        assert all(unicodedata.category(c)[0] != "C" for c in row.body)
        assert book.log() == [row]
        book.log(search=text)


def test_a_note_may_correct_another_that_exists(logbook):
    first = logbook.note("t", "seeing 2 arcsec", "ann")
    logbook.note("t", "seeing 3 arcsec", "ann", corrects=first.id)
    with pytest.raises(LogbookError):
        logbook.note("t", "x", "ann", corrects="unknown")
    assert len(logbook.log()) == 2


def test_the_index_can_be_made_anew(logbook):
    logbook.note("t", "cirrus", "ann")
    with logbook._database.transaction() as write:
        write.execute("DELETE FROM log_text")
    assert logbook.log(search="cirrus") == []
    assert logbook.rebuild_search() == 1
    assert len(logbook.log(search="cirrus")) == 1


def test_empty_values_mean_the_program_judges():
    rows = [Decision("1", json.dumps(["frame", "f"]), STATE, "", "", "", "")]
    assert choices_from(rows) == Choices()


def frame_row(band, night, exposure, kind="light"):
    return FrameRow(
        id="x", file="x", path="x", kind=kind, band=band, mjd=None, night=night, exposure_s=exposure,
        outcome="measured", state="kept", reason="", provisional=False, by_person=False,
    )  # fmt: skip


def test_the_report_of_a_night(logbook):
    logbook.note("SN demo", "thin cirrus", "ann", "2026-03-01")
    logbook.note("SN demo", "another night", "ann", "2026-03-02")
    frames = [
        frame_row("V", "2026-03-01", 60.0), frame_row("V", "2026-03-01", None),
        frame_row("B", "2026-03-01", 90.0),
        frame_row(None, "2026-03-01", 1.0), frame_row("V", "2026-03-02", 60.0),
        frame_row(None, "2026-03-01", 0.0, "bias"),
    ]  # fmt: skip
    report = night_report("2026-03-01", frames, {"kept": 2, "doubtful": 0, "dropped": 1}, logbook.log(), "Hill\x1b[1m")
    assert report.splitlines() == [
        "Night of 2026-03-01, Hill·[1m", "=" * 29, "",
        "  B           1 frames       90 s", "  V           2 frames       60 s",
        "  no band     1 frames        1 s", "",
        "Verdicts: 2 kept, 1 dropped", "", "Log", f"  {logbook.log()[0].at}  ann  SN demo  thin cirrus",
    ]  # fmt: skip
    assert "no frames" in night_report("2020-01-01", frames, {}, [])
