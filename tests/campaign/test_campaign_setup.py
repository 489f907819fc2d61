"""What is set up while a campaign runs: it is checked, logged, followed by the reducer, and never mixed up."""

from __future__ import annotations

import shutil
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from astropy.io import fits
from small_campaign import CALIBRATION, FIRST, lay, make_campaign, make_old, opened, reduce_here, target_of, wait_until

from reduce.campaign.door import Campaign, CampaignError
from reduce.campaign.setup import SetupError, change, follow_target, setup_view
from reduce.campaign.targets import TargetError
from reduce.logbook.store import Logbook
from reduce.plain_text import PlainError

LIGHTS = [f"{FIRST}039-V.fits", f"{FIRST}040-V.fits"]


@pytest.fixture
def folder(demo, tmp_path) -> Path:
    return make_campaign(demo, tmp_path, [*CALIBRATION, *LIGHTS])


@contextmanager
def followed(folder: Path) -> Iterator[Logbook]:
    """A reducer at work in this process; the logbook as another session sees it."""
    stop = threading.Event()

    def follow() -> None:
        for _ in Campaign.open(folder).reduce(follow=True, workers=1, should_stop=stop.is_set):
            pass

    thread = threading.Thread(target=follow)
    thread.start()
    try:
        with Logbook.open(folder) as book:
            wait_until(lambda: len(book.reductions_done()) >= 2)
            yield book
    finally:
        stop.set()
        thread.join()


def lines(book: Logbook) -> list[str]:
    return [row.body for row in book.log()]


# ---- settings --------------------------------------------------------------------------------------------


def test_a_setting_that_is_changed_makes_frames_stale_and_they_are_measured_again(folder):
    with followed(folder) as book, opened(folder) as campaign:
        old = book.reductions_done()
        words = change(campaign, "setting:camera.dark_e_per_s", "0.07")
        assert "0.07" in words
        assert campaign.settings.camera.dark_e_per_s == 0.07
        wait_until(lambda: len(book.reductions_done()) == 4)
        assert old < book.reductions_done()
        assert lines(book).count("observatory.toml: camera.dark_e_per_s = 0.07.") == 1
        assert "observatory.toml was changed." not in lines(book)  # it was this session, and it has said so


def test_a_file_edited_by_hand_is_taken_over_and_a_bad_one_is_said(folder):
    path = folder / "observatory.toml"
    with followed(folder) as book:
        good = path.read_text()
        path.write_text(good + "\n[camera\n")
        wait_until(lambda: any("is not valid TOML" in line for line in lines(book)))
        assert len(book.reductions_done()) == 2
        path.write_text(good.replace("dark_e_per_s = 0.05", "dark_e_per_s = 0.07"))
        wait_until(lambda: len(book.reductions_done()) == 4)
        assert lines(book).count("observatory.toml was changed.") == 1


def test_an_open_campaign_shows_what_was_changed_by_hand(folder):
    path = folder / "observatory.toml"
    with opened(folder) as campaign:
        assert campaign.snapshot().setup.settings["camera.dark_e_per_s"] == "0.05"
        path.write_text(path.read_text().replace("dark_e_per_s = 0.05", "dark_e_per_s = 0.07"))
        assert campaign.snapshot().setup.settings["camera.dark_e_per_s"] == "0.07"
        path.write_text("[camera]\ndark = 1\n")
        picture = campaign.snapshot()
        assert "unknown key camera.dark" in picture.setup.trouble
        assert picture.setup.trouble in picture.notes
        assert picture.setup.settings["camera.dark_e_per_s"] == "0.07"


def test_settings_of_plans_alone_leave_frames_as_they_are(folder):
    reduce_here(folder)
    with opened(folder) as campaign:
        wanted = campaign.wanted_recipes()
        change(campaign, "setting:planning.slew_s", "120")
        change(campaign, "setting:photometry.colour_terms.V", "-0.05")
        assert campaign.wanted_recipes() == wanted


