"""How one person wants the app: a file of one's own, since observers share a campaign and not their terminals.

``$XDG_CONFIG_HOME/fadeline/app.toml`` (or ``~/.config/fadeline/app.toml``)::

    [app]
    alert = "bell"        # off, bell or flash: on a dropped frame, cloud, focus drift, a low or saturating target
    slow_link = "auto"    # auto, yes or no

    [keys]                # action = key; an action of one screen after the screen's name
    undo = "z"
    frames.keep = "y"
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from itertools import product
from pathlib import Path
from typing import Any, Literal, get_args

from reduce.plain_text import PlainError, clean_text
from tui.actions import ACTIONS, Action, places_of

AlertWay = Literal["off", "bell", "flash"]
SlowLink = Literal["auto", "yes", "no"]
_NAMES = {"slash": "/", "question_mark": "?", "left_square_bracket": "[", "right_square_bracket": "]"}
_SIGNS = {sign: name for name, sign in _NAMES.items()}


class PreferencesError(PlainError):
    """The file cannot be used; one sentence with file, key and remedy."""


@dataclass(frozen=True, slots=True)
class Preferences:
    """What the file says."""

    alert: AlertWay = "off"
    slow_link: SlowLink = "auto"
    keys: Mapping[str, str] = field(default_factory=dict)
    """Name of an action → key."""

    def key_shown(self, action: Action) -> str:
        """The key as footer and help write it."""
        key = self.keys.get(action.name)
        return action.key_shown if key is None else _shown(key)

    @property
    def keymap(self) -> dict[str, str]:
        """The same keys by their long names."""
        return {name: _SIGNS.get(key, key) for name, key in self.keys.items()}


def preferences_file(environ: Mapping[str, str]) -> Path:
    """Where the file lies."""
    folder = environ.get("XDG_CONFIG_HOME", "")
    # the standard says that a relative path there counts as unset
    base = Path(folder) if folder.startswith("/") else Path(environ.get("HOME", "~")).expanduser() / ".config"
    return base / "fadeline" / "app.toml"


def read_preferences(path: Path) -> Preferences:
    """What the file says; without a file everything is as built in.

    Raises
    ------
    PreferencesError
        One sentence.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError:
        return Preferences()
    except (OSError, UnicodeDecodeError) as error:
        raise PreferencesError(f"{path} cannot be read: {clean_text(error)}.") from error
    import tomllib  # only who has a file pays for it

    try:
        content = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise PreferencesError(f"{path} is not valid TOML: {clean_text(error)}.") from error
    for table in content:
        if table not in ("app", "keys"):
            raise PreferencesError(f"{path} has an unknown table [{clean_text(table)}]; there are [app] and [keys].")
        if not isinstance(content[table], dict):
            raise PreferencesError(f"{path}: [{table}] is not a table; write [{table}] on a line of its own.")
    app, keys = content.get("app", {}), content.get("keys", {})
    for name in app:
        if name not in ("alert", "slow_link"):
            raise PreferencesError(f"{path} has an unknown key {clean_text(name)}; [app] has alert and slow_link.")
    checked = _checked_keys(path, keys)
    return Preferences(
        _one_of(path, "alert", app.get("alert", "off"), get_args(AlertWay)),
        _one_of(path, "slow_link", app.get("slow_link", "auto"), get_args(SlowLink)),
        checked,
    )


def _one_of(path: Path, name: str, value: Any, allowed: tuple[str, ...]) -> Any:
    if value not in allowed:
        raise PreferencesError(f"{path}: {name} is {clean_text(value)!r}; it can be {', '.join(allowed)}.")
    return value


def _checked_keys(path: Path, keys: Mapping[str, Any]) -> dict[str, str]:
    known = {action.name for action in ACTIONS}
    keys = {
        f"{name}.{part}" if part else name: key
        for name, value in keys.items()
        for part, key in (value.items() if isinstance(value, dict) else (("", value),))
    }
    for name, key in keys.items():
        if name not in known:
            near = get_close_matches(name, known, 1, 0.4)
            hint = f"did you mean {near[0]}?" if near else "those of one screen begin with it, as in frames.keep."
            raise PreferencesError(f"{path}, [keys]: there is no action {clean_text(name)}; {hint}")
        if not isinstance(key, str) or not key.strip() or "," in key:
            raise PreferencesError(f"{path}, [keys]: {name} needs one key, such as z or ctrl+t.")
    wanted = {name: _SIGNS.get(key.strip(), key.strip()) for name, key in keys.items()}
    taken: dict[tuple[str, str], str] = {}
    for action in ACTIONS:
        for place, key in product(places_of(action), wanted.get(action.name, action.key).split(",")):
            other = taken.setdefault((place, key), action.name)
            if other != action.name:
                raise PreferencesError(
                    f"{path}, [keys]: {_shown(key)} would mean both {other} and {action.name} on one screen; "
                    "give one of them another key."
                )
    return {name: key.strip() for name, key in keys.items()}


def _shown(key: str) -> str:
    return _NAMES.get(key, key).replace("ctrl+", "^")
