"""Light curves from CSV files: what is understood, and the one sentence for what is not."""

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from reduce.exchange.light_curve_file import LightCurveFileError, read_light_curves
from reduce.plain_text import PlainError

HEADER = "name,mjd,band,mag,err,z,ebv_mw"


def read(tmp_path, text, name="curve.csv"):
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_light_curves(path)


def test_two_objects_in_the_order_of_the_file(tmp_path):
    text = f"""{HEADER}
Wick 2,60010.25,B,15.2,0.02,0.012,0.03
Ember 9,60010.30,V,16.1,0.05,,
Wick 2,60011.26,V,15.1,0.03,0.012,0.03
"""
    (wick, wick_curve), (ember, ember_curve) = read(tmp_path, text)
    assert (wick.name, wick.kind, wick.z, wick.ebv_mw, wick.ebv_scale) == (
        "Wick 2",
        "type_ia",
        0.012,
        0.03,
        "SF11",
    )
    assert (ember.name, ember.z, ember.ebv_mw) == ("Ember 9", None, None)
    assert math.isnan(wick.ra_deg)
    assert wick_curve.mjd.tolist() == [60010.25, 60011.26]
    assert wick_curve.band.tolist() == ["B", "V"]
    assert wick_curve.night.tolist() == ["60010", "60011"]
    assert wick_curve.err_night.tolist() == [0.0, 0.0]
    assert np.isnan(wick_curve.err_band).all()
    # definition of zero point 25: flux = 10**(-0.4 (mag - 25))
    assert wick_curve.flux[0] == pytest.approx(10 ** (-0.4 * (15.2 - 25.0)))
    assert wick_curve.flux_err[0] / wick_curve.flux[0] == pytest.approx(0.02 * math.log(10) / 2.5)
    assert len(ember_curve) == 1


def test_zero_reddening_is_not_unknown_reddening(tmp_path):
    ((target, _),) = read(tmp_path, f"{HEADER}\nA,60000,B,15,0.1,0,0\n")
    assert (target.z, target.ebv_mw) == (0.0, 0.0)


def test_limits_carry_flux_and_no_magnitude(tmp_path):
    limit, point = "A,60000,B,,,0.01,0.02,-3.5,12,", "A,60001,B,18,0.1,0.01,0.02,,,0.03"
    text = f"{HEADER},flux,flux_err,err_band\n{limit}\n{point}\n"
    ((_, curve),) = read(tmp_path, text)
    assert np.isnan(curve.mag[0])
    assert np.isnan(curve.err[0])
    assert (curve.flux[0], curve.flux_err[0]) == (-3.5, 12.0)
    assert curve.err_band[1] == 0.03
    assert np.isnan(curve.err_band[0])


def test_spreadsheet_habits_are_understood(tmp_path):
    text = (
        "\ufeff# made by hand\r\n"
        + HEADER.replace(",", " , ")
        + ',note\r\n\r\n"Wick, 2", 60010.5 ,B,15.2,0.02,,,"a, b"\r\n,,,,,,,\r\n'
    )
    ((target, curve),) = read(tmp_path, text)
    assert target.name == "Wick, 2"
    assert curve.mjd.tolist() == [60010.5]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (f"{HEADER}\nA,sixty,B,15,0.1,,\n", ["line 2", "column mjd", "'sixty'"]),
        (f"{HEADER}\nA,2460000.5,B,15,0.1,,\n", ["line 2", "column mjd", "Julian date", "2400000.5"]),
        (f"{HEADER}\nA,,B,15,0.1,,\n", ["column mjd", "empty"]),
        (f"{HEADER}\nA,60000,B,nan,0.1,,\n", ["column mag", "nan"]),
        (f"{HEADER}\nA,60000,B,inf,0.1,,\n", ["column mag", "inf"]),
        (f"{HEADER}\nA,60000,B,99.99,0.1,,\n", ["column mag", "99.99"]),
        (f"{HEADER}\nA,60000,B,15,0,,\n", ["column err", "above 0"]),
        (f"{HEADER}\nA,60000,B,15,-0.1,,\n", ["column err"]),
        (f"{HEADER}\nA,60000,B,15,,,\n", ["column err"]),
        (f"{HEADER}\nA,60000,B,,,,\n", ["column mag", "flux"]),
        (f"{HEADER},flux\nA,60000,B,,,,,5\n", ["column flux_err"]),
        (f"{HEADER}\nA,60000,,15,0.1,,\n", ["column band"]),
        (f"{HEADER}\n,60000,B,15,0.1,,\n", ["column name"]),
        (f"{HEADER}\nA,60000,B,15,0.1,,-0.1\n", ["column ebv_mw"]),
        (f"{HEADER}\nA,60000,B,15,0.1,0.01,\nA,60001,B,15,0.1,0.02,\n", ["line 3", "column z", "differs"]),
        (f"{HEADER}\nA,60000,B,15,0.1,,0.1\nA,60001,B,15,0.1,,\n", ["line 3", "column ebv_mw"]),
        (f"{HEADER}\nA,60000,B,15\n", ["line 2", "4 cells"]),
        ("name,mjd,band,mag,err,z\nA,60000,B,15,0.1,\n", ["no column ebv_mw"]),
        (f"{HEADER},mag\nA,60000,B,15,0.1,,,15\n", ["column mag", "twice"]),
        (f"{HEADER}\n", ["no points"]),
        ("", ["no points"]),
        (b"\x89PNG\r\n\x1a\n\xff\xfe\x00", ["not a CSV"]),
        (f'{HEADER}\nA,60000,"B,15,0.1,,\n', ["not a CSV"]),
    ],
)  # fmt: skip
def test_bad_input_gets_one_sentence(tmp_path, text, words):
    with pytest.raises(LightCurveFileError) as caught:
        read(tmp_path, text)
    message = str(caught.value)
    assert "curve.csv" in message
    assert message.count("\n") == 0
    assert message.endswith(".")
    for word in words:
        assert word in message
    assert isinstance(caught.value, ValueError)
    assert isinstance(caught.value, PlainError)


