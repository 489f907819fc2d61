"""The frozen forms of commands and JSON, through the installed command."""

from __future__ import annotations

import csv
import io
import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from astropy.table import Table
from check_demo_result import complaints

POINT_KEYS = [
    "star", "file", "night", "band", "mjd", "bjd_tdb", "mag", "err", "err_night", "err_band", "flux", "flux_err",
    "state", "flags", "host_method", "zp_group", "provisional",
]  # fmt: skip
ESTIMATE_KEYS = [
    "name", "mu", "mu_err", "mu_err_fit", "t_max", "t_max_err", "dm15", "dm15_err", "e_host", "e_host_err", "chi2",
    "n", "warnings",
]  # fmt: skip
TARGET = "Larkrise 25a"


def fadeline(*words: object, code: int = 0) -> subprocess.CompletedProcess[str]:
    done = subprocess.run(
        [sys.executable, "-m", "tui.cli", *map(str, words)], capture_output=True, text=True, check=False, cwd="/"
    )
    assert done.returncode == code, done.stdout + done.stderr
    assert "Traceback" not in done.stderr
    return done


def strict_json(text: str):
    def refuse(name: str) -> None:
        raise AssertionError(f"{name} in JSON")

    return json.loads(text, parse_constant=refuse)


def test_the_demo_prints_one_object_and_recovers_what_was_rendered(demo):
    assert sorted(demo.result) == ["folder", "photometry", "seconds", "targets", "version"]
    assert sorted(demo.result["targets"][0]) == sorted(
        ["name", "kind", "mu", "mu_err", "mu_err_fit", "mu_true", "nights", "frames_kept", "frames_doubtful",
         "frames_dropped"]
    )  # fmt: skip
    assert all(sorted(row) == ["chi2_reduced", "mean_offset", "n"] for row in demo.result["photometry"].values())
    assert complaints(demo.result) == []


def test_reduce_prints_a_line_a_frame_and_a_summary(demo, tmp_path):
    folder = demo.copy(tmp_path / "campaign")
    done = fadeline("reduce", folder, "--json", code=1)  # the demo holds files that cannot be read
    *rows, summary = [strict_json(line) for line in done.stdout.splitlines()]
    assert all(list(row) == ["file", "band", "outcome", "state", "reason", "seconds"] for row in rows)
    assert {row["state"] for row in rows} <= {"kept", "doubtful", "dropped"}
    assert all(row["reason"] for row in rows if row["state"] != "kept")
    assert summary["frames"] == len(rows)
    assert summary["measured_now"] == 0  # all of it was measured when the demo was made
    truth = json.loads((demo.place / "truth.json").read_text())
    states = {row["file"]: row["state"] for row in rows}
    for frame in truth["frames"]:
        expected = "dropped" if frame["expected"] == "unreadable" else frame["expected"]
        assert states[frame["file"]] == expected, frame


@pytest.mark.parametrize("options", [[], ["--per-frame"], ["--per-frame", "--all-stars"]])
def test_curve_prints_an_array_of_points(demo, options):
    points = strict_json(fadeline("curve", demo.campaign, TARGET, *options, "--json").stdout)
    assert len(points) > 30
    assert all(list(point) == POINT_KEYS for point in points)
    assert {point["state"] for point in points} <= {"kept", "doubtful", "dropped", "excluded", "limit"}
    assert all((point["file"] is None) == (not options) for point in points)
    for point in points:
        if point["mag"] is not None:
            assert point["flux"] == pytest.approx(10 ** (-0.4 * (point["mag"] - 25)), rel=1e-9)


def test_distance_prints_one_object_a_target(demo):
    (line,) = fadeline("distance", demo.campaign, "--json").stdout.splitlines()
    row = strict_json(line)
    assert list(row)[: len(ESTIMATE_KEYS)] == ESTIMATE_KEYS
    assert row["mu"] == pytest.approx(demo.result["targets"][0]["mu"], abs=1e-9)
    assert "73.04" in fadeline("distance", demo.campaign, TARGET).stdout


def test_distance_of_a_light_curve_file_needs_no_logbook(demo, tmp_path):
    points = strict_json(fadeline("curve", demo.campaign, TARGET, "--json").stdout)
    path = tmp_path / "curve.csv"
    with path.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["name", "mjd", "band", "mag", "err", "z", "ebv_mw"])
        for name in ("one", "two"):
            writer.writerows([name, p["mjd"], p["band"], p["mag"], p["err"], 0.009, 0.038] for p in points if p["mag"])
    rows = [strict_json(line) for line in fadeline("distance", "--light-curve", path, "--json").stdout.splitlines()]
    assert [row["name"] for row in rows] == ["one", "two"]
    assert list(rows[0])[: len(ESTIMATE_KEYS)] == ESTIMATE_KEYS
    assert rows[0]["mu"] == rows[1]["mu"]


