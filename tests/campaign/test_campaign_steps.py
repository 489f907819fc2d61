"""The line of steps says what is done, what waits, and one thing that wants doing."""

from dataclasses import replace

from reduce.campaign.steps import steps_of
from reduce.records import Target
from reduce.views import FrameRow

TARGET = Target("Lantern 3", "type_ia", 150.0, 20.0)
FRAME = FrameRow(
    id="f", file="a.fits", path="/a.fits", kind="light", band="V", mjd=60000.0, night="2023-02-24", exposure_s=60.0,
    outcome="measured", state="kept", reason="", provisional=False, by_person=False, targets=("Lantern 3",),
)  # fmt: skip


def told(rows, unreadable=0, missing=()):
    steps, sentence, screen = steps_of(TARGET, rows, unreadable, missing, (), None)
    return {step.name: step.state for step in steps}, sentence, screen


def test_nothing_has_landed():
    states, sentence, _ = told([])
    assert set(states.values()) == {"waiting"}
    assert sentence == "Waiting for frames."


def test_a_doubtful_frame_wants_you_and_its_reason_is_said():
    states, sentence, screen = told([FRAME, replace(FRAME, id="g", state="doubtful", reason="stars are trailed")])
    assert states["Photometry"] == "wants you"
    assert "1 doubtful frame" in sentence
    assert "stars are trailed" in sentence
    assert screen == "Frames"


def test_a_decided_frame_wants_nothing_more():
    states, _, _ = told([replace(FRAME, state="doubtful", by_person=True)])
    assert states["Photometry"] != "wants you"


def test_missing_flats_are_asked_for_but_measuring_again_is_not():
    assert "no flat in V: take it at dawn" in told([FRAME], missing=["no flat in V"])[1]
    sentence = told([replace(FRAME, provisional=True)])[1]
    assert sentence == "1 frame to measure again: that happens by itself."


def test_no_frame_recognised_says_why():
    lost = replace(FRAME, outcome="no match", state="dropped", reason="the field was not recognised", targets=())
    states, sentence, _ = told([lost])
    assert states["Field"] == "wants you"
    assert "the field was not recognised" in sentence
