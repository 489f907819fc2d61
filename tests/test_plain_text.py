"""Text from outside: printable, on one line, of bounded length."""

from hypothesis import given
from hypothesis import strategies as st

from reduce.plain_text import clean_text


@given(st.text())
def test_what_comes_out_is_printable_on_one_line(text):
    cleaned = clean_text(text)
    assert cleaned.isprintable()
    assert len(cleaned) <= 200


def test_an_escape_sequence_becomes_letters():
    assert clean_text("M\x1b[2J\x07 51\r\n") == "M·[2J· 51"


def test_ordinary_text_is_untouched():
    assert clean_text("Δm15 of V0 (étoile)") == "Δm15 of V0 (étoile)"
