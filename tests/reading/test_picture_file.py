from __future__ import annotations

import dataclasses
import gzip
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import tifffile
from numpy.typing import NDArray

from fringespan.exceptions import CalibrationError, UnreadablePictureError
from fringespan.reading import read


@pytest.fixture
def tiff(tmp_path: Path, grey16: NDArray[np.uint16]) -> Path:
    path = tmp_path / "particle.tif"
    tifffile.imwrite(path, grey16, resolution=(5e8, 5e8), resolutionunit=3)
    return path


def test_says_where_everything_came_from(tiff: Path) -> None:
    micrograph = read(str(tiff))
    assert (micrograph.name, micrograph.path) == ("particle.tif", tiff)
    assert (micrograph.frame, micrograph.frame_count) == (0, 1)
    assert micrograph.pixel_size_source == "resolution tags"
    assert micrograph.pixel_size_relative_uncertainty is None
    assert len(micrograph.sha256()) == 64


def test_what_is_given_goes_before_what_the_file_says(tiff: Path) -> None:
    micrograph = read(
        tiff,
        pixel_size_nm=(0.03, 0.031),
        pixel_size_relative_uncertainty=0.01,
        voltage_kv=300,
        cs_mm=1.2,
        defocus_nm=60,
        dark_level=5,
    )
    assert micrograph.pixel_size_nm == (0.03, 0.031)
    assert micrograph.pixel_size_source == "given by the user"
    assert micrograph.pixel_size_relative_uncertainty == 0.01
    assert (micrograph.voltage_kv, micrograph.cs_mm, micrograph.defocus_nm, micrograph.dark_level) == (300, 1.2, 60, 5)


def test_a_given_size_ends_the_doubts_about_the_files(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    tifffile.imwrite(tmp_path / "a.tif", grey16, resolution=(300, 300), resolutionunit=2)
    assert read(tmp_path / "a.tif").cautions
    assert read(tmp_path / "a.tif", pixel_size_nm=0.02).cautions == ()


def test_it_can_be_corrected_afterwards(tiff: Path) -> None:
    changed = dataclasses.replace(read(tiff), pixel_size_nm=(0.04, 0.04), voltage_kv=200.0)
    assert changed.pixel_size_nm == (0.04, 0.04)
    assert changed.crop(slice(0, 2), slice(0, 2)).shape == (2, 2)


def test_an_impossible_given_size_is_refused(tiff: Path) -> None:
    with pytest.raises(CalibrationError, match="pixel_size_nm must lie between"):
        read(tiff, pixel_size_nm=0.0)


def test_the_content_decides_and_not_the_name(tiff: Path, tmp_path: Path) -> None:
    renamed = tiff.rename(tmp_path / "particle.png")
    assert read(renamed).pixel_size_nm == pytest.approx((0.02, 0.02))


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (b"", "is empty; copy it again"),
        (b"\n", "is none of the picture formats TIFF, MRC, PNG, JPEG, NumPy .npy and OME-Zarr"),
        (b"A list of spacings, by mistake saved as a picture.", "is none of the picture formats"),
        (b"II*", "is none of the picture formats"),
        (b"II*\0", "is damaged"),
        (b"\x93NUMPY", "is damaged"),
        (b"\x89PNG\r\n\x1a\n", "is damaged"),
        (b"\xff\xd8\xff", "is damaged"),
        (bytes(208) + b"MAP " + bytes(20), "header is cut off"),
        (gzip.compress(b"picture", mtime=0), "is compressed with gzip; unpack it first"),
        (b"PK\x03\x04 ...", "is a zip archive; unpack it first"),
        (b"\x89HDF\r\n\x1a\n ...", "is an HDF5 file; export the picture as TIFF or MRC"),
        (b"%PDF-1.7 ...", "is a PDF document"),
    ],
)
@pytest.mark.parametrize("name", ["picture.tif", "picture.mrc", "picture"])
def test_what_is_no_picture_is_refused_in_one_line(tmp_path: Path, content: bytes, says: str, name: str) -> None:
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(UnreadablePictureError, match=says) as refusal:
        read(path)
    assert str(refusal.value).startswith(f"{path}: ")
    assert "\n" not in str(refusal.value)


def test_a_missing_file(tmp_path: Path) -> None:
    for name in ("missing.tif", "a\0b.tif", "x" * 5000):
        with pytest.raises(UnreadablePictureError, match=r"no such file|cannot be read"):
            read(tmp_path / name)


def test_a_folder(tmp_path: Path) -> None:
    with pytest.raises(UnreadablePictureError, match="is a folder and not an OME-Zarr; name a picture in it"):
        read(tmp_path)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="the system has no named pipes")
def test_a_pipe_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.tif")
    with pytest.raises(UnreadablePictureError, match="is not an ordinary file"):
        read(tmp_path / "pipe.tif")


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may read everything")
def test_a_forbidden_file(tiff: Path) -> None:
    tiff.chmod(0)
    with pytest.raises(UnreadablePictureError, match=r"cannot be read \(Permission denied\)"):
        read(tiff)


def test_a_plain_tiff_costs_no_library_that_it_does_not_need(tiff: Path) -> None:
    code = f"""
import sys
from fringespan.reading import read
read({str(tiff)!r}).crop(slice(0, 9), slice(0, 9))
print({{"zarr", "pint", "matplotlib", "PIL", "mrcfile", "skimage", "scipy", "numba"}} & set(sys.modules))
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "set()"
    assert done.stderr == ""


def test_a_damaged_file_prints_nothing_of_its_own(tiff: Path) -> None:
    content = bytearray(tiff.read_bytes())
    content[8:200] = b"\xff" * 192
    tiff.write_bytes(content)
    code = f"""
from fringespan.exceptions import UnreadablePictureError
from fringespan.reading import read
try:
    read({str(tiff)!r})
except UnreadablePictureError:
    print("refused")
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert (done.stdout.strip(), done.stderr) == ("refused", "")
