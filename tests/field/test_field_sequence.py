from __future__ import annotations

from contextlib import suppress

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from hypothesis import given
from hypothesis import strategies as st

from reduce.field.sequence import UNSTATED_ERR_MAG, SequenceError, cross_match, read_sequence

GOOD = """# invented stars
id,ra,dec,B,B_err,V,note

n1,150.10,-20.10,14.20,0.010,13.50,near
n2,150.20,-20.20,15.10,,14.40,
n3,150.30,-20.15,,0.02,12.90,no B
"""


@pytest.fixture
def file(tmp_path):
    def write(text: str | bytes):
        path = tmp_path / "stars.csv"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    return write


def test_reads_stars_and_leaves_unknown_unknown(file):
    stars = read_sequence(file(GOOD))
    assert stars.ids == ("n1", "n2", "n3")
    assert stars.ra_deg.tolist() == [150.10, 150.20, 150.30]
    assert stars.dec_deg.tolist() == [-20.10, -20.20, -20.15]
    assert set(stars.mag) == {"B", "V"}
    assert stars.mag["B"][:2].tolist() == [14.20, 15.10]
    assert np.isnan([stars.mag["B"][2], stars.mag_err["B"][2]]).all()
    assert stars.mag_err["B"][:2].tolist() == [0.010, UNSTATED_ERR_MAG]
    assert stars.mag_err["V"].tolist() == [UNSTATED_ERR_MAG] * 3


def test_a_spreadsheet_with_byte_order_mark_and_carriage_returns(file):
    assert len(read_sequence(file(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode()))) == 3


HEAD = "id,ra,dec,V\n"
ROWS = "".join(f"s{k},{10.0 + 0.02 * k},{41.0 + 0.3 * k},14\n" for k in range(6))
MISTAKES = [
    ("", "no column 'id'"),
    ("id;ra;dec;V\ns;1;2;3\n", "no column 'id'"),
    ("id,ra,V\ns,1,14\n", "no column 'dec'"),
    ("id,ra,dec,U\ns,1,2,14\n", "no magnitudes"),
    ("id,ra,dec,V,V\ns,1,2,14,15\n", "column 'V' twice"),
    (HEAD, "no stars"),
    (HEAD + "a,1,2,14\na,3,4,15\n", "'a' twice"),
    (HEAD + ",1,2,14\n", "line 2: a star has no id"),
    (HEAD + "a,1,2,14\nb,,3,14\n", "line 3: ra is empty"),
    (HEAD + "a,361,2,14\n", "line 2: ra 361 is outside 0 to 360"),
    (HEAD + "a,1,-91,14\n", "line 2: dec -91 is outside"),
    (HEAD + "a,10:00:00,2,14\n", "decimal degrees"),
    (HEAD + "a,1,2,bright\n", "line 2: V 'bright' is no number"),
    (HEAD + "a,1,2,1_4\n", "line 2: V '1_4' is no number"),
    (HEAD + "a,1,2,inf\n", "line 2: V inf is outside"),
    (HEAD + "# comment\n\na,1,2,14\nb,1,2,x\n", "line 5: V 'x' is no number"),
    (HEAD + "a,1,2,14,5\n", "line 2: more cells than columns"),
    (HEAD + "a,1\n", "line 2: dec is empty"),
    (HEAD + ROWS, "hours"),
    (b"SIMPLE  = \xff\xfe\x00", "not a text file"),
]


@pytest.mark.parametrize(("text", "words"), MISTAKES, ids=[m[1] for m in MISTAKES])
def test_a_mistake_is_one_sentence_that_names_the_file(file, text, words):
    with pytest.raises(SequenceError) as caught:
        read_sequence(file(text))
    sentence = str(caught.value)
    assert words in sentence
    assert "stars.csv" in sentence
    assert "\n" not in sentence


def test_missing_file_and_folder(tmp_path):
    for path in (tmp_path / "none.csv", tmp_path):
        with pytest.raises(SequenceError, match="cannot be read"):
            read_sequence(path)


def test_ids_are_harmless(file):
    stars = read_sequence(file(HEAD + "a\x1b[31mb,1,2,14\n"))
    assert "\x1b" not in stars.ids[0]


@given(st.text(max_size=300))
def test_any_text_is_read_or_refused_by_name(tmp_path_factory, text):
    path = tmp_path_factory.getbasetemp() / "any.csv"
    for head in ("", HEAD):
        path.write_text(head + text, encoding="utf-8", errors="replace")
        with suppress(SequenceError):
            read_sequence(path)


@given(st.integers(0, 2**31), st.floats(-89, 89), st.floats(0, 360), st.floats(1, 200))
def test_cross_match_is_astropys(seed, dec0, ra0, radius):
    rng = np.random.default_rng(seed)
    first = (ra0 + rng.normal(0, 0.05, 20)) % 360, np.clip(dec0 + rng.normal(0, 0.05, 20), -90, 90)
    second = (ra0 + rng.normal(0, 0.05, 15)) % 360, np.clip(dec0 + rng.normal(0, 0.05, 15), -90, 90)
    found = cross_match(*first, *second, radius)
    index, apart, _ = SkyCoord(*first, unit="deg").match_to_catalog_sky(SkyCoord(*second, unit="deg"))
    clear = np.abs(apart.arcsec - radius) > 1e-6
    assert found[clear].tolist() == np.where(apart.arcsec < radius, index, -1)[clear].tolist()


def test_cross_match_with_nothing():
    nothing, one = np.zeros(0), np.array([1.0])
    assert cross_match(one, one, nothing, nothing, 1.0).tolist() == [-1]
    assert len(cross_match(nothing, nothing, one, one, 1.0)) == 0
