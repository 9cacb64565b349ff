"""NumPy's .npy: one array, mapped into memory, never unpickled."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import PixelSource
from fringespan.reading.partial_pixels import PartialPixels, luminance, native_pixels
from fringespan.reading.refusal import check_frame, check_pixel_type
from fringespan.reading.stored_picture import COLOUR, StoredPicture

__all__ = ["open_picture"]

_MOST_SAMPLES = 4


def open_picture(path: Path, frame: int) -> StoredPicture:
    """Open one frame of an array: (rows, columns), (..., rows, columns), or colours (..., rows, columns, 3 or 4)."""
    # maps the numbers as they stand and refuses Python objects
    array = np.lib.format.open_memmap(path, mode="r")
    check_pixel_type(array.dtype, path)
    if array.ndim < 2 or 0 in array.shape:
        raise UnreadablePictureError(
            f"{path}: an array of shape {array.shape} is no picture; save one of shape (rows, columns) or "
            "(frames, rows, columns)"
        )
    # no picture is so narrow that it could be measured
    in_colour = array.ndim >= 3 and array.shape[-1] in (3, _MOST_SAMPLES)
    frame_axes = array.ndim - (3 if in_colour else 2)
    frames = array.shape[:frame_axes]
    count = int(np.prod(frames, dtype=np.int64))
    index = tuple(int(i) for i in np.unravel_index(check_frame(frame, count, path), frames)) if frames else ()
    picture = array[index]
    if not in_colour:
        return StoredPicture(native_pixels(picture), count)
    pixels: PixelSource = PartialPixels(
        picture.shape[:2], np.float32, lambda rows, columns: luminance(picture[rows, columns])
    )
    return StoredPicture(pixels, count, cautions=(COLOUR,))
