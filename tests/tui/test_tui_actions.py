"""The table of actions is the truth: bindings, palette and help hold all of it and nothing is dead."""

from importlib import import_module

import pytest
from fake_desk import FakeDesk
from on_screen import screen_text, settle

from tui.actions import ACTIONS, FIRST_RUN, SCREENS, actions_of
from tui.app import FadelineApp
from tui.screens.help import help_text
from tui.screens.palette import ActionCommands, Palette


@pytest.mark.parametrize("mode", SCREENS)
def test_every_action_has_its_method(mode: str) -> None:
    module = import_module(f"tui.screens.{mode}")
    screen = next(v for k, v in vars(module).items() if k.endswith("Screen") and getattr(v, "MODE", "") == mode)
    for action in actions_of(mode):
        owner = screen if action.screens else FadelineApp
        assert callable(getattr(owner, "action_" + action.call.partition("(")[0], None)), action


@pytest.mark.parametrize("mode", SCREENS)
def test_no_key_means_two_things_on_one_screen(mode: str) -> None:
    keys = [key for action in actions_of(mode) for key in action.key.split(",")]
    assert len(keys) == len(set(keys))


@pytest.mark.parametrize("mode", SCREENS)
async def test_every_action_is_bound_found_and_explained(mode: str) -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press(str(list(SCREENS).index(mode) + 1))
        await settle(pilot)
        bound = app.screen.active_bindings
        for action in actions_of(mode):
            for key in action.key.split(","):
                assert bound[key].binding.action == action.call
        hits = [hit async for hit in ActionCommands(app.screen).discover()]
        words = " ".join(str(hit.text) for hit in hits)
        for action in actions_of(mode):
            assert action.help in help_text(mode).plain
            assert action.call == "command_palette" or action.help in words


def test_actions_name_screens_that_exist() -> None:
    for mode in {mode for action in ACTIONS for mode in action.screens}:
        assert mode in SCREENS or mode == FIRST_RUN or import_module(f"tui.screens.{mode}")


async def test_help_opens_and_closes() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("4", "question_mark")
        await settle(pilot)
        assert "Magnitudes of the nights" in screen_text(app)
        await pilot.press("escape")
        await settle(pilot)
        assert app.current_mode == "light_curve"
        assert "Magnitudes of the nights" not in screen_text(app)


async def test_palette_runs_what_is_chosen_on_the_screen_below() -> None:
    app = FadelineApp(FakeDesk())
    async with app.run_test(size=(80, 24)) as pilot:
        await settle(pilot)
        await pilot.press("2", "ctrl+p")
        await settle(pilot)
        assert isinstance(app.screen, Palette)
        assert not app.screen.query_one("Input").cursor_blink
        await pilot.press(*"drop the chosen")
        for _ in range(50):
            await pilot.pause()
            if "Drop: Drop the chosen frame" in screen_text(app):
                break
        await pilot.press("enter")
        await settle(pilot)
        assert app.desk.decisions == [("frame:z2", "state", "drop")]
