"""TIFF: grey or colour, plain or compressed, single or stacked; only the parts that are needed are read.

Plain pixels are mapped into memory, compressed ones decoded strip by strip or tile by tile.
"""

from __future__ import annotations

import json
import logging
import struct
import xml.etree.ElementTree as ElementTree
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import numpy as np
import tifffile
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import PixelSource
from fringespan.reading.length_units import is_no_unit
from fringespan.reading.ome_xml import UNREADABLE, looks_like_ome, ome_pixel_size
from fringespan.reading.partial_pixels import (
    PartialPixels,
    RectangleReader,
    SegmentedPixels,
    luminance,
    native_pixels,
)
from fringespan.reading.pixel_size import StatedPixelSize
from fringespan.reading.refusal import check_frame, check_pixel_type, check_unpacked_size, refusing
from fringespan.reading.stored_picture import COLOUR, JPEG, StoredPicture

if TYPE_CHECKING:
    from collections.abc import Callable

__all__ = ["open_picture"]

# what is wrong with a file is said once, by the error; a handler keeps the library from printing it as well
logging.getLogger("tifffile").addHandler(logging.NullHandler())

_GREY = (0, 1)
_WHITE_IS_ZERO, _COLOURS, _PALETTE, _JPEG_COLOURS = 0, 2, 3, 6
_OPACITY = (1, 2)
_JPEG_COMPRESSIONS = (6, 7)
# none, LZW, both forms of deflate, PackBits, LZMA, both forms of Zstandard; the other codecs bring a size of their own,
# which may differ from what the file says
_COMPRESSIONS = (1, 5, 8, 32946, 32773, 34925, 34926, 50000, *_JPEG_COMPRESSIONS)
_RESOLUTION_UNITS: dict[int, str | None] = {1: None, 2: "inch", 3: "cm", 4: "mm", 5: "µm"}
_THUMBNAIL_OR_MASK = 0b101
_MOST_PAGES = 1_000_000
_LONGEST_DESCRIPTION = 10_000_000

_INVERTED = Caution(
    "grey-scale-inverted",
    "note",
    "The file stores white as 0; the stored numbers were measured, so that bright and dark are exchanged.",
    "Spacings and angles are not touched by it; invert the picture if the visibility matters.",
)


def open_picture(path: Path, frame: int) -> StoredPicture:
    """Open one frame; thumbnails and masks are not counted."""
    with tifffile.TiffFile(path) as tif:
        pages = _pages(tif)
        if not pages:
            raise UnreadablePictureError(f"{path}: holds no picture; copy it again from the microscope")
        first = _page(tif, pages[0])
        description = _description(first)
        stacked = 0
        if len(pages) == 1:
            stacked = _pictures_behind(first, description, path)
        count = stacked or len(pages)
        frame = check_frame(frame, count, path)
        page = first if stacked else _page(tif, pages[frame])
        cautions: list[Caution] = []
        pixels = _pixels(page, frame if stacked else 0, path, cautions)
        if not stacked and page is not first and not looks_like_ome(description):
            description = _description(page) or description
        stated = _stated_pixel_sizes(page, description, frame, cautions)
        return StoredPicture(pixels, count, stated, tuple(cautions))


def _page(tif: tifffile.TiffFile, index: int) -> tifffile.TiffPage:
    page = tif.pages[index]
    if not isinstance(page, tifffile.TiffPage):
        raise UnreadablePictureError(f"{tif.filehandle.path}: page {index} cannot be read")
    return page


