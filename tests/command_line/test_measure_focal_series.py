"""`fringespan measure --focal-series`: pictures of one region at different defocus, combined."""

import json
import re

import numpy as np
import pytest
import tifffile

from fringespan.record import record_from

KNOWN = ["--pixel-size", "0.02", "--pixel-size-uncertainty", "1", "--voltage", "200", "--cs", "1"]


def frame(seed: int) -> np.ndarray:
    """Fringes of 8 and 11.03 px in noise."""
    row, column = np.indices((200, 220))
    values = 200 + 20 * np.cos(2 * np.pi * column / 8) + 15 * np.cos(2 * np.pi * (0.06 * row + 0.068 * column))
    return (values + np.random.default_rng(seed).normal(0, 10, values.shape)).astype(np.float32)


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("series")
    paths = [folder / f"f{n}.tif" for n in range(3)]
    for n, path in enumerate(paths):
        tifffile.imwrite(path, frame(n))
    return paths


@pytest.fixture(scope="module")
def stack(tmp_path_factory):
    path = tmp_path_factory.mktemp("stack") / "stack.tif"
    tifffile.imwrite(path, np.array([frame(n) for n in range(3)]), photometric="minisblack")
    return path


def test_pictures_are_combined_in_one_table(run, files):
    result = run("measure", *files, "--focal-series", "--defocus-each", "30,60,90", *KNOWN)
    assert result.exit_code == 0
    assert result.stderr == ""
    assert "Focal series of 3 pictures" in result.stdout
    assert "f0.tif (30 nm), f1.tif (60 nm), f2.tif (90 nm)" in result.stdout
    # 11.027 px and 8 px of 0.02 nm
    spacings = [float(d) for d in re.findall(r"^ +\d+ +(0\.\d+)\(\d+\)", result.stdout, re.MULTILINE)]
    assert sorted(spacings)[-2:] == pytest.approx([0.16, 0.2205], abs=1e-3)
    assert "1-2 " in result.stdout


def test_one_document_holds_the_series_and_the_record_of_each_picture(run, files, tmp_path):
    file = tmp_path / "series.json"
    result = run("measure", *files, "--focal-series", "--defocus-each", "30,60,90", *KNOWN, "--json", file)
    assert result.exit_code == 0
    document = json.loads(file.read_text())
    assert document["schema"] == "fringespan.focal_series/1"
    (region,) = document["regions"]
    assert region["name"] == "whole picture"
    assert region["defocus_nm"] == [30.0, 60.0, 90.0]
    by_spacing = {round(r["d_nm"], 2): r for r in region["reflections"]}
    reflection = by_spacing[0.22]
    assert reflection["used"] == 3
    records = [record_from(record) for record in document["records"]]
    assert [record.picture.defocus_nm for record in records] == [30.0, 60.0, 90.0]
    singles = [r.regions[0].peaks[k].d_nm for r, k in zip(records, reflection["peaks"], strict=True)]
    assert min(singles) <= reflection["d_nm"] <= max(singles)


def test_the_frames_of_a_stack_are_a_series(run, stack, tmp_path):
    result = run(
        "measure", stack, "--focal-series", *KNOWN, "--figure", tmp_path / "figure.png", "--csv", tmp_path / "t.csv"
    )
    assert result.exit_code == 0
    assert "stack.tif frame 0 (defocus not stated)" in " ".join(result.stdout.split())
    assert sorted(path.name for path in tmp_path.glob("*.png")) == [f"figure.stack-{n}.png" for n in range(3)]
    rows = (tmp_path / "t.csv").read_text().splitlines()
    assert len(rows) > 2 * 3


def test_regions_are_combined_one_by_one(run, files):
    regions = ["--region", "left: 5,5 5,100 195,100 195,5", "--region", "right: 5,110 5,215 195,215 195,110"]
    result = run("measure", *files, "--focal-series", *KNOWN, *regions, "--json", "-")
    document = json.loads(result.stdout)
    assert [region["name"] for region in document["regions"]] == ["left", "right"]
    assert all(region["reflections"] for region in document["regions"])


@pytest.mark.parametrize(
    ("pictures", "options", "status", "words"),
    [
        (1, ["--focal-series", *KNOWN], 1, "needs at least two pictures"),
        (3, ["--focal-series", *KNOWN, "--defocus-each", "1,2"], 1, "one number for each of the 3 pictures, got 2"),
        (3, ["--focal-series"], 1, "no pixel size"),
        (3, [*KNOWN, "--defocus-each", "1,2,3"], 2, "--defocus-each goes with --focal-series"),
        (3, ["--focal-series", *KNOWN, "--defocus-each", "1,b,3"], 2, "no list of numbers"),
        (3, ["--focal-series", *KNOWN, "--defocus-each", "1,nan,3"], 1, "defocus_nm must be finite"),
    ],
)
def test_what_cannot_be_combined_is_said_in_a_line(run, files, pictures, options, status, words):
    result = run("measure", *files[:pictures], *options)
    assert result.exit_code == status
    assert words in result.stderr
    assert result.stderr.count("\n") == 1
    assert result.stdout == ""
