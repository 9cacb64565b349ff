"""OME-Zarr: the full-resolution picture of a folder of chunks, of which only the touched ones are read."""

from __future__ import annotations

import math
from pathlib import Path, PurePosixPath
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import PixelSource
from fringespan.reading.partial_pixels import PartialPixels, SegmentedPixels
from fringespan.reading.pixel_size import StatedPixelSize
from fringespan.reading.refusal import check_frame, check_pixel_type, refusing
from fringespan.reading.stored_picture import StoredPicture

__all__ = ["open_picture"]

_SOURCE = "OME-Zarr"
_LARGEST_CHUNK = 2**31


def open_picture(path: Path, frame: int) -> StoredPicture:
    """Open one plane of the first, finest level; all axes but the last two count as frames."""
    try:
        import zarr
    except ImportError:
        raise UnreadablePictureError(
            f'{path}: an OME-Zarr needs the package zarr, which is not installed; run: pip install "fringespan[zarr]"'
        ) from None
    node: Any = zarr.open(store=str(path), mode="r")
    stated: tuple[StatedPixelSize, ...] = ()
    if isinstance(node, zarr.Group):
        image, multiscale = _first_image(node, zarr.Group, path)
        level = _entry(multiscale, "datasets", path)
        array: Any = image[_inside(level.get("path"), path)]
        stated = _pixel_size(multiscale, level)
    else:
        array = node
    if not isinstance(array, zarr.Array):
        raise UnreadablePictureError(f"{path}: its finest level is not an array; export it again")
    shape = tuple(int(n) for n in array.shape)
    if len(shape) < 2 or 0 in shape:
        raise UnreadablePictureError(f"{path}: an array of shape {shape} is no picture; export it again")
    dtype = np.dtype(array.dtype)
    check_pixel_type(dtype, path)
    frames = shape[:-2]
    count = math.prod(frames)
    index = tuple(int(i) for i in np.unravel_index(check_frame(frame, count, path), frames)) if frames else ()
    return StoredPicture(_plane(array, index, shape[-2:], dtype.newbyteorder("="), path), count, stated)


def _plane(
    array: Any, index: tuple[int, ...], shape: tuple[int, ...], dtype: np.dtype[np.generic], path: Path
) -> PixelSource:
    height, width = (int(n) for n in array.chunks[-2:])
    if math.prod(array.chunks) * dtype.itemsize > _LARGEST_CHUNK:
        raise UnreadablePictureError(
            f"{path}: its chunks {tuple(array.chunks)} are larger than 2 GB; export it with smaller ones"
        )

    def decode(i: int, j: int) -> NDArray[np.generic]:
        with refusing(path, "is damaged"):
            part = array[(*index, slice(i * height, (i + 1) * height), slice(j * width, (j + 1) * width))]
            return np.asarray(part)

    segments = SegmentedPixels(shape, (height, width), dtype, decode)
    return PartialPixels((shape[0], shape[1]), dtype, segments.read)


def _first_image(group: Any, group_type: type, path: Path) -> tuple[Any, dict[str, Any]]:
    """Return the group of the first image and what it says about its levels."""
    attributes = dict(group.attrs)
    # version 0.5 keeps everything under one key, versions before at the top
    found = attributes.get("ome", attributes)
    if isinstance(found, dict) and "multiscales" in found:
        return group, _entry(found, "multiscales", path)
    # a folder of several images counts them from 0
    first = group.get("0")
    if isinstance(first, group_type):
        attributes = dict(first.attrs)  # type: ignore[attr-defined]
        found = attributes.get("ome", attributes)
        if isinstance(found, dict) and "multiscales" in found:
            return first, _entry(found, "multiscales", path)
    raise UnreadablePictureError(
        f"{path}: is a Zarr group without the entry 'multiscales' of an OME-Zarr; name the folder of one picture"
    )


def _entry(holder: dict[str, Any], name: str, path: Path) -> dict[str, Any]:
    """Return the first of a list of objects."""
    entries = holder.get(name)
    if not (isinstance(entries, list) and entries and isinstance(entries[0], dict)):
        raise UnreadablePictureError(f"{path}: its entry {name!r} must list at least one object; export it again")
    return dict(entries[0])


def _inside(name: object, path: Path) -> str:
    """Return the name of an array that lies inside the folder."""
    if not isinstance(name, str) or not name or PurePosixPath(name).is_absolute() or ".." in PurePosixPath(name).parts:
        raise UnreadablePictureError(f"{path}: its finest level must lie inside it, got {name!r}; export it again")
    return name


def _pixel_size(multiscale: dict[str, Any], level: dict[str, Any]) -> tuple[StatedPixelSize, ...]:
    scales = [s for s in (_scale(level), _scale(multiscale)) if s is not None]
    if not scales:
        return ()
    row, column = (math.prod(s[axis] for s in scales) for axis in (-2, -1))
    axes = multiscale.get("axes")
    named = (
        [a if isinstance(a, dict) else {} for a in axes[-2:]] if isinstance(axes, list) and len(axes) > 1 else [{}, {}]
    )
    units = [a.get("unit") if isinstance(a.get("unit"), str) else None for a in named]
    if units[0] != units[1]:
        from fringespan.reading.length_units import nm_per_unit

        factors = [None if unit is None else nm_per_unit(unit) for unit in units]
        if factors[0] is not None and factors[1] is not None:
            return (StatedPixelSize(row * factors[0], column * factors[1], "nm", _SOURCE),)
        odd = units[0] if factors[0] is None else units[1]
        return (StatedPixelSize(row, column, odd, _SOURCE),)
    return (StatedPixelSize(row, column, units[0], _SOURCE),)


def _scale(holder: dict[str, Any]) -> list[float] | None:
    """Return the scale among the coordinate transformations of a level or of all levels."""
    steps = holder.get("coordinateTransformations")
    for step in steps if isinstance(steps, list) else []:
        scale = step.get("scale") if isinstance(step, dict) else None
        if isinstance(scale, list) and len(scale) >= 2 and all(isinstance(v, int | float) for v in scale[-2:]):
            return [float(v) for v in scale[-2:]]
    return None