def _pages(tif: tifffile.TiffFile) -> list[int]:
    """Return which pages are pictures, following the chain of pages without ever going round in a circle."""
    order, big = tif.byteorder, tif.is_bigtiff
    count_format, entry_bytes, next_format = (f"{order}Q", 20, f"{order}Q") if big else (f"{order}H", 12, f"{order}I")
    count_bytes, next_bytes = struct.calcsize(count_format), struct.calcsize(next_format)
    file = tif.filehandle
    file.seek(8 if big else 4)
    (offset,) = struct.unpack(next_format, file.read(next_bytes))
    seen: set[int] = set()
    pictures: list[int] = []
    while 0 < offset < file.size and offset not in seen and len(seen) < _MOST_PAGES:
        file.seek(offset)
        start = file.read(count_bytes)
        if len(start) < count_bytes:
            break
        (entries,) = struct.unpack(count_format, start)
        if entries > 4096:
            break
        table = file.read(entries * entry_bytes + next_bytes)
        if len(table) < entries * entry_bytes + next_bytes:
            break
        # entries are sorted, and the kind of page has the lowest number of all
        tag, _, _ = struct.unpack_from(f"{order}HH{'Q' if big else 'I'}", table) if entries else (0, 0, 0)
        (kind,) = struct.unpack_from(f"{order}I", table, entry_bytes - next_bytes) if tag == 254 else (0,)
        if not kind & _THUMBNAIL_OR_MASK:
            pictures.append(len(seen))
        seen.add(offset)
        (offset,) = struct.unpack_from(next_format, table, entries * entry_bytes)
    return pictures


def _description(page: tifffile.TiffPage) -> str:
    text = page.description
    return text if isinstance(text, str) and len(text) <= _LONGEST_DESCRIPTION else ""


def _pictures_behind(page: tifffile.TiffPage, description: str, path: Path) -> int:
    """Return how many pictures follow each other behind a single page, as large stacks are written; 0 if just one."""
    text = _key_values(description).get("images", "")
    if not (text.isascii() and text.isdigit() and len(text) < 10 and page.is_final and page.dataoffsets):
        return 0
    count = int(text)
    fits = page.dataoffsets[0] + count * page.nbytes <= path.stat().st_size
    return count if count > 1 and fits else 0


def _pixels(page: tifffile.TiffPage, picture: int, path: Path, cautions: list[Caution]) -> PixelSource:
    rows, columns, samples = page.imagelength, page.imagewidth, page.samplesperpixel
    if min(rows, columns, samples) < 1 or page.imagedepth != 1:
        raise UnreadablePictureError(
            f"{path}: claims {page.imagedepth} x {rows} x {columns} pixels, which is no picture; export it again"
        )
    if page.dtype is None:
        raise UnreadablePictureError(
            f"{path}: its pixels ({page.bitspersample} bits each) are of no known kind; export it with 8, 16 or 32 bits"
        )
    check_pixel_type(page.dtype, path)
    if page.compression not in _COMPRESSIONS:
        name = getattr(page.compression, "name", page.compression)
        raise UnreadablePictureError(
            f"{path}: is compressed by {name}, which is not read; save it without compression, or with LZW or deflate"
        )
    if page.compression in _JPEG_COMPRESSIONS:
        cautions.append(JPEG)
    grey_samples = _grey_samples(page)
    if page.is_final:
        stored = _mapped(page, picture, path)
        if grey_samples == samples == 1 and page.photometric != _PALETTE:
            _note_inversion(page, cautions)
            return native_pixels(stored[..., 0])
        read = _rectangles_of(stored)
    else:
        read = _segmented(page, path)
    return _one_value_a_pixel(page, grey_samples, read, path, cautions)


def _grey_samples(page: tifffile.TiffPage) -> int:
    """Return how many samples of a grey pixel are not its opacity."""
    extra = tuple(int(e) for e in page.extrasamples)
    return page.samplesperpixel - (len(extra) if extra and all(e in _OPACITY for e in extra) else 0)


def _note_inversion(page: tifffile.TiffPage, cautions: list[Caution]) -> None:
    if page.photometric == _WHITE_IS_ZERO:
        cautions.append(_INVERTED)


