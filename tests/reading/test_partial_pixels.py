from __future__ import annotations

import threading

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.micrograph import Micrograph
from fringespan.reading.partial_pixels import PartialPixels, SegmentedPixels, luminance, native_pixels

PICTURE = np.arange(35 * 27, dtype=np.uint16).reshape(35, 27)


def segmented(
    shape: tuple[int, int], decoded: list[tuple[int, int]] | None = None, keep_bytes: int = 2**20
) -> PartialPixels:
    height, width = shape

    def decode(i: int, j: int) -> np.ndarray:
        if decoded is not None:
            decoded.append((i, j))
        return PICTURE[i * height : (i + 1) * height, j * width : (j + 1) * width]

    segments = SegmentedPixels(PICTURE.shape, shape, np.uint16, decode, keep_bytes=keep_bytes)
    return PartialPixels(PICTURE.shape, np.uint16, segments.read)


SLICES = st.builds(
    slice,
    st.none() | st.integers(-40, 40),
    st.none() | st.integers(-40, 40),
    st.none() | st.integers(-3, 3).filter(bool),
)


@given(SLICES, SLICES, st.tuples(st.integers(1, 40), st.integers(1, 40)))
def test_any_slice_is_that_of_the_whole_picture(rows: slice, columns: slice, segment: tuple[int, int]) -> None:
    np.testing.assert_array_equal(segmented(segment)[rows, columns], PICTURE[rows, columns])


def test_only_the_segments_touched_are_decoded_and_each_once() -> None:
    decoded: list[tuple[int, int]] = []
    pixels = segmented((8, 8), decoded)
    for _ in range(2):
        pixels[8:17, 3:16]
    assert sorted(decoded) == [(1, 0), (1, 1), (2, 0), (2, 1)]


def test_what_was_used_last_is_kept_within_a_limit() -> None:
    decoded: list[tuple[int, int]] = []
    pixels = segmented((8, 8), decoded, keep_bytes=3 * 128)
    for column in (0, 8, 16, 0):  # three segments of 128 bytes fit
        pixels[0:8, column : column + 8]
    assert decoded == [(0, 0), (0, 1), (0, 2)]
    pixels[8:16, 0:8]  # the fourth drives out the one used longest ago
    pixels[0:8, 0:8]
    pixels[0:8, 8:16]
    assert decoded == [(0, 0), (0, 1), (0, 2), (1, 0), (0, 1)]


def test_several_threads_read_the_same_pixels() -> None:
    pixels, wrong = segmented((8, 8)), []

    def work(seed: int) -> None:
        rng = np.random.default_rng(seed)
        for _ in range(200):
            r, c = rng.integers(0, 20, 2)
            if not np.array_equal(pixels[r : r + 9, c : c + 7], PICTURE[r : r + 9, c : c + 7]):
                wrong.append((r, c))

    threads = [threading.Thread(target=work, args=(seed,)) for seed in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []


def test_an_array_of_this_computer_is_taken_as_it_is() -> None:
    assert native_pixels(PICTURE) is PICTURE


@pytest.mark.parametrize("dtype", [">u2", ">f4", ">i4", "<u2"])
def test_foreign_byte_order_becomes_that_of_this_computer(dtype: str) -> None:
    pixels = native_pixels(PICTURE.astype(dtype))
    part = pixels[3:9, 5:7]
    assert part.dtype.isnative
    assert part.dtype == pixels.dtype == np.dtype(dtype).newbyteorder("=")
    np.testing.assert_array_equal(part, PICTURE[3:9, 5:7])


def test_unaligned_and_long_numbers_become_usable() -> None:
    raw = b"\0" + PICTURE.astype("=f4").tobytes()
    unaligned = np.frombuffer(raw, np.float32, PICTURE.size, offset=1).reshape(PICTURE.shape)
    assert native_pixels(unaligned)[:, :].flags.aligned
    assert native_pixels(PICTURE.astype(np.longdouble))[:, :].dtype == np.float64


def test_can_be_turned_into_an_array_and_measured() -> None:
    pixels = segmented((8, 8))
    np.testing.assert_array_equal(np.asarray(pixels), PICTURE)
    np.testing.assert_array_equal(Micrograph(pixels).crop(slice(0, 9), slice(9, 12)), PICTURE[0:9, 9:12])


def test_luminance_keeps_grey_and_weighs_colours_by_the_standard() -> None:
    grey = np.repeat(PICTURE[..., None], 3, axis=-1)
    np.testing.assert_allclose(luminance(grey), PICTURE, rtol=1e-6)
    # Recommendation ITU-R BT.709: 0.2126 R + 0.7152 G + 0.0722 B (from memory)
    np.testing.assert_allclose(luminance(np.diag([100.0, 100.0, 100.0])), [21.26, 71.52, 7.22], rtol=1e-6)
    np.testing.assert_allclose(luminance(np.array([10.0, 10.0, 10.0, 255.0])), 10.0, rtol=1e-6)
