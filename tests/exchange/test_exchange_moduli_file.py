"""Moduli of one galaxy from CSV files: what is understood, and the one sentence for what is not."""

import pytest

from reduce.exchange.moduli_file import ModuliFileError, read_moduli


def read(tmp_path, text):
    path = tmp_path / "moduli.csv"
    path.write_text(text)
    return read_moduli(path)


def test_lines_with_shared_errors(tmp_path):
    text = "# one galaxy\nname,mu,err,LMC anchor,dust\nCepheids,29.18,0.04,0.026,\n\nIa,29.20,0.12,,-0.01\n"
    assert read(tmp_path, text) == [
        ("Cepheids", 29.18, 0.04, {"LMC anchor": 0.026}),
        ("Ia", 29.20, 0.12, {"dust": -0.01}),
    ]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "needs a header"),
        ("name,mu,err\n", "a line below"),
        ("name,mu\na,1\n", "needs a header"),
        ("name,mu,err,x,x\na,30,0.1,0,0\n", "needs a header"),
        ("name,mu,err\na,30\n", "2 cells where the header has 3"),
        ("name,mu,err\na,thirty,0.1\n", "mu is no number"),
        ("name,mu,err\na,nan,0.1\n", "mu is no number"),
        ("name,mu,err\na,,0.1\n", "mu is no number"),
        ("name,mu,err\na,30,0\n", "err must be above 0"),
        ("name,mu,err\n\x1b[31ma,30,-1\n", "err must be above 0"),
    ],
)
def test_every_mistake_is_one_sentence(tmp_path, text, words):
    with pytest.raises(ModuliFileError, match=words) as caught:
        read(tmp_path, text)
    assert "\x1b" not in str(caught.value)
    assert "moduli.csv" in str(caught.value)


def test_a_missing_file_is_one_sentence(tmp_path):
    with pytest.raises(ModuliFileError, match="cannot be read"):
        read_moduli(tmp_path / "none.csv")
