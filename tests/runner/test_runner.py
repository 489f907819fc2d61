"""Every task ends in exactly one result, whatever its process does."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
import runner_tasks as jobs

from reduce.runner import run_tasks


def run(function, tasks, workers=2, timeout_s=30.0, **more):
    results = []
    run_tasks(function, tasks, workers, timeout_s, results.append, **more)
    return {result.task: result for result in results} if len(results) > 1 else results[0]


def wait_for(condition, seconds=20.0):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        os.sched_yield()


def gone(pid):
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0]
    except (FileNotFoundError, ProcessLookupError):
        return True
    return state == "Z"


@pytest.mark.parametrize("workers", [0, 1, 2])
def test_every_task_gives_its_value(workers):
    results = run(jobs.square, range(20), workers)
    assert {task: result.value for task, result in results.items()} == {n: n * n for n in range(20)}
    assert {result.ending for result in results.values()} == {"done"}


@pytest.mark.parametrize("workers", [0, 2])
def test_errors_become_sentences_and_the_rest_goes_on(workers):
    results = run(jobs.fail, [1, 2, 3, 4], workers)
    assert results[2].sentence == "this one cannot be done."
    assert results[2].ending == "failed"
    assert "ValueError: bad·[31m thing" in results[3].sentence
    assert "Traceback" in results[3].detail
    assert results[4].value == 4


def test_a_result_that_cannot_be_sent_is_a_sentence():
    results = run(jobs.give_what_cannot_be_sent, [1, 2], workers=1)
    assert results[1].ending == "failed"
    assert "cannot be handed over" in results[1].sentence
    assert results[2].value == 2


def test_workers_do_not_write_to_the_terminal(tmp_path):
    script = tmp_path / "parent.py"
    script.write_text(
        f"import sys\nsys.path.insert(0, {str(Path(jobs.__file__).parent)!r})\n"
        "import runner_tasks as jobs\nfrom reduce.runner import run_tasks\n"
        "if __name__ == '__main__':\n"
        "    run_tasks(jobs.speak, [1], 1, 60.0, lambda r: print(r.value))\n"
    )
    done = subprocess.run([sys.executable, str(script)], capture_output=True, text=True, timeout=60)
    assert (done.stdout, done.stderr) == ("1\n", "")


def test_no_tasks_no_results():
    results = []
    run_tasks(jobs.square, [], 2, 1.0, results.append)
    assert results == []


def test_a_task_that_hangs_is_ended_and_the_others_are_done():
    results = run(jobs.hang_on_negative, [-1, 1, 2, 3], timeout_s=1.5)
    assert results[-1].ending == "timed out"
    assert "longer than 1.5 s" in results[-1].sentence
    assert [results[n].value for n in (1, 2, 3)] == [1, 2, 3]


def test_a_poison_task_stops_after_two_starts():
    started = []
    results = run(jobs.die_on_negative, [1, -1, 2, 3], before_start=lambda task: started.append(task) or True)
    assert results[-1].ending == "died"
    assert "SIGKILL" in results[-1].sentence
    assert started.count(-1) == 2
    assert [results[n].value for n in (1, 2, 3)] == [1, 2, 3]


def test_a_task_killed_once_is_done_at_the_second_start(tmp_path):
    assert run(jobs.die_the_first_time, [str(tmp_path / "mark")]).value == "alive"


@pytest.mark.parametrize("workers", [0, 2])
def test_a_refused_task_is_reported_and_never_started(workers):
    results = run(jobs.die_on_negative, [-1, 2], workers, before_start=lambda task: task > 0)
    assert results[-1].ending == "refused"
    assert results[2].value == 2


def test_the_attempt_is_counted_before_the_start(tmp_path):
    counted = []
    mark = tmp_path / "mark"
    run(jobs.die_the_first_time, [str(mark)], before_start=lambda task: counted.append(mark.exists()) or True)
    assert counted == [False, True]


def test_results_come_as_they_end_and_tasks_are_taken_as_workers_are_free():
    taken, seen = [], []

    def tasks():
        for n in range(6):
            taken.append(n)
            yield n

    run_tasks(jobs.square, tasks(), 2, 30.0, lambda result: seen.append((result.task, len(taken))))
    assert seen[0][1] <= 3, "the list was read to its end before the first result"
    assert sorted(task for task, _ in seen) == list(range(6))


def test_workers_have_one_thread_and_are_other_processes():
    before = os.environ.get("OPENBLAS_NUM_THREADS")
    results = run(jobs.process_and_threads, [1, 2, 3])
    assert all(result.value[1] == "1" for result in results.values())
    assert os.getpid() not in {result.value[0] for result in results.values()}
    assert os.environ.get("OPENBLAS_NUM_THREADS") == before


@pytest.mark.parametrize("workers", [0, 1])
def test_a_wish_to_stop_is_heard(workers):
    results = []
    run_tasks(jobs.square, range(1000), workers, 30.0, results.append, should_stop=lambda: len(results) >= 3)
    assert 3 <= len(results) <= 5
    assert results[0].ending == "done"


def test_a_running_task_is_stopped(tmp_path):
    path = tmp_path / "pid"
    result = run(jobs.write_pid_and_hang, [str(path)], should_stop=path.exists)
    assert result.ending == "stopped"
    assert gone(int(path.read_text()))


def test_an_error_of_the_caller_ends_the_workers(tmp_path):
    path = tmp_path / "pid"

    def interrupt():
        if path.exists():
            raise KeyboardInterrupt
        return False

    with pytest.raises(KeyboardInterrupt):
        run_tasks(jobs.write_pid_and_hang, [str(path)], 1, 30.0, print, should_stop=interrupt)
    assert gone(int(path.read_text()))


PARENT = """
import sys
sys.path.insert(0, {here!r})
import runner_tasks as jobs
from reduce.runner import run_tasks
if __name__ == "__main__":
    try:
        run_tasks(jobs.write_pid_and_hang, [{path!r}], 1, 60.0, print, preload=["colorsys"])
    except KeyboardInterrupt:
        print("interrupted")
