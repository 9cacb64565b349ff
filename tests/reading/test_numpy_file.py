from __future__ import annotations

import pickle
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from fringespan.exceptions import SettingsError, UnreadablePictureError
from fringespan.reading import read


def saved(path: Path, array: NDArray[np.generic]) -> Path:
    np.save(path / "picture.npy", array)
    return path / "picture.npy"


@pytest.mark.parametrize("dtype", ["u1", "i1", "<u2", ">u2", "i2", "u4", ">i4", "f2", "<f4", ">f4", "f8", "u8"])
@pytest.mark.parametrize("order", ["C", "F"])
def test_every_kind_of_number(tmp_path: Path, grey16: NDArray[np.uint16], dtype: str, order: str) -> None:
    array = (grey16 % 100).astype(dtype, order=order)
    micrograph = read(saved(tmp_path, array))
    assert micrograph.shape == (48, 40)
    assert micrograph.pixel_size_nm is None
    assert [c.code for c in micrograph.cautions] == ["pixel-size-not-stated"]
    part = micrograph.crop(slice(5, 30), slice(7, 9))
    assert part.dtype.isnative
    np.testing.assert_array_equal(part, array[5:30, 7:9])


def test_frames_of_a_stack(tmp_path: Path) -> None:
    stack = np.arange(2 * 3 * 30 * 26, dtype=np.float32).reshape(2, 3, 30, 26)
    path = saved(tmp_path, stack)
    for frame in range(6):
        micrograph = read(path, frame=frame)
        assert (micrograph.frame, micrograph.frame_count) == (frame, 6)
        np.testing.assert_array_equal(micrograph.crop(slice(None), slice(None)), stack[frame // 3, frame % 3])
    with pytest.raises(SettingsError, match=r"frame must be one that the file has, got 6; .* holds frames 0 to 5"):
        read(path, frame=6)


@pytest.mark.parametrize("samples", [3, 4])
def test_colours_become_luminance(tmp_path: Path, samples: int) -> None:
    colours = np.random.default_rng(1).integers(0, 256, (48, 40, samples), dtype=np.uint8)
    micrograph = read(saved(tmp_path, colours))
    expected = colours[..., :3] @ np.array([0.2126, 0.7152, 0.0722])
    np.testing.assert_allclose(micrograph.crop(slice(3, 20), slice(None)), expected[3:20], rtol=1e-5)
    assert "colour-picture" in [c.code for c in micrograph.cautions]


def test_a_picture_larger_than_the_memory_is_read_in_part(tmp_path: Path) -> None:
    path = tmp_path / "large.npy"
    large = np.lib.format.open_memmap(path, mode="w+", dtype=np.float32, shape=(16384, 16384))
    large[8000:8064, 9000:9064] = 7.0
    del large
    tracemalloc.start()
    part = read(path).crop(slice(8000, 8064), slice(9000, 9064))
    assert (np.array(part) == 7).all()
    assert tracemalloc.get_traced_memory()[1] < 2e6
    tracemalloc.stop()


class Trap:
    """Leaves a mark when it is unpickled."""

    def __init__(self, mark: Path) -> None:
        self.mark = mark

    def __reduce__(self) -> tuple[object, ...]:
        return (Path.touch, (self.mark,))


def test_never_unpickles(tmp_path: Path) -> None:
    mark = tmp_path / "unpickled"
    trap = np.empty((30, 30), dtype=object)
    trap[:] = Trap(mark)
    np.save(tmp_path / "trap.npy", trap, allow_pickle=True)
    (tmp_path / "bare.npy").write_bytes(pickle.dumps(Trap(mark)))
    for name in ("trap.npy", "bare.npy"):
        with pytest.raises(UnreadablePictureError, match=name):
            read(tmp_path / name)
    assert not mark.exists()


@pytest.mark.parametrize(
    ("array", "says"),
    [
        (np.zeros(100), "is no picture"),
        (np.zeros((0, 100)), "is no picture"),
        (np.zeros((30, 30), complex), "complex"),
        (np.zeros((30, 30), bool), "bool"),
        (np.zeros((30, 30), "U3"), "U3"),
        (np.zeros((30, 30), [("a", "f4"), ("b", "f4")]), "integer or float"),
        (np.zeros((30, 30), "M8[s]"), "datetime64"),
    ],
    ids=["one axis", "empty", "complex", "bool", "text", "fields", "dates"],
)
def test_what_is_no_picture_is_refused(tmp_path: Path, array: NDArray[np.generic], says: str) -> None:
    with pytest.raises(UnreadablePictureError, match=says):
        read(saved(tmp_path, array))


def test_a_claim_beyond_the_file_is_refused(tmp_path: Path) -> None:
    path = saved(tmp_path, np.zeros((30, 30)))
    path.write_bytes(path.read_bytes().replace(b"(30, 30)", b"(9999999999, 9999999999)"))
    with pytest.raises(UnreadablePictureError, match="cut off after"):
        read(path)
