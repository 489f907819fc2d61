"""``fadeline reduce`` on nights as they are: frames that come late, broken, twice, or not at all."""

from __future__ import annotations

import json
import os
import shutil
from dataclasses import replace

import pytest
from astropy.io import fits
from small_campaign import (
    BIAS,
    CALIBRATION,
    DARKS,
    FIRST,
    FLATS,
    LIGHTS,
    OTHER_FIELD,
    curves,
    fadeline,
    lay,
    make_campaign,
    make_old,
    moved,
    opened,
    reduce_here,
    reduce_json,
    reductions,
    target_of,
)

from reduce.campaign.door import Campaign, CampaignError
from reduce.logbook.store import Logbook
from reduce.plain_text import PlainError

V_FLATS = [path for path in FLATS if "flatV" in path]
V_LIGHT, V_LIGHT_2 = f"{FIRST}039-V.fits", f"{FIRST}040-V.fits"
NAME, NAME_2 = "20250226-039-V.fits", "20250226-040-V.fits"


def is_one_sentence(text: str) -> bool:
    return bool(text) and text.endswith(".") and ". " not in text and text.isprintable()


# ---- calibration that comes late -------------------------------------------------------------------------


def test_calibration_after_the_lights(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [*BIAS, *DARKS, V_LIGHT, V_LIGHT_2])
    rows, summary = reduce_json(folder)
    assert {row["state"] for row in rows.values()} == {"doubtful"}
    assert all("no flat field was applied" in row["reason"] for row in rows.values())
    assert summary["measured_now"] == 2
    old = reductions(folder)
    with opened(folder) as campaign:
        assert "no flat in V" in campaign.calibration_sentences()[1]
        before = campaign.curve(target_of(demo).name)
        assert not any(point.provisional for point in before)

    lay(demo, tmp_path / "frames", V_FLATS)
    with opened(folder) as campaign:  # the flats stand, the frames are not measured with them yet
        campaign.intake.look(lambda text: None)
        campaign.intake.build_masters(campaign.known_frames(), lambda text: None)
        points = campaign.curve(target_of(demo).name) + campaign.curve(target_of(demo).name, per_frame=True)
        assert len(points) == 3
        assert all(point.provisional for point in points)
        picture = campaign.snapshot()
        assert [row.provisional for row in picture.frames if row.kind == "light"] == [True, True]
        assert "measure again" in next(s.detail for s in picture.targets[0].steps if s.name == "Calibration")

    rows, summary = reduce_json(folder)
    assert summary["measured_now"] == 2
    assert {row["state"] for row in rows.values()} == {"kept"}
    assert reductions(folder) > old
    assert len(reductions(folder)) == 4
    with opened(folder) as campaign:
        after = campaign.curve(target_of(demo).name)
        assert not any(point.provisional for point in after)
        (line,) = [row.body for row in campaign.log() if "measured again" in row.body]
        moves = [abs(new.mag - old.mag) for new, old in zip(after, before, strict=True)]
        assert f"at most {max(moves):.3f} mag" in line
        assert max(moves) > 0.001


def test_a_flat_that_cannot_be_made_is_said_once(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [*V_FLATS, V_LIGHT])
    for _ in range(2):
        reduce_here(folder)
    with opened(folder) as campaign:
        (line,) = [row.body for row in campaign.log() if "needs bias frames" in row.body]
        assert "flat V" in line


def test_calibration_frames_that_are_put_away_are_not_lost(demo, tmp_path):
    """The masters stand: to move raw flats to an archive must not measure a season anew without them."""
    folder = make_campaign(demo, tmp_path, [*BIAS, *V_FLATS, V_LIGHT])
    reduce_here(folder)
    before, done = curves(folder), reductions(folder)
    for path in (tmp_path / "frames").iterdir():
        if path.name != NAME:
            path.unlink()
    rows, summary = reduce_json(folder)
    assert summary["measured_now"] == 0
    assert rows[NAME]["state"] == "kept"
    assert (curves(folder), reductions(folder)) == (before, done)
    # other flats come: the new master is made of those that are there
    lay(demo, tmp_path / "frames", [f"{FIRST}009-flatV.fits", f"{FIRST}010-flatV.fits"])
    rows, summary = reduce_json(folder)
    assert summary["measured_now"] == 1
    assert rows[NAME]["state"] == "kept"
    assert reductions(folder) > done