"""


@pytest.mark.parametrize("how", [signal.SIGKILL, signal.SIGINT])
def test_workers_die_with_their_parent(tmp_path, how):
    path = tmp_path / "pid"
    script = tmp_path / "parent.py"
    script.write_text(PARENT.format(here=str(Path(jobs.__file__).parent), path=str(path)))
    command = [sys.executable, str(script)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as parent:
        try:
            wait_for(path.exists)
            parent.send_signal(how)
            out, err = parent.communicate(timeout=60)
            wait_for(lambda: gone(int(path.read_text())))
        finally:
            parent.kill()
    if how == signal.SIGINT:
        assert out == "interrupted\n"
        assert err == ""


def test_modules_are_preloaded_in_a_fresh_server(tmp_path):
    script = tmp_path / "parent.py"
    script.write_text(
        f"import sys\nsys.path.insert(0, {str(Path(jobs.__file__).parent)!r})\n"
        "import runner_tasks as jobs\nfrom reduce.runner import run_tasks\n"
        "if __name__ == '__main__':\n"
        "    run_tasks(jobs.process_and_threads, [1], 1, 60.0, lambda r: print(r.value[2]),"
        " preload=['colorsys'])\n"
    )
    done = subprocess.run([sys.executable, str(script)], capture_output=True, text=True, timeout=60)
    assert (done.stdout, done.stderr) == ("True\n", "")


def test_processes_start_where_the_standard_streams_have_no_file(tmp_path):
    """As inside a full-screen app, whose stderr has no usable descriptor."""
    script = tmp_path / "parent.py"
    script.write_text(
        f"import sys\nsys.path.insert(0, {str(Path(jobs.__file__).parent)!r})\n"
        "import runner_tasks as jobs\nfrom reduce.runner import prepare_processes, run_tasks\n"
        "class Stream:\n    def fileno(self): return -1\n"
        "    def write(self, text): pass\n    def flush(self): pass\n"
        "if __name__ == '__main__':\n"
        "    prepare_processes()\n"
        "    sys.stderr = Stream()\n"
        "    run_tasks(jobs.square, [7], 1, 60.0, lambda r: print(r.value))\n"
    )
    done = subprocess.run([sys.executable, str(script)], capture_output=True, text=True, timeout=60)
    assert done.stdout == "49\n", done.stderr
