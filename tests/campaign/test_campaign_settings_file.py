"""observatory.toml changed key by key: comments stay, what cannot be changes nothing, the file is always whole."""

from __future__ import annotations

import os
import stat

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reduce.campaign.settings_file import change_settings, changed_text, settings_keys, settings_texts, starter_text
from reduce.settings import SettingsError, parse_settings

COMMENTED = """# mine
[camera]   # the old one
gain_e_per_adu = 1.4  # from the maker's sheet
# read_noise_e = 9

[filters]
"Slot 3" = "V"
"""


def test_comments_order_and_everything_else_stay():
    text = changed_text(COMMENTED, {"camera.gain_e_per_adu": "1.52"})
    assert text == COMMENTED.replace("1.4", "1.52")
    assert changed_text(text, {"camera.gain_e_per_adu": "1.4"}) == COMMENTED


@pytest.mark.parametrize(
    ("changes", "get", "value"),
    [
        ({"site.latitude_deg": "-33 30 36", "site.longitude_deg": "149.25"}, lambda s: s.site.latitude_deg, -33.51),
        ({"camera.overrides_header": "yes"}, lambda s: s.camera.overrides_header, True),
        ({"camera.fringe_bands": "I, R"}, lambda s: s.camera.fringe_bands, ("I", "R")),
        ({"filters.Filter 2.5 [new]": "r"}, lambda s: s.filters["Filter 2.5 [new]"], "r"),
        ({"photometry.aperture_fwhm.V": "1.5"}, lambda s: s.photometry.aperture_fwhm, {"V": 1.5}),
        ({"frames.flat": "flats/*, *_f_*"}, lambda s: s.frames.flat, ("flats/*", "*_f_*")),
        ({"telescope.name": "the = [old] #1"}, lambda s: s.telescope.name, "the = [old] #1"),
        ({"camera.saturation_adu": "65535"}, lambda s: s.camera.saturation_adu, 65535.0),
    ],
)
def test_each_kind_of_value_arrives(changes, get, value):
    settings = parse_settings(changed_text(starter_text(), changes))
    assert get(settings) == pytest.approx(value) if isinstance(value, float) else get(settings) == value


def test_an_empty_text_takes_a_value_away_and_leaves_no_empty_table():
    assert parse_settings(changed_text(COMMENTED, {"filters.Slot 3": ""})) == parse_settings(
        "[camera]\ngain_e_per_adu=1.4"
    )
    text = changed_text("[photometry]\naperture_fwhm = { V = 1.5 }\n", {"photometry.aperture_fwhm.V": ""})
    assert "photometry" not in text
    assert changed_text(COMMENTED, {"site.name": ""}) == COMMENTED


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"camera.gain_e_per_adu": "1,4"}, "not a number"),
        ({"camera.gain_e_per_adu": "-1"}, "greater than 0"),
        ({"camera.gain_e_per_adu": "nan"}, "camera.gain_e_per_adu"),
        ({"site.latitude_deg": "43"}, "site.longitude_deg"),
        ({"site.latitude_deg": "91", "site.longitude_deg": "0"}, "less than or equal to 90"),
        ({"filters.X": "Q"}, "'B', 'V', 'R'"),
        ({"camera.overrides_header": "perhaps"}, "neither yes nor no"),
        ({"camera.colour": "1"}, "no setting camera.colour"),
        ({"nonsense": "1"}, "no setting nonsense"),
    ],
)
def test_what_cannot_be_is_one_sentence_and_changes_nothing(tmp_path, changes, words):
    path = tmp_path / "observatory.toml"
    path.write_text(COMMENTED)
    with pytest.raises(SettingsError) as refused:
        change_settings(path, changes)
    assert words in str(refused.value)
    assert "\n" not in str(refused.value)
    assert path.read_text() == COMMENTED
    assert os.listdir(tmp_path) == [path.name]


def test_the_file_is_replaced_whole_and_keeps_its_permissions(tmp_path):
    path = tmp_path / "observatory.toml"
    path.write_text(COMMENTED)
    path.chmod(0o664)
    with path.open() as reader:  # somebody who reads it now goes on reading the old one
        change_settings(path, {"camera.gain_e_per_adu": "2"})
        assert reader.read() == COMMENTED
    assert "gain_e_per_adu = 2" in path.read_text()
    assert stat.S_IMODE(path.stat().st_mode) == 0o664
    assert os.listdir(tmp_path) == [path.name]


def test_without_a_file_the_starter_is_written(tmp_path):
    change_settings(tmp_path / "observatory.toml", {"camera.name": "mine"})
    assert "# Your observatory" in (tmp_path / "observatory.toml").read_text()


def test_control_codes_do_not_pass(tmp_path):
    text = changed_text("", {"camera.name": "a\x1b[31m\nb"})
    assert "\x1b" not in text
    assert parse_settings(text).camera.name == "a·[31m b"


values = st.floats(0.01, 20, allow_nan=False).map(lambda x: float(f"{x:.6g}"))
settings_strategy = st.fixed_dictionaries(
    {},
    optional={
        "camera.gain_e_per_adu": values.map(str),
        "camera.scale_arcsec": values.map(str),
        "camera.overrides_header": st.sampled_from(["yes", "no"]),
        "photometry.colour_terms.V": values.map(str),
        "filters.some name": st.sampled_from(["B", "V", "g"]),
        "telescope.name": st.text("abc =#'\"[]\\", min_size=1, max_size=12).map(str.strip).filter(bool),
    },
)


@given(settings_strategy)
def test_what_is_shown_can_be_typed_again(changes):
    """Every value as `settings_texts` shows it gives back the same settings."""
    settings = parse_settings(changed_text(COMMENTED, changes))
    shown = settings_texts(settings)
    assert parse_settings(changed_text("", shown)) == settings
    for key, typed in changes.items():
        assert key in shown
        assert shown[key] == " ".join(typed.split()) or float(shown[key]) == float(typed)


@given(
    st.text(max_size=20),
    st.sampled_from([*settings_keys(), "filters.x", "photometry.colour_terms.V"]),
)
def test_nothing_that_is_typed_breaks_anything(typed, key):
    said = ""
    try:
        parse_settings(changed_text(COMMENTED, {key: typed}))
    except SettingsError as error:
        said = str(error)
    assert said.isprintable()
