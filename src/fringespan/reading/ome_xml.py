"""OME-XML: the pixel size of each image that a TIFF's description lists."""

from __future__ import annotations

import math
import xml.etree.ElementTree as ElementTree

from fringespan.cautions import Caution
from fringespan.reading.pixel_size import StatedPixelSize

__all__ = ["UNREADABLE", "looks_like_ome", "ome_pixel_size"]

_SOURCE = "OME-XML"

UNREADABLE = Caution(
    "metadata-unreadable",
    "warning",
    "The picture's OME-XML description is damaged, so what it says about the pixel size is lost.",
    "Give the pixel size in nm, or export the picture again.",
)


def looks_like_ome(description: str) -> bool:
    """Say whether a description is meant to be OME-XML."""
    start = description.lstrip("\ufeff \t\r\n")[:2000]
    return start.startswith("<") and ("<OME" in start or "<ome:OME" in start)


def ome_pixel_size(description: str, page: int) -> StatedPixelSize | None:
    """Return the pixel size stated for one page of the file.

    Parameters
    ----------
    description : str
        OME-XML.
    page : int
        Which page; with several images, each takes as many pages as it has planes.

    Returns
    -------
    StatedPixelSize or None
        None if nothing is stated.

    Raises
    ------
    ElementTree.ParseError
        If it is not well-formed, or declares entities, which OME-XML has no use for.
    """
    if "<!DOCTYPE" in description or "<!ENTITY" in description:
        raise ElementTree.ParseError("entities are not allowed in OME-XML")
    root = ElementTree.fromstring(description.strip("\ufeff \t\r\n\0").encode())
    images = [element for element in root.iter() if element.tag.rpartition("}")[2] == "Pixels"]
    first = 0
    for image in images:
        planes = _planes(image)
        if first <= page < first + planes or len(images) == 1:
            return _stated(image)
        first += planes
    return None


def _planes(image: ElementTree.Element) -> int:
    def whole(name: str) -> int:
        text = image.get(name, "1")
        return int(text) if text.isascii() and text.isdigit() and len(text) < 10 else 1

    channels = [element for element in image if element.tag.rpartition("}")[2] == "Channel"]
    samples = {channel.get("SamplesPerPixel", "1") for channel in channels}
    # the samples of a colour are one plane
    in_one_plane = int(samples.pop()) if samples in ({"3"}, {"4"}) else 1
    return whole("SizeZ") * whole("SizeT") * max(1, whole("SizeC") // in_one_plane)


def _stated(image: ElementTree.Element) -> StatedPixelSize | None:
    row, column = image.get("PhysicalSizeY"), image.get("PhysicalSizeX")
    if row is None and column is None:
        return None
    sizes = _number(row), _number(column)
    row_unit, column_unit = image.get("PhysicalSizeYUnit"), image.get("PhysicalSizeXUnit")
    if row_unit is None and column_unit is None:
        if sizes == (1, 1):
            return StatedPixelSize(*sizes, None, _SOURCE)
        return StatedPixelSize(*sizes, "µm", f"{_SOURCE}, in its standard unit µm")
    unit = column_unit if column_unit is not None else "µm"
    other = row_unit if row_unit is not None else "µm"
    if other != unit:
        return _in_one_unit(sizes, other, unit)
    return StatedPixelSize(*sizes, unit, _SOURCE)


def _in_one_unit(sizes: tuple[float, float], row_unit: str, column_unit: str) -> StatedPixelSize:
    from fringespan.reading.length_units import nm_per_unit

    row, column = nm_per_unit(row_unit), nm_per_unit(column_unit)
    if row is None or column is None:
        return StatedPixelSize(*sizes, row_unit if row is None else column_unit, _SOURCE)
    return StatedPixelSize(sizes[0] * row, sizes[1] * column, "nm", _SOURCE)


def _number(text: str | None) -> float:
    try:
        return math.nan if text is None else float(text)
    except ValueError:
        return math.nan
