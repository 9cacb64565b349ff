"""`fringespan profile`: the fringes along a line, for people and for programs."""

import csv
import io
import json
import re

import pytest


def test_the_text_gives_count_and_spacing(run, picture):
    result = run("profile", picture, "--line", "128,20,128,220", "--width", "40", "--pixel-size", "0.02")
    assert result.exit_code == 0
    assert result.stderr == ""
    assert "particle.tif" in result.stdout
    assert "Line from 128,20 to 128,220" in result.stdout
    assert "200.0 px long, 40 px wide, direction 0.00 deg" in result.stdout
    # 200 px / 8 px
    assert "fringes on the line   25.0" in result.stdout
    spacing = re.search(r"spacing along it +([\d.]+)\(\d+\) nm", result.stdout)[1]
    assert float(spacing) == pytest.approx(0.16, rel=1e-3)
    assert "give --pixel-size-uncertainty PERCENT" in " ".join(result.stdout.split())


def test_the_uncertainty_is_told_in_its_parts(run, picture):
    options = ["--pixel-size", "0.02", "--pixel-size-uncertainty", "1"]
    assert "pixel size 1.00 %" in run("profile", picture, "--line", "128,20,128,220", *options).stdout


def test_the_document_holds_result_profile_and_picture(run, picture):
    document = json.loads(run("profile", picture, "--line", "128,20,128,220", "--width", "40", "--json", "-").stdout)
    assert document["schema"] == "fringespan.profile/1"
    assert document["picture"]["name"] == "particle.tif"
    assert document["line_px"] == [[128.0, 20.0], [128.0, 220.0]]
    assert document["period_px"] == pytest.approx(8, rel=1e-3)
    assert document["spacing_nm"] is None
    assert len(document["positions_px"]) == len(document["values"]) == len(document["fitted_values"]) == 201


def test_the_table_holds_the_profile(run, picture):
    output = run("profile", picture, "--line", "128,20,128,220", "--pixel-size", "0.02", "--csv", "-").stdout
    rows = list(csv.DictReader(io.StringIO(output)))
    assert len(rows) == 201
    assert float(rows[-1]["position_px"]) == 200
    assert float(rows[-1]["position_nm"]) == pytest.approx(4)


@pytest.mark.parametrize("name", ["p.png", "p.svg", "p.pdf"])
def test_the_figure_is_drawn(run, picture, tmp_path, name):
    assert run("profile", picture, "--line", "20,20,200,200", "--figure", tmp_path / name).exit_code == 0
    assert (tmp_path / name).stat().st_size > 10_000


def test_no_fringe_along_the_line_is_a_result(run, picture):
    # along the fringes of 8 px nothing repeats but the second set, which this width averages away
    result = run("profile", picture, "--line", "30,80,230,80", "--width", "1")
    assert result.exit_code == 0


def test_regions_are_said_to_play_no_part(run, picture):
    result = run("profile", picture, "--line", "128,20,128,220", "--region", "A: 0,0 0,50 50,50")
    assert result.exit_code == 0
    assert "regions play no part" in result.stderr
