"""napari's way to our file reading: any picture that `fringespan.read` knows becomes a layer with scale and units."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from fringespan.micrograph import Micrograph
from fringespan.reading import read
from fringespan.viewer.layers import METADATA_KEY

__all__ = ["layer_of", "layers_of_file", "reader_for"]

LayerData = tuple[Any, dict[str, Any], str]


def reader_for(path: str | Sequence[str]) -> Callable[[str], list[LayerData]] | None:
    """Return the function that reads a file; None for several files at once, which napari stacks by itself."""
    if not isinstance(path, str | os.PathLike):
        return None
    return layers_of_file


def layers_of_file(path: str) -> list[LayerData]:
    """Read a picture, or a stack of them.

    Raises
    ------
    UnreadablePictureError
        If the file is no picture of real numbers; the text says what to do.
    """
    first = read(path)
    if first.frame_count == 1:
        return [layer_of(first)]
    return [layer_of(first, np.stack([np.asarray(f.pixels[:, :]) for f in _frames(path, first)]))]


def _frames(path: str, first: Micrograph) -> list[Micrograph]:
    return [first, *(read(path, frame=number) for number in range(1, first.frame_count))]


def layer_of(micrograph: Micrograph, stack: Any = None) -> LayerData:
    """Return a picture as napari takes it: pixels, scale and units, and what it has no place for as metadata."""
    pixels = np.asarray(micrograph.pixels[:, :]) if stack is None else stack
    size = micrograph.pixel_size_nm
    leading = pixels.ndim - 2
    known = {
        name: getattr(micrograph, name)
        for name in (
            "pixel_size_nm",
            "pixel_size_source",
            "pixel_size_relative_uncertainty",
            "voltage_kv",
            "cs_mm",
            "defocus_nm",
            "dark_level",
            "path",
            "cautions",
        )
    }
    options: dict[str, Any] = {"name": micrograph.name, "metadata": {METADATA_KEY: known}, "colormap": "gray"}
    if size is not None:
        options["scale"] = (*[1.0] * leading, *size)
        options["units"] = (*["pixel"] * leading, "nm", "nm")
    return pixels, options, "image"
