"""`fringespan view`: what it hands to the viewer, and what it says without one. Windows are opened in `tests/viewer`."""

import pytest


@pytest.fixture
def shown(monkeypatch):
    calls = []
    monkeypatch.setattr("fringespan.command_line.view.show", lambda *arguments: calls.append(arguments))
    return calls


def test_the_viewer_opens_with_nothing_in_it(run, shown):
    pytest.importorskip("napari")
    assert run("view").exit_code == 0
    assert shown == [(None, (), None)]


def test_the_picture_comes_with_what_was_said_of_it(run, shown, picture):
    pytest.importorskip("napari")
    arguments = ("--pixel-size", "0.021", "--pixel-size-uncertainty", "1.5", "--voltage", "300")
    assert run("view", picture, *arguments, "--region", "A: 10,10 10,90 90,90").exit_code == 0
    ((micrograph, regions, path),) = shown
    assert micrograph.pixel_size_nm == (0.021, 0.021)
    assert micrograph.pixel_size_relative_uncertainty == pytest.approx(0.015)
    assert micrograph.voltage_kv == 300
    assert [region.name for region in regions] == ["A"]
    assert path == str(picture)


def test_a_missing_picture_is_one_line_and_no_window(run, shown, tmp_path):
    result = run("view", tmp_path / "nothing.tif")
    assert result.exit_code == 1
    assert len(result.stderr.splitlines()) == 1
    assert shown == []


def test_without_the_viewer_it_says_what_to_install(run, shown, monkeypatch):
    monkeypatch.setattr("fringespan.command_line.view.find_spec", lambda name: None)
    result = run("view")
    assert result.exit_code == 1
    assert 'pip install "fringespan[all]"' in result.stderr
    assert shown == []
