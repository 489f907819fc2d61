"""What the first run finds in a folder, refuses and makes; on real files with headers good, poor and broken."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from small_campaign import CALIBRATION, FIRST, lay, target_of

from reduce.campaign.door import Campaign, CampaignError
from reduce.campaign.first_run import begin, check_settings, check_stars, check_target, settings_text, survey
from reduce.field.sequence import SequenceError
from reduce.plain_text import PlainError
from reduce.settings import parse_settings
from reduce.views import FilterRow, ObjectRow


def frame(folder: Path, name: str, **cards: object) -> Path:
    """A small file with these cards."""
    unit = fits.PrimaryHDU(np.full((16, 16), 1000, np.uint16))
    for key, value in cards.items():
        unit.header[key.replace("_", "-")] = value
    folder.mkdir(parents=True, exist_ok=True)
    unit.writeto(folder / name)
    return folder / name


LIGHT = {"IMAGETYP": "LIGHT", "DATE_OBS": "2031-05-05T22:00:00", "EXPTIME": 60.0}


def test_a_folder_is_counted_and_named(tmp_path):
    for n in range(3):
        frame(tmp_path / "a", f"v{n}.fits", **LIGHT, FILTER="V", OBJECT="Vesna 7", RA="12 35 38.4", DEC="+12 02 24")
    frame(tmp_path / "a", "x.fits", **LIGHT, FILTER="Slot 5", OBJECT="Korab b", INSTRUME="Kamera", GAIN=1.4)
    frame(tmp_path, "bias.fits", IMAGETYP="BIAS", EXPTIME=0.0)
    (tmp_path / "half.fits").write_bytes((tmp_path / "bias.fits").read_bytes()[:3000])
    (tmp_path / "notes.txt").write_text("not a frame")
    found = survey(tmp_path, {})
    assert found.kinds == {"light": 4, "bias": 1}
    assert found.filters == (FilterRow("Slot 5", None, 1, False), FilterRow("V", "V", 3, False))
    assert found.objects[0].name == "Vesna 7"
    assert (found.objects[0].ra_deg, found.objects[0].dec_deg) == pytest.approx((188.91, 12.04), abs=1e-6)
    assert found.objects[1] == ObjectRow("Korab b", 1, None, None)
    assert found.nights == ("2031-05-05",)
    assert found.cameras == ("camera without a name, 16 × 16 pixels", "Kamera, 16 × 16 pixels, 1.4 e⁻/ADU")
    assert found.unusable[0].startswith("half.fits: ")
    said = " ".join(found.missing)
    assert "'Slot 5'" in said
    assert "No flats in V" in said
    assert "states the gain" in said
    assert "pixel scale" in said


def test_a_named_filter_is_no_longer_missing(tmp_path):
    frame(tmp_path, "x.fits", **LIGHT, FILTER="Slot 5", GAIN=1.4, PIXSCALE=1.0)
    assert "Slot 5" in " ".join(survey(tmp_path, {}).missing)
    found = survey(tmp_path, {"filters.Slot 5": "R"})
    assert found.filters == (FilterRow("Slot 5", "R", 1, True),)
    assert "Slot 5" not in " ".join(found.missing)
    assert "No flats in R" in " ".join(found.missing)


def test_what_the_observer_states_is_not_missed(tmp_path):
    frame(tmp_path, "x.fits", **LIGHT, FILTER="V")
    said = " ".join(survey(tmp_path, {"camera.gain_e_per_adu": "1.5", "camera.scale_arcsec": "1.1"}).missing)
    assert "gain" not in said
    assert "scale" not in said


def test_objects_around_the_zero_hour_have_one_place_and_spread_ones_none(tmp_path):
    for n, ra in enumerate((359.99, 0.01, 0.02)):
        frame(tmp_path, f"a{n}.fits", **LIGHT, FILTER="V", OBJECT="Zero", RADEG=ra, DECDEG=5.0)
    for n, ra in enumerate((10.0, 80.0)):
        frame(tmp_path, f"b{n}.fits", **LIGHT, FILTER="V", OBJECT="Sweep", RADEG=ra, DECDEG=5.0)
    objects = {row.name: row for row in survey(tmp_path, {}).objects}
    assert (objects["Zero"].ra_deg, objects["Zero"].dec_deg) == pytest.approx((0.01, 5.0))
    assert objects["Sweep"].ra_deg is None


def test_empty_and_missing_folders(tmp_path):
    found = survey(tmp_path, {})
    assert found.kinds == {}
    assert found.nights == ()
    assert "may come later" in found.missing[0]
    with pytest.raises(CampaignError, match="does not exist"):
        survey(tmp_path / "no", {})


def test_settings_are_checked_before_anything_is_made():
    check_settings({"site.position": "46.2, 14.5, 410", "camera.gain_e_per_adu": ""})
    with pytest.raises(PlainError, match=r"site\.latitude_deg"):
        check_settings({"site.position": "146.2, 14.5"})
    settings = parse_settings(settings_text({"site.position": "46 12 00, 14.5", "filters.Slot 5": "R"}))
    assert settings.site is not None
    assert (settings.site.latitude_deg, settings.site.height_m) == (46.2, 0.0)
    assert settings.filters == {"Slot 5": "R"}


def test_a_target_is_shown_as_it_was_understood():
    words = check_target({"name": "N", "position": "12:35:38.4, +12:02:24", "kind": "type_ia"})
    assert words == "N at RA 188.910000°, Dec +12.040000°."
    assert check_target({"name": "N", "position": "12 35 38.4 +12 02 24"}) == words
    assert check_target({"name": "N", "position": "188.91 12.04"}) == words


def test_stars_that_lie_elsewhere_are_said(tmp_path):
    stars = tmp_path / "stars.csv"
    stars.write_text("id,ra,dec,V\na,188.9,12.0,14\nb,188.95,12.05,15\nc,188.8,12.1,16\n")
    facts = {"name": "N", "position": "188.91, 12.04"}
    assert check_stars(stars, facts).startswith("3 stars (V 3); the nearest lies 2.")
    assert "degrees from N" in check_stars(stars, facts | {"position": "12.6, 12.04"})
    with pytest.raises(SequenceError, match="cannot be read"):
        check_stars(tmp_path / "none.csv", facts)


def test_the_campaign_is_made_as_typed_and_keeps_a_settings_file_that_is_there(demo, tmp_path):
    target = target_of(demo)
    lay(demo, tmp_path / "night", [*CALIBRATION, f"{FIRST}039-V.fits"])
    folder = tmp_path / "campaign"
    folder.mkdir()
    (folder / "observatory.toml").write_text("# mine\n[camera]\nread_noise_e = 8  # measured\n")
    facts = {"name": target.name, "position": f"{target.ra_deg}, {target.dec_deg}", "ebv_mw": "0.02, SFD"}
    begin(folder, tmp_path / "night", demo.place / "comparison.csv", facts, {"site.position": "38, -5, 800"})
    text = (folder / "observatory.toml").read_text()
    assert "# mine" in text
    assert "# measured" in text
    campaign = Campaign.open(folder)
    assert (campaign.settings.camera.read_noise_e, campaign.settings.site.height_m) == (8.0, 800.0)
    assert campaign.target(None).ebv_scale == "SFD"
    list(campaign.reduce(workers=1))
    assert [point.band for point in campaign.curve(target.name)] == ["V"]
    campaign.book.close()


def test_a_refused_beginning_leaves_the_folder_as_it_was(demo, tmp_path):
    facts = {"name": "N", "position": "1, 2"}
    bad = tmp_path / "bad.csv"
    bad.write_text("no stars")
    with pytest.raises(SequenceError):
        begin(tmp_path / "new", tmp_path, bad, facts, {})
    with pytest.raises(PlainError):
        begin(tmp_path / "new", tmp_path, demo.place / "comparison.csv", {"name": "N"}, {})
    assert not (tmp_path / "new").exists()