def _one_value_a_pixel(
    page: tifffile.TiffPage, grey_samples: int, read: RectangleReader, path: Path, cautions: list[Caution]
) -> PixelSource:
    """Turn colours and palettes into luminance, and drop the opacity; `read` returns (rows, columns, samples)."""
    shape = page.imagelength, page.imagewidth
    photometric, samples = page.photometric, page.samplesperpixel
    if photometric in _GREY and grey_samples == 1:
        _note_inversion(page, cautions)
        return PartialPixels(
            shape,
            cast("np.dtype[Any]", page.dtype).newbyteorder("="),
            lambda rows, columns: read(rows, columns)[..., 0],
        )
    if photometric == _PALETTE and samples == 1:
        palette = np.asarray(page.colormap)
        if palette.ndim != 2 or palette.shape[0] != 3 or not palette.shape[1] or palette.dtype.kind != "u":
            raise UnreadablePictureError(f"{path}: its palette of colours is damaged; save it as a grey picture")
        table = luminance(palette.T)
        cautions.append(COLOUR)

        def look_up(rows: slice, columns: slice) -> NDArray[np.generic]:
            return table.take(read(rows, columns)[..., 0].astype(np.intp), mode="clip")

        return PartialPixels(shape, np.float32, look_up)
    # colours that JPEG stores as brightness and hue come out of its decoder as red, green, blue
    in_colour = photometric == _COLOURS or (photometric == _JPEG_COLOURS and page.compression in _JPEG_COMPRESSIONS)
    if in_colour and samples >= 3:
        cautions.append(COLOUR)
        return PartialPixels(shape, np.float32, lambda rows, columns: luminance(read(rows, columns)))
    name = getattr(photometric, "name", photometric)
    raise UnreadablePictureError(
        f"{path}: holds {samples} values a pixel ({name}), which is neither grey nor red, green, blue; save each "
        "channel as a grey picture"
    )


def _mapped(page: tifffile.TiffPage, picture: int, path: Path) -> NDArray[np.generic]:
    """Map the pixels into memory, shape (rows, columns, samples)."""
    dtype = cast("np.dtype[Any]", page.dtype).newbyteorder(page.parent.byteorder)
    rows, columns, samples = page.imagelength, page.imagewidth, page.samplesperpixel
    size = rows * columns * samples * dtype.itemsize
    offset = page.dataoffsets[0] + picture * size
    found = path.stat().st_size
    if found < offset + size:
        raise UnreadablePictureError(
            f"{path}: cut off after {found} of {offset + size} bytes; copy it again from the microscope"
        )
    in_planes = page.planarconfig == 2 and samples > 1
    shape = (samples, rows, columns) if in_planes else (rows, columns, samples)
    mapped = np.memmap(path, dtype=dtype, mode="r", offset=offset, shape=shape)
    return np.moveaxis(mapped, 0, -1) if in_planes else mapped


def _rectangles_of(stored: NDArray[np.generic]) -> RectangleReader:
    return lambda rows, columns: stored[rows, columns]


