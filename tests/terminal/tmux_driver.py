"""A program in a private tmux server of fixed size; waits for text, never for time."""

from __future__ import annotations

import shlex
import subprocess
import time
import uuid
from collections.abc import Callable


class Tmux:
    """One program; ``close`` ends its server. A missing tmux is an error, not a reason to skip."""

    def __init__(
        self,
        argv: list[str],
        cols: int = 80,
        rows: int = 24,
        env: dict[str, str] | None = None,
        cwd: str = "/",
    ) -> None:
        self.socket = f"fadeline-{uuid.uuid4().hex[:8]}"
        wanted = {"LANG": "C.UTF-8", "TERM": "tmux-256color", "TZ": "UTC"} | (env or {})
        exports = " ".join(f"{key}={shlex.quote(value)}" for key, value in wanted.items())
        command = f"env -u COLUMNS -u LINES -u NO_COLOR {exports} {shlex.join(argv)}; echo EXIT=$?; read hold"
        size = ("-x", str(cols), "-y", str(rows))
        self.run("-f", "/dev/null", "new-session", "-d", *size, "-c", cwd, command)
        self.run("set", "-g", "status", "off")
        self.run("set", "-g", "escape-time", "0")
        self.resize(cols, rows)

    def run(self, *args: str) -> str:
        done = subprocess.run(["tmux", "-u", "-L", self.socket, *args], capture_output=True, text=True, check=True)
        return done.stdout

    def resize(self, cols: int, rows: int) -> None:
        self.run("resize-window", "-x", str(cols), "-y", str(rows))

    def keys(self, *keys: str) -> None:
        self.run("send-keys", *keys)

    def screen(self, styles: bool = False) -> str:
        return self.run("capture-pane", "-p", *(["-e"] if styles else []))

    def wait(self, text: str, timeout_s: float = 60.0) -> str:
        """The screen as soon as it shows the text."""
        return self.wait_until(lambda screen: text in screen, timeout_s, repr(text))

    def wait_until(self, seen: Callable[[str], object], timeout_s: float = 60.0, what: str = "it") -> str:
        """The screen as soon as ``seen`` says so."""
        end = time.monotonic() + timeout_s
        while not seen(screen := self.screen()):
            if time.monotonic() > end:
                raise AssertionError(f"{what} is not on the screen:\n{screen}")
            time.sleep(0.02)
        return screen

    def stable(self, styles: bool = False, quiet_s: float = 0.3, timeout_s: float = 20.0) -> str:
        """The screen once it has not changed for a while."""
        end = time.monotonic() + timeout_s
        last, since = self.screen(styles), time.monotonic()
        while time.monotonic() < end:
            time.sleep(0.03)
            now = self.screen(styles)
            if now != last:
                last, since = now, time.monotonic()
            elif time.monotonic() - since > quiet_s:
                return now
        raise AssertionError("the screen never became stable")

    def close(self) -> None:
        subprocess.run(["tmux", "-L", self.socket, "kill-server"], capture_output=True, check=False)