def test_a_filter_that_is_named_makes_its_frames_measurable(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, CALIBRATION)
    for path in lay(demo, tmp_path / "frames", [*LIGHTS, *(p for p in CALIBRATION if "flatV" in p)]):
        fits.setval(path, "FILTER", value="Slot 3")
        make_old(path)
    reduce_here(folder)
    with opened(folder) as campaign:
        (row,) = [row for row in setup_view(campaign).filters if row.name == "Slot 3"]
        assert (row.band, row.n_frames, row.named) == (None, 5, False)
        assert not campaign.curve(target_of(demo).name)
        change(campaign, "setting:filters.Slot 3", "V")
        for _ in campaign.reduce(workers=1):
            pass
        (row,) = [row for row in setup_view(campaign).filters if row.name == "Slot 3"]
        assert (row.band, row.named) == ("V", True)
        assert [point.band for point in campaign.curve(target_of(demo).name)] == ["V"]


def test_the_site_is_one_place_and_can_be_taken_away(folder):
    with opened(folder) as campaign:
        change(campaign, "setting:site.position", "-33 30, 149.25, 860")
        site = campaign.settings.site
        assert (site.latitude_deg, site.longitude_deg, site.height_m) == (-33.5, 149.25, 860.0)
        assert setup_view(campaign).settings["site.position"] == "-33.5, 149.25, 860"
        change(campaign, "setting:site.position", "")
        assert campaign.settings.site is None
        with pytest.raises(SetupError, match="position first"):
            change(campaign, "setting:site.name", "Hilltop")
        with pytest.raises(SetupError, match="is not latitude"):
            change(campaign, "setting:site.position", "12")


def test_nothing_new_writes_nothing(folder):
    with opened(folder) as campaign:
        before = lines(campaign.book)
        assert change(campaign, "setting:camera.gain_e_per_adu", "1.5") == "That is how it was."
        assert lines(campaign.book) == before


# ---- targets ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("fact", "typed", "get", "value"),
    [
        (
            "position",
            "11:09:55.5 +21:38:14",
            lambda t: (round(t.ra_deg, 5), round(t.dec_deg, 5)),
            (167.48125, 21.63722),
        ),
        ("z", "0.021", lambda t: t.z, 0.021),
        ("ebv_mw", "0.03, SFD", lambda t: (t.ebv_mw, t.ebv_scale), (0.03, "SFD")),
        ("spectrum", "Ia", lambda t: t.spectroscopic_type, "Ia"),
        ("host", "", lambda t: (t.host_ra_deg, t.host_dec_deg), (None, None)),
        ("z", "", lambda t: t.z, None),
        ("ebv_mw", "", lambda t: t.ebv_mw, None),
    ],
)
def test_facts_of_a_target_are_corrected_as_they_are_typed(folder, fact, typed, get, value):
    with opened(folder) as campaign:
        name = campaign.target(None).name
        change(campaign, f"target:{name}:{fact}", typed)
        assert get(campaign.target(name)) == value
        assert campaign.log()[-1].target == name


def test_a_corrected_position_is_measured_again_by_a_running_reducer(folder, demo):
    with followed(folder) as book, opened(folder) as campaign:
        target = campaign.target(None)
        change(campaign, f"target:{target.name}:position", f"{target.ra_deg + 0.0001:.7f}, {target.dec_deg:.7f}")
        wait_until(lambda: len(book.reductions_done()) == 4)


def test_a_reference_folder_may_be_named_and_forgotten(folder, tmp_path):
    with opened(folder) as campaign:
        name = campaign.target(None).name
        with pytest.raises(TargetError, match="does not exist"):
            change(campaign, f"target:{name}:reference", str(tmp_path / "nowhere"))
        (tmp_path / "before").mkdir()
        change(campaign, f"target:{name}:reference", str(tmp_path / "before"))
        assert campaign.intake.reference_folders == (tmp_path / "before",)
        change(campaign, f"target:{name}:reference", "")
        assert campaign.intake.reference_folders == ()


def test_one_more_target_is_followed_and_measured(folder, demo):
    first = target_of(demo)
    with followed(folder) as book, opened(folder) as campaign:
        with pytest.raises(TargetError, match="followed already"):
            follow_target(campaign, {"name": first.name.upper(), "position": "1, 1"})
        facts = {"name": "Second", "position": f"{first.ra_deg + 0.01:.5f}, {first.dec_deg:.5f}", "kind": "other"}
        assert "Second" in follow_target(campaign, facts)
        wait_until(lambda: len(book.reductions_done()) == 4)
        wait_until(lambda: campaign.curve("Second"))
        assert [target.name for target in campaign.targets()] == [first.name, "Second"]


