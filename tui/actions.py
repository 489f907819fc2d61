"""The one table of everything a key can do; bindings, command palette and help are made from it."""

from __future__ import annotations

from dataclasses import dataclass

from textual.binding import Binding, BindingType

SCREENS = {
    "tonight": "Tonight",
    "frames": "Frames",
    "field": "Field",
    "light_curve": "Light curve",
    "distance": "Distance",
    "log": "Log",
}
"""Mode → name on the screen bar, in the order of the digit keys."""


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

    def binding(self) -> Binding:
        """The binding for app (everywhere) or screen."""
        return Binding(
            self.key,
            self.call,
            self.label,
            show=self.in_footer,
            key_display=self.key_shown,
            tooltip=self.help,
        )


ACTIONS = (
    Action("decide_frame('keep')", "k", "k", "Keep", "Keep the chosen frame, whatever the verdict.", ("frames",)),
    Action("decide_frame('drop')", "d", "d", "Drop", "Drop the chosen frame.", ("frames",)),
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
    Action("next_band", "b", "b", "Band", "Show the next band, or all of them.", ("field", "light_curve")),
    Action("search", "slash", "/", "Search", "Search the log.", ("log",)),
    Action(
        "dismiss_safety",
        "escape",
        "esc",
        "Hide safety",
        "Hide the safety line for this session.",
        ("tonight",),
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
        "[ ]",
        "Target",
        "Go to the next target; [ goes to the one before.",
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
    Action("redraw", "ctrl+l", "^l", "Redraw", "Draw the whole screen again.", in_footer=False),
    Action("help", "question_mark", "?", "Help", "Show what this screen is and what its keys do."),
    Action("command_palette", "ctrl+p", "^p", "All", "Find any action by its words."),
    Action("quit", "q", "q", "Quit", "Leave; everything is stored already."),
)


def actions_of(mode: str) -> list[Action]:
    """Everything that can be done on a screen, its own actions first."""
    return [a for a in ACTIONS if mode in a.screens] + [a for a in ACTIONS if not a.screens]


def screen_bindings(mode: str) -> list[BindingType]:
    """Bindings that a screen has for itself."""
    return [a.binding() for a in ACTIONS if mode in a.screens]


def app_bindings() -> list[BindingType]:
    """Bindings of every screen."""
    return [a.binding() for a in ACTIONS if not a.screens]