def test_export_is_read_back_by_others(demo, tmp_path):
    n = len(strict_json(fadeline("curve", demo.campaign, TARGET, "--json").stdout))
    table = Table.read(io.StringIO(fadeline("export", demo.campaign, TARGET).stdout).read(), format="ascii.ecsv")
    assert len(table) == n
    assert table["mag"].unit == "mag"
    path = tmp_path / "curve.csv"
    fadeline("export", demo.campaign, TARGET, "-o", path)
    with path.open(newline="") as file:
        assert len(list(csv.DictReader(file))) == n


def test_inspect_says_what_each_file_is_or_why_not(demo):
    truth = json.loads((demo.place / "truth.json").read_text())
    good = next(f for f in truth["frames"] if f["expected"] == "kept" and not f["fault"])
    bad = next(f for f in truth["frames"] if f["expected"] == "unreadable")
    files = [demo.frames / good["path"], demo.frames / bad["path"]]
    rows = [strict_json(line) for line in fadeline("inspect", *files, "--json", code=1).stdout.splitlines()]
    assert rows[0]["usable"] is True
    assert (rows[0]["kind"], rows[0]["band"]) == ("light", good["band"])
    assert rows[0]["mjd_mid"] == pytest.approx(good["mjd_mid"], abs=1e-6)
    assert rows[1]["usable"] is False
    assert rows[1]["reason"].count(". ") == 0


def test_notes_stay_in_the_log(demo, tmp_path):
    folder = demo.copy(tmp_path / "campaign")
    fadeline("note", folder, "Clouds", "in", "the", "west")
    lines = [strict_json(line) for line in fadeline("log", folder, "--search", "clouds", "--json").stdout.splitlines()]
    assert [line["body"] for line in lines] == ["Clouds in the west"]


def test_new_and_reduce_on_a_few_frames(demo, tmp_path):
    """The way of a newcomer with frames of his own: folders, sequence, target by hand, no flats for most bands."""
    truth = json.loads((demo.place / "truth.json").read_text())
    frames = tmp_path / "frames"
    frames.mkdir()
    few = [f for f in truth["frames"] if f["expected"] == "kept" and not f["fault"]][:3]
    for frame in few:
        shutil.copy(demo.frames / frame["path"], frames)
    (frames / "notes.txt").write_text("no frame")
    target = f"My star,{truth['ra_deg']},{truth['dec_deg']},type_ia,0.01"
    folder = tmp_path / "mine"
    fadeline("new", folder, "--frames", frames, "--sequence", demo.place / "comparison.csv", "--target", target,
             "--ebv-mw", "0.03,SFD", "--scale", "1.02", "--site", "37.9,-4.6,820")  # fmt: skip
    *rows, summary = [strict_json(line) for line in fadeline("reduce", folder, "--json").stdout.splitlines()]
    assert [row["outcome"] for row in rows] == ["measured"] * 3
    assert {row["state"] for row in rows} == {"doubtful"}  # no flat, no bias: said, not hidden
    assert all("flat" in row["reason"] for row in rows)
    assert summary["doubtful"] == 3
    assert "cannot tell yet" in fadeline("distance", folder).stdout


@pytest.mark.parametrize(
    ("words", "sentence"),
    [
        (["open", "/nowhere"], "holds no campaign"),
        (["reduce", "/nowhere"], "holds no campaign"),
        (["curve", "{campaign}", "No such star"], "There is no target"),
        (["distance", "--light-curve", "/nowhere.csv"], "/nowhere.csv"),
        (["new", "{tmp}/c", "--frames", "/nowhere", "--sequence", "x", "--target", "A,1,2,other"], "/nowhere"),
        (["new", "{tmp}/c", "--frames", "{tmp}", "--sequence", "/no.csv", "--target", "A,1,2,other"], "/no.csv"),
        (["new", "{tmp}/c", "--frames", "{tmp}", "--sequence", "x", "--target", "A,1,2"], "NAME,RA,DEC,KIND"),
        (["demo", "--folder", "{campaign}", "--headless"], "holds no demo"),
        (["distance", "{campaign}", "--scale-mb", "nan"], "nan is not a number"),
        (["distance", "{campaign}", "--scale-h0", "nan"], "nan is not a number"),
        (["plan", "{campaign}", "--night", "9999-12-31"], "date of the evening"),
        (["target", "{campaign}", "--host-light", "reference"], "has no reference"),
    ],
)
def test_a_refusal_is_one_sentence_and_exit_2(demo, tmp_path: Path, words, sentence):
    filled = [word.format(campaign=demo.campaign, tmp=tmp_path) for word in words]
    done = fadeline(*filled, code=2)
    assert sentence in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1
