"""The public face: every name in it exists and is listed, and importing it loads nothing heavy."""

import importlib
import pkgutil
import subprocess
import sys
import types

import pytest

import fringespan

HEAVY = [
    "numba", "matplotlib", "scipy", "skimage", "PIL", "gemmi", "zarr", "tifffile", "mrcfile", "imagecodecs", "pint",
    "uncertainties", "contourpy", "click", "jsonschema",
    "qtpy", "napari", "PyQt5", "PyQt6", "PySide2", "PySide6", "magicgui", "superqt", "vispy",
]  # fmt: skip

PROMISED = [
    "Caution", "FringespanError", "Measurement", "MeasurementSettings", "Micrograph", "Peak", "Region",
    "electron_wavelength_pm", "measure", "read",
]  # fmt: skip


def test_all_is_sorted_and_every_name_in_it_exists():
    assert list(fringespan.__all__) == sorted(fringespan.__all__)
    for name in fringespan.__all__:
        assert getattr(fringespan, name) is not None


def test_all_is_the_whole_truth():
    for name in fringespan.__all__:
        getattr(fringespan, name)
    public = {name for name in vars(fringespan) if not name.startswith("_")}
    modules = {name for name in public if isinstance(getattr(fringespan, name), types.ModuleType)}
    assert public - modules <= set(fringespan.__all__)
    assert set(dir(fringespan)) >= set(fringespan.__all__)


@pytest.mark.parametrize("name", PROMISED)
def test_what_scripts_rely_on_is_there(name):
    assert name in fringespan.__all__


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="measure_all"):
        _ = fringespan.measure_all


def test_every_module_says_what_it_offers_and_offers_it():
    for module in pkgutil.walk_packages(fringespan.__path__, "fringespan."):
        if module.name.endswith("__main__") or module.name.startswith("fringespan.viewer"):
            continue
        loaded = importlib.import_module(module.name)
        for name in getattr(loaded, "__all__", []):
            assert hasattr(loaded, name), f"{module.name}.{name}"


def loaded_after(statement):
    """Return the top-level modules that a fresh interpreter holds after a statement."""
    report = f"{statement}\nimport sys\nprint(*sorted({{name.split('.')[0] for name in sys.modules}}))"
    done = subprocess.run([sys.executable, "-c", report], capture_output=True, text=True, check=True)
    return set(done.stdout.split())


def test_importing_the_package_loads_nothing_heavy():
    loaded = loaded_after("import fringespan")
    assert "fringespan" in loaded
    assert not loaded & set(HEAVY)
    assert "numpy" not in loaded


def test_measuring_loads_no_window_and_no_drawing():
    loaded = loaded_after(
        "import numpy, fringespan\n"
        "y, x = numpy.indices((64, 64))\n"
        "fringespan.measure(fringespan.Micrograph(numpy.cos(x) + numpy.cos(1.1 * y) + 0.01 * (x * y % 7)))"
    )
    assert not loaded & {"matplotlib", "qtpy", "napari", "PyQt6", "PySide6", "magicgui", "gemmi", "zarr", "click"}


@pytest.mark.parametrize("module", ["measurement", "region", "reading", "record", "export", "profile"])
def test_no_part_of_the_library_loads_a_window_system(module):
    assert not loaded_after(f"import fringespan.{module}") & {"qtpy", "napari", "PyQt6", "PySide6", "magicgui", "vispy"}
