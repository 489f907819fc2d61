"""Processes that die and disks that fill: the logbook stays whole and the lock is freed."""

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from reduce.logbook.database import LogbookError
from reduce.logbook.lock import ReducerBusy, reducer_lock
from reduce.logbook.store import FILE_NAME, Logbook
from reduce.records import Measured

STARS = 40

WRITER = """
import itertools, os, sys
from pathlib import Path
import numpy as np
from reduce.logbook.lock import reducer_lock
from reduce.logbook.store import Logbook
from reduce.records import Measured, Sequence, STAR_DTYPE

folder = Path(sys.argv[1])
n = {stars}
with reducer_lock(folder), Logbook.open(folder) as book:
    for count in itertools.count():
        frame = f"{{os.getpid()}}-{{count}}"
        book.add_frame(frame, {{}})
        stars = np.zeros(n, STAR_DTYPE)
        stars["x_px"] = count
        book.add_reduction(Measured(frame, "r", "measured", "", stars=stars, stamps=os.urandom(20000)))
        numbers = np.full(n, float(count))
        ids = tuple(f"s{{k}}" for k in range(n))
        book.add_sequence(Sequence(frame, ids, numbers, numbers, {{"V": numbers}}, {{"V": numbers}}))
        print(frame, flush=True)
"""


def start_writer(folder):
    return subprocess.Popen(
        [sys.executable, "-c", WRITER.format(stars=STARS), str(folder)], stdout=subprocess.PIPE, text=True
    )


def check_whole(folder, promised):
    with Logbook.open(folder) as book:
        assert book.check() == ""
        found = {measured.frame for measured in book.newest_reductions()}
        assert promised <= found, "what was reported as written is there"
        sizes = book._database.rows("SELECT count(*) FROM sequence_star GROUP BY sequence")
        assert {size for (size,) in sizes} <= {STARS}
        n_sequences = book._database.row("SELECT count(*) FROM sequence")
        assert n_sequences == (len(sizes),)
        for measured in book.newest_reductions():
            assert len(measured.stars) == STARS
            assert len(book.stamps(measured.frame, "r")) == 20000


def test_a_killed_writer_leaves_whole_rows_and_a_free_lock(tmp_path):
    Logbook.create(tmp_path).close()
    dice = random.Random(20260301)
    promised = set()
    for _ in range(12):
        with start_writer(tmp_path) as writer:
            try:
                promised.add(writer.stdout.readline().strip())
                with pytest.raises(ReducerBusy, match=f"process {writer.pid} on"), reducer_lock(tmp_path):
                    pass
                # any moment of a write will do: spin for a random time instead of waiting for a sign
                end = time.monotonic() + dice.uniform(0, 0.03)
                while time.monotonic() < end:
                    pass
            finally:
                writer.send_signal(signal.SIGKILL)
            rest = writer.stdout.read().splitlines()
            promised.update(line for line in rest if "-" in line and not line.endswith("-"))
        with reducer_lock(tmp_path):
            check_whole(tmp_path, promised)
    assert len(promised) >= 12