@pytest.mark.parametrize(
    ("facts", "words"),
    [
        ({}, "no name"),
        ({"name": "A"}, "no position"),
        ({"name": "A", "position": "12"}, "is not RA,DEC"),
        ({"name": "A", "position": "12, 95"}, "outside"),
        ({"name": "A", "position": "1, 1", "kind": "nova"}, "not one of"),
        ({"name": "A", "position": "1, 1", "z": "6000"}, "km/s"),
        ({"name": "A", "position": "1, 1", "ebv_mw": "0.1, old"}, "neither SF11 nor SFD"),
        ({"name": "A", "position": "1, 1", "reference": "/no/such"}, "does not exist"),
    ],
)
def test_a_target_that_cannot_be_is_one_sentence(folder, facts, words):
    with opened(folder) as campaign:
        with pytest.raises(TargetError, match=words):
            follow_target(campaign, facts)
        assert len(campaign.targets()) == 1


# ---- folders and stars -----------------------------------------------------------------------------------


def test_frames_that_moved_are_known_by_their_content(folder, tmp_path):
    reduce_here(folder)
    with opened(folder) as campaign:
        points = campaign.curve(campaign.target(None).name)
        (tmp_path / "frames").rename(tmp_path / "disk two")
        picture = campaign.snapshot()
        assert "is not there" in picture.setup.trouble
        assert picture.targets[0].next_screen == "Setup"
        assert picture.targets[0].next_sentence == picture.setup.trouble
        with pytest.raises(CampaignError, match="does not exist"):
            change(campaign, "frames folder", str(tmp_path / "disk three"))
        change(campaign, "frames folder", str(tmp_path / "disk two"))
        assert not campaign.snapshot().setup.trouble
        (report,) = campaign.reduce(workers=1)
        assert report.summary["measured_now"] == 0
        assert campaign.curve(campaign.target(None).name) == points
        assert {Path(row.path).parent for row in campaign.frame_rows() if row.kind == "light"} == {
            tmp_path / "disk two"
        }


def test_a_campaign_may_lie_in_its_own_frames_folder(demo, tmp_path):
    lay(demo, tmp_path / "night", [*CALIBRATION, *LIGHTS])
    Campaign.create(
        tmp_path / "night", tmp_path / "night", demo.place / "comparison.csv", [target_of(demo)],
        settings_text=(demo.place / "observatory.toml").read_text(),
    ).book.close()  # fmt: skip
    reduce_here(tmp_path / "night")
    with opened(tmp_path / "night") as campaign:
        list(campaign.reduce(workers=1))
        assert list((tmp_path / "night" / "masters").glob("*.fits"))
        assert not [frame for frame in campaign.known_frames() if frame.path.parent.name == "masters"]
        assert len(campaign.known_frames()) == len(CALIBRATION) + len(LIGHTS)


def test_stars_are_imported_and_problems_said(folder, demo, tmp_path):
    with opened(folder) as campaign:
        bad = tmp_path / "bad.csv"
        bad.write_text("id,ra,dec,V\na,1,2,x\n")
        with pytest.raises(PlainError, match=r"line 2: V 'x' is no number"):
            change(campaign, "sequence", str(bad))
        text = (demo.place / "comparison.csv").read_text().splitlines()
        better = shutil.copy(demo.place / "comparison.csv", tmp_path / "better.csv")
        Path(better).write_text("\n".join(text[:-1]) + "\n")
        assert "nothing needs to be measured again" in change(campaign, "sequence", str(better))
        assert setup_view(campaign).sequence == "better"


@pytest.mark.parametrize(
    "subject", ["", "setting:", "setting:x.y", "target:Nobody:z", "target:x", "moon", "frames folder"]
)
def test_subjects_that_do_not_exist_are_refused(folder, subject):
    with opened(folder) as campaign, pytest.raises(PlainError):
        change(campaign, subject, "nothing/such")
