"""NumPy's .npy: one array, mapped into memory, never unpickled."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import PixelSource
from fringespan.reading.partial_pixels import PartialPixels, luminance, native_pixels
from fringespan.reading.refusal import check_frame, check_pixel_type
from fringespan.reading.stored_picture import COLOUR, StoredPicture

__all__ = ["open_picture"]

_MOST_SAMPLES = 4


def open_picture(path: Path, frame: int) -> StoredPicture:
    """Open one frame of an array: (rows, columns), (..., rows, columns), or colours (..., rows, columns, 3 or 4)."""
    array = _mapped(path)
    # no picture is so narrow that it could be measured
    in_colour = array.ndim >= 3 and array.shape[-1] in (3, _MOST_SAMPLES)
    frame_axes = array.ndim - (3 if in_colour else 2)
    frames = array.shape[:frame_axes]
    count = math.prod(frames)
    number = check_frame(frame, count, path)
    index = tuple(int(i) for i in np.unravel_index(number, frames)) if frames else ()
    picture = array[index]
    if not in_colour:
        return StoredPicture(native_pixels(picture), count)
    pixels: PixelSource = PartialPixels(
        picture.shape[:2], np.float32, lambda rows, columns: luminance(picture[rows, columns])
    )
    return StoredPicture(pixels, count, cautions=(COLOUR,))


def _mapped(path: Path) -> NDArray[np.generic]:
    """Map the numbers into memory as they stand; Python objects are refused by their type, never loaded."""
    with path.open("rb") as file:
        version = np.lib.format.read_magic(file)
        # later versions differ in the names of fields only, which no picture has
        read_header = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        shape, in_columns, dtype = read_header(file)
        start = file.tell()
    check_pixel_type(dtype, path)
    if len(shape) < 2 or min(shape) < 1:
        raise UnreadablePictureError(
            f"{path}: an array of shape {shape} is no picture; save one of shape (rows, columns) or "
            "(frames, rows, columns)"
        )
    found, expected = path.stat().st_size, start + math.prod(shape) * dtype.itemsize
    if found < expected:
        raise UnreadablePictureError(f"{path}: cut off after {found} of {expected} bytes; copy it again")
    return np.memmap(path, dtype=dtype, mode="r", offset=start, shape=shape, order="F" if in_columns else "C")
