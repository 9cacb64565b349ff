"""Whatever happened to the bytes of a file: one clear line, and never a wrong picture where bytes are missing."""

from __future__ import annotations

import io
import shutil
import tempfile
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

import imagecodecs
import mrcfile
import numpy as np
import pytest
import tifffile
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from PIL import Image

from fringespan.exceptions import FringespanError, UnreadablePictureError
from fringespan.reading import read

RNG = np.random.default_rng(13)
GREY = RNG.integers(0, 4000, (48, 40), dtype=np.uint16)
GREY8 = (GREY >> 4).astype(np.uint8)
COLOURS = RNG.integers(0, 256, (48, 40, 3), dtype=np.uint8)
OME = {f"PhysicalSize{axis}": 0.02 for axis in "XY"} | {f"PhysicalSize{axis}Unit": "nm" for axis in "XY"}


def tiff(array: np.ndarray, **options: Any) -> bytes:
    buffer = io.BytesIO()
    tifffile.imwrite(buffer, array, **options)
    return buffer.getvalue()


def mrc() -> bytes:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "a.mrc"
        with mrcfile.new(path) as file:
            file.set_data(np.stack([GREY, GREY]).astype(np.float32))
            file.voxel_size = 0.2
        return path.read_bytes()


def npy() -> bytes:
    buffer = io.BytesIO()
    np.save(buffer, GREY)
    return buffer.getvalue()


def jpeg(array: np.ndarray, **options: Any) -> bytes:
    buffer = io.BytesIO()
    Image.fromarray(array).save(buffer, "jpeg", **options)
    return buffer.getvalue()


FILES: dict[str, Callable[[], bytes]] = {
    "tiff": lambda: tiff(GREY, resolution=(5e8, 5e8), resolutionunit=3),
    "tiff big": lambda: tiff(GREY, bigtiff=True, byteorder=">", description="unit=nm\n", metadata=None),
    "tiff ome stack": lambda: tiff(np.stack([GREY] * 3), ome=True, metadata=OME | {"axes": "ZYX"}),
    "tiff deflate tiles": lambda: tiff(GREY, compression="zlib", tile=(16, 16)),
    "tiff lzw": lambda: tiff(GREY, compression="lzw", predictor=True, rowsperstrip=8),
    "tiff zstd": lambda: tiff(GREY.astype(np.float32), compression="zstd", predictor=True, rowsperstrip=8),
    "tiff packbits": lambda: tiff(GREY8, compression="packbits"),
    "tiff jpeg": lambda: tiff(COLOURS, photometric="rgb", compression="jpeg", tile=(16, 16)),
    "tiff palette": lambda: tiff(
        GREY8, photometric="palette", colormap=RNG.integers(0, 65536, (3, 256), dtype=np.uint16)
    ),
    "mrc": mrc,
    "npy": npy,
    "png": lambda: imagecodecs.png_encode(GREY),
    "png colour": lambda: imagecodecs.png_encode(COLOURS),
    "jpeg": lambda: jpeg(GREY8, dpi=(72, 72)),
    "jpeg colour": lambda: jpeg(COLOURS, progressive=True),
}


@cache
def content_of(name: str) -> bytes:
    return FILES[name]()


@pytest.fixture(scope="module")
def file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("damaged") / "picture"


def looked_at(path: Path) -> np.ndarray | None:
    """Read a picture, or at least a corner of one that claims to be huge; None if it is refused in one line."""
    try:
        micrograph = read(path)
        end = None if micrograph.shape[0] * micrograph.shape[1] < 1e7 else 64
        return micrograph.crop(slice(0, end), slice(0, end))
    except FringespanError as refusal:
        message = str(refusal)
    assert message.startswith(f"{path}: ")
    assert len(message.splitlines()) == 1
    return None


def write(path: Path, content: bytes) -> None:
    path.unlink(missing_ok=True)  # a new file, because the old one may still be mapped
    path.write_bytes(content)


quick = settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@pytest.mark.parametrize("name", FILES)
def test_whole_files_are_read(name: str, file: Path) -> None:
    write(file, content_of(name))
    pixels = looked_at(file)
    assert pixels is not None
    assert pixels.shape == (48, 40)


