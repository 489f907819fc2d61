"""A reducer that is killed, crowded, hung up on or left alone: nothing lost, nothing twice, nobody left behind."""

from __future__ import annotations

import json
import os
import random
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from small_campaign import (
    BIAS,
    COMMAND,
    DARKS,
    ENOUGH_S,
    FIRST,
    FLATS,
    LIGHTS,
    curves,
    fadeline,
    lay,
    make_campaign,
    opened,
    processes_below,
    reduce_here,
    reduce_json,
    reductions,
    start_reduce,
    wait_until,
)

from reduce.logbook.lock import LOCK_FILE
from reduce.logbook.store import Logbook

FRAMES = [*BIAS, *DARKS[:4], *FLATS, *LIGHTS]
V_LIGHT, V_LIGHT_2 = LIGHTS[2], LIGHTS[3]
NAME, NAME_2 = Path(V_LIGHT).name, Path(V_LIGHT_2).name
SOON_S = 3.0
"""A follower must have ended by then: "a second or two", and a little for a busy machine."""


def kill_session(process: subprocess.Popen) -> None:
    """End the reducer at once; its workers must see to themselves."""
    process.send_signal(signal.SIGKILL)
    process.communicate(timeout=ENOUGH_S)


def nobody_is_left(process: subprocess.Popen) -> None:
    wait_until(lambda: not processes_below(process.pid), 20)


def history(folder: Path) -> list[tuple]:
    with opened(folder) as campaign:
        return [(row.mu, row.n, row.why) for t in campaign.targets() for row in campaign.book.history(t.name)]


@pytest.fixture
def follower(demo, tmp_path):
    """A function that starts ``reduce --follow`` on a campaign and gives it once its first summary is out."""
    started: list[subprocess.Popen] = []

    def start(folder: Path, *options: str, stdin=subprocess.DEVNULL) -> subprocess.Popen:
        process = start_reduce(folder, "--follow", *options, stdin=stdin)
        started.append(process)
        next_summary(process)
        return process

    yield start
    for process in started:
        if process.poll() is None:
            process.kill()
        process.communicate()


def next_summary(process: subprocess.Popen) -> tuple[dict[str, dict], dict]:
    """Rows and summary of the follower's next report."""
    rows = {}
    for line in process.stdout:
        row = json.loads(line)
        if "measured_now" in row:
            return rows, row
        rows[row["file"]] = row
    raise AssertionError(process.stderr.read())


# ---- kill -9 ---------------------------------------------------------------------------------------------


def test_kill_at_any_moment_then_again_gives_what_an_undisturbed_run_gives(demo, tmp_path):
    calm = make_campaign(demo, tmp_path / "calm", FRAMES)
    reduce_here(calm)
    folder = make_campaign(demo, tmp_path / "torn", FRAMES)
    dice = random.Random(20260302)
    moments = [
        lambda: (folder / LOCK_FILE).exists(),
        lambda: list(folder.glob("masters/*")),
        lambda: len(list(folder.glob("masters/*.fits"))) >= 3,
        lambda: len(reductions(folder)) >= 1,
        lambda: len(reductions(folder)) >= 4,
    ]
    for moment in moments:
        process = start_reduce(folder, "--workers", "2")
        wait_until(lambda moment=moment, process=process: moment() or process.poll() is not None)
        end = time.monotonic() + dice.uniform(0, 0.2)
        while time.monotonic() < end:
            pass
        kill_session(process)
        nobody_is_left(process)
        with Logbook.open(folder) as book:
            assert book.check() == ""
    rows, _ = reduce_json(folder)
    assert {row["outcome"] for row in rows.values()} == {"measured"}
    assert reductions(folder) == reductions(calm)
    assert curves(folder) == curves(calm)
    assert history(folder)[-1][:2] == history(calm)[-1][:2]
    masters = [{path.name: path.read_bytes() for path in (one / "masters").glob("*.fits")} for one in (folder, calm)]
    assert masters[0] == masters[1]
    with opened(folder) as campaign:
        lines = [row.body for row in campaign.log() if row.body.startswith("Night")]
    assert sum(int(line.split(": ")[1].split()[0]) for line in lines) == len(LIGHTS)  # each frame is told of once


