"""Open damaged copies of files, one after the other, in little memory; run as a program by test_faults_damaged.

Usage: damaged_files.py SEED COUNT FILE...   Prints one line for each copy that did anything but end as a frame or as a
FrameError within the time; exits 0 when it came to the end.
"""

from __future__ import annotations

import os
import random
import resource
import sys
import time
from pathlib import Path

from reduce.frames.arrival import completeness
from reduce.frames.reader import open_frame
from reduce.records import FrameError
from reduce.settings import Settings

MOST_S = 2.0
MOST_BYTES = 300_000_000
NUMBERS = (
    b"-1", b"0", b"3", b"17", b"64", b"-64", b"2147483648", b"9223372036854775807", b"1" * 30, b"1e9", b"T", b"''",
)  # fmt: skip


def damaged(content: bytes, dice: random.Random) -> bytes:
    """A copy with flipped bytes, a cut, doubled or lost blocks, or cards whose value is another."""
    data = bytearray(content)
    for _ in range(dice.choice((1, 1, 2, 5))):
        way = dice.randrange(6)
        at = dice.randrange(len(data)) if dice.random() < 0.4 else dice.randrange(min(len(data), 8640))
        if way == 0:
            data[at] ^= 1 << dice.randrange(8)
        elif way == 1:
            data[at : at + dice.randrange(1, 80)] = dice.randbytes(dice.randrange(1, 80))
        elif way == 2:
            del data[at + 1 :]
        elif way == 3:
            block = at // 2880 * 2880
            data[block:block] = data[block : block + 2880 * dice.choice((1, 3))]
        elif way == 4:
            card = at // 80 * 80
            data[card + 10 : card + 30] = dice.choice(NUMBERS).rjust(20)[:20]
        else:
            cards = [k for k in range(0, min(len(data), 20000), 80) if data[k + 8 : k + 10] == b"= "]
            if cards:
                one, other = dice.choice(cards), dice.choice(cards)
                data[one : one + 30] = data[other : other + 8] + b"= " + dice.choice(NUMBERS).rjust(20)[:20]
    return bytes(data)


def main(seed: int, count: int, files: list[str]) -> None:
    settings = Settings()
    for name in files:  # what has to be imported is imported before memory is limited
        open_frame(Path(name), settings).read()
    with open("/proc/self/statm") as statm:
        now = int(statm.read().split()[0]) * os.sysconf("SC_PAGE_SIZE")
    resource.setrlimit(resource.RLIMIT_AS, (now + MOST_BYTES, now + MOST_BYTES))
    for name in files:
        content = Path(name).read_bytes()
        dice = random.Random(f"{seed} {Path(name).name}")
        for k in range(count):
            path = Path(name).with_name(f"damaged-{Path(name).name}")
            path.write_bytes(damaged(content, dice))
            began = time.perf_counter()
            try:
                completeness(path)
                open_frame(path, settings).read()
            except FrameError as error:
                if "does not fit into memory" in str(error):
                    print(f"{name} {k}: took more than {MOST_BYTES} bytes", flush=True)
                elif not str(error).endswith(".") or not str(error).isprintable():
                    print(f"{name} {k}: not a sentence: {error}", flush=True)
            except BaseException as error:
                print(f"{name} {k}: {type(error).__name__}: {error}", flush=True)
            if time.perf_counter() - began > MOST_S:
                print(f"{name} {k}: {time.perf_counter() - began:.1f} s", flush=True)


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]), sys.argv[3:])
