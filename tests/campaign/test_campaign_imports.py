"""Points of other observatories beside own ones: kept once, shown, fitted with their own zero points, exported."""

import json

import numpy as np
import pytest
from astropy.table import Table
from small_campaign import fadeline, opened

from reduce.candles.assumptions import Assumptions
from reduce.exchange.light_curve_file import LightCurveFileError

TARGET = "Larkrise 25a"


@pytest.fixture
def campaign(demo, tmp_path):
    with opened(demo.copy(tmp_path / "campaign")) as campaign:
        yield campaign


def as_file(campaign, path, shift, name=TARGET):
    """The campaign's own kept V points as another observatory would send them, ``shift`` fainter and a day later."""
    mine = [p for p in campaign.curve(TARGET) if p.state == "kept" and p.band == "V" and p.mag is not None]
    lines = [f"{name},{p.mjd + 0.01:.5f},V,{p.mag + shift:.4f},{max(p.err, 0.01):.4f},,,unknown" for p in mine]
    path.write_text("name,mjd,band,mag,err,z,ebv_mw,passbands\n" + "\n".join(lines) + "\n")
    return len(lines)


def test_imported_points_join_the_curve_the_fit_and_the_export(campaign, tmp_path):
    before = campaign.estimate(TARGET)
    path = tmp_path / "others.csv"
    n = as_file(campaign, path, 0.05)
    assert campaign.import_points(TARGET, path, "Beacon Hill") == n
    assert campaign.import_points(TARGET, path, "Beacon Hill") == 0
    assert sum("Beacon Hill" in row.body for row in campaign.log()) == 1

    points = [p for p in campaign.curve(TARGET) if p.source == "Beacon Hill"]
    assert len(points) == n
    assert {p.zp_group.split("/")[0] for p in points} == {"Beacon Hill"}
    after = campaign.estimate(TARGET)
    assert after.n == before.n + n
    (offset,) = after.offsets
    assert (offset.source, offset.band, offset.n) == ("Beacon Hill", "V", n)
    free = campaign.estimate(TARGET, assumptions=Assumptions(without=frozenset({"offsets"})))
    assert free.offsets[0].mag == pytest.approx(0.05, abs=0.01)
    # its zero point is its own, so that 0.05 mag cannot move the distance by more than the prior lets it
    assert abs(free.mu - before.mu) < 0.01

    out = tmp_path / "curve.ecsv"
    campaign.export(TARGET, out, "ecsv")
    table = Table.read(out, format="ascii.ecsv")
    assert int(np.sum(table["source"] == "Beacon Hill")) == n


def test_an_imported_point_can_be_excluded_alone(campaign, tmp_path):
    path = tmp_path / "others.csv"
    as_file(campaign, path, 0.0)
    campaign.import_points(TARGET, path, "Beacon: Hill/2")
    point = next(p for p in campaign.curve(TARGET) if p.source)
    assert point.source == "Beacon  Hill 2"
    campaign.decide(f"point:{TARGET}:{point.night}:V", "exclude", "yes")
    states = {p.night: p.state for p in campaign.curve(TARGET) if p.band == "V"}
    assert states[point.night] == "excluded"
    assert states[point.night.split(" ")[0]] == "kept"


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("A,60000,V,15,0.1,,\n", "does not say who measured"),
        ("A,60000,V,15,0.1,,\nB,60000,V,15,0.1,,\n", "2 objects and none is"),
        ("A,60000,z,15,0.1,,\n", "band z is none of"),
    ],
)
def test_what_cannot_be_imported_is_one_sentence(campaign, tmp_path, text, words):
    path = tmp_path / "others.csv"
    path.write_text("name,mjd,band,mag,err,z,ebv_mw\n" + text)
    with pytest.raises(LightCurveFileError, match=words):
        campaign.import_points(TARGET, path)
    assert campaign.book.imported() == []


def test_the_commands(campaign, tmp_path):
    path = tmp_path / "others.csv"
    n = as_file(campaign, path, 0.02)
    said = fadeline("import", campaign.folder, path, "--source", "Beacon Hill")
    assert f"{n} new points of {TARGET}" in said.stdout
    text = fadeline("distance", campaign.folder).stdout
    assert "Beacon Hill V: " in text
    own, other = (
        json.loads(fadeline("distance", campaign.folder, "--json", *more).stdout) for more in ([], ["--scale-h0", "70"])
    )
    assert other["mu"] - own["mu"] == pytest.approx(5 * np.log10(73.04 / 70.0), abs=1e-9)
    history = campaign.book.history(TARGET)
    assert history[-1].mu == own["mu"]  # what is asked for once does not join the history
    rows = fadeline("distance", campaign.folder, "--samples", "200").stdout.splitlines()
    assert rows[0] == "name,mu,e_host,t_max,dm15"
    drawn = np.array([float(row.split(",")[1]) for row in rows[1:]])
    assert drawn.mean() == pytest.approx(own["mu"], abs=4 * own["mu_err"] / np.sqrt(200))
