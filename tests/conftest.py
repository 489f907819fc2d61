"""What many tests share: one rendered and reduced demo, made once for all workers.

The file's presence also lets test files import modules that lie in this folder (synthetic_nights).
"""

from __future__ import annotations

import fcntl
import json
import os
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest


@dataclass(frozen=True)
class FinishedDemo:
    """The demo of seed 1 after ``fadeline demo --headless --json``; do not write into it, `copy` it."""

    place: Path
    result: dict

    @property
    def campaign(self) -> Path:
        return self.place / "campaign"

    @property
    def frames(self) -> Path:
        return self.place / "frames"

    def copy(self, folder: Path) -> Path:
        """A campaign folder of one's own on the same frames."""
        shutil.copytree(self.campaign, folder)
        return folder


@pytest.fixture(scope="session")
def demo(tmp_path_factory: pytest.TempPathFactory) -> FinishedDemo:
    mine = tmp_path_factory.getbasetemp()
    shared = mine.parent if "PYTEST_XDIST_WORKER" in os.environ else mine
    place, result = shared / "demo-1", shared / "demo-1.json"
    with open(shared / "demo-1.lock", "w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not result.exists():
            command = [sys.executable, "-m", "tui.cli", "demo", "--headless", "--json", "--folder", str(place)]
            done = subprocess.run(command, capture_output=True, text=True, check=False)
            assert done.returncode == 0, done.stderr[-3000:]
            result.write_text(done.stdout)
    return FinishedDemo(place, json.loads(result.read_text()))
