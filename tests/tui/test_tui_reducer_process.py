"""A reducer beside the app: one at a time, started again, gone with the app."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from reduce.logbook.lock import is_reducing, reducer_lock
from tui.reducer_process import ReducerProcess


def wait_for(happened: Callable[[], object], timeout_s: float = 40.0) -> None:
    end = time.monotonic() + timeout_s
    while not happened():
        assert time.monotonic() < end, "it did not happen"
        time.sleep(0.02)


@pytest.fixture
def campaign(demo, tmp_path: Path) -> Path:
    return demo.copy(tmp_path / "campaign")


def test_it_reduces_and_stops_when_asked(campaign):
    said: list[str] = []
    reducer = ReducerProcess(campaign, said.append)
    reducer.keep_running()
    wait_for(lambda: is_reducing(campaign))
    reducer.stop()
    wait_for(lambda: not is_reducing(campaign))
    assert said == []


def test_it_leaves_the_work_to_another_session_and_takes_over_when_that_ends(campaign, monkeypatch):
    monkeypatch.setattr("tui.reducer_process.LOOK_EVERY_S", 0.1)
    said: list[str] = []
    reducer = ReducerProcess(campaign, said.append)
    with reducer_lock(campaign):
        reducer.keep_running()
        assert reducer._process is None
    wait_for(lambda: reducer._process is not None and is_reducing(campaign))
    reducer.stop()
    assert said == []


def test_a_killed_reducer_is_reported_and_started_again(campaign, monkeypatch):
    monkeypatch.setattr("tui.reducer_process.LOOK_EVERY_S", 0.1)
    monkeypatch.setattr("tui.reducer_process.REST_AFTER_FAILURE_S", 0.0)
    said: list[str] = []
    reducer = ReducerProcess(campaign, said.append)
    reducer.keep_running()
    wait_for(lambda: is_reducing(campaign))
    first = reducer._process
    os.kill(first.pid, signal.SIGKILL)
    wait_for(lambda: reducer._process not in (None, first) and is_reducing(campaign))
    reducer.stop()
    assert len(said) == 1
    assert "stopped" in said[0]


def test_a_campaign_that_cannot_be_reduced_says_why(campaign, monkeypatch):
    monkeypatch.setattr("tui.reducer_process.LOOK_EVERY_S", 0.1)
    (campaign / "observatory.toml").write_text("[camera]\ngain = 1\n")
    said: list[str] = []
    reducer = ReducerProcess(campaign, said.append)
    reducer.keep_running()
    wait_for(lambda: said)
    reducer.stop()
    assert "camera.gain" in said[0]
