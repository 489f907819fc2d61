"""The night as it comes: many frames decided at once, alerts, the after-slew line, a slow link, one's own keys."""

from dataclasses import replace
from pathlib import Path

import pytest
from fake_desk import FakeDesk
from on_screen import screen_text, settle

from reduce.views import Alert
from tui.after_slew_text import after_slew_text
from tui.app import FadelineApp
from tui.link import comes_over_ssh, is_slow
from tui.preferences import Preferences, PreferencesError, preferences_file, read_preferences
from tui.screens.help import GUIDE, guide_text, help_text
from tui.widgets.row_table import RowTable


def more_doubtful(desk: FakeDesk, n: int) -> list[str]:
    """Make the last n kept frames doubtful; their ids."""
    kept = [f.id for f in desk.now.frames if f.state == "kept" and "Vesna 7" in f.targets][-n:]
    desk.change(frames=tuple(replace(f, state="doubtful") if f.id in kept else f for f in desk.now.frames))
    return kept


@pytest.mark.parametrize(("key", "state"), [("K", "kept"), ("D", "dropped")])
async def test_all_doubtful_frames_are_decided_at_once_and_one_undo_takes_it_back(key: str, state: str) -> None:
    desk = FakeDesk()
    ids = [next(f.id for f in desk.now.frames if f.state == "doubtful"), *more_doubtful(desk, 4)]
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "f", key)
        await settle(pilot)
        assert len(desk.decisions) == 1
        assert sorted(desk.decisions[0][0].removeprefix("frames:").split(",")) == sorted(ids)
        assert {f.state for f in app.snapshot.frames if f.id in ids} == {state}
        assert f"{'Kept' if key == 'K' else 'Dropped'} 5 doubtful frames (u takes it back)" in screen_text(app)
        await pilot.press("u")
        await settle(pilot)
        assert {f.state for f in app.snapshot.frames if f.id in ids} == {"doubtful"}
        assert desk.decisions == []


async def test_without_a_doubtful_frame_there_is_nothing_to_decide() -> None:
    desk = FakeDesk()
    desk.change(frames=tuple(f for f in desk.now.frames if f.state != "doubtful"))
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "K")
        await settle(pilot)
        assert desk.decisions == []
        assert "No doubtful frame is shown" in screen_text(app)


async def test_the_modulus_is_new_with_the_first_picture_after_a_decision_and_after_its_undo() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("4", "left", "left")
        await settle(pilot)
        before, made = app.view.estimate.mu, desk.snapshots_made
        await pilot.press("x")
        await settle(pilot)
        assert desk.snapshots_made == made + 1
        assert app.view.estimate.mu != before
        assert f"μ {app.view.estimate.mu:.3f}" in screen_text(app).splitlines()[1]
        await pilot.press("u")
        await settle(pilot)
        assert desk.snapshots_made == made + 2
        assert f"μ {before:.3f}" in screen_text(app).splitlines()[1]


async def test_rows_that_arrive_steal_no_cursor() -> None:
    desk = FakeDesk()
    app = FadelineApp(desk)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "up", "up", "up")
        await settle(pilot)
        table = app.screen.query_one(RowTable)
        chosen, top = table.chosen(), table.scroll_offset.y
        newest = next(f for f in reversed(desk.now.frames) if f.outcome == "measured")
        desk.change(frames=(*desk.now.frames, replace(newest, id="new" + "b" * 61, file="new.fits")))
        app._nudge.set()
        await settle(pilot)
        assert (table.chosen(), table.scroll_offset.y) == (chosen, top)
        assert table.row_count == len(table._shown)


async def test_tonight_says_where_the_telescope_points_and_what_is_missing() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        shown = screen_text(app)
        for words in ("offset 0.4′", "rotation 179.8°", "peak 16120 of 52000 ADU", "I 31/50",
                      "S/N B 140/50 enough", "Go on in I: about 2 more like this."):  # fmt: skip
            assert words in " ".join(shown.split()), words


def test_a_frame_that_was_not_recognised_says_why_instead_of_numbers() -> None:
    line = FakeDesk().now.after_slew
    lost = replace(line, outcome="no match", reason="only 3 stars were found", bands=(), advice="look")
    assert after_slew_text(lost).plain == "n11_I_1.fits  only 3 stars were found\nLook."
    assert "cannot" not in after_slew_text(replace(line, offset_arcmin=None, peak_adu=None)).plain
    assert after_slew_text(None).plain == ""


ALERTS = (Alert("cloud 1", "cloud", "a.fits: cloud: 0.5 mag less"), Alert("dropped 2", "dropped", "b.fits was dropped"))


@pytest.mark.parametrize("way", ["off", "bell", "flash"])
async def test_only_new_alerts_are_told_and_ring_as_wished(way: str, monkeypatch: pytest.MonkeyPatch) -> None:
    rung: list[int] = []
    monkeypatch.setattr(FadelineApp, "bell", lambda self: rung.append(1))
    desk = FakeDesk()
    desk.change(alerts=ALERTS[:1])
    app = FadelineApp(desk, Preferences(alert=way))
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        assert "0.5 mag less" not in screen_text(app)
        assert rung == []
        desk.change(alerts=ALERTS)
        app._nudge.set()
        await settle(pilot)
        assert "b.fits was dropped" in screen_text(app)
        assert app.screen.query_one("#status").has_class("flash") == (way == "flash")
        assert len(rung) == (way == "bell")
        desk.change()
        app._nudge.set()
        await settle(pilot)
        assert len(rung) == (way == "bell")
        await pilot.press("w")
        await settle(pilot)
        assert not app.screen.query_one("#status").has_class("flash")