def _segmented(page: tifffile.TiffPage, path: Path) -> RectangleReader:
    """Return a reader that decodes the strips or tiles a rectangle touches, shape (rows, columns, samples)."""
    rows, columns, samples = page.imagelength, page.imagewidth, page.samplesperpixel
    height, width = (page.tilelength, page.tilewidth) if page.is_tiled else (min(page.rowsperstrip, rows), columns)
    if min(height, width) < 1:
        raise UnreadablePictureError(f"{path}: its strips or tiles have no size; export it again")
    down, across = -(-rows // height), -(-columns // width)
    in_planes = page.planarconfig == 2 and samples > 1
    planes = samples if in_planes else 1
    offsets, lengths = page.dataoffsets, page.databytecounts
    needed = planes * down * across
    if min(len(offsets), len(lengths)) < needed:
        raise UnreadablePictureError(
            f"{path}: lists {min(len(offsets), len(lengths))} of {needed} strips or tiles; copy it again from the "
            "microscope"
        )
    dtype = cast("np.dtype[Any]", page.dtype).newbyteorder("=")
    end = max((o + n for o, n in zip(offsets[:needed], lengths[:needed], strict=True)), default=0)
    if end > (found := path.stat().st_size):
        raise UnreadablePictureError(f"{path}: cut off after {found} of {end} bytes; copy it again from the microscope")
    unpacked = height * width * (samples if not in_planes else 1) * dtype.itemsize
    check_unpacked_size(unpacked, max(lengths[:needed], default=0), path)
    decode_segment: Callable[..., Any] = page.decode
    tables = {}
    if page.compression in _JPEG_COMPRESSIONS:
        tables = {"jpegtables": page.jpegtables, "jpegheader": page.jpegheader}
    nodata = page.nodata

    def decode(i: int, j: int) -> NDArray[np.generic]:
        with refusing(path, "is damaged"):
            parts = [decode_one((plane * down + i) * across + j, i, j) for plane in range(planes)]
            return parts[0] if planes == 1 else np.concatenate(parts, axis=-1)

    def decode_one(segment: int, i: int, j: int) -> NDArray[np.generic]:
        wanted = min(height, rows - i * height), min(width, columns - j * width)
        content = None
        if lengths[segment] > 0:
            with path.open("rb") as file:
                file.seek(offsets[segment])
                content = file.read(lengths[segment])
            if len(content) < lengths[segment]:
                raise UnreadablePictureError(f"{path}: became shorter while it was read; copy it again")
            if page.compression in _JPEG_COMPRESSIONS:
                _check_jpeg_size(content, unpacked, path)
            # decoders of variable-length codes need not notice where the bytes are damaged
            pixels = decode_segment(content, segment, **tables)[0]
            return cast("NDArray[np.generic]", pixels[0, : wanted[0], : wanted[1]])
        # a segment that was never written
        return np.full((*wanted, samples if planes == 1 else 1), nodata, dtype)

    segments = SegmentedPixels((rows, columns, samples), (height, width), dtype, decode)
    return segments.read


def _check_jpeg_size(content: bytes, unpacked: int, path: Path) -> None:
    """Compare the size in a JPEG stream's frame header with its strip's or tile's."""
    at = 2
    while at + 9 <= len(content) and content[at] == 0xFF:
        marker = content[at + 1]
        if 0xC0 <= marker <= 0xCF and marker not in (0xC4, 0xC8, 0xCC):
            height, width = struct.unpack_from(">HH", content, at + 5)
            if height * width > 4 * max(unpacked, 1024):
                raise UnreadablePictureError(
                    f"{path}: a part of it claims {height} x {width} pixels, more than the picture has; export it again"
                )
            return
        at += 2 + int(struct.unpack_from(">H", content, at + 2)[0])


def _stated_pixel_sizes(
    page: tifffile.TiffPage, description: str, frame: int, cautions: list[Caution]
) -> tuple[StatedPixelSize, ...]:
    stated: list[StatedPixelSize] = []
    unit: str | None = None
    if looks_like_ome(description):
        try:
            of_image = ome_pixel_size(description, frame)
        except (ElementTree.ParseError, UnicodeError):
            cautions.append(UNREADABLE)
        else:
            stated += [of_image] if of_image else []
    else:
        unit = _unit_in(description)
    by_tags = _resolution(page, unit)
    if by_tags is not None and not (stated and by_tags.row == by_tags.column == 1 and is_no_unit(by_tags.unit)):
        stated.append(by_tags)
    return tuple(stated)


def _resolution(page: tifffile.TiffPage, unit_in_description: str | None) -> StatedPixelSize | None:
    """Return the inverse of pixels per unit, or None if the tags are not there."""
    row, column = (_inverse(page.tags.valueof(name)) for name in ("YResolution", "XResolution"))
    if row is None or column is None:
        return None
    sizes = row, column
    if unit_in_description is not None and not is_no_unit(unit_in_description):
        return StatedPixelSize(*sizes, unit_in_description, "resolution tags with the unit in the description")
    number = page.tags.valueof("ResolutionUnit", 2)
    unit = _RESOLUTION_UNITS.get(int(number)) if isinstance(number, int) else None
    return StatedPixelSize(*sizes, unit, "resolution tags")


def _inverse(value: object) -> float | None:
    """Return denominator over numerator of a tag's fraction; 0 if that makes no sense."""
    if not (isinstance(value, tuple) and len(value) == 2 and all(isinstance(v, int) for v in value)):
        return None
    numerator, denominator = value
    return denominator / numerator if numerator else 0.0


def _unit_in(description: str) -> str | None:
    """Return the unit that a description gives as `unit=...` line by line, or as an entry of a JSON object."""
    if description.lstrip().startswith("{"):
        try:
            entries = json.loads(description)
        except (ValueError, RecursionError):
            return None
        unit = entries.get("unit") if isinstance(entries, dict) else None
        return unit if isinstance(unit, str) else None
    return _key_values(description).get("unit")


def _key_values(description: str) -> dict[str, str]:
    """Return the `key=value` lines of a description."""
    pairs = (line.partition("=") for line in description.splitlines()[:10_000])
    return {key.strip().lower(): value.strip() for key, found, value in pairs if found}
