"""Who calls a function on many tasks: this process, or worker processes that may hang, die or be killed.

Knows nothing of pixels or of the logbook. A worker runs one task at a time, so a task that must be stopped
costs its own process only. Workers are forked from a server that has imported what they need.
"""

from __future__ import annotations

import os
import pickle
import signal
import threading
import time
import traceback
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from multiprocessing import forkserver, get_context, parent_process, resource_tracker
from multiprocessing.connection import Connection, wait
from multiprocessing.context import ForkServerProcess
from typing import Any, Generic, Literal, TypeVar

from reduce.plain_text import PlainError, clean_text

T = TypeVar("T")
R = TypeVar("R")

Ending = Literal["done", "failed", "timed out", "died", "refused", "stopped"]
MOST_STARTS = 2
"""A task whose worker died is started once more."""
POLL_S = 0.2
"""How often a wish to stop is looked for."""
DEATH_S = 2.0
"""How long the exit code of a process whose pipe has closed may take."""
ONE_THREAD = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMEXPR_NUM_THREADS"), "1")


@dataclass(frozen=True, slots=True)
class TaskResult(Generic[T, R]):
    """How one task ended; ``value`` when ``ending`` is "done", otherwise ``sentence`` says what happened."""

    task: T
    ending: Ending
    value: R | None
    sentence: str
    detail: str
    """The traceback of a failed task, for the log file."""
    seconds: float


@contextmanager
def _one_thread() -> Iterator[None]:
    """The server process, and with it every worker, starts with one thread a numerical library."""
    before = {name: os.environ.get(name) for name in ONE_THREAD}
    os.environ.update(ONE_THREAD)
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def prepare_processes(preload: Sequence[str] = ()) -> None:
    """Start the servers that workers come from; call it before a full-screen app takes the standard streams.

    Parameters
    ----------
    preload
        Modules that every worker needs; imported once, in the server, when it is started by this call.
    """
    context = get_context("forkserver")
    context.set_forkserver_preload(list(preload))
    resource_tracker.ensure_running()
    with _one_thread():
        forkserver.ensure_running()


def end_with_parent() -> None:
    """In a worker: leave no orphan behind when the process that asked for the work is gone."""
    threading.Thread(target=_wait_for_parent, daemon=True).start()


def _wait_for_parent() -> None:
    parent = parent_process()
    if parent is not None:
        parent.join()
    os._exit(1)


