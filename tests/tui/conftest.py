"""A terminal that does not depend on who runs the tests."""

import pytest


@pytest.fixture(autouse=True)
def usual_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("LC_ALL", "LC_CTYPE", "NO_COLOR", "COLORTERM", "COLUMNS", "LINES", "TEXTUAL_COLOR_SYSTEM"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setenv("LANG", "C.UTF-8")
    monkeypatch.setenv("TERM", "xterm-256color")
