"""From an empty folder to the first point in a real terminal, with the keyboard alone, on frames whose headers say next
to nothing; and a campaign whose frames were moved.
"""

from __future__ import annotations

import os
import shutil
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from astropy.io import fits
from small_campaign import BIAS, FIRST, target_of
from tmux_driver import Tmux

from reduce.campaign.door import Campaign
from reduce.logbook.store import Logbook

pytestmark = pytest.mark.terminal
LIGHTS = [f"{FIRST}039-V.fits", f"{FIRST}040-V.fits"]
FLATS = [f"{FIRST}{n:03}-flatV.fits" for n in range(6, 9)]
SAID = ("DATE-OBS", "EXPTIME", "BZERO", "BSCALE")


def lay_poor(source: Path, folder: Path, paths: list[str]) -> None:
    """Copies whose headers hold a time, an exposure and the name of a filter slot: no kind, camera, object or scale."""
    folder.mkdir(parents=True)
    for path in paths:
        with fits.open(source / path, do_not_scale_image_data=True) as units:
            header = units[0].header
            if "FILTER" in header:
                header["FILTER"] = "Slot 3"
            for keyword in [
                k for k in header if k not in (*SAID, "FILTER") and not k.startswith(("SIMPLE", "BITPIX", "NAXIS"))
            ]:
                del header[keyword]
            units.writeto(folder / Path(path).name)
    then = time.time() - 3600.0
    for path in folder.iterdir():
        os.utime(path, (then, then))


@pytest.fixture
def open_app() -> Iterator:
    started: list[Tmux] = []

    def start(folder: Path, cols: int, rows: int) -> Tmux:
        app = Tmux([sys.executable, "-m", "tui.cli", "open", str(folder)], cols, rows, cwd=str(folder))
        started.append(app)
        return app

    yield start
    for app in started:
        app.close()


def say(app: Tmux, text: str, *keys: str) -> None:
    """Type letters, then press keys."""
    app.keys("-l", text)
    app.keys(*keys)


@pytest.mark.parametrize("size", [(80, 24), (160, 48)], ids=["80x24", "160x48"])
def test_from_an_empty_folder_to_the_first_point(open_app, demo, tmp_path, size):
    lay_poor(demo.frames, tmp_path / "night one", [*LIGHTS, *FLATS, *BIAS])
    target = target_of(demo)
    campaign = tmp_path / "mine"
    campaign.mkdir()
    app = open_app(campaign, *size)
    app.wait("Frames folder")
    app.keys("C-u")
    say(app, f"{tmp_path}/ni", "Tab")
    app.wait("night one/")
    app.keys("Enter")
    app.wait("no band: enter names it")
    screen = app.wait("No header states the gain")
    assert "2 lights" in screen
    assert "3 flats" in screen
    app.keys("Enter")
    app.wait("stands for")
    app.keys("Down", "Enter")  # Landolt's V
    app.wait_until(lambda screen: "no band" not in screen, what="the band of the slot")
    app.keys("C-n")
    app.wait("aperture, m")
    for text in ("37.912, -4.633, 820", "0.5", "1.021", "1.5", "8.0"):
        say(app, text, "Enter")
    say(app, "lots", "Enter")
    app.wait("is not a number")  # of the saturation
    app.keys("C-u")
    say(app, "65535", "Enter")
    app.wait("as you call it")
    hours = target.ra_deg / 15
    h, m = int(hours), int(hours % 1 * 60)
    s = ((hours - h) * 60 - m) * 60
    say(app, target.name, "Enter")
    say(app, f"{h}:{m:02d}:{s:07.4f}, {target.dec_deg:.6f}", "C-n")
    app.wait("Comparison stars")
    app.keys("C-u")
    say(app, str(demo.place / "comp"), "Tab")
    app.wait("comparison.csv")
    app.keys("Enter")
    app.wait("Make the campaign")
    app.keys("Enter")
    app.wait("latest frame", 90)
    app.wait_until(lambda screen: screen.count("kept") >= 2, 120, "two frames kept")
    app.keys("4")
    app.wait("2025-02-26", 30)
    app.keys("8")
    screen = app.wait_until(lambda screen: "nightone" in "".join(screen.split()), what="the frames folder, whole")
    assert all(len(line) <= size[0] for line in screen.splitlines())
    app.keys("q")
    app.wait("EXIT=0")
    found = Campaign.open(campaign)
    (point,) = found.curve(target.name)
    assert (point.band, point.state, point.n_frames) == ("V", "kept", 2)
    assert found.settings.filters == {"Slot 3": "V"}
    assert abs(found.target(None).ra_deg - target.ra_deg) * 3600 < 0.01
    found.book.close()


def test_a_first_run_that_is_left_makes_nothing(open_app, tmp_path):
    app = open_app(tmp_path, 80, 24)
    app.wait("Frames folder")
    app.keys("C-q")
    app.wait("EXIT=0")
    assert not list(tmp_path.iterdir())


def test_frames_that_were_moved_are_found_again_in_setup(open_app, demo, tmp_path):
    folder = demo.copy(tmp_path / "campaign")
    shutil.copytree(demo.frames / "2025-02-26", tmp_path / "elsewhere" / "2025-02-26")
    with Logbook.open(folder) as book:
        book.set_setting("frames folder", str(tmp_path / "gone"))
        before = len(book.reductions_done())
    app = open_app(folder, 80, 24)
    app.wait("is not there")
    app.keys("8")
    app.wait("Frames, folder")
    app.stable()  # the table has the keys
    app.keys("Enter")
    app.wait("folder /")  # the line has taken the value over
    app.keys("C-u")
    say(app, f"{tmp_path}/else", "Tab", "Enter")
    app.wait("Frames are looked for in")
    app.wait_until(lambda screen: "is not there" not in screen, what="the folder found")
    app.keys("q")
    screen = app.wait("EXIT=0")
    assert "The frames folder" in screen  # said before the app opened, still to be read after it
    with Logbook.open(folder) as book:
        assert book.setting("frames folder") == str(tmp_path / "elsewhere")
        assert len(book.reductions_done()) == before  # known again by their content
