"""MRC2014: pictures and stacks with the cell's size in angstrom, mapped into memory."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
from mrcfile.dtypes import HEADER_DTYPE
from mrcfile.utils import dtype_from_mode

from fringespan.cautions import Caution
from fringespan.exceptions import UnreadablePictureError
from fringespan.reading.partial_pixels import native_pixels
from fringespan.reading.pixel_size import StatedPixelSize
from fringespan.reading.refusal import check_frame, check_pixel_type
from fringespan.reading.stored_picture import StoredPicture

__all__ = ["open_picture"]

_BIG_ENDIAN = 0x11
_MODES = (0, 1, 2, 3, 4, 6, 12, 101)
_SOURCE = "MRC header"

_PLACEHOLDER = Caution(
    "pixel-size-placeholder",
    "warning",
    "The MRC header gives exactly 1 angstrom per pixel, which programs write when they do not know the pixel size.",
    "Check the pixel size against the microscope's log.",
)


def open_picture(path: Path, frame: int) -> StoredPicture:
    """Open one frame of a stack or one slice of a volume; the first row of the file is the top."""
    with path.open("rb") as file:
        raw = file.read(HEADER_DTYPE.itemsize)
    if len(raw) < HEADER_DTYPE.itemsize:
        raise UnreadablePictureError(f"{path}: its MRC header is cut off; copy it again from the microscope")
    header = _header(raw)
    columns, rows, count = (int(header[name]) for name in ("nx", "ny", "nz"))
    if min(rows, columns, count) < 1:
        raise UnreadablePictureError(
            f"{path}: its MRC header claims {count} frames of {rows} x {columns} pixels; copy it again from the "
            "microscope"
        )
    mode = int(header["mode"])
    if mode not in _MODES or mode in (3, 101):
        raise UnreadablePictureError(
            f"{path}: its pixels are of MRC mode {mode}, which is no plain picture; save it in mode 1, 2 or 6"
        )
    dtype = dtype_from_mode(mode).newbyteorder(header.dtype["mode"].byteorder)
    check_pixel_type(dtype, path)
    start, size = HEADER_DTYPE.itemsize + int(header["nsymbt"]), rows * columns * dtype.itemsize
    found, expected = path.stat().st_size, start + count * size
    if start < HEADER_DTYPE.itemsize or found < expected:
        raise UnreadablePictureError(
            f"{path}: cut off after {found} of {expected} bytes; copy it again from the microscope"
        )
    offset = start + check_frame(frame, count, path) * size
    pixels = np.memmap(path, dtype=dtype, mode="r", offset=offset, shape=(rows, columns))
    stated = _pixel_size(header)
    placeholder = stated.row == stated.column == 1
    return StoredPicture(native_pixels(pixels), count, (stated,), (_PLACEHOLDER,) if placeholder else ())


def _header(raw: bytes) -> Any:
    """Return the header in the byte order of its machine stamp, unless only the other one makes sense of the mode."""
    little, big = (np.frombuffer(raw, HEADER_DTYPE.newbyteorder(order))[0] for order in "<>")
    stamped, other = (big, little) if little["machst"][0] == _BIG_ENDIAN else (little, big)
    return other if int(stamped["mode"]) not in _MODES and int(other["mode"]) in _MODES else stamped


def _pixel_size(header: Any) -> StatedPixelSize:
    """Return the cell's edges over the numbers of samples, for the cell's axes that run along rows and columns."""

    def along(axis: int) -> float:
        name = {2: "y", 3: "z"}.get(axis, "x")
        samples = int(header[f"m{name}"])
        # rounded to the 32-bit number it was computed from, so that 0.16 angstrom is not 0.16000000238
        return float(f"{float(header['cella'][name]) / samples:.7g}") if samples > 0 else math.nan

    column, row = int(header["mapc"]), int(header["mapr"])
    if {column, row} - {1, 2, 3} or column == row:
        column, row = 1, 2
    return StatedPixelSize(along(row), along(column), "angstrom", _SOURCE)