def test_a_missing_file_gets_one_sentence(tmp_path):
    with pytest.raises(LightCurveFileError, match=r"none\.csv cannot be read: No such file"):
        read_light_curves(tmp_path / "none.csv")
    with pytest.raises(LightCurveFileError, match="cannot be read"):
        read_light_curves(tmp_path)


def test_control_codes_do_not_pass(tmp_path):
    ((target, curve),) = read(tmp_path, f"{HEADER}\nA\x1b[31mB,60000,V\x07,15,0.1,,\n")
    assert "\x1b" not in target.name
    assert "\x07" not in str(curve.band[0])
    with pytest.raises(LightCurveFileError) as caught:
        read(tmp_path, f"{HEADER}\nA,\x1b]0;x\x07,B,15,0.1,,\n")
    assert "\x1b" not in str(caught.value)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(body=st.text(max_size=80))
def test_any_text_is_read_or_refused_in_one_sentence(tmp_path, body):
    try:
        curves = read(tmp_path, (HEADER + "\n" + body).encode("utf-8", "surrogatepass"))
    except LightCurveFileError as error:
        sentence = str(error)
    else:
        sentence = ""
        assert all(np.isfinite(curve.mjd).all() for _, curve in curves)
    assert sentence.isprintable()


def test_sources_and_passbands_are_read(tmp_path):
    text = f"""{HEADER},source,passbands
A,60000,B,15,0.1,,,,
A,60001,B,15,0.1,,,Beacon Hill,unknown
A,60002,B,15,0.1,,,\x1b[2JBeacon,known
"""
    ((_, curve),) = read(tmp_path, text)
    assert curve.source.tolist()[:2] == ["", "Beacon Hill"]
    assert "\x1b" not in curve.source[2]
    assert curve.by_colour_terms.tolist() == [False, True, False]
    with pytest.raises(LightCurveFileError, match="neither known nor unknown"):
        read(tmp_path, f"{HEADER},passbands\nA,60000,B,15,0.1,,,perhaps\n")


def test_a_cepheid_with_all_that_is_known_of_it(tmp_path):
    text = f"""{HEADER},kind,bjd_tdb,metallicity_dex,metallicity_err,relation
Korab b,60010.25,V,15.2,0.02,,0.03,cepheid,2460010.7531,-0.3,0.1,OGLE-III LMC
Korab b,60012.25,V,15.4,0.02,,0.03,cepheid,,-0.3,0.1,OGLE-III LMC
"""
    ((target, curve),) = read(tmp_path, text)
    assert (target.kind, target.metallicity_dex, target.metallicity_err) == ("cepheid", -0.3, 0.1)
    assert target.relation == "OGLE-III LMC"
    assert curve.bjd_tdb[0] == 2460010.7531
    assert math.isnan(curve.bjd_tdb[1])


def test_an_unknown_kind_is_one_sentence(tmp_path):
    with pytest.raises(LightCurveFileError, match="line 2, column kind: 'comet' is not one of type_ia, cepheid"):
        read(tmp_path, f"{HEADER},kind\nKorab b,60010.25,V,15.2,0.02,,,comet\n")
