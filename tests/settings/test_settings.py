"""The configuration file: every mistake is one sentence that names file, key and remedy."""

import pytest

from reduce.settings import Settings, SettingsError, parse_settings, read_settings


def test_a_missing_file_gives_the_defaults(tmp_path):
    assert read_settings(tmp_path / "observatory.toml") == Settings()


def test_values_arrive_with_their_units():
    settings = parse_settings(
        """
        filters = { "Grün 2" = "V" }
        [site]
        latitude_deg = -33.5
        longitude_deg = 149.25
        height_m = 860
        [camera]
        gain_e_per_adu = 1.4
        """
    )
    assert settings.site is not None
    assert settings.site.latitude_deg == -33.5
    assert settings.camera.gain_e_per_adu == 1.4
    assert settings.filters == {"Grün 2": "V"}


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[camera]\ngain = 2", ("camera.gain", "did you mean gain_e_per_adu?")),
        ("[site]\nlatitude_deg = 123\nlongitude_deg = 0", ("site.latitude_deg", "90", "123")),
        ("[telescope]\naperture_m = 0", ("telescope.aperture_m", "greater than 0")),
        ("[camera]\ngain_e_per_adu = 'two'", ("camera.gain_e_per_adu", "'two'")),
        ("[site\n", ("not valid TOML",)),
        ("[site]\nlatitude_deg = nan\nlongitude_deg = 0", ("site.latitude_deg",)),
    ],
)
def test_each_mistake_is_one_sentence(text, words):
    with pytest.raises(SettingsError) as refused:
        parse_settings(text, "observatory.toml")
    sentence = str(refused.value)
    assert sentence.startswith("observatory.toml")
    assert "\n" not in sentence or "TOML" in sentence
    for word in words:
        assert word in sentence


def test_a_file_that_is_no_text_is_refused(tmp_path):
    path = tmp_path / "observatory.toml"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(SettingsError, match="cannot be read"):
        read_settings(path)
