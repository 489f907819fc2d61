"""observatory.toml, changed key by key: comments and order stay, a mistake changes nothing."""

from __future__ import annotations

import math
import os
import tempfile
from collections.abc import Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any, get_args, get_origin

import tomlkit
from pydantic import BaseModel

from reduce.campaign.targets import parse_angle
from reduce.plain_text import PlainError, clean_text
from reduce.settings import Settings, SettingsError, parse_settings

SETTINGS_FILE = "observatory.toml"
ANGLES = ("site.latitude_deg", "site.longitude_deg")
YES, NO = "yes", "no"


def starter_text() -> str:
    """The observatory.toml that a new campaign starts from: everything in it is a comment."""
    return (files("reduce") / "_config" / SETTINGS_FILE).read_text(encoding="utf-8").rstrip() + "\n"


def settings_texts(settings: Settings) -> dict[str, str]:
    """Every value that is set, by key, as it would be typed: ``site.latitude_deg``, ``filters.Slot 3``.

    Lists stand with commas, truth as yes or no; what has no value is left out.
    """
    found: dict[str, str] = {}

    def walk(key: str, value: Any) -> None:
        if isinstance(value, Mapping):
            for name, inner in value.items():
                walk(f"{key}.{name}" if key else str(name), inner)
        elif isinstance(value, bool):
            found[key] = YES if value else NO
        elif isinstance(value, (list, tuple)):
            if value:
                found[key] = ", ".join(map(str, value))
        elif isinstance(value, float):
            found[key] = f"{value:.10g}"
        elif value not in (None, ""):
            found[key] = str(value)

    walk("", settings.model_dump())
    return found


def settings_keys() -> list[str]:
    """Every key that takes one value (a dictionary's keys are names), in the order of the settings."""
    found = []
    for table, field in Settings.model_fields.items():
        model: Any = _plain(field.annotation)
        if isinstance(model, type) and issubclass(model, BaseModel):
            for key, inner in model.model_fields.items():
                if get_origin(_plain(inner.annotation)) is not dict:
                    found.append(f"{table}.{key}")
    return found


def changed_text(text: str, changes: Mapping[str, str]) -> str:
    """TOML text with these keys set as typed; an empty text takes the key away.

    Raises
    ------
    SettingsError
        One sentence: a text is not what its key wants, or the result would not be valid.
    """
    try:
        document = tomlkit.parse(text)
    except tomlkit.exceptions.TOMLKitError as error:
        raise SettingsError(f"{SETTINGS_FILE} is not valid TOML: {error}.") from error
    for key, typed in changes.items():
        _set(document, key, clean_text(typed, 500).strip())
    changed = tomlkit.dumps(document)
    parse_settings(changed, SETTINGS_FILE)
    return changed


def change_settings(path: Path, changes: Mapping[str, str]) -> Settings:
    """Change the file; it is whole at every moment.

    Raises
    ------
    SettingsError
        As `changed_text`, or the file cannot be written; it is then as it was.
    """
    try:
        text = path.read_text(encoding="utf-8") if path.exists() else starter_text()
        changed = changed_text(text, changes)
        _replace_file(path, changed)
    except (OSError, UnicodeDecodeError) as error:
        why = getattr(error, "strerror", None) or str(error)
        raise SettingsError(f"{clean_text(path, 300)} cannot be changed: {clean_text(why).lower()}.") from error
    return parse_settings(changed, str(path))


def stamp_of(path: Path) -> tuple[int, int, int] | None:
    """What changes when a file is written or replaced; None without one."""
    try:
        stat = path.stat()
    except OSError:
        return None
    return stat.st_ino, stat.st_size, stat.st_mtime_ns


def _replace_file(path: Path, text: str) -> None:
    """Write beside the file, then put in its place; its permissions stay."""
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(name, path.stat().st_mode & 0o777 if path.exists() else 0o644)
        os.replace(name, path)
    except BaseException:
        os.unlink(name)
        raise


def _set(document: tomlkit.TOMLDocument, key: str, typed: str) -> None:
    table, *rest = key.split(".", 1)
    if not rest or table not in Settings.model_fields:
        raise SettingsError(f"There is no setting {clean_text(key)}.")
    value = _value(key, typed) if typed else None
    parts = [table, rest[0]]
    if table not in ("filters",) and "." in rest[0]:
        parts = [table, *rest[0].split(".", 1)]
    place: Any = document
    for part in parts[:-1]:
        if part not in place:
            if value is None:
                return
            place[part] = tomlkit.inline_table() if place is not document else tomlkit.table()
        place = place[part]
    if value is not None:
        place[parts[-1]] = value
        return
    if parts[-1] in place:
        del place[parts[-1]]
    if not place and table in document:  # a table that says nothing any more
        if len(parts) == 3:
            del document[table][parts[1]]
        if not document[table]:
            del document[table]


def _value(key: str, typed: str) -> Any:
    """What was typed as the value that the key wants."""
    kind = _kind(key)
    if kind is bool:
        if typed.casefold() not in (YES, NO):
            raise SettingsError(f"{key}: {typed!r} is neither {YES} nor {NO}.")
        return typed.casefold() == YES
    if kind is tuple:
        return [part.strip() for part in typed.split(",") if part.strip()]
    if kind is int or kind is float:
        try:
            number = parse_angle(typed, key, False) if key in ANGLES else float(typed)
        except PlainError as error:
            raise SettingsError(str(error)) from error
        except ValueError as error:
            raise SettingsError(f"{key}: {typed!r} is not a number; write decimals with a point.") from error
        if not math.isfinite(number):
            raise SettingsError(f"{key}: {typed!r} is not a number that can be used.")
        return int(number) if number.is_integer() and "." not in typed and abs(number) < 1e15 else number
    return typed


def _kind(key: str) -> type:
    """float, int, bool, tuple or str: what the settings declare for a key."""
    annotation: Any = Settings
    for part in key.split("."):
        if isinstance(annotation, type) and issubclass(annotation, BaseModel):
            field = annotation.model_fields.get(part)
            if field is None:
                raise SettingsError(f"There is no setting {clean_text(key)}.")
            annotation = _plain(field.annotation)
        elif get_origin(annotation) is dict:
            annotation = _plain(get_args(annotation)[1])
            break  # the rest of the key is a name, whatever stands in it
    origin = get_origin(annotation) or annotation
    return origin if origin in (float, int, bool, tuple) else str


def _plain(annotation: Any) -> Any:
    """An annotation without ``None`` and without limits."""
    options = [option for option in get_args(annotation) if option is not type(None)]
    if get_origin(annotation) in (dict, tuple) or not options:
        return annotation
    first = options[0]
    return _plain(first) if get_args(first) else first