def test_a_frame_in_work_at_many_power_cuts_is_measured_in_the_end(demo, tmp_path):
    """What died was the machine, not the frame's fault."""
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    for n in range(1, 5):
        process = start_reduce(folder, "--workers", "1")
        wait_until(lambda n=n: attempts(folder) >= n)
        kill_session(process)
    assert not reductions(folder)
    assert attempts(folder) == 4
    rows, _ = reduce_json(folder)
    assert rows[NAME]["outcome"] == "measured"


def attempts(folder: Path) -> int:
    """Starts in the logbook that nobody has ended."""
    with Logbook.open(folder) as book:
        row = book._database.row("SELECT count(*) FROM attempt WHERE outcome = ''")
    return row[0]


def test_killing_a_worker_costs_nothing(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, LIGHTS[:4])
    process = start_reduce(folder, "--workers", "1")
    workers = wait_until(  # children of the server that workers come from
        lambda: [child for child in processes_below(process.pid) if parent(child) not in (process.pid, os.getpid())]
    )
    assert len(workers) == 1
    os.kill(workers[0], signal.SIGKILL)
    out, _ = process.communicate(timeout=ENOUGH_S)
    *rows, _summary = [json.loads(line) for line in out.splitlines()]
    assert [row["outcome"] for row in rows] == ["measured"] * 4
    assert process.returncode == 0


def parent(process: int) -> int:
    return int(Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[1])


# ---- two at once -----------------------------------------------------------------------------------------


def test_a_second_reducer_is_refused_and_readers_are_not(demo, tmp_path, follower):
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    first = follower(folder)
    refused = fadeline("reduce", folder, code=2)
    assert refused.stdout == ""
    (sentence,) = refused.stderr.strip().splitlines()
    assert f"process {first.pid} on" in sentence
    assert len(json.loads(fadeline("curve", folder, "--json").stdout)) == 1
    fadeline("note", folder, "seen while it runs")
    first.send_signal(signal.SIGKILL)
    first.communicate()
    fadeline("reduce", folder)


# ---- what lands while it runs ----------------------------------------------------------------------------


