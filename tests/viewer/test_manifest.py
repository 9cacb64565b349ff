"""The manifest: valid, found in an installation, and every name in it leads somewhere."""

import importlib
from importlib.metadata import entry_points
from pathlib import Path

import pytest
from npe2 import PluginManifest

import fringespan
from fringespan.viewer.open import DOCKS

FILE = Path(fringespan.__file__).with_name("napari.yaml")


@pytest.fixture(scope="module")
def manifest() -> PluginManifest:
    return PluginManifest.from_file(FILE)


def test_napari_finds_it_through_the_entry_point():
    (found,) = (e for e in entry_points(group="napari.manifest") if e.name == "fringespan")
    assert found.value == "fringespan:napari.yaml"


def test_every_command_is_a_function_or_a_dock(manifest):
    assert len(manifest.contributions.commands) >= 8
    for command in manifest.contributions.commands:
        module, name = command.python_name.split(":")
        assert callable(getattr(importlib.import_module(module), name))


def test_every_contribution_names_a_command(manifest):
    known = {command.id for command in manifest.contributions.commands}
    parts = manifest.contributions
    used = [*parts.widgets, *parts.readers, *parts.sample_data, *parts.menus["napari/layers/measure"]]
    assert {item.command for item in used} <= known


def test_the_docks_that_are_opened_are_those_of_the_manifest(manifest):
    assert [widget.display_name for widget in manifest.contributions.widgets] == list(DOCKS)


def test_every_sample_is_simulated_and_says_so(manifest):
    for sample in manifest.contributions.sample_data:
        assert "simulated" in sample.display_name
        module, name = manifest_function(manifest, sample.command)
        for _, options, kind in getattr(importlib.import_module(module), name)():
            assert kind == "image"
            assert "simulated" in options["name"]


def manifest_function(manifest: PluginManifest, command: str) -> list[str]:
    return next(c.python_name for c in manifest.contributions.commands if c.id == command).split(":")


def test_the_file_at_the_top_of_a_checkout_is_the_same_one():
    top = FILE.parents[2] / "napari.yaml"
    if not top.is_symlink():
        pytest.skip("not a checkout with links")
    assert top.resolve() == FILE.resolve()
    assert not Path(top.readlink()).is_absolute()
