"""The environment is mended before the app starts."""

from tui.terminal import few_colours, plain_characters, prepare_environment


def test_size_variables_go_and_animations_are_off() -> None:
    environ = {"COLUMNS": "80", "LINES": "24", "TERM": "xterm-256color"}
    prepare_environment(environ)
    assert environ == {
        "TERM": "xterm-256color",
        "TEXTUAL_ANIMATIONS": "none",
        "TEXTUAL_SMOOTH_SCROLL": "0",
        "TEXTUAL_COLOR_SYSTEM": "256",
    }


def test_a_terminal_that_says_nothing_gets_no_colour() -> None:
    for term in ({}, {"TERM": "dumb"}):
        environ = dict(term)
        prepare_environment(environ)
        assert environ["NO_COLOR"] == "1"
        assert few_colours(environ)
        assert plain_characters({**environ, "LANG": "C.UTF-8"})


def test_an_explicit_wish_for_colours_is_respected() -> None:
    environ = {"TERM": "xterm-256color", "TEXTUAL_COLOR_SYSTEM": "truecolor"}
    prepare_environment(environ)
    assert environ["TEXTUAL_COLOR_SYSTEM"] == "truecolor"


def test_plain_characters_follow_the_locale() -> None:
    xterm = {"TERM": "xterm"}
    assert not plain_characters({**xterm, "LANG": "en_US.UTF-8"})
    assert not plain_characters({**xterm, "LC_ALL": "C.utf8", "LANG": "C"})
    assert plain_characters({**xterm, "LC_ALL": "C", "LANG": "en_US.UTF-8"})
    assert plain_characters(xterm)


def test_sixteen_colours_are_few() -> None:
    assert few_colours({"TERM": "xterm"})
    assert few_colours({"TERM": "xterm-256color", "NO_COLOR": "1"})
    assert few_colours({"TERM": "xterm", "TEXTUAL_COLOR_SYSTEM": "standard"})
    assert not few_colours({"TERM": "xterm-256color"})
    assert not few_colours({"TERM": "xterm", "COLORTERM": "truecolor"})