def test_a_writer_killed_inside_a_transaction_leaves_nothing_of_it(tmp_path):
    Logbook.create(tmp_path).close()
    code = (
        "import os, signal, sys; from pathlib import Path; from reduce.logbook.store import Logbook\n"
        "book = Logbook.open(Path(sys.argv[1]))\n"
        "with book._database.transaction() as write:\n"
        "    for n in range(5000):\n"
        "        write.execute(\"INSERT INTO setting VALUES (?, 'k', ?, '')\", (str(n), 'v' * 2000))\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    done = subprocess.run([sys.executable, "-c", code, str(tmp_path)], check=False)
    assert done.returncode == -signal.SIGKILL
    with Logbook.open(tmp_path) as book:
        assert book.check() == ""
        assert book.setting("k") is None
        assert book.set_setting("k", "after")


def test_the_lock_is_for_one_and_is_given_back(tmp_path):
    with reducer_lock(tmp_path):
        with pytest.raises(ReducerBusy, match=f"process {os.getpid()} on .* since 20"), reducer_lock(tmp_path):
            pass
        with pytest.raises(ReducerBusy), reducer_lock(tmp_path):
            pass
    with reducer_lock(tmp_path):
        pass
    with pytest.raises(LogbookError, match="cannot be opened"), reducer_lock(tmp_path / "nowhere"):
        pass


def test_the_words_in_the_lock_file_are_escaped(tmp_path):
    with reducer_lock(tmp_path):
        (tmp_path / "reducer.lock").write_bytes(b"evil\x1b]0;x\x07\xff")
        with pytest.raises(ReducerBusy) as caught, reducer_lock(tmp_path):
            pass
    assert "\x1b" not in str(caught.value)


FILLER = """
import os, resource, sys
from pathlib import Path
from reduce.logbook.database import LogbookError
from reduce.logbook.store import Logbook
from reduce.records import Measured

book = Logbook.open(Path(sys.argv[1]))
limit = int(sys.argv[2])
if limit:
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
written = 0
try:
    for n in range(1000):
        if sys.argv[3] == "stamps":
            book.add_frame(str(n), {})
            book.add_reduction(Measured(str(n), "r", "measured", "", stamps=os.urandom(30000 * (n + 1))))
        else:
            book.set_setting("k", f"{n} " + "v" * 20000)
        written += 1
except LogbookError as error:
    print(written)
    print(error)
"""


def fill(folder, limit, what):
    command = [sys.executable, "-c", FILLER, str(folder), str(limit), what]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60, check=True)
    written, sentence = done.stdout.splitlines()
    assert done.stderr == ""
    assert sentence.endswith((".", "go on."))
    assert "Traceback" not in sentence
    return int(written), sentence


def check_filled(folder, written, what):
    with Logbook.open(folder) as book:
        assert book.check() == ""
        if what == "stamps":
            found = book.newest_reductions()
            assert sorted(int(m.frame) for m in found) == list(range(written))
            assert all(isinstance(m, Measured) and book.stamps(m.frame, "r") for m in found)
        else:
            assert book.setting("k").startswith(f"{written - 1} ")
    assert not list(folder.rglob("*.part"))


@pytest.mark.parametrize("what", ["settings", "stamps"])
def test_a_file_that_may_not_grow_is_one_sentence_and_nothing_half_written(tmp_path, what):
    Logbook.create(tmp_path).close()
    written, sentence = fill(tmp_path, 600_000, what)
    assert written > 2
    assert "nothing was changed" in sentence
    check_filled(tmp_path, written, what)


@pytest.mark.parametrize("what", ["settings", "stamps"])
def test_a_full_disk_is_one_sentence_and_nothing_half_written(tmp_path, what):
    disk = tmp_path / "disk"
    disk.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=1500k", "tmpfs", str(disk)]
    if subprocess.run(mount, capture_output=True, check=False).returncode:
        pytest.skip("a small file system cannot be mounted here (needs root)")
    try:
        Logbook.create(disk).close()
        written, sentence = fill(disk, 0, what)
        assert written > 2
        assert "make room" in sentence
        copy = tmp_path / "copy"
        subprocess.run(["cp", "-r", str(disk), str(copy)], check=True)
    finally:
        subprocess.run(["umount", str(disk)], check=True)
    check_filled(copy, written, what)


def test_changed_or_missing_stamps_are_noticed(tmp_path):
    with Logbook.create(tmp_path) as book:
        book.add_frame("f", {})
        book.add_reduction(Measured("f", "r", "measured", "", stamps=b"x"))
        (pack,) = Path(tmp_path, "stamps").rglob("*.pack")
        pack.write_bytes(b"y")
        with pytest.raises(LogbookError, match="was changed"):
            book.stamps("f", "r")
        pack.unlink()
        with pytest.raises(LogbookError, match="cannot be read"):
            book.stamps("f", "r")
    assert (tmp_path / FILE_NAME).exists()
