"""The shipped pictures and their truth files belong together, and the truth agrees with references not made here.

Outside references: gemmi (unit-cell geometry and systematic absences), tifffile (pixel sizes as stored), numpy's FFT.
"""

import json
from pathlib import Path
from typing import Any

import gemmi
import numpy as np
import pytest
import tifffile

HERE = Path(__file__).parent
TRUTHS = sorted([*HERE.glob("*.json"), *(HERE.parents[1] / "sample_images").glob("*.json")])


def crystals() -> list[Any]:
    """Every region with a crystal, in every frame of every picture."""
    cases = []
    for path in TRUTHS:
        truth = json.loads(path.read_text(encoding="utf-8"))
        for frame in truth.get("frames", [{"frame": 0, "regions": truth["regions"]}]):
            for region in frame["regions"]:
                if region.get("phase"):
                    label = f"{path.stem}-{frame['frame']}-{region['phase']}"
                    cases.append(pytest.param(path, truth, frame["frame"], region, id=label))
    return cases


def vectors(region: dict[str, Any], key: str) -> np.ndarray:
    return np.array([reflection[key] for reflection in region["reflections"]], float)


@pytest.mark.parametrize("path", TRUTHS, ids=lambda path: path.stem)
def test_a_picture_has_the_shape_and_the_pixel_size_its_truth_says(path: Path) -> None:
    truth = json.loads(path.read_text(encoding="utf-8"))
    assert truth["statement"].startswith("Simulated picture.")
    picture_path = path.parent / truth["picture"]
    assert picture_path.stat().st_size < (1_000_000 if path.parent != HERE else 150_000)
    with tifffile.TiffFile(picture_path) as tif:
        pixels = tif.asarray()
        if tif.is_ome:
            description = tifffile.xml2dict(tif.ome_metadata)["OME"]["Image"]["Pixels"]
            assert description["PhysicalSizeXUnit"] == description["PhysicalSizeYUnit"] == "nm"
            stored = [description["PhysicalSizeY"], description["PhysicalSizeX"]]
        else:
            tags = tif.pages[0].tags
            assert tags["ResolutionUnit"].value == tifffile.RESUNIT.CENTIMETER
            stored = [1e7 * tags[f"{axis}Resolution"].value[1] / tags[f"{axis}Resolution"].value[0] for axis in "YX"]
    assert list(pixels.shape) == truth["shape"]
    assert str(pixels.dtype) == truth["dtype"]
    assert stored == pytest.approx(truth["pixel_size"]["stated_in_file_nm"], rel=1e-6)


@pytest.mark.parametrize(("path", "truth", "frame", "region"), crystals())
def test_spacings_angles_and_absences_are_those_of_the_cell(
    path: Path, truth: dict[str, Any], frame: int, region: dict[str, Any]
) -> None:
    edges, angles = region["cell_nm_deg"][:3], region["cell_nm_deg"][3:]
    cell = gemmi.UnitCell(*(10 * edge for edge in edges), *angles)
    hkl = vectors(region, "hkl").astype(int)
    assert np.all(hkl @ region["zone"] == 0)
    spacing = np.array([cell.calculate_d(indices) for indices in hkl.tolist()]) / 10
    assert vectors(region, "d_lattice_nm") == pytest.approx(spacing, rel=2e-6)

    g = vectors(region, "g_true_per_nm")
    g_file = vectors(region, "g_per_nm")
    ratio = np.array(truth["pixel_size"]["true_over_stated"])
    assert g_file == pytest.approx(g * ratio, abs=2e-6)
    assert vectors(region, "d_nm") == pytest.approx(1 / np.hypot(*g_file.T), rel=2e-6)
    assert vectors(region, "direction_deg") == pytest.approx(
        np.degrees(np.arctan2(-g_file[:, 0], g_file[:, 1])) % 180, abs=1e-4
    )
    # a tilt shortens g in projection, at most by the cosine of the tilt
    length = np.hypot(*g.T) * spacing
    assert np.all(length <= 1 + 3e-6)
    assert np.all(length >= np.cos(np.radians(region["tilt_deg"])) - 3e-6)
    if region["tilt_deg"] == 0:
        reciprocal = hkl @ np.array(cell.frac.mat.tolist())
        between = reciprocal @ reciprocal.T * 100
        assert np.max(np.abs(g @ g.T - between)) < 2e-4

    operations = gemmi.find_spacegroup_by_name(region["space_group"].split(":")[0]).operations()
    for indices, reflection in zip(hkl.tolist(), region["reflections"], strict=True):
        if operations.is_systematically_absent(indices):
            assert reflection["absent"] is not None
        if reflection["absent"] == "centring":
            assert operations.is_systematically_absent(indices)


@pytest.mark.parametrize(("path", "truth", "frame", "region"), crystals())
def test_strong_reflections_are_where_numpys_fourier_transform_has_them(
    path: Path, truth: dict[str, Any], frame: int, region: dict[str, Any]
) -> None:
    pixels = tifffile.imread(path.parent / truth["picture"]).astype(float)
    pixels = pixels if pixels.ndim == 2 else pixels[frame]
    corners = np.array(region["vertices_px"])
    top, left = np.maximum(np.ceil(corners.min(axis=0)), 0).astype(int)
    bottom, right = np.floor(corners.max(axis=0)).astype(int) + 1
    cut = pixels[top:bottom, left:right]
    window = np.outer(np.hanning(cut.shape[0]), np.hanning(cut.shape[1]))
    power = np.abs(np.fft.fft2(window * (cut - np.average(cut, weights=window)), (1024, 1024))) ** 2
    visible = [r for r in region["reflections"] if r["seen"] == "visible"]
    assert len(visible) >= 2
    width = 1024 / np.array(cut.shape)
    for reflection in sorted(visible, key=lambda r: -r["peak_over_background"])[:2]:
        centre = np.array(reflection["g_per_nm"]) * truth["pixel_size"]["stated_in_file_nm"] * 1024
        reach = np.ceil(3 * width).astype(int)
        rows, columns = (np.arange(-n, n + 1) + round(c) for n, c in zip(reach, centre, strict=True))
        near = power[np.ix_(rows % 1024, columns % 1024)]
        i, j = np.unravel_index(np.argmax(near), near.shape)
        assert np.all(np.abs(np.array([rows[i], columns[j]]) - centre) < 0.6 * width + 0.5)


@pytest.mark.parametrize("path", TRUTHS, ids=lambda path: path.stem)
def test_the_check_made_with_each_picture_agreed(path: Path) -> None:
    truth = json.loads(path.read_text(encoding="utf-8"))
    for frame in truth.get("frames", [truth]):
        for region in frame["regions"]:
            if "check" in region:
                assert region["check"]["outcome"] == "agrees"
                assert region["check"].get("projected_atoms_worst_cycles", 0) < 0.05
