"""Every screen as text at the sizes that matter; labels whole, hostile text harmless."""

from dataclasses import replace

import pytest
from fake_desk import HOSTILE, FakeDesk, invented_snapshot
from on_screen import SIZES, check_golden, screen_text, settle

from reduce.plain_text import clean_text
from tui.actions import ACTIONS, SCREENS, actions_of
from tui.app import FadelineApp

DIGITS = {mode: str(digit) for digit, mode in enumerate(SCREENS, 1)}


@pytest.mark.parametrize("size", SIZES, ids=["80x24", "160x48"])
@pytest.mark.parametrize("mode", SCREENS)
async def test_screen_looks_as_agreed(mode: str, size: tuple[int, int]) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=size) as pilot:
        await settle(pilot)
        await pilot.press(DIGITS[mode])
        await settle(pilot)
        check_golden(f"{mode}_{size[0]}x{size[1]}", screen_text(app))


@pytest.mark.parametrize("mode", ["frames", "light_curve", "distance", "plan"])
async def test_plain_characters_are_all_ascii_where_drawn(mode: str) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press(DIGITS[mode], "p")
        await settle(pilot)
        text = screen_text(app)
        check_golden(f"{mode}_plain", text)
        drawn = set(text) & {chr(code) for code in (*range(0x2500, 0x25A0), *range(0x2800, 0x2900), ord("✓"))}
        assert drawn <= {"▆", "▇", "▅", "▃", "▂", "▁", "█", "▄"}  # Textual's own scrollbar


async def test_locale_without_utf8_starts_plain(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("LANG", "C")
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        assert app.plain
        assert "+ Frames > + Calibration" in screen_text(app)


@pytest.mark.parametrize("mode", SCREENS)
async def test_no_label_is_clipped_at_80_columns(mode: str) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press(DIGITS[mode])
        await settle(pilot)
        lines = screen_text(app).splitlines()
        for action in actions_of(mode):
            if action.in_footer:
                assert f"{action.key_shown} {action.label}" in lines[-1]
        for digit, name in enumerate(SCREENS.values(), 1):
            assert f"{digit} {name}" in lines[0]
        assert all(len(line) <= 80 for line in lines)
        for step in app.view.steps:
            assert step.name in lines[2]


@pytest.mark.parametrize("mode", SCREENS)
async def test_hostile_names_are_shown_as_they_are(mode: str) -> None:
    """Markup is not interpreted; the escape character was removed at the door, its letters are harmless."""
    name = clean_text(HOSTILE)
    snapshot = invented_snapshot(name)
    frames = tuple(replace(f, file=f"[red]{f.file}[/red]", reason="[blink]no[/]") for f in snapshot.frames)
    log = tuple(replace(row, body="[link=x]click[/link]") for row in snapshot.log)
    stars = tuple(replace(s, star=f"[b]{s.star}", reason="[/nonsense]") for s in snapshot.stars)
    app = FadelineApp(FakeDesk(replace(snapshot, frames=frames, log=log, stars=stars, notes=("[x]",))))
    async with app.run_test(size=(160, 48)) as pilot:
        await settle(pilot)
        await pilot.press(DIGITS[mode])
        await settle(pilot)
        text = screen_text(app)
        assert name in text
        assert "\x1b" not in text
        shown = {"frames": "[red]", "tonight": "[red]", "log": "[link=x]click[/link]", "field": "[b]C1"}
        assert shown.get(mode, name) in text


@pytest.mark.parametrize("size", [(80, 24), (40, 10), (20, 6)], ids=str)
async def test_empty_campaign_and_tiny_terminal_do_not_break_anything(size: tuple[int, int]) -> None:
    empty = replace(
        invented_snapshot(),
        targets=(),
        frames=(),
        stars=(),
        sequence=(),
        log=(),
        calibration=(),
        colour_terms=(),
    )
    app = FadelineApp(FakeDesk(empty))
    async with app.run_test(size=size) as pilot:
        await settle(pilot)
        for mode in SCREENS:
            await pilot.press(DIGITS[mode])
            own = [action.key for action in ACTIONS if mode in action.screens and action.call != "search"]
            await pilot.press(*own, "right_square_bracket", "down", "enter")
            await settle(pilot)
            assert app.current_mode == mode
