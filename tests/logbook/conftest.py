"""Its presence lets test files import modules that lie in this folder (logbook_samples)."""

import pytest
from logbook_samples import counting_random, no_mounts, ticking_clock

from reduce.logbook.store import Logbook


@pytest.fixture
def logbook(tmp_path):
    with Logbook.create(tmp_path, clock=ticking_clock(), random=counting_random(), mounts=no_mounts) as book:
        yield book