@pytest.mark.parametrize("name", FILES)
@quick
@given(data=st.data())
def test_a_file_cut_off_anywhere_is_refused_or_lost_nothing(name: str, file: Path, data: st.DataObject) -> None:
    content = content_of(name)
    write(file, content)
    expected = looked_at(file)
    write(file, content[: data.draw(st.integers(0, len(content) - 1), label="bytes left")])
    pixels = looked_at(file)
    if pixels is not None:
        np.testing.assert_array_equal(pixels, expected)


@pytest.mark.parametrize("name", FILES)
@quick
@given(data=st.data())
def test_changed_bytes_end_in_a_picture_or_in_one_line(name: str, file: Path, data: st.DataObject) -> None:
    content = bytearray(content_of(name))
    # most of the structure is at the start; both ends of the range of a byte do most harm
    places = st.one_of(st.integers(0, min(400, len(content) - 1)), st.integers(0, len(content) - 1))
    values = st.one_of(st.sampled_from([0, 1, 127, 128, 254, 255]), st.integers(0, 255))
    for place, value in data.draw(st.lists(st.tuples(places, values), min_size=1, max_size=12), label="changes"):
        content[place] = value
    write(file, bytes(content))
    looked_at(file)


@pytest.mark.parametrize("name", FILES)
@quick
@given(data=st.data())
def test_inserted_bytes_end_in_a_picture_or_in_one_line(name: str, file: Path, data: st.DataObject) -> None:
    content = content_of(name)
    place = data.draw(st.integers(0, len(content)), label="place")
    write(file, content[:place] + data.draw(st.binary(min_size=1, max_size=16), label="bytes") + content[place:])
    looked_at(file)


@quick
@given(
    start=st.sampled_from([b"II*\0", b"MM\0*", b"II+\0", b"\x93NUMPY", b"\x89PNG\r\n\x1a\n", b"\xff\xd8\xff", b""]),
    rest=st.binary(),
)
def test_random_bytes_behind_a_right_beginning_end_in_one_line(start: bytes, rest: bytes, file: Path) -> None:
    write(file, start + rest)
    assert looked_at(file) is None


@pytest.fixture(scope="module")
def zarr_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    zarr = pytest.importorskip("zarr")
    path = tmp_path_factory.mktemp("zarr") / "whole"
    group = zarr.open_group(str(path), mode="w")
    group.create_array("0", shape=GREY.shape, dtype=GREY.dtype, chunks=(24, 40))[...] = GREY
    axes = [{"name": n, "type": "space", "unit": "nanometer"} for n in "yx"]
    level = {"path": "0", "coordinateTransformations": [{"type": "scale", "scale": [0.02, 0.02]}]}
    group.attrs["ome"] = {"version": "0.5", "multiscales": [{"axes": axes, "datasets": [level]}]}
    return path


@settings(max_examples=80, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
@pytest.mark.parametrize("part", ["zarr.json", "0/zarr.json", "0/c/0/0"])
def test_damage_in_any_part_of_a_zarr_ends_in_a_picture_or_in_one_line(
    zarr_folder: Path, part: str, data: st.DataObject
) -> None:
    damaged = zarr_folder.with_name("damaged")
    shutil.rmtree(damaged, ignore_errors=True)
    shutil.copytree(zarr_folder, damaged)
    content = bytearray((zarr_folder / part).read_bytes())
    if data.draw(st.booleans(), label="cut off"):
        content = content[: data.draw(st.integers(0, len(content) - 1), label="bytes left")]
    else:
        for _ in range(data.draw(st.integers(1, 4), label="changes")):
            place = data.draw(st.integers(0, len(content) - 1))
            content[place] = data.draw(st.one_of(st.sampled_from(b'0123456789"{}[],.-'), st.integers(0, 255)))
    (damaged / part).write_bytes(content)
    looked_at(damaged)


@pytest.mark.parametrize("part", ["zarr.json", "0/zarr.json"])
def test_a_missing_part_of_a_zarr_is_refused(zarr_folder: Path, part: str, tmp_path: Path) -> None:
    shutil.copytree(zarr_folder, tmp_path / "a")
    (tmp_path / "a" / part).unlink()
    with pytest.raises(UnreadablePictureError):
        read(tmp_path / "a")
