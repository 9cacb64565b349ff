"""`fringespan measure`: the table for people, the record, the table for programs, the figure."""

import csv
import io
import json
import re

import jsonschema
import numpy as np
import pytest
import tifffile

from fringespan.record import read_record, record_schema

LEFT = "left: 10,10 10,115 245,115 245,10"
RIGHT = "right half: 10,125 10,230 245,230 245,125"


def test_the_table_tells_period_direction_and_strength(run, picture):
    result = run("measure", picture)
    assert result.exit_code == 0
    assert result.stderr == ""
    assert "particle.tif\n  256 x 240 px, pixel size not stated" in result.stdout
    assert "whole picture\n" in result.stdout
    rows = re.findall(r"^ +\d+ +([\d.]+)\(\d+\) +([\d.]+)\(\d+\) +\d+", result.stdout, re.MULTILINE)
    found = {round(float(period)): (float(period), float(direction)) for period, direction in rows}
    # 8 px along the columns; 1 / hypot(0.06, 0.068) = 11.027 px at atan2(-0.06, 0.068) = 138.576 degrees
    assert found[8] == pytest.approx((8, 0), abs=0.02)
    assert found[11] == pytest.approx((11.027, 138.576), abs=0.03)


def test_with_a_pixel_size_everything_is_in_nm_and_its_uncertainty_is_in_the_record(run, picture, tmp_path):
    file = tmp_path / "record.json"
    options = ["--pixel-size", "0.02,0.025", "--pixel-size-uncertainty", "1,2", "--voltage", "300", "--cs", "1.2"]
    result = run("measure", picture, *options, "--defocus", "-20", "--json", file)
    assert result.exit_code == 0
    assert "0.02 (down) x 0.025 (right) nm/px, known to 1 % (down) and 2 % (right)" in result.stdout
    document = json.loads(file.read_text())
    jsonschema.validate(document, record_schema())
    assert document["pixel_size"]["nm"] == [0.02, 0.025]
    assert document["pixel_size"]["relative_uncertainty"] == [0.01, 0.02]
    assert document["pixel_size"]["shared_by_both_axes"] is False
    assert document["beam"] == {"voltage_kv": 300.0, "cs_mm": 1.2, "defocus_nm": -20.0}
    spacings = [peak["d_nm"] for peak in document["regions"][0]["peaks"]]
    assert any(d == pytest.approx(8 * 0.025, rel=1e-3) for d in spacings)


def test_one_number_for_the_pixel_size_is_that_of_both_axes(run, picture):
    document = json.loads(
        run("measure", picture, "--pixel-size", "0.02", "--pixel-size-uncertainty", "1.5", "--json", "-").stdout
    )
    assert document["pixel_size"]["nm"] == [0.02, 0.02]
    assert document["pixel_size"]["relative_uncertainty"] == pytest.approx([0.015, 0.015])
    assert document["pixel_size"]["shared_by_both_axes"] is True


def test_regions_are_measured_one_by_one_under_their_names(run, picture):
    document = json.loads(run("measure", picture, "--region", LEFT, "--region", RIGHT, "--json", "-").stdout)
    assert [region["name"] for region in document["regions"]] == ["left", "right half"]
    assert document["regions"][0]["vertices_px"][1] == [10.0, 115.0]


def test_a_region_without_a_name_gets_a_number_and_a_name_may_have_colons(run, picture):
    first, second = "10,10 10,115 245,115 245,10", "film: edge: 10,125 10,230 245,230 245,125"
    document = json.loads(run("measure", picture, "--region", first, "--region", second, "--json", "-").stdout)
    assert [region["name"] for region in document["regions"]] == ["region 1", "film: edge"]


def test_a_record_can_be_measured_again_with_its_regions_and_gives_the_same(run, picture, tmp_path):
    first, second = tmp_path / "first.json", tmp_path / "second.json"
    run("measure", picture, "--region", LEFT, "--json", first)
    assert run("measure", picture, "--regions", first, "--json", second).exit_code == 0
    assert second.read_bytes() == first.read_bytes()


def test_regions_come_from_any_list_too(run, picture, tmp_path):
    file = tmp_path / "regions.json"
    corners = [[10, 10], [10, 115], [245, 115], [245, 10]]
    file.write_text(json.dumps({"regions": [{"name": "A", "vertices_px": corners}]}))
    document = json.loads(run("measure", picture, "--regions", file, "--region", RIGHT, "--json", "-").stdout)
    assert [region["name"] for region in document["regions"]] == ["right half", "A"]


def test_no_fringe_is_a_result_not_an_error(run, tmp_path):
    path = tmp_path / "noise.tif"
    tifffile.imwrite(path, np.random.default_rng(0).normal(100, 10, (128, 128)).astype(np.float32))
    result = run("measure", path, "--csv", tmp_path / "table.csv", "--figure", tmp_path / "figure.png")
    assert result.exit_code == 0
    assert "no fringe found" in result.stdout
    assert len((tmp_path / "table.csv").read_text().splitlines()) == 1


def test_the_csv_table_has_every_digit(run, picture):
    output = run("measure", picture, "--pixel-size", "0.02", "--csv", "-").stdout
    document = json.loads(run("measure", picture, "--pixel-size", "0.02", "--json", "-").stdout)
    rows = list(csv.DictReader(io.StringIO(output)))
    peaks = document["regions"][0]["peaks"]
    assert [float(row["d_nm"]) for row in rows] == [peak["d_nm"] for peak in peaks]
    assert [row["peak"] for row in rows] == [str(i + 1) for i in range(len(peaks))]