def test_masters_that_are_deleted_are_built_again_with_the_same_numbers(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [*BIAS, *V_FLATS, V_LIGHT])
    reduce_here(folder)
    before, done = curves(folder), reductions(folder)
    shutil.rmtree(folder / "masters")
    _, summary = reduce_json(folder)
    assert summary["measured_now"] == 0
    assert (curves(folder), reductions(folder)) == (before, done)
    assert len(list((folder / "masters").iterdir())) == 2


def test_flats_alone_make_no_light_curve_and_no_error(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, CALIBRATION)
    rows, summary = reduce_json(folder)
    assert rows == {}
    assert summary["calibration"] == len(CALIBRATION)
    assert json.loads(fadeline("curve", folder, "--json").stdout) == []
    assert "tell" in fadeline("distance", folder).stdout
    assert list(tmp_path.glob("campaign/masters/*.fits"))


# ---- files that cannot be used ---------------------------------------------------------------------------


def test_bad_files_are_one_sentence_each_and_the_rest_goes_on(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    frames = tmp_path / "frames"
    whole = (frames / NAME).read_bytes()
    for name, content in {
        "cut.fits": whole[:200000],
        "empty.fits": b"",
        "words.fits": b"Dear diary\n",
        "evil\x1b[2J\x1b]0;x\x07<b>=1+1.fits": b"no",
        "x" * 200 + ".fits": b"no",
    }.items():
        (frames / name).write_bytes(content)
        make_old(frames / name)
    (frames / os.fsdecode(b"caf\xe9.fits")).write_bytes(b"no")
    make_old(frames / os.fsdecode(b"caf\xe9.fits"))
    os.symlink(frames / "nowhere", frames / "link.fits")
    os.utime(frames / "link.fits", (1e9, 1e9), follow_symlinks=False)
    os.mkfifo(frames / "pipe.fits")
    (frames / "folder.fits").mkdir()
    make_old(frames / "pipe.fits")
    rows, summary = reduce_json(folder, code=1)
    assert rows.pop(NAME)["outcome"] == "measured"
    assert len(rows) == 8
    for row in rows.values():
        assert row["file"].isprintable()
        assert (row["outcome"], row["state"], row["band"]) == ("unreadable", "dropped", None)
        assert is_one_sentence(row["reason"]), row
    assert "holds 200000 of" in rows["cut.fits"]["reason"]
    assert summary["unreadable"] == 8
    words = fadeline("reduce", folder, code=1).stdout
    assert "\x1b" not in words
    assert len(words.splitlines()) == 8 + 1 + 1  # and the light without flat, and the summary


def test_a_bad_file_that_is_replaced_or_removed_is_forgotten(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [])
    frames = tmp_path / "frames"
    whole = (demo.frames / V_LIGHT).read_bytes()
    (frames / NAME).write_bytes(whole[: len(whole) // 2])
    (frames / "other.fits").write_bytes(b"")
    for path in frames.iterdir():
        make_old(path)
    rows, _ = reduce_json(folder, code=1)
    assert {row["outcome"] for row in rows.values()} == {"unreadable"}
    (frames / NAME).write_bytes(whole)
    make_old(frames / NAME, 1000)
    (frames / "other.fits").unlink()
    rows, summary = reduce_json(folder, code=0)
    assert [(row["file"], row["outcome"]) for row in rows.values()] == [(NAME, "measured")]
    assert summary["unreadable"] == 0


def test_a_file_still_being_written_waits_and_is_no_error(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [])
    whole = (demo.frames / V_LIGHT).read_bytes()
    (tmp_path / "frames" / NAME).write_bytes(whole[:100000])
    rows, summary = reduce_json(folder, code=0)
    assert rows[NAME]["outcome"] == "waiting"
    assert is_one_sentence(rows[NAME]["reason"])
    assert (summary["waiting"], summary["frames"]) == (1, 0)
    (tmp_path / "frames" / NAME).write_bytes(whole)
    rows, _ = reduce_json(folder, code=0)
    assert rows[NAME]["outcome"] == "measured"


def test_a_frames_folder_that_is_gone_is_said(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    reduce_here(folder)
    (tmp_path / "frames").rename(tmp_path / "elsewhere")
    said = fadeline("reduce", folder, code=2).stderr
    assert str(tmp_path / "frames") in said
    assert len(said.strip().splitlines()) == 1
    assert len(json.loads(fadeline("curve", folder, "--json").stdout)) == 1  # what was measured is still there


# ---- names, copies, places -------------------------------------------------------------------------------


def test_a_copy_counts_once(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    reduce_here(folder)
    before = curves(folder)
    shutil.copyfile(tmp_path / "frames" / NAME, tmp_path / "frames" / "again.fits")
    make_old(tmp_path / "frames" / "again.fits")
    rows, summary = reduce_json(folder)
    assert list(rows) == [NAME]
    assert summary["measured_now"] == 0
    assert curves(folder) == before  # the name included


def test_a_deleted_frame_keeps_its_measurement(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [V_LIGHT, V_LIGHT_2])
    reduce_here(folder)
    before = curves(folder)
    (tmp_path / "frames" / NAME).unlink()
    rows, summary = reduce_json(folder)
    assert {row["outcome"] for row in rows.values()} == {"measured"}
    assert summary["frames"] == 2
    assert curves(folder) == before


def test_a_moved_frame_is_the_same_frame_and_can_be_measured_again(demo, tmp_path):
    """Tidying frames into folders by night must not leave them without the flats that come later."""
    folder = make_campaign(demo, tmp_path, [*BIAS, V_LIGHT])
    reduce_here(folder)
    (tmp_path / "frames" / "night").mkdir()
    (tmp_path / "frames" / NAME).rename(tmp_path / "frames" / "night" / "renamed.fits")
    rows, summary = reduce_json(folder)
    assert list(rows) == ["renamed.fits"]
    assert summary["measured_now"] == 0
    lay(demo, tmp_path / "frames", V_FLATS)
    rows, summary = reduce_json(folder)
    assert summary["measured_now"] == 1
    assert "no flat" not in rows["renamed.fits"]["reason"]
    assert {point.file for point in curves(folder)} == {None, "renamed.fits"}


def test_odd_names_are_measured_like_any_other_and_shown_harmless(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [])
    names = ["évil\x1b[2J <b>$(reboot)'\";.fits", os.fsdecode(b"\xff\xfe.fits"), "new\nline.FITS"]
    for name, source in zip(names, LIGHTS, strict=False):
        shutil.copyfile(demo.frames / source, tmp_path / "frames" / name)
        make_old(tmp_path / "frames" / name)
    rows, _ = reduce_json(folder)
    assert len(rows) == 3
    assert {row["outcome"] for row in rows.values()} == {"measured"}
    assert all(name.isprintable() for name in rows)
    points = json.loads(fadeline("curve", folder, "--per-frame", "--json").stdout)
    assert {point["file"] for point in points} == set(rows)
    for words in (["curve", folder, "--per-frame"], ["export", folder, "--per-frame"], ["log", folder],
                  ["export", folder, "--per-frame", "--format", "csv"]):  # fmt: skip
        assert "\x1b" not in fadeline(*words).stdout


def test_inspect_takes_odd_names(demo, tmp_path):
    path = tmp_path / os.fsdecode(b"\xff\x1b[2J.fits")
    shutil.copyfile(demo.frames / V_LIGHT, path)
    assert fadeline("inspect", path).stdout.replace("\n", " ").isprintable()
    assert json.loads(fadeline("inspect", path, "--json").stdout)["usable"] is True


def test_a_reference_frame_is_never_science(demo, tmp_path):
    target = target_of(demo)
    frames = tmp_path / "frames"
    lay(demo, frames / "reference", [V_LIGHT_2])
    folder = make_campaign(demo, tmp_path, [V_LIGHT], [replace(target, reference_folder=str(frames / "reference"))])
    rows, _ = reduce_json(folder)
    assert list(rows) == [NAME]


def test_a_frame_overwritten_by_another_is_replaced(demo, tmp_path):
    """A camera program that writes every exposure to one name, or a header put right: the file's content counts."""
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    reduce_here(folder)
    shutil.copyfile(demo.frames / V_LIGHT_2, tmp_path / "frames" / NAME)
    make_old(tmp_path / "frames" / NAME, 1000)
    rows, summary = reduce_json(folder)
    assert summary["measured_now"] == 1
    assert len(rows) == 1
    assert len(reductions(folder)) == 2


def test_an_unusual_frame_is_not_passed_over_in_silence(demo, tmp_path):
    """A readable file that says it is neither a light nor a calibration frame."""
    folder = make_campaign(demo, tmp_path, [V_LIGHT])
    with fits.open(demo.frames / V_LIGHT) as units:
        units[0].header["IMAGETYP"] = "Master Light"
        units.writeto(tmp_path / "frames" / "stack.fits")
    make_old(tmp_path / "frames" / "stack.fits")
    rows, _ = reduce_json(folder)
    assert "stack.fits" not in rows
    with opened(folder) as campaign:
        (note,) = [note for note in campaign.snapshot().notes if "stack.fits" in note]
        assert "not used" in note


# ---- targets ---------------------------------------------------------------------------------------------


def test_two_targets_in_one_field_do_not_disturb_each_other(demo, tmp_path):
    target = target_of(demo)
    alone = make_campaign(demo, tmp_path / "alone", [V_LIGHT], [target])
    both = make_campaign(demo, tmp_path / "both", [V_LIGHT], [target, moved(target, "Second", 100, 60)])
    reduce_here(alone)
    reduce_here(both)
    names = {point.star for point in curves(both)}
    assert target.name in names
    mine = [point for point in curves(both) if point.star == target.name]
    assert len(mine) == 2
    for one, other in zip(mine, curves(alone), strict=True):
        # not bit-equal: what lies at the second position is masked in the sky of its neighbours
        assert one.mag == pytest.approx(other.mag, abs=5e-5)
        assert one.state == other.state
    assert len(fadeline("distance", both, "--json").stdout.splitlines()) == 2


def test_a_target_off_the_frame_is_said(demo, tmp_path):
    target = target_of(demo)
    folder = make_campaign(demo, tmp_path, [V_LIGHT], [moved(target, "Far", north_arcsec=7200)])
    rows, _ = reduce_json(folder)
    assert rows[NAME]["outcome"] == "measured"
    assert curves(folder) == []
    with opened(folder) as campaign:
        view = campaign.snapshot().targets[0]
        assert "Far" in view.next_sentence
        assert "not on any" in view.next_sentence
        assert next(step.state for step in view.steps if step.name == "Field") == "wants you"


def test_a_frame_of_another_field_is_dropped_with_a_reason_and_no_error(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [OTHER_FIELD])
    rows, _ = reduce_json(folder, code=0)
    (row,) = rows.values()
    assert (row["outcome"], row["state"]) == ("no match", "dropped")


# ---- making a campaign -----------------------------------------------------------------------------------


def test_a_refused_campaign_leaves_nothing(demo, tmp_path):
    (tmp_path / "frames").mkdir()
    with pytest.raises(PlainError, match="gian"):
        Campaign.create(tmp_path / "c", tmp_path / "frames", demo.place / "comparison.csv", [target_of(demo)],
                        settings_text="[camera]\ngian = 3\n")  # fmt: skip
    assert not (tmp_path / "c").exists()


def test_a_campaign_whose_making_was_interrupted_is_said(tmp_path):
    Logbook.create(tmp_path / "c").close()
    (sentence,) = fadeline("reduce", tmp_path / "c", code=2).stderr.strip().splitlines()
    assert "never finished" in sentence


@pytest.mark.parametrize("name", [b"n\xe4chte", b"\x1b[2J"])
def test_a_frames_folder_with_a_name_that_is_no_text_is_refused(demo, tmp_path, name):
    frames = tmp_path / os.fsdecode(name)
    frames.mkdir()
    words = ["--frames", frames, "--sequence", demo.place / "comparison.csv", "--target", "Odd,167,21,type_ia"]
    (sentence,) = fadeline("new", tmp_path / "c", *words, code=2).stderr.strip().splitlines()
    assert sentence.isprintable()
    assert "rename" in sentence
    assert not (tmp_path / "c").exists()


def test_a_campaign_is_not_made_over_another(demo, tmp_path):
    folder = make_campaign(demo, tmp_path, [])
    with pytest.raises(CampaignError, match="holds a campaign already"):
        make_campaign(demo, tmp_path, [])
    with Logbook.open(folder) as book:
        assert len(book.targets()) == 1
