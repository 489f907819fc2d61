"""The starter files must be right as they are, and their examples when the comment signs are taken away."""

from __future__ import annotations

import re
from importlib.resources import files

from reduce.frames.dialect import built_in_dialect
from reduce.records import BANDS
from reduce.settings import Settings, parse_settings


def starter() -> str:
    return (files("reduce") / "_config" / "observatory.toml").read_text(encoding="utf-8")


def test_the_starter_changes_nothing():
    assert parse_settings(starter()) == Settings()


def test_every_example_of_the_starter_is_valid():
    lines = starter().split("\n\n", 1)[1].splitlines()
    settings = parse_settings("\n".join(re.sub(r"^# ", "", line) for line in lines))
    assert settings.site is not None
    for model in (settings.site, settings.telescope, settings.camera, settings.frames, settings.photometry):
        assert model.model_fields_set == set(type(model).model_fields), model
    assert settings.filters == {"Slot 3": "V"}


def test_the_dialect_is_in_the_form_that_the_code_compares():
    words = built_in_dialect()
    for list_ in words.kinds.values():
        assert all(re.fullmatch("[a-z]+", word) for word in list_)
    assert set(words.bands["exact"].values()) <= set(BANDS)
    for name in ("landolt_words", "sdss_words", "idle_words", "nothing"):
        assert all(word == word.casefold() for word in words.bands[name])
    for list_ in [*words.keywords.values(), *words.time.values()]:
        assert all(word == word.upper() for word in list_)
        assert len(set(list_)) == len(list_)