def _serve(pipe: Connection, function: Callable[[Any], Any]) -> None:
    """Body of a worker: one task after the other until the pipe closes."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _be_silent()
    end_with_parent()
    while True:
        try:
            task = pipe.recv()
        except EOFError:
            return
        try:
            pipe.send(_call(function, task))
        except (pickle.PicklingError, TypeError, AttributeError) as error:
            sentence = f"Its result cannot be handed over ({clean_text(error)})."
            pipe.send(("failed", None, sentence, traceback.format_exc()))


def _be_silent() -> None:
    """Nothing that a library prints in a worker may fall into the app's screen or the command's output."""
    nowhere = os.open(os.devnull, os.O_WRONLY)
    for stream in (1, 2):
        os.dup2(nowhere, stream)
    os.close(nowhere)


def _call(function: Callable[[Any], Any], task: Any) -> tuple[Ending, Any, str, str]:
    try:
        return "done", function(task), "", ""
    except PlainError as error:
        return "failed", None, str(error), traceback.format_exc()
    except Exception as error:
        sentence = f"Something unforeseen happened ({type(error).__name__}: {clean_text(error)})."
        return "failed", None, sentence, traceback.format_exc()


class _Worker(Generic[T]):
    """One process with a pipe, and the task it is on."""

    def __init__(self, function: Callable[[Any], Any]) -> None:
        context = get_context("forkserver")
        self.pipe, far_end = context.Pipe()
        self._process: ForkServerProcess = context.Process(target=_serve, args=(far_end, function), daemon=True)
        self._process.start()
        far_end.close()
        self.task: T | None = None
        self.starts = 0
        self.began = 0.0

    def give(self, task: T, starts: int) -> None:
        self.task, self.starts, self.began = task, starts, time.monotonic()
        self.pipe.send(task)

    def end(self) -> None:
        """Kill the process and forget it."""
        self._process.kill()
        self._process.join()
        self._process.close()
        self.pipe.close()

    def cause_of_death(self) -> str:
        """How the process ended by itself, in words."""
        self._process.join(DEATH_S)
        code = self._process.exitcode
        if code is None or code >= 0:
            return "its process ended"
        try:
            name = signal.Signals(-code).name
        except ValueError:
            name = f"signal {-code}"
        hint = ", perhaps for want of memory" if name == "SIGKILL" else ""
        return f"its process was ended by {name}{hint}"


def run_tasks(
    function: Callable[[T], R],
    tasks: Iterable[T],
    workers: int,
    timeout_s: float,
    on_result: Callable[[TaskResult[T, R]], None],
    before_start: Callable[[T], bool] = lambda task: True,
    should_stop: Callable[[], bool] = lambda: False,
    preload: Sequence[str] = (),
) -> None:
    """Call ``function`` on every task; every task gives exactly one result, in the order they end.

    Parameters
    ----------
    function
        Importable by its name when there are workers.
    workers
        0: in this process, one after the other, without time-out; otherwise the number of worker processes.
    timeout_s
        A task that takes longer is ended with its process and not started again.
    on_result
        Called in this thread.
    before_start
        Called in this thread before every start, the second one of a task whose worker died included; False
        refuses the task. This is where attempts are counted.
    should_stop
        Looked at between tasks and a few times a second; the tasks that run then end as "stopped", the others
        are not started and give no result.
    preload
        Modules that workers need, see `prepare_processes`.
    """
    if workers == 0:
        _run_here(function, tasks, on_result, before_start, should_stop)
        return
    prepare_processes(preload)
    queue = _Queue(iter(tasks), on_result, before_start)
    crew: list[_Worker[T]] = []
    try:
        while not should_stop():
            idle = [worker for worker in crew if worker.task is None]
            while (idle or len(crew) < workers) and (found := queue.take()) is not None:
                if idle:
                    worker = idle.pop()
                else:
                    worker = _Worker(function)
                    crew.append(worker)
                _give(worker, *found)
            busy = [worker for worker in crew if worker.task is not None]
            if not busy:
                return
            _collect(busy, crew, queue, timeout_s, on_result)
        for worker in crew:
            if worker.task is not None:
                on_result(_result(worker, "stopped", None, "It was stopped."))
    finally:
        for worker in crew:
            worker.end()


class _Queue(Generic[T]):
    """Tasks to start, those to start again first."""

    def __init__(
        self,
        tasks: Iterator[T],
        on_result: Callable[[TaskResult[T, Any]], None],
        before_start: Callable[[T], bool],
    ) -> None:
        self._tasks, self._on_result, self._before_start = tasks, on_result, before_start
        self._again: deque[tuple[T, int]] = deque()

    def put_back(self, task: T, starts: int) -> None:
        self._again.append((task, starts))

    def take(self) -> tuple[T, int] | None:
        """The next task that may start, with the number of its start; refused ones are reported."""
        while True:
            if self._again:
                task, starts = self._again.popleft()
            else:
                try:
                    task, starts = next(self._tasks), 0
                except StopIteration:
                    return None
            if self._before_start(task):
                return task, starts + 1
            sentence = "It was not started again: too many attempts ended badly."
            self._on_result(TaskResult(task, "refused", None, sentence, "", 0.0))


def _give(worker: _Worker[T], task: T, starts: int) -> None:
    try:
        worker.give(task, starts)
    except OSError:
        # the idle worker died: its closed pipe is noticed by _collect, which starts the task again
        return


def _collect(
    busy: Sequence[_Worker[T]],
    crew: list[_Worker[T]],
    queue: _Queue[T],
    timeout_s: float,
    on_result: Callable[[TaskResult[T, Any]], None],
) -> None:
    """Wait a moment for results; replace workers that died or took too long."""
    ready = wait([worker.pipe for worker in busy], timeout=min(POLL_S, timeout_s))
    for worker in busy:
        assert worker.task is not None
        if worker.pipe in ready:
            try:
                ending, value, sentence, detail = worker.pipe.recv()
            except (EOFError, OSError):
                crew.remove(worker)
                how = worker.cause_of_death()
                worker.end()
                if worker.starts < MOST_STARTS:
                    queue.put_back(worker.task, worker.starts)
                else:
                    on_result(_result(worker, "died", None, f"It was given up after two attempts: {how}."))
                continue
            result = _result(worker, ending, value, sentence, detail)
            worker.task = None
            on_result(result)
        elif time.monotonic() - worker.began > timeout_s:
            crew.remove(worker)
            worker.end()
            on_result(_result(worker, "timed out", None, f"It took longer than {timeout_s:g} s and was ended."))


def _result(worker: _Worker[T], ending: Ending, value: Any, sentence: str, detail: str = "") -> TaskResult[T, Any]:
    assert worker.task is not None
    return TaskResult(worker.task, ending, value, sentence, detail, time.monotonic() - worker.began)


def _run_here(
    function: Callable[[T], R],
    tasks: Iterable[T],
    on_result: Callable[[TaskResult[T, R]], None],
    before_start: Callable[[T], bool],
    should_stop: Callable[[], bool],
) -> None:
    queue = _Queue(iter(tasks), on_result, before_start)
    while not should_stop() and (found := queue.take()) is not None:
        began = time.monotonic()
        ending, value, sentence, detail = _call(function, found[0])
        on_result(TaskResult(found[0], ending, value, sentence, detail, time.monotonic() - began))
