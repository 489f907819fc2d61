"""Sequences that were in force once, and the solution by which frames of few stars are recognised."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from logbook_samples import frame_id, info, measured, sequence


def test_an_older_sequence_is_still_there(logbook):
    logbook.add_sequence(sequence())
    first = logbook.sequence_id()
    logbook.add_sequence(sequence(0.1))
    assert logbook.sequence_id() != first
    old, new = logbook.sequence_by_id(first), logbook.current_sequence()
    assert np.allclose(new.mag["V"] - old.mag["V"], [0.1, 0.0])
    assert logbook.sequence_by_id("no such") is None


def test_a_frame_recognised_with_help_does_not_change_what_the_help_is(logbook):
    """It was taken earlier, and is measured later: the others would otherwise be measured again after it."""
    row = measured(5, recipe="alone")
    assert row.solution is not None
    helped = measured(1, recipe="helped")
    helped = replace(helped, solution=replace(row.solution, cd_deg=((-3.1e-4, 0.0), (0.0, 3.1e-4))))
    for n, one in ((5, row), (1, helped)):
        logbook.add_frame(frame_id(n), {})
        logbook.add_recipe(one.recipe, {"version": 1, **({"camera": [1.08, False]} if one is helped else {})})
        logbook.add_reduction(one)
    assert logbook.first_solution(info()) == row.solution