def test_a_growing_file_is_taken_once_and_whole(demo, tmp_path, follower):
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    process = follower(folder)
    whole = (demo.frames / V_LIGHT_2).read_bytes()
    path = tmp_path / "frames" / NAME_2
    with path.open("wb") as file:
        for start in range(0, len(whole), len(whole) // 4):
            file.write(whole[start : start + len(whole) // 4])
            file.flush()
            with Logbook.open(folder) as book:
                assert path not in book.known_locations()
                assert book.problems() == {}
            grown = time.monotonic() + 0.7
            while time.monotonic() < grown:  # a slow writer: longer than the pause between two looks in all
                select_nothing()
    rows, summary = next_summary(process)
    assert (rows[NAME_2]["outcome"], summary["measured_now"]) == ("measured", 1)
    assert summary["unreadable"] == 0
    assert len(reductions(folder)) == 2


def select_nothing() -> None:
    """Leave the processor to others for a moment."""
    import select

    select.select([], [], [], 0.05)


def test_a_follower_takes_flats_and_whole_versions_as_they_come(demo, tmp_path, follower):
    folder = make_campaign(demo, tmp_path, [*BIAS, V_LIGHT])
    cut = tmp_path / "frames" / NAME_2
    cut.write_bytes((demo.frames / V_LIGHT_2).read_bytes()[:50000])
    os.utime(cut, (1e9, 1e9))
    process = follower(folder)
    with Logbook.open(folder) as book:
        assert [path.name for path in book.problems()] == [NAME_2]
    lay(demo, tmp_path / "frames", [path for path in FLATS if "flatV" in path] + [V_LIGHT_2])
    rows, summary = next_summary(process)
    while summary["measured_now"] == 0 or len(reductions(folder)) < 3:
        rows, summary = next_summary(process)
    assert summary["unreadable"] == 0
    assert {row["state"] for row in rows.values()} == {"kept"}
    process.send_signal(signal.SIGTERM)
    process.communicate(timeout=ENOUGH_S)
    assert process.returncode == 0  # nothing is unreadable in the end
    with Logbook.open(folder) as book:
        assert book.problems() == {}


# ---- how it ends -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP", "SIGINT"])
def test_a_follower_ends_soon_when_asked(demo, tmp_path, follower, name):
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    process = follower(folder)
    asked = time.monotonic()
    process.send_signal(getattr(signal, name))
    _, err = process.communicate(timeout=ENOUGH_S)
    assert time.monotonic() - asked < SOON_S
    assert process.returncode == 0
    assert "Traceback" not in err
    nobody_is_left(process)
    fadeline("reduce", folder)  # the lock is free


@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP"])
def test_it_ends_soon_in_the_middle_of_its_work_too_and_nothing_counts_against_a_frame(demo, tmp_path, name):
    folder = make_campaign(demo, tmp_path, LIGHTS)
    process = start_reduce(folder, "--follow", "--workers", "2")
    wait_until(lambda: attempts(folder) >= 1)
    asked = time.monotonic()
    process.send_signal(getattr(signal, name))
    _, err = process.communicate(timeout=ENOUGH_S)
    assert time.monotonic() - asked < SOON_S
    assert "Traceback" not in err
    nobody_is_left(process)
    assert attempts(folder) == 0
    rows, _ = reduce_json(folder)
    assert {row["outcome"] for row in rows.values()} == {"measured"}


def test_it_ends_when_the_app_that_started_it_is_killed(demo, tmp_path):
    """The app holds the other end of a pipe; kill -9 closes it."""
    folder = make_campaign(demo, tmp_path, LIGHTS[:2])
    app = (
        "import sys, time; from pathlib import Path; from tui.reducer_process import ReducerProcess\n"
        "ReducerProcess(Path(sys.argv[1]), print).keep_running(); time.sleep(600)"
    )
    parent_process = subprocess.Popen([sys.executable, "-c", app, str(folder)], stdout=subprocess.PIPE, text=True)
    wait_until(lambda: attempts(folder) or reductions(folder))
    reducer = int((folder / LOCK_FILE).read_text().split()[1])
    assert parent(reducer) == parent_process.pid
    assert processes_below(reducer)
    parent_process.kill()
    parent_process.communicate()
    wait_until(lambda: not processes_below(reducer), SOON_S + 2)
    fadeline("reduce", folder)
    assert len(reductions(folder)) == 2


def test_output_that_nobody_reads_is_no_traceback(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, LIGHTS[:3])
    reduce_here(folder)
    process = subprocess.Popen(
        [*COMMAND, "reduce", str(folder), "--json"], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    process.stdout.close()
    assert "Traceback" not in process.stderr.read()
    process.stderr.close()
    process.wait(ENOUGH_S)


# ---- the campaign's own files ----------------------------------------------------------------------------


def test_a_damaged_logbook_is_one_sentence(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [])
    with (folder / "logbook.db").open("r+b") as file:
        file.write(b"not a database at all" * 200)
    for words in (["reduce"], ["curve"], ["distance"], ["log"]):
        said = fadeline(*words, folder, code=2).stderr.strip()
        assert len(said.splitlines()) == 1


def test_a_mistake_in_the_settings_is_one_sentence(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [])
    (folder / "observatory.toml").write_text("[camera]\ngian_e_per_adu = 2\n")
    said = fadeline("reduce", folder, code=2).stderr.strip()
    assert "gian_e_per_adu" in said
    assert len(said.splitlines()) == 1


def test_the_campaign_folder_can_be_moved(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [*BIAS, V_LIGHT, f"{FIRST}006-flatV.fits"])
    reduce_here(folder)
    before = curves(folder)
    moved = tmp_path / "elsewhere" / "campaign"
    shutil.copytree(folder, moved)
    shutil.rmtree(folder)
    _, summary = reduce_json(moved)
    assert summary["measured_now"] == 0
    assert curves(moved) == before
