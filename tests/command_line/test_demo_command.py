"""`fringespan demo`: a right table at the first try, in a folder of its own, and a window only when asked for."""

import json

import pytest

from fringespan.command_line.demo import _PIXEL_SIZE_UNCERTAINTY
from fringespan.record import read_record
from fringespan.sample_pictures import sample_file


@pytest.fixture(scope="module")
def truth():
    return json.loads(sample_file("two_grains.json").read_text())


def test_the_demo_measures_both_grains_right_and_says_where_everything_is(run, tmp_path, truth):
    """Spacings against the published cells that the simulated picture was made from (`sample_images/README.md`)."""
    folder = tmp_path / "demo"
    result = run("demo", "--out", folder)
    assert result.exit_code == 0
    assert result.stderr == ""
    assert "simulated" in result.stdout
    assert {p.name for p in folder.iterdir()} == {"two_grains.ome.tif", "record.json", "peaks.csv", "figure.png"}
    for path in folder.iterdir():
        assert str(path) in result.stdout
    record = read_record(folder / "record.json")
    assert [r.region.name for r in record.regions] == [r["name"] for r in truth["regions"]]
    for recorded, expected in zip(record.regions, truth["regions"], strict=True):
        visible = [r["d_nm"] for r in expected["reflections"] if r["seen"] == "visible"]
        strongest = recorded.peaks[0]
        nearest = min(visible, key=lambda d: abs(d - strongest.d_nm))
        assert strongest.d_nm == pytest.approx(nearest, rel=5e-3)
        assert strongest.d_nm == pytest.approx(nearest, abs=3 * strongest.d_uncertainty_nm)
        assert strongest.d_uncertainty_nm > _PIXEL_SIZE_UNCERTAINTY * strongest.d_nm


def test_the_command_it_ends_with_works(run, tmp_path):
    result = run("demo", "--out", tmp_path / "demo")
    command = result.stdout.splitlines()[-1].split()
    assert command[0] == "fringespan"
    assert run(*command[1:]).exit_code == 0


def test_files_that_are_there_are_never_touched(run, tmp_path):
    folder = tmp_path / "results"
    folder.mkdir()
    (folder / "record.json").write_text("mine")
    first, second = run("demo", "--out", folder), run("demo", "--out", folder)
    assert first.exit_code == second.exit_code == 0
    assert (folder / "record.json").read_text() == "mine"
    assert {p.name for p in tmp_path.iterdir()} == {"results", "results-2", "results-3"}
    assert str(tmp_path / "results-3" / "figure.png") in second.stdout


def test_the_folder_has_a_name_of_its_own_by_default(run, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run("demo").exit_code == 0
    assert [p.name for p in tmp_path.iterdir()] == ["fringespan-demo"]


def test_without_the_viewer_it_says_what_to_install_before_it_writes(run, tmp_path, monkeypatch):
    monkeypatch.setattr("fringespan.command_line.view.find_spec", lambda name: None)
    result = run("demo", "--out", tmp_path / "demo", "--view")
    assert result.exit_code == 1
    assert 'pip install "fringespan[all]"' in result.stderr
    assert not list(tmp_path.iterdir())


def test_the_viewer_opens_on_the_picture_that_was_written(run, tmp_path, monkeypatch):
    pytest.importorskip("napari")
    shown = []
    monkeypatch.setattr("fringespan.command_line.demo.show", lambda *arguments: shown.append(arguments))
    assert run("demo", "--out", tmp_path / "demo", "--view").exit_code == 0
    ((micrograph, regions, path),) = shown
    assert path == str(micrograph.path) == str(tmp_path / "demo" / "two_grains.ome.tif")
    assert [region.name for region in regions] == ["gold", "ceria"]
