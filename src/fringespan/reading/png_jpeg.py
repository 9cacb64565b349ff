"""PNG and JPEG: read whole, because they cannot be read in part."""

from __future__ import annotations

import io
from pathlib import Path

import imagecodecs
import numpy as np
from numpy.typing import NDArray
from PIL.JpegImagePlugin import JpegImageFile
from PIL.PngImagePlugin import PngImageFile

from fringespan.reading.partial_pixels import luminance
from fringespan.reading.pixel_size import StatedPixelSize
from fringespan.reading.refusal import check_frame, check_unpacked_size
from fringespan.reading.stored_picture import COLOUR, JPEG, StoredPicture

__all__ = ["open_picture"]

_INCH_M = 0.0254
_BYTES = {"1": 1, "L": 1, "P": 1, "I;16": 2, "I": 2, "LA": 2, "RGB": 6, "RGBA": 8, "CMYK": 4}


def open_picture(path: Path, frame: int) -> StoredPicture:
    """Open the picture; only frame 0 exists."""
    check_frame(frame, 1, path)
    content = path.read_bytes()
    return _png(content, path) if content.startswith(b"\x89PNG") else _jpeg(content, path)


def _png(content: bytes, path: Path) -> StoredPicture:
    with PngImageFile(io.BytesIO(content)) as header:
        _check_size(header, content, path)
        # Pillow turns the chunk's pixels per metre into dots per inch
        dpi = header.info.get("dpi")
        # checks the sums of all chunks, which the decoder below takes for granted
        header.verify()
    stated: tuple[StatedPixelSize, ...] = ()
    if dpi is not None:
        stated = (_per_unit(dpi[1] / _INCH_M, dpi[0] / _INCH_M, "m", "pHYs chunk"),)
    # unlike Pillow, this keeps 16 bits of each colour
    samples = imagecodecs.png_decode(content)
    if samples.ndim == 2 or samples.shape[-1] <= 2:
        # a second sample is the opacity
        return StoredPicture(samples if samples.ndim == 2 else np.ascontiguousarray(samples[..., 0]), 1, stated)
    return StoredPicture(luminance(samples), 1, stated, (COLOUR,))


def _jpeg(content: bytes, path: Path) -> StoredPicture:
    with JpegImageFile(io.BytesIO(content)) as picture:
        _check_size(picture, content, path)
        unit = {1: "inch", 2: "cm"}.get(picture.info.get("jfif_unit", 0))
        density = picture.info.get("jfif_density")
        stated: tuple[StatedPixelSize, ...] = ()
        if unit is not None and density is not None:
            stated = (_per_unit(density[1], density[0], unit, "JPEG header"),)
        if picture.mode == "L":
            # unlike the faster decoders, Pillow says when the file is cut off
            return StoredPicture(_pixels(picture), 1, stated, (JPEG,))
        return StoredPicture(luminance(_pixels(picture.convert("RGB"))), 1, stated, (JPEG, COLOUR))


def _pixels(picture: object) -> NDArray[np.uint8]:
    return np.array(picture, dtype=np.uint8)


def _check_size(header: PngImageFile | JpegImageFile, content: bytes, path: Path) -> None:
    columns, rows = header.size
    check_unpacked_size(rows * columns * _BYTES.get(header.mode, 8), len(content), path)


def _per_unit(rows: float, columns: float, unit: str, source: str) -> StatedPixelSize:
    return StatedPixelSize(1 / rows if rows else 0.0, 1 / columns if columns else 0.0, unit, source)