# ---- slow link -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("choice", "environ", "measured_s", "slow"),
    [
        ("auto", {}, None, False),
        ("auto", {"SSH_CONNECTION": "198.51.100.7 50022 192.0.2.1 22"}, 0.02, False),
        ("auto", {"SSH_CONNECTION": "198.51.100.7 50022 192.0.2.1 22"}, 0.6, True),
        ("auto", {"SSH_TTY": "/dev/pts/3"}, None, True),
        ("no", {"SSH_TTY": "/dev/pts/3"}, None, False),
        ("yes", {}, 0.001, True),
    ],
)
def test_it_is_sparing_where_the_terminal_is_far(choice: str, environ: dict, measured_s: float, slow: bool) -> None:
    assert is_slow(choice, environ, measured_s) is slow
    assert comes_over_ssh(environ) is bool(environ)


async def test_over_a_slow_link_pictures_come_only_when_asked(monkeypatch: pytest.MonkeyPatch) -> None:
    asked: list[str] = []
    fetch = FakeDesk.preview

    async def counted(self, path, *rest, **more):
        asked.append(path)
        return await fetch(self, path, *rest, **more)

    monkeypatch.setattr(FakeDesk, "preview", counted)
    app = FadelineApp(FakeDesk(), slow_link=True)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "up", "up", "up")
        await settle(pilot)
        assert asked == []
        assert "Slow link: v" in " ".join(screen_text(app).split())
        await pilot.press("v")
        await settle(pilot)
        assert len(set(asked)) == 1
        fetched = len(asked)
        await pilot.press("escape", "w")
        await settle(pilot)
        assert len(asked) == fetched + 1


# ---- one's own keys --------------------------------------------------------------------------------------


async def test_keys_of_ones_own_act_and_are_shown() -> None:
    mine = Preferences(keys={"undo": "z", "frames.drop": "y", "help": "f1"})
    app = FadelineApp(FakeDesk(), mine)
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "up", "up", "d")
        await settle(pilot)
        assert app.desk.decisions == []
        await pilot.press("y")
        await settle(pilot)
        assert len(app.desk.decisions) == 1
        assert "y Drop" in screen_text(app)
        assert "z Undo" in screen_text(app)
        await pilot.press("u")
        await settle(pilot)
        assert len(app.desk.decisions) == 1
        await pilot.press("z")
        await settle(pilot)
        assert app.desk.decisions == []
        await pilot.press("f1")
        await settle(pilot)
        assert "  z      Take the last decision back." in help_text("frames", mine).plain
        assert "y      Drop the chosen frame." in help_text("frames", mine).plain


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ('[keys]\nundo = "n"', "n would mean both undo and note on one screen"),
        ('[keys]\nframes.keep = "d"', "d would mean both frames.keep and frames.drop"),
        ('[keys]\nundoing = "z"', "there is no action undoing; did you mean undo?"),
        ("[keys]\nundo = 3", "undo needs one key"),
        ('[keys]\nundo = "\\u001b[31m, x"', "undo needs one key"),
        ('[app]\nalert = "siren"', "alert is 'siren'; it can be off, bell, flash"),
        ('[app]\nsound = "x"', "unknown key sound; [app] has alert and slow_link"),
        ("[app]\nalert = [1]", "it can be off, bell, flash"),
        ("[colours]", "unknown table [colours]"),
        ("[app", "is not valid TOML"),
        ("app = 3", "[app] is not a table"),
    ],
)
def test_a_mistake_in_the_preferences_is_one_sentence(tmp_path: Path, text: str, words: str) -> None:
    path = tmp_path / "app.toml"
    path.write_text(text)
    with pytest.raises(PreferencesError) as refused:
        read_preferences(path)
    assert words in str(refused.value)
    assert str(path) in str(refused.value)
    assert str(refused.value).isprintable()


def test_preferences_are_read_where_the_standard_says(tmp_path: Path) -> None:
    """XDG Base Directory Specification 0.8: an unset, empty or relative XDG_CONFIG_HOME means $HOME/.config."""
    assert preferences_file({"XDG_CONFIG_HOME": "/c", "HOME": "/h"}) == Path("/c/fadeline/app.toml")
    for unset in ({}, {"XDG_CONFIG_HOME": ""}, {"XDG_CONFIG_HOME": "c"}):
        assert preferences_file(unset | {"HOME": "/h"}) == Path("/h/.config/fadeline/app.toml")
    assert read_preferences(tmp_path / "none.toml") == Preferences()
    (tmp_path / "app.toml").write_text('[app]\nalert = "bell"\nslow_link = "no"\n[keys]\nnote = "z"\n')
    assert read_preferences(tmp_path / "app.toml") == Preferences("bell", "no", {"note": "z"})


# ---- guide -----------------------------------------------------------------------------------------------


async def test_the_guide_has_two_pages_that_fit_and_close() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("G")
        await settle(pilot)
        assert "A night, from dusk to dawn" in screen_text(app)
        await pilot.press("right")
        await settle(pilot)
        assert "What to believe" in screen_text(app)
        await pilot.press("escape")
        await settle(pilot)
        assert "latest frame" in screen_text(app)


def test_the_guide_runs_its_lines_together_and_keeps_examples() -> None:
    night, doubt = (guide_text(page).plain for page in range(len(GUIDE)))
    assert "Nobody near the mount before it moves" in night
    assert '    undo = "z"\n' in doubt
    assert max(len(line) for line in doubt.splitlines() if line.startswith(" ")) <= 72