@pytest.mark.parametrize(("name", "begins"), [("f.png", b"\x89PNG"), ("f.svg", b"<?xml"), ("f.pdf", b"%PDF")])
def test_figures_are_written_in_the_format_of_their_name(run, picture, tmp_path, name, begins):
    assert run("measure", picture, "--figure", tmp_path / name).exit_code == 0
    assert (tmp_path / name).read_bytes().startswith(begins)


def test_a_frame_of_a_stack_is_chosen(run, tmp_path):
    column = np.indices((3, 128, 128))[2]
    frames = np.stack([np.cos(2 * np.pi * column[0] / period) for period in (6, 8, 11)])
    frames += 0.2 * np.random.default_rng(0).normal(size=frames.shape)
    tifffile.imwrite(tmp_path / "stack.tif", frames.astype(np.float32), photometric="minisblack")
    document = json.loads(run("measure", tmp_path / "stack.tif", "--frame", "2", "--json", "-").stdout)
    assert document["picture"]["frame"] == 2
    assert document["regions"][0]["peaks"][0]["period_px"] == pytest.approx(11, rel=1e-3)


def test_what_is_to_be_said_of_the_picture_is_said_once(run, picture):
    text = " ".join(run("measure", picture, "--region", LEFT, "--region", RIGHT).stdout.split())
    assert text.count("states no usable pixel size") == 1


# --- several pictures -----------------------------------------------------------------------------------------------


@pytest.fixture
def two_pictures(picture, tmp_path):
    paths = [tmp_path / "a" / "one.tif", tmp_path / "b" / "two.ome.tif"]
    for path in paths:
        path.parent.mkdir()
        path.write_bytes(picture.read_bytes())
    return paths


def test_several_pictures_follow_each_other_each_with_files_of_its_own(run, two_pictures, tmp_path):
    out = tmp_path / "out"
    out.mkdir()
    result = run(
        "measure", *two_pictures, "--json", out / "rec.json", "--csv", out / "t.csv", "--figure", out / "f.png"
    )
    assert result.exit_code == 0
    assert result.stdout.index("one.tif") < result.stdout.index("two.ome.tif")
    assert {p.name for p in out.iterdir()} == {"rec.one.json", "rec.two.json", "f.one.png", "f.two.png", "t.csv"}
    assert read_record(out / "rec.two.json").picture.name == "two.ome.tif"
    assert {row["picture"] for row in csv.DictReader(io.StringIO((out / "t.csv").read_text()))} == {
        "one.tif",
        "two.ome.tif",
    }


def test_pictures_of_the_same_name_do_not_overwrite_each_others_record(run, two_pictures, tmp_path):
    same = two_pictures[1].with_name("one.png")
    two_pictures[1].rename(same)
    assert run("measure", two_pictures[0], same, "--json", tmp_path / "r.json").exit_code == 0
    assert {p.name for p in tmp_path.glob("r.*")} == {"r.one.json", "r.one-2.json"}


def test_records_of_several_pictures_on_standard_output_are_a_list(run, two_pictures):
    documents = json.loads(run("measure", *two_pictures, "--json", "-").stdout)
    assert [d["picture"]["name"] for d in documents] == ["one.tif", "two.ome.tif"]


def test_a_picture_that_cannot_be_read_does_not_stop_the_others_but_shows_in_the_status(run, two_pictures, tmp_path):
    broken = tmp_path / "broken.tif"
    broken.write_bytes(b"II*\0")
    result = run("measure", two_pictures[0], broken, two_pictures[1])
    assert result.exit_code == 1
    assert "one.tif" in result.stdout
    assert "two.ome.tif" in result.stdout
    (line,) = result.stderr.splitlines()
    assert str(broken) in line


# --- files are safe -------------------------------------------------------------------------------------------------


def test_a_picture_is_never_overwritten_by_a_result(run, picture, tmp_path, monkeypatch):
    path = tmp_path / "picture.tif"
    path.write_bytes(picture.read_bytes())
    monkeypatch.chdir(tmp_path)
    for option in ("--json", "--csv"):
        result = run("measure", path, option, "./picture.tif")
        assert result.exit_code == 2
        assert "would be overwritten" in result.stderr
    assert path.read_bytes() == picture.read_bytes()


def test_a_record_of_another_program_that_stands_in_the_place_is_replaced_only_whole(run, picture, tmp_path):
    file = tmp_path / "record.json"
    file.write_text("old")
    assert run("measure", picture, "--region", "far: 900,900 900,990 990,990", "--json", file).exit_code == 1
    assert file.read_text() == "old"
    assert run("measure", picture, "--json", file).exit_code == 0
    assert read_record(file).picture.name == "particle.tif"
    assert [p.name for p in tmp_path.iterdir()] == ["record.json"]


def test_peaks_are_compared_with_phases(run, picture, tmp_path):
    file = tmp_path / "record.json"
    scale = ("--pixel-size", "0.021", "--pixel-size-uncertainty", "1")
    done = run("measure", picture, "--phases", "gold,tio2_a", *scale, "--json", file)
    assert done.exit_code == 0
    [region] = read_record(file).regions
    identification = region.identification
    assert identification.verdict is not None
    assert identification.sentence.split()[0] in done.output
    assert {match.phase for match in identification.matches} <= {"au", "tio2_a"}
    assert all(len(match.hkl) == len(region.peaks) for match in identification.matches)


def test_without_phases_nothing_is_compared(run, picture, tmp_path):
    file = tmp_path / "record.json"
    assert run("measure", picture, "--phases", "none", "--json", file).exit_code == 0
    assert read_record(file).regions[0].identification.verdict is None


def test_an_unknown_phase_is_refused_before_anything_is_measured(run, picture):
    done = run("measure", picture, "--phases", "unobtainium")
    assert done.exit_code == 1
    assert "no phase called" in done.stderr
