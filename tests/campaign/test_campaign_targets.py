"""Targets as people type them."""

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.campaign.targets import TargetError, corrected, parse_position, parse_target
from reduce.records import Target


def test_degrees_and_sexagesimal_mean_the_same_place():
    decimal = parse_target("Lantern 3,150.25,-12.5,type_ia,0.012", None, None, None)
    sexagesimal = parse_target("Lantern 3,10:01:00,-12:30:00,type_ia,0.012", None, None, None)
    assert decimal.ra_deg == pytest.approx(sexagesimal.ra_deg, abs=1e-12)
    assert decimal.dec_deg == pytest.approx(sexagesimal.dec_deg, abs=1e-12)
    assert decimal.z == 0.012


def test_a_small_negative_declination_keeps_its_sign():
    assert parse_position("10:01:00,-00:30:00", "Target")[1] == -0.5


def test_unknown_reddening_stays_unknown_and_scales_are_told_apart():
    assert parse_target("A,1,2,type_ia", None, None, None).ebv_mw is None
    assert parse_target("A,1,2,type_ia", "0.05", None, None).ebv_scale == "SF11"
    with_map = parse_target("A,1,2,type_ia", "0.05,SFD", "1.01,2.01", Path("/frames/before"))
    assert (with_map.ebv_mw, with_map.ebv_scale) == (0.05, "SFD")
    assert (with_map.host_ra_deg, with_map.host_dec_deg) == (1.01, 2.01)
    assert with_map.reference_folder == "/frames/before"


@pytest.mark.parametrize(
    ("text", "ebv", "host", "words"),
    [
        ("A,1,2", None, None, "NAME,RA,DEC,KIND"),
        (",1,2,type_ia", None, None, "NAME,RA,DEC,KIND"),
        ("A,361,2,type_ia", None, None, "RA 361"),
        ("A,1,-91,type_ia", None, None, "Dec -91"),
        ("A,1,2,quasar", None, None, "quasar"),
        ("A,x,2,type_ia", None, None, "not a number"),
        ("A,10:61:00,2,type_ia", None, None, "outside 0 to 60"),
        ("A,1,2,type_ia,3600", None, None, "redshift 3600"),
        ("A,1,2,type_ia,nan", None, None, "not a number"),
        ("A,1,2,type_ia", "0.05,XYZ", None, "neither SF11 nor SFD"),
        ("A,1,2,type_ia", "-0.1", None, "outside 0 to 5"),
        ("A,1,2,type_ia", None, "10", "not RA,DEC"),
        ("A,1,2,type_ia", None, "10,10", "degrees from A"),
    ],
)
def test_each_mistake_is_one_sentence(text, ebv, host, words):
    with pytest.raises(TargetError) as refused:
        parse_target(text, ebv, host, None)
    assert words in str(refused.value)


def test_control_codes_do_not_survive_in_a_name():
    assert "\x1b" not in parse_target("A\x1b[31mB,1,2,other", None, None, None).name


@given(st.floats(0, 359.99999), st.floats(-90, 90))
def test_decimal_positions_are_kept_exactly(ra, dec):
    assert parse_position(f"{ra!r},{dec!r}", "Target") == (ra, dec)


def test_metallicity_and_relation_of_a_pulsating_star():
    star = Target("Korab b", "cepheid", 10.0, 10.0)
    found = corrected(star, metallicity="-0.3,0.1", relation="freedman 2001")
    assert (found.metallicity_dex, found.metallicity_err, found.relation) == (-0.3, 0.1, "Freedman 2001")
    assert corrected(found, metallicity="0.1").metallicity_err is None
    assert corrected(found, relation="").relation is None
    for facts, words in (
        ({"metallicity": "8.7"}, "outside −4 to 1.5 dex"),
        ({"metallicity": "poor"}, "not a number"),
        ({"relation": "Muraveva 2018"}, "is not one of: OGLE-III LMC"),
    ):
        with pytest.raises(TargetError, match=words):
            corrected(star, **facts)
