"""The one table of everything a key can do; bindings, command palette and help are made from it."""

from __future__ import annotations

from dataclasses import dataclass

from textual.binding import Binding, BindingType

from tui.band_look import BAND_COLOURS

SCREENS = {
    "tonight": "Tonight",
    "frames": "Frames",
    "field": "Field",
    "light_curve": "Light curve",
    "distance": "Distance",
    "log": "Log",
    "plan": "Plan",
    "setup": "Setup",
}
"""Mode → name on the screen bar, in the order of the digit keys."""
FIRST_RUN = "first_run"
"""The screen of a folder without a campaign; it has no digit."""


@dataclass(frozen=True, slots=True)
class Action:
    """One thing to do: where it is offered, its key and its words."""

    call: str
    """Textual action, without ``action_``."""
    key: str
    key_shown: str
    label: str
    """For the footer."""
    help: str
    """One sentence for palette and help."""
    screens: tuple[str, ...] = ()
    """Modes that offer it; empty: everywhere."""
    in_footer: bool = True

    @property
    def name(self) -> str:
        """How a file of preferences calls it: ``undo``, or with its (first) screen ``frames.keep``."""
        words = self.label.lower().replace(" ", "_").replace("+", "_")
        if self.screens:
            return f"{self.screens[0]}.{words}"
        return f"go_{words}" if self.call.startswith("go(") else words

    def binding(self) -> Binding:
        """The binding for app (everywhere) or screen."""
        return Binding(
            self.key,
            self.call,
            self.label,
            show=self.in_footer,
            key_display=self.key_shown,
            tooltip=self.help,
            id=self.name,
        )


