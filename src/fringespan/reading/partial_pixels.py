"""Pictures of which only the rectangle asked for is read, decoded, and converted."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable
from typing import cast

import numpy as np
from numpy.typing import DTypeLike, NDArray

from fringespan.micrograph import PixelSource

__all__ = ["PartialPixels", "RectangleReader", "SegmentedPixels", "luminance", "native_pixels"]

RectangleReader = Callable[[slice, slice], NDArray[np.generic]]
"""Returns the pixels of rows and columns given as slices with plain bounds and step 1."""

_LUMINANCE = np.array([0.2126, 0.7152, 0.0722], dtype=np.float32)
"""Weights of red, green, blue by Recommendation ITU-R BT.709."""


def luminance(colours: NDArray[np.generic]) -> NDArray[np.float32]:
    """Return the luminance of red, green, blue in the last axis; further samples (opacity) are left out."""
    return cast("NDArray[np.float32]", colours[..., :3].astype(np.float32) @ _LUMINANCE)


class PartialPixels:
    """A picture that is read when it is sliced.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns.
    dtype : dtype-like
        What the pixels are converted to.
    read : callable
        Returns the pixels of a rectangle.
    """

    def __init__(self, shape: tuple[int, int], dtype: DTypeLike, read: RectangleReader) -> None:
        self.shape: tuple[int, ...] = (int(shape[0]), int(shape[1]))
        self.dtype: np.dtype[np.generic] = np.dtype(dtype)
        self._read = read

    def __getitem__(self, key: tuple[slice, slice]) -> NDArray[np.generic]:
        rows, columns = (range(*part.indices(n)) for part, n in zip(key, self.shape, strict=True))
        if not rows or not columns:
            return np.empty((len(rows), len(columns)), self.dtype)
        (r0, r1), (c0, c1) = ((min(part), max(part) + 1) for part in (rows, columns))
        pixels = np.require(self._read(slice(r0, r1), slice(c0, c1)), self.dtype, ["ALIGNED"])
        if rows.step == columns.step == 1:
            return pixels
        # a step may be negative, so that it has to start at the right end
        first_row, first_column = rows[0] - r0, columns[0] - c0
        return pixels[first_row :: rows.step, first_column :: columns.step]

    def __array__(self, dtype: DTypeLike | None = None, copy: bool | None = None) -> NDArray[np.generic]:
        return self[:, :].astype(dtype or self.dtype, copy=False)


def native_pixels(pixels: NDArray[np.generic]) -> PixelSource:
    """Return pixels that fast code can use: aligned, in this computer's byte order, at most 8 bytes a number.

    Parameters
    ----------
    pixels : ndarray, shape (rows, columns)
        A memory map, or an array in memory. It is returned as it is where possible, otherwise converted when sliced.
    """
    wanted = pixels.dtype.newbyteorder("=")
    if wanted.kind == "f" and wanted.itemsize > 8:
        wanted = np.dtype(np.float64)
    if wanted == pixels.dtype and pixels.flags.aligned:
        return cast("PixelSource", pixels)
    return PartialPixels(pixels.shape, wanted, lambda rows, columns: pixels[rows, columns])


class SegmentedPixels:
    """A picture stored in strips, tiles, or chunks, of which only those are decoded that a rectangle touches.

    The ones used last are kept, because a region that is dragged about asks for nearly the same rectangle many times.

    Parameters
    ----------
    shape : tuple of int
        Rows, columns, and samples if there are several.
    segment_shape : (int, int)
        Rows and columns of a segment; those at the end may be smaller.
    dtype : dtype-like
        Type of a sample.
    decode : callable
        Returns segment (i, j), counted down and to the right, shaped (rows, columns[, samples]).
    keep_bytes : int, optional
        How much to keep; the segment used last is always kept.
    """

    def __init__(
        self,
        shape: tuple[int, ...],
        segment_shape: tuple[int, int],
        dtype: DTypeLike,
        decode: Callable[[int, int], NDArray[np.generic]],
        *,
        keep_bytes: int = 64 * 2**20,
    ) -> None:
        self._shape = shape
        self._segment_shape = segment_shape
        self._dtype = np.dtype(dtype)
        self._decode = decode
        self._keep_bytes = keep_bytes
        self._kept: OrderedDict[tuple[int, int], NDArray[np.generic]] = OrderedDict()
        self._kept_bytes = 0
        self._lock = threading.Lock()

    def read(self, rows: slice, columns: slice) -> NDArray[np.generic]:
        """Return the pixels of a rectangle given by plain bounds, shape (rows, columns[, samples])."""
        height, width = self._segment_shape
        out = np.empty((rows.stop - rows.start, columns.stop - columns.start, *self._shape[2:]), self._dtype)
        for i in range(rows.start // height, (rows.stop - 1) // height + 1):
            top = max(rows.start, i * height)
            for j in range(columns.start // width, (columns.stop - 1) // width + 1):
                left = max(columns.start, j * width)
                segment = self._segment(i, j)
                part = segment[top - i * height : rows.stop - i * height, left - j * width : columns.stop - j * width]
                r, c = top - rows.start, left - columns.start
                out[r : r + part.shape[0], c : c + part.shape[1]] = part
        return out

    def _segment(self, i: int, j: int) -> NDArray[np.generic]:
        with self._lock:
            kept = self._kept.get((i, j))
            if kept is not None:
                self._kept.move_to_end((i, j))
                return kept
        # decoded outside the lock, so that several threads can decode at once; at worst one segment is decoded twice
        segment = self._decode(i, j)
        with self._lock:
            if (i, j) not in self._kept:
                self._kept[i, j] = segment
                self._kept_bytes += segment.nbytes
            while self._kept_bytes > self._keep_bytes and len(self._kept) > 1:
                self._kept_bytes -= self._kept.popitem(last=False)[1].nbytes
        return segment
