"""``fadeline reduce --follow`` beside the app: started when nobody reduces, started again when it ended."""

from __future__ import annotations

import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path

from reduce.logbook.lock import is_reducing
from reduce.plain_text import clean_text

LOOK_EVERY_S = 3.0
REST_AFTER_FAILURE_S = 30.0
PATIENCE_S = 3.0
OUTPUT_FILE = "reducer.log"


class ReducerProcess:
    """Keeps one reducer at work on a campaign, ours or that of another session.

    Its standard input is a pipe from this process: when that closes, for whatever reason, the reducer stops.

    Parameters
    ----------
    folder
        The campaign.
    complain
        Is given one sentence when the reducer ended by itself; called from a thread.
    """

    def __init__(self, folder: Path, complain: Callable[[str], None]) -> None:
        self.folder, self._complain = folder, complain
        self._process: subprocess.Popen[bytes] | None = None
        self._stopped = threading.Event()
        self._not_before = 0.0

    def keep_running(self) -> None:
        """Start it, and look after it from a thread until `stop`."""
        self._look()
        threading.Thread(target=self._watch, daemon=True).start()

    def stop(self) -> None:
        """Ask it to stop, and end it when it does not listen; the logbook bears either."""
        self._stopped.set()
        if self._process is None:
            return
        self._close_input()
        try:
            self._process.wait(PATIENCE_S)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()

    def _close_input(self) -> None:
        if self._process is not None and self._process.stdin is not None:
            self._process.stdin.close()

    def _watch(self) -> None:
        while not self._stopped.wait(LOOK_EVERY_S):
            self._look()

    def _look(self) -> None:
        if self._process is not None:
            code = self._process.poll()
            if code is None:
                return
            self._close_input()
            self._process = None
            if not is_reducing(self.folder):
                self._not_before = time.monotonic() + REST_AFTER_FAILURE_S
                self._complain(f"The reducer stopped ({self._last_words() or f'exit code {code}'}); it starts again.")
        if time.monotonic() >= self._not_before and not is_reducing(self.folder):
            self._start()

    def _start(self) -> None:
        command = [sys.executable, "-m", "tui.cli", "reduce", str(self.folder), "--follow", "--until-input-ends"]
        with (self.folder / OUTPUT_FILE).open("wb") as output:
            self._process = subprocess.Popen(
                command, stdin=subprocess.PIPE, stdout=subprocess.DEVNULL, stderr=output, start_new_session=True
            )

    def _last_words(self) -> str:
        try:
            lines = (self.folder / OUTPUT_FILE).read_text(encoding="utf-8", errors="replace").strip().splitlines()
        except OSError:
            return ""
        return clean_text(lines[-1], 200).removeprefix("fadeline: ") if lines else ""