ACTIONS = (
    Action("view", "v", "v", "View", "Look at the chosen frame over the whole screen.", ("frames",)),
    Action("read", "enter", "⏎", "Read", "Read the star at the cursor.", ("picture",)),
    Action("zoom(1)", "plus,equals_sign", "+", "Zoom", "Look nearer at the cursor; - goes back.", ("picture",)),
    Action("zoom(-1)", "minus", "-", "Farther", "See twice as much of the frame.", ("picture",), False),
    Action("whole", "0", "0", "Whole", "See the whole frame.", ("picture",), False),
    Action("centre", "t", "t", "Target", "Put the target in the middle.", ("picture",)),
    Action(
        "blink",
        "b",
        "b",
        "Blink",
        "Show the reference or the sharpest other frame at the same place, then the difference, then the frame again.",
        ("picture",),
    ),
    Action(
        "next_star(1)", "full_stop", ".", "Next star", "Go to the next named star and read it.", ("picture",), False
    ),
    Action("next_star(-1)", "comma", ",", "Star before", "Go to the named star before.", ("picture",), False),
    Action("step_frame(1)", "pagedown", "PgDn", "Next frame", "Look at the next frame.", ("picture",), False),
    Action("step_frame(-1)", "pageup", "PgUp", "Frame before", "Look at the frame before.", ("picture",), False),
    Action("dots", "m", "m", "Dots", "Draw frames in shades of grey, or in dots.", ("picture",), False),
    *(
        Action(f"cursor({across}, {up})", key, arrow, f"Cursor {key}", f"Move the cursor {key}.", ("picture",), False)
        for key, arrow, across, up in (
            ("left", "←", -1, 0),
            ("right", "→", 1, 0),
            ("up", "↑", 0, 1),
            ("down", "↓", 0, -1),
            ("shift+left", "⇧←", -8, 0),
            ("shift+right", "⇧→", 8, 0),
            ("shift+up", "⇧↑", 0, 4),
            ("shift+down", "⇧↓", 0, -4),
        )
    ),
    Action("leave", "escape", "esc", "Back", "Go back to the table of frames.", ("picture",)),
    Action(
        "decide_frame('keep')",
        "k",
        "k",
        "Keep",
        "Keep the chosen frame, whatever the verdict.",
        ("frames", "picture"),
    ),
    Action("decide_frame('drop')", "d", "d", "Drop", "Drop the chosen frame.", ("frames", "picture")),
    Action(
        "decide_shown('keep')",
        "K",
        "K",
        "Keep all",
        "Keep all doubtful frames shown, as one decision.",
        ("frames",),
        False,
    ),
    Action(
        "decide_shown('drop')",
        "D",
        "D",
        "Drop all",
        "Drop all doubtful frames shown, as one decision.",
        ("frames",),
        False,
    ),
    Action(
        "next_filter",
        "f",
        "f",
        "Filter",
        "Show this target's frames, those that want you, or all.",
        ("frames",),
    ),
    Action(
        "set_aside",
        "s",
        "s",
        "Set aside",
        "Set the chosen comparison star aside, or use it again.",
        ("field",),
    ),
    Action(
        "next_axis",
        "c",
        "c",
        "Axis",
        "Draw the residuals against colour, magnitude, or the place east or north of the target.",
        ("field",),
    ),
    Action("aperture", "a", "a", "Aperture", "Choose the aperture of the shown band.", ("field",)),
    Action(
        "exclude",
        "x",
        "x",
        "Exclude",
        "Exclude the point under the cursor from the fit, or restore it.",
        ("light_curve",),
    ),
    Action(
        "move_cursor(-1)",
        "left",
        "←",
        "Earlier point",
        "Move the cursor to the point before.",
        ("light_curve",),
        False,
    ),
    Action(
        "move_cursor(1)",
        "right",
        "→",
        "Later point",
        "Move the cursor to the next point.",
        ("light_curve",),
        False,
    ),
    Action(
        "zoom_time(1)",
        "plus,equals_sign",
        "+",
        "Zoom",
        "Show half the days, about the cursor.",
        ("light_curve",),
        False,
    ),
    Action("zoom_time(-1)", "minus", "-", "Farther", "Show twice the days.", ("light_curve",), False),
    Action("zoom_time(0)", "0", "0", "All days", "Show all days.", ("light_curve",), False),
    *(
        Action(
            f"toggle_band('{band}')", band, band, f"Band {band}", f"Show or hide band {band}.", ("light_curve",), False
        )
        for band in BAND_COLOURS
    ),
    Action("host_light", "h", "h", "Host", "Choose how the host galaxy's light is taken off.", ("light_curve",)),
    Action(
        "fold",
        "f",
        "f",
        "Fold",
        "Show a pulsating star's light curve against phase, or against time.",
        ("light_curve",),
    ),
    Action("next_band", "b", "b", "Band", "Show the next band, or all of them.", ("field", "light_curve")),
    Action("next_section", "f", "f", "Section", "Go to the next section of the setup.", ("setup",)),
    Action("add_target", "a", "a", "Add", "Follow one more target.", ("setup",)),
    Action("take_back", "r", "r", "Put back", "Put the value that was changed last here back.", ("setup",)),
    Action("next_page", "ctrl+n", "^n", "Next", "Check what stands here and go on.", (FIRST_RUN,)),
    Action("page_before", "escape", "esc", "Back", "Go back one step; nothing is lost.", (FIRST_RUN,)),
    Action("next_object", "ctrl+o", "^o", "Object", "Take the next object of the headers as target.", (FIRST_RUN,)),
    Action("leave", "ctrl+q", "^q", "Leave", "Leave; no campaign is made.", (FIRST_RUN,)),
    Action("search", "slash", "/", "Search", "Search the log.", ("log",)),
    Action(
        "dismiss_safety",
        "escape",
        "esc",
        "Hide safety",
        "Hide the safety line for this session.",
        ("tonight", "plan"),
        False,
    ),
    Action("undo", "u", "u", "Undo", "Take the last decision back."),
    Action("note", "n", "n", "Note", "Write a note into the log."),
    Action(
        "step_target(-1)",
        "left_square_bracket",
        "[",
        "Target before",
        "Go to the target before.",
        in_footer=False,
    ),
    Action(
        "step_target(1)",
        "right_square_bracket",
        "]",
        "Target",
        "Go to the next target.",
    ),
    *(
        Action(f"go('{mode}')", str(digit), str(digit), name, f"Go to the screen {name}.", in_footer=False)
        for digit, (mode, name) in enumerate(SCREENS.items(), 1)
    ),
    Action(
        "plain_characters",
        "p",
        "p",
        "Plain",
        "Draw charts and pictures with plain characters, or finely.",
        in_footer=False,
    ),
    Action(
        "slow_link",
        "w",
        "w",
        "Slow link",
        "Send less over the wire: fewer redraws, no picture unless asked; or as usual again.",
        in_footer=False,
    ),
    Action("guide", "G", "G", "Guide", "Read the observer's guide, two pages.", in_footer=False),
    Action("suspend_process", "ctrl+z", "^z", "Suspend", "Go back to the shell; fg returns.", in_footer=False),
    Action("redraw", "ctrl+l", "^l", "Redraw", "Draw the whole screen again.", in_footer=False),
    Action("help", "question_mark", "?", "Help", "Show what this screen is and what its keys do."),
    Action("command_palette", "ctrl+p", "^p", "All", "Find any action by its words."),
    Action("quit", "q", "q", "Quit", "Leave; everything is stored already."),
)


def actions_of(mode: str) -> list[Action]:
    """Everything that can be done on a screen, its own actions first."""
    return [a for a in ACTIONS if mode in a.screens] + [a for a in ACTIONS if not a.screens]


def places_of(action: Action) -> tuple[str, ...]:
    """Every mode in which its key acts; on the screen of a folder without a campaign only what is made for it does."""
    return action.screens or tuple(SCREENS)


def group_of(action: Action) -> str:
    """Where it belongs, for the palette."""
    if action.call.startswith("go("):
        return "Go to"
    return "Everywhere" if not action.screens else " and ".join(_name_of(mode) for mode in action.screens)


def _name_of(mode: str) -> str:
    return SCREENS.get(mode, mode.replace("_", " ").capitalize())


def screen_bindings(mode: str) -> list[BindingType]:
    """Bindings that a screen has for itself."""
    return [a.binding() for a in ACTIONS if mode in a.screens]


def app_bindings() -> list[BindingType]:
    """Bindings of every screen."""
    return [a.binding() for a in ACTIONS if not a.screens]
