from __future__ import annotations

import struct
import tracemalloc
from pathlib import Path

import mrcfile
import numpy as np
import pytest
from numpy.typing import NDArray

from fringespan.exceptions import SettingsError, UnreadablePictureError
from fringespan.reading import read


def saved(path: Path, array: NDArray[np.generic], voxel_angstrom: object = 0.2) -> Path:
    with mrcfile.new(path / "picture.mrc", overwrite=True) as mrc:
        mrc.set_data(array)
        mrc.voxel_size = voxel_angstrom
    return path / "picture.mrc"


@pytest.mark.parametrize("dtype", ["i1", "i2", "u2", "f4", "f2"])
def test_every_mode_with_its_cell_in_angstrom(tmp_path: Path, grey16: NDArray[np.uint16], dtype: str) -> None:
    array = (grey16 % 100).astype(dtype)
    micrograph = read(saved(tmp_path, array, (0.21, 0.2, 1.0)))  # x, y, z
    assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.021), rel=1e-6)
    assert micrograph.pixel_size_source == "MRC header"
    assert micrograph.cautions == ()
    np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), array)


def test_big_endian(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    path = saved(tmp_path, grey16)
    with mrcfile.open(path, mode="r") as mrc:
        header = np.array(mrc.header).astype(mrc.header.dtype.newbyteorder(">"))
    header["machst"] = (0x11, 0x11, 0, 0)
    path.write_bytes(header.tobytes() + grey16.astype(">u2").tobytes())
    with mrcfile.open(path) as mrc:  # the general library agrees that this is big-endian
        np.testing.assert_array_equal(mrc.data, grey16)
    for stamp in ((0x11, 0x11, 0, 0), (0, 0, 0, 0)):  # also where the machine stamp was never written
        header["machst"] = stamp
        path.write_bytes(header.tobytes() + grey16.astype(">u2").tobytes())
        micrograph = read(path)
        assert micrograph.pixel_size_nm == pytest.approx((0.02, 0.02))
        part = micrograph.crop(slice(2, 9), slice(3, 30))
        assert part.dtype.isnative
        np.testing.assert_array_equal(part, grey16[2:9, 3:30])


def test_frames_of_a_stack_behind_an_extended_header(tmp_path: Path) -> None:
    stack = np.arange(3 * 30 * 26, dtype=np.float32).reshape(3, 30, 26)
    path = saved(tmp_path, stack)
    with mrcfile.open(path, mode="r+") as mrc:
        mrc.set_extended_header(np.zeros(100, "V1"))
    for frame in range(3):
        micrograph = read(path, frame=frame)
        assert micrograph.frame_count == 3
        np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), stack[frame])
    with pytest.raises(SettingsError, match="frame"):
        read(path, frame=-1)


def test_a_cell_without_size_is_not_believed(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    micrograph = read(saved(tmp_path, grey16, 0.0))
    assert micrograph.pixel_size_nm is None
    assert [c.code for c in micrograph.cautions] == ["pixel-size-not-believed"]
    assert "MRC header: 0 x 0" in micrograph.cautions[0].text


def test_one_angstrom_sharp_is_taken_with_a_caution(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    micrograph = read(saved(tmp_path, grey16, 1.0))
    assert micrograph.pixel_size_nm == pytest.approx((0.1, 0.1))
    assert [c.code for c in micrograph.cautions] == ["pixel-size-placeholder"]


def test_exchanged_axes_of_the_cell(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    path = saved(tmp_path, grey16)
    with mrcfile.open(path, mode="r+") as mrc:
        # columns run along y: the cell has 40 samples of 0.3 angstrom there, 48 of 0.2 along x
        mrc.header.mapc, mrc.header.mapr = 2, 1
        mrc.header.mx, mrc.header.my = 48, 40
        mrc.header.cella.x, mrc.header.cella.y = 9.6, 12.0
    assert read(path).pixel_size_nm == pytest.approx((0.02, 0.03))


def test_a_large_picture_is_read_in_part(tmp_path: Path) -> None:
    path = tmp_path / "large.mrc"
    large = mrcfile.new_mmap(path, (16384, 16384), mrc_mode=6)
    large.data[8000:8064, 9000:9064] = 7
    large.close()
    tracemalloc.start()
    part = read(path).crop(slice(8000, 8064), slice(9000, 9064))
    assert (np.array(part) == 7).all()
    assert tracemalloc.get_traced_memory()[1] < 2e6
    tracemalloc.stop()


def test_a_file_that_is_cut_off_is_refused(tmp_path: Path, grey16: NDArray[np.uint16]) -> None:
    path = saved(tmp_path, grey16)
    whole = path.read_bytes()
    for length, says in ((len(whole) - 1, f"cut off after {len(whole) - 1} of {len(whole)} bytes"), (600, "cut off")):
        path.write_bytes(whole[:length])
        with pytest.raises(UnreadablePictureError, match=says):
            read(path)


@pytest.mark.parametrize(
    ("offset", "value", "says"),
    [
        (0, -1, "-1"),
        (0, 2**31 - 1, "cut off"),
        (8, 0, "0 frames"),
        (12, 4, "complex"),
        (12, 101, "mode 101"),
        (12, 77, "mode 77"),
        (92, -2000, "cut off"),
    ],
    ids=["negative width", "huge width", "no frames", "transform", "packed", "unknown mode", "negative header"],
)
def test_impossible_headers_are_refused(
    tmp_path: Path, grey16: NDArray[np.uint16], offset: int, value: int, says: str
) -> None:
    path = saved(tmp_path, grey16)
    content = bytearray(path.read_bytes())
    struct.pack_into("<i", content, offset, value)
    path.write_bytes(content)
    with pytest.raises(UnreadablePictureError, match=says):
        read(path)
