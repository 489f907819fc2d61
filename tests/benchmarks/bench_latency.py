"""First paint, key to screen, and what an idle app sends: the real app under a pty of 80 × 24 in 256 colours.

    python tests/benchmarks/bench_latency.py --demo DEMO_FOLDER [--keys N] [--paints N]

DEMO_FOLDER is one that ``fadeline demo --headless --folder`` made. Beside each figure stands that of the prototype
which was measured before the app was written (the same machine with nothing else running).
"""

from __future__ import annotations

import argparse
import fcntl
import os
import pty
import select
import signal
import struct
import subprocess
import sys
import tempfile
import termios
import time
from pathlib import Path
from statistics import median

from bench_arrival import new_campaign

EAGER = "import tui.app, numpy, pandas, scipy.optimize, scipy.stats, astropy.io.fits, astropy.wcs, astropy.time, " \
        "astropy.table, photutils.aperture, photutils.detection"  # fmt: skip
LIMIT_OF_EAGER = 0.8
LIMIT_S = 1.0
IDLE_S = 20.0


class Terminal:
    """The app on a campaign, at the other end of a pty."""

    def __init__(self, campaign: Path) -> None:
        self.began = time.monotonic()
        self.pid, self.fd = pty.fork()
        if self.pid == 0:
            environ = {k: v for k, v in os.environ.items() if k in ("PATH", "HOME", "VIRTUAL_ENV", "PYTHONPATH")}
            environ |= {"TERM": "xterm-256color", "LANG": "C.UTF-8"}
            os.execvpe(sys.executable, [sys.executable, "-m", "tui.cli", "open", str(campaign)], environ)
        fcntl.ioctl(self.fd, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))

    def read(self, quiet_s: float, limit_s: float = 60.0) -> bytes:
        """What comes until nothing came for a while."""
        data, end = b"", time.monotonic() + limit_s
        while time.monotonic() < end and select.select([self.fd], [], [], quiet_s)[0]:
            data += os.read(self.fd, 65536)
        return data

    def wait(self, text: bytes, limit_s: float = 60.0) -> float:
        """Seconds since the start until a text has come."""
        data, end = b"", time.monotonic() + limit_s
        while time.monotonic() < end:
            if select.select([self.fd], [], [], 0.05)[0]:
                data += os.read(self.fd, 65536)
                if text in data:
                    return time.monotonic() - self.began
        raise TimeoutError(f"{text!r} never came")

    def key_s(self, key: bytes) -> float:
        """Seconds from a key to the first byte that answers it."""
        self.read(0.03, 2.0)
        began = time.monotonic()
        os.write(self.fd, key)
        if not select.select([self.fd], [], [], 5.0)[0]:
            raise TimeoutError("a key was not answered")
        return time.monotonic() - began

    def close(self) -> None:
        """Leave by q, and by force when that does not help."""
        os.write(self.fd, b"q")
        end = time.monotonic() + 10.0
        while time.monotonic() < end:
            try:
                self.read(0.2, 1.0)
            except OSError:
                break
        if os.waitpid(self.pid, os.WNOHANG) == (0, 0):
            os.kill(self.pid, signal.SIGKILL)
            os.waitpid(self.pid, 0)
        os.close(self.fd)


def percentile(values: list[float], percent: float) -> float:
    """Nearest rank."""
    ranked = sorted(values)
    return ranked[min(len(ranked) - 1, round(percent / 100.0 * (len(ranked) - 1)))]


def keys_on_frames(app: Terminal, n: int) -> list[float]:
    """Cursor moves in the table of frames."""
    os.write(app.fd, b"2")
    app.wait(b"FWHM")
    app.read(1.0, 20.0)
    times = []
    for k in range(n):
        times.append(app.key_s(b"\x1b[A" if k % 40 < 20 else b"\x1b[B"))
    return times


def first_paints(campaign: Path, n: int) -> list[float]:
    """Seconds from the start of the command to the first screen."""
    times = []
    for _ in range(n):
        app = Terminal(campaign)
        times.append(app.wait(b"Tonight"))
        app.read(0.5, 20.0)
        app.close()
    return times


def eager_imports(n: int) -> list[float]:
    """Seconds that a start with all scientific imports would take before it paints."""
    times = []
    for _ in range(n):
        began = time.monotonic()
        subprocess.run([sys.executable, "-c", EAGER], check=True)
        times.append(time.monotonic() - began)
    return times


def line(name: str, value: str, prototype: str) -> None:
    """One row of the table."""
    print(f"{name:44} {value:34} {prototype}")


def keys_line(name: str, times: list[float], prototype: str) -> None:
    """Percentiles of key latencies, in ms."""
    p50, p99, most = (1000 * value for value in (percentile(times, 50), percentile(times, 99), max(times)))
    line(name, f"p50 {p50:.0f}  p99 {p99:.0f}  max {most:.0f} ms", prototype)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--demo", type=Path, required=True)
    parser.add_argument("--keys", type=int, default=150)
    parser.add_argument("--paints", type=int, default=5)
    args = parser.parse_args()
    place = Path(tempfile.mkdtemp(prefix="bench-latency-"))
    campaign = place / "campaign"
    new_campaign(args.demo, campaign, args.demo / "frames").book.close()
    line("", "now", "prototype, on a quiet machine")
    app = Terminal(campaign)  # it starts the reducer, which has every frame to measure
    app.wait(b"kept", 300.0)
    busy = keys_on_frames(app, args.keys)
    app.close()
    subprocess.run([sys.executable, "-m", "tui.cli", "reduce", str(campaign)], check=False, capture_output=True)
    paints, eager = first_paints(campaign, args.paints), eager_imports(args.paints)
    ratio = median(paints) / median(eager)
    line("first paint, median", f"{median(paints):.2f} s (limit {LIMIT_S:g} s)", "0.63 s")
    line("eager scientific imports, median", f"{median(eager):.2f} s", "3.68 s")
    line("first paint over eager imports", f"{ratio:.2f} (limit {LIMIT_OF_EAGER:g})", "0.17")
    app = Terminal(campaign)
    app.wait(b"S/N", 120.0)
    app.read(12.0, 240.0)  # the first picture may be followed by that of a stored estimate
    began = time.monotonic()
    idle = app.read(IDLE_S, IDLE_S)
    line(f"bytes sent while idle, {time.monotonic() - began:.0f} s", f"{len(idle)} (limit 0)", "0")
    quiet = keys_on_frames(app, args.keys)
    app.close()
    keys_line("key to first byte, idle", quiet, "p50 18  p99 54  max 88 ms")
    keys_line("key to first byte, during reduction", busy, "p50 31  p99 97  max 181 ms")
    print("load of this machine:", *(f"{value:.1f}" for value in os.getloadavg()))


if __name__ == "__main__":
    main()
