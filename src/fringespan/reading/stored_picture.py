"""What a format's module finds in a file: one frame, what is stated about its scale, what is wrong with it."""

from __future__ import annotations

from dataclasses import dataclass

from fringespan.cautions import Caution
from fringespan.micrograph import PixelSource
from fringespan.reading.pixel_size import StatedPixelSize

__all__ = ["COLOUR", "JPEG", "StoredPicture"]

COLOUR = Caution(
    "colour-picture",
    "warning",
    "The picture is in colour; its luminance was measured. Colours come from a screen or an illustration, not from a "
    "detector.",
    "Use the grey picture as the microscope saved it.",
)

JPEG = Caution(
    "jpeg-compression",
    "warning",
    "JPEG compression leaves blocks of 8 x 8 pixels, which show as false peaks at multiples of 1/8 per pixel, and "
    "weakens fine fringes.",
    "Use the picture as the microscope saved it, without JPEG.",
)


@dataclass(frozen=True, eq=False)
class StoredPicture:
    """One frame of a file.

    Parameters
    ----------
    pixels : PixelSource, shape (rows, columns)
        Real numbers in the byte order of this computer, read from the file when they are sliced.
    frame_count : int
        How many frames the file holds.
    pixel_sizes : tuple of StatedPixelSize
        What the file says, the most trustworthy first.
    cautions : tuple of Caution
        What reading brought to light, apart from the pixel size.
    """

    pixels: PixelSource
    frame_count: int
    pixel_sizes: tuple[StatedPixelSize, ...] = ()
    cautions: tuple[Caution, ...] = ()
