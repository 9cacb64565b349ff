"""The one translator between napari layers and our objects. Works on layers without a window.

Everything we measure is in data pixels of the picture; what napari says about scale, units, shear and rotation becomes
the pixel size and shear of the `Micrograph`. A rotation turns the whole picture and is left out: directions are those
in the picture.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import PIXEL_SIZE_LIMITS_NM, Micrograph
from fringespan.reading.stored_picture import COLOUR
from fringespan.region import RegionKind
from fringespan.viewer.line_angles import Line
from fringespan.viewer.state import DrawnRegion

if TYPE_CHECKING:
    from napari.components import Dims
    from napari.layers import Image, Shapes, Vectors

__all__ = [
    "FROM_LAYER",
    "drawn_line",
    "drawn_regions",
    "is_picture",
    "is_regions_layer_of",
    "name_regions",
    "new_lines_layer",
    "new_regions_layer",
    "pixel_geometry",
    "place_of_region",
    "region_number",
    "set_pixel_size",
    "show_lines",
    "shown_picture",
]

FROM_LAYER = "scale of the napari layer"

METADATA_KEY = "fringespan"

_LUMINANCE = (0.2126, 0.7152, 0.0722)
_DECIMALS_PX = 4
"""Corners are rounded to this: napari's own transforms leave the edges of an upright rectangle off by rounding errors."""

_REGION_SHAPES = ("rectangle", "ellipse", "polygon")

_NEW_SHAPE = {"id": 0, "region": "", "label": ""}

REGION_COLOURS = ("#E69F00", "#56B4E9", "#009E73", "#CC79A7", "#F0E442", "#D55E00")

LINE_COLOUR = "#FFFFFF"


# --- pictures ------------------------------------------------------------------------------------------------------


def is_picture(layer: object) -> bool:
    """Whether a layer is a picture that could be measured, and no overlay or label."""
    from napari.layers import Image

    return isinstance(layer, Image) and layer.ndim >= 2


def shown_picture(layer: Image, dims: Dims) -> Micrograph:
    """Return the frame of a layer that the viewer shows.

    Raises
    ------
    UnreadablePictureError
        If its pixels are no real numbers, or the viewer shows other axes than the last two.
    CalibrationError
        If the layer's scale is impossible.
    """
    data = layer.data[0] if layer.multiscale else layer.data
    offset = dims.ndim - layer.ndim
    order = [axis - offset for axis in dims.displayed if axis >= offset]
    rows, columns = layer.ndim - 2, layer.ndim - 1
    if order[-2:] != [rows, columns]:
        raise UnreadablePictureError(
            f"{layer.name}: only the last two axes of a stack can be measured; put the axes back in order"
        )
    step = [dims.current_step[axis + offset] for axis in range(layer.ndim - 2)]
    step = [min(max(place, 0), data.shape[axis] - 1) for axis, place in enumerate(step)]
    frame = int(np.ravel_multi_index(step, data.shape[: len(step)])) if step else 0
    count = math.prod(data.shape[: len(step)])
    pixels = data[tuple(step)]
    known: dict[str, Any] = dict(layer.metadata.get(METADATA_KEY, {}))
    cautions: tuple[Caution, ...] = known.get("cautions", ())
    if layer.rgb:
        pixels = np.asarray(pixels)[..., :3] @ np.array(_LUMINANCE)
        cautions = tuple(dict.fromkeys((*cautions, COLOUR)))
    # a lazy frame is computed once, not for each region
    pixels = np.asarray(pixels)
    size, shear = pixel_geometry(layer)
    source = FROM_LAYER
    if size is not None and size == known.get("pixel_size_nm"):
        source = str(known.get("pixel_size_source", FROM_LAYER))
    return Micrograph(
        pixels,
        pixel_size_nm=size,
        pixel_size_relative_uncertainty=known.get("pixel_size_relative_uncertainty"),
        pixel_size_source=source if size is not None else "",
        shear=shear,
        voltage_kv=known.get("voltage_kv"),
        cs_mm=known.get("cs_mm"),
        defocus_nm=known.get("defocus_nm"),
        dark_level=known.get("dark_level"),
        name=str(layer.name),
        path=known.get("path") if count == 1 else None,
        frame=frame,
        frame_count=count,
        cautions=cautions,
    )


def pixel_geometry(layer: Image) -> tuple[tuple[float, float] | None, float]:
    """Return the pixel size in nm along (row, column) and the shear that a layer's transform and units say.

    None where the units are no length, or the size lies outside what a lattice picture can have.
    """
    factors = [_nm_per_unit(unit) for unit in layer.units[-2:]]
    corner = np.zeros(layer.ndim)
    steps = np.zeros((2, layer.ndim))
    steps[0, -2] = steps[1, -1] = 1
    origin = np.array(layer.data_to_world(corner))
    row, column = (np.array(layer.data_to_world(step))[-2:] - origin[-2:] for step in steps)
    if factors[0] is None or factors[1] is None:
        return None, 0.0
    row, column = row * factors, column * factors
    # a rotation in front of the matrix [[size_row, 0], [shear * size_column, size_column]] leaves lengths as they are
    across = float(np.hypot(*column))
    if across == 0:
        return None, 0.0
    along = column / across
    shear = float(row @ along) / across
    size = (abs(float(row[0] * along[1] - row[1] * along[0])), across)
    rounded = tuple(float(f"{value:.9g}") for value in size)
    low, high = PIXEL_SIZE_LIMITS_NM
    if not all(low <= value <= high for value in rounded):
        return None, 0.0
    # rounding errors of the transform are no shear
    return (rounded[0], rounded[1]), shear if abs(shear) > 1e-9 else 0.0


def _nm_per_unit(unit: Any) -> float | None:
    """Return the length of a pint unit; None for pixels, which napari takes for lengths on a screen."""
    if str(unit) in ("pixel", "css_pixel") or not unit.is_compatible_with("nm"):
        return None
    return float((1 * unit).to("nm").magnitude)


def set_pixel_size(layers: Iterable[Any], size_nm: tuple[float, float] | None) -> None:
    """Give the layers of a picture another pixel size; positions on the picture stay where they are in pixels."""
    for layer in layers:
        units = list(layer.units)
        old = tuple(float(v) for v in layer.scale[-2:])
        units[-2:] = ["pixel"] * 2 if size_nm is None else ["nm"] * 2
        new = (1.0, 1.0) if size_nm is None else size_nm
        scale, translate = list(layer.scale), list(layer.translate)
        scale[-2:] = new
        translate[-2:] = [t * n / o for t, n, o in zip(layer.translate[-2:], new, old, strict=True)]
        layer.scale, layer.translate = scale, translate
        layer.units = tuple(str(unit) for unit in units)


# --- regions -------------------------------------------------------------------------------------------------------


def _geometry_like(picture: Image) -> dict[str, Any]:
    """Return what makes a two-dimensional layer lie on a picture."""
    return {
        "scale": tuple(picture.scale[-2:]),
        "translate": tuple(picture.translate[-2:]),
        "rotate": np.asarray(picture.rotate)[-2:, -2:],
        "shear": _last_shear(picture),
        "affine": _last_affine(picture),
        "units": tuple(str(unit) for unit in picture.units[-2:]),
    }


def _last_shear(picture: Image) -> NDArray[np.float64]:
    shear = np.asarray(picture.shear)
    # the last entry of an upper triangle without diagonal is that of the last two axes
    return shear[-1:] if shear.ndim == 1 else shear[-2:, -2:]


def _last_affine(picture: Image) -> NDArray[np.float64]:
    matrix = np.asarray(picture.affine)
    return matrix[-3:, -3:]


def new_regions_layer(picture: Image) -> Shapes:
    """Return an empty layer to draw regions of a picture on."""
    from napari.layers import Shapes

    layer = Shapes(
        None,
        ndim=2,
        name=f"regions of {picture.name}",
        edge_color=REGION_COLOURS[0],
        face_color="transparent",
        edge_width=_line_width(picture),
        opacity=1.0,
        metadata={METADATA_KEY: {"regions of": str(picture.unique_id)}},
        **_geometry_like(picture),
    )
    layer.features = {"id": np.empty(0, int), "region": np.empty(0, object), "label": np.empty(0, object)}
    layer.feature_defaults = _NEW_SHAPE
    layer.text = {"string": "{label}", "anchor": "upper_left", "size": 9, "color": "white", "translation": [0, 0]}
    return layer


def _line_width(picture: Image) -> float:
    data = picture.data[0] if picture.multiscale else picture.data
    shape = data.shape[:-1] if picture.rgb else data.shape
    return max(1.0, float(max(shape[-2:])) / 300)


def is_regions_layer_of(layer: Any, picture: Image) -> bool:
    """Whether a layer holds the regions of a picture."""
    known = getattr(layer, "metadata", {}).get(METADATA_KEY, {})
    return isinstance(known, dict) and known.get("regions of") == str(picture.unique_id)


def drawn_regions(layer: Shapes, picture: Image) -> list[DrawnRegion]:
    """Return the outlines on a layer in (row, column) pixels of a picture; lines and paths are no regions.

    A shape that has no number yet, or a copied one, gets the next; `name_regions` writes that down.
    """
    numbers = _numbers(layer)
    names = [str(name) for name in layer.features["region"]] if "region" in layer.features else []
    same_place = _lie_alike(layer, picture)
    regions = []
    for place, (corners, kind) in enumerate(zip(layer.data, layer.shape_type, strict=True)):
        if kind not in _REGION_SHAPES:
            continue
        points = np.asarray(corners, dtype=float)[:, -2:]
        if not same_place:
            points = _in_picture(points, layer, picture)
        number = numbers[place]
        first = place < len(names) and names[place] not in ("", "nan") and number not in numbers[:place]
        # a copied shape comes with the name of the one it was copied from
        copied = first and names[place] in names[:place]
        name = names[place] if first and not copied else f"region {number}"
        regions.append(DrawnRegion(number, name, *_outline(points, kind)))
    return regions


def _numbers(layer: Shapes) -> list[int]:
    """Return a number for each shape that is never given twice."""
    given = [0] * layer.nshapes
    if "id" in layer.features:
        column = list(layer.features["id"])
        given = [int(v) if v == v and v is not None else 0 for v in column][: layer.nshapes]
        given += [0] * (layer.nshapes - len(given))
    is_region = [kind in _REGION_SHAPES for kind in layer.shape_type]
    following = itertools.count(max([*given, int(layer.metadata.get(METADATA_KEY, {}).get("last id", 0))]) + 1)
    seen: set[int] = set()
    numbers = []
    for number, counts in zip(given, is_region, strict=True):
        if not counts:
            # a line is no region and takes no number away from them
            numbers.append(0)
            continue
        number = next(following) if number <= 0 or number in seen else number
        seen.add(number)
        numbers.append(number)
    return numbers


def region_number(layer: Shapes, place: int) -> int:
    """Return the number of the region at a place among the shapes; 0 for a line."""
    numbers = _numbers(layer)
    return numbers[place] if place < len(numbers) else 0


def place_of_region(layer: Shapes, number: int) -> int:
    """Return the place of a region among the shapes."""
    return _numbers(layer).index(number)


def drawn_line(layer: Shapes, picture: Image) -> Line | None:
    """Return the line drawn last on a layer, in pixels of a picture; None without one."""
    places = [place for place, kind in enumerate(layer.shape_type) if kind == "line"]
    if not places:
        return None
    ends = np.asarray(layer.data[places[-1]], dtype=float)[:, -2:]
    if not _lie_alike(layer, picture):
        ends = _in_picture(ends, layer, picture)
    (r0, c0), (r1, c1) = np.round(ends, _DECIMALS_PX).tolist()
    return (r0, c0), (r1, c1)


def _outline(points: NDArray[np.float64], kind: str) -> tuple[tuple[tuple[float, float], ...], RegionKind]:
    drawn_as: RegionKind = "polygon"
    if kind == "ellipse":
        # napari gives the corners of the box around it
        centre = points.mean(axis=0)
        half_columns, half_rows = (points[1] - points[0]) / 2, (points[3] - points[0]) / 2
        angle = np.linspace(0, 2 * np.pi, 90, endpoint=False)[:, None]
        points = centre + half_columns * np.cos(angle) + half_rows * np.sin(angle)
        drawn_as = "ellipse"
    elif kind == "rectangle" and len(points) == 4:
        # dragging one corner leaves a "rectangle" that is none
        sides = points[[1, 3]] - points[0]
        closes = np.abs(points[1] + points[3] - points[0] - points[2]).max() < 1e-3
        if closes and abs(float(sides[0] @ sides[1])) < 1e-3 * max(1.0, float(np.abs(sides).max())):
            drawn_as = "rectangle"
    rounded = np.round(points, _DECIMALS_PX).tolist()
    return tuple((row, column) for row, column in rounded), drawn_as


def _lie_alike(layer: Any, picture: Image) -> bool:
    return (
        np.array_equal(layer.scale[-2:], picture.scale[-2:])
        and np.array_equal(layer.translate[-2:], picture.translate[-2:])
        and np.array_equal(np.asarray(layer.rotate)[-2:, -2:], np.asarray(picture.rotate)[-2:, -2:])
        and np.array_equal(np.asarray(layer.shear)[-1:], np.asarray(picture.shear)[-1:])
        and np.array_equal(np.asarray(layer.affine)[-3:, -3:], np.asarray(picture.affine)[-3:, -3:])
    )


def _in_picture(points: NDArray[np.float64], layer: Any, picture: Image) -> NDArray[np.float64]:
    placed = []
    for point in points:
        own = np.zeros(layer.ndim)
        own[-2:] = point
        world = np.array(layer.data_to_world(own))
        full = np.zeros(picture.ndim)
        full[-2:] = world[-2:]
        placed.append(np.array(picture.world_to_data(full))[-2:])
    return np.array(placed)


def name_regions(layer: Shapes, regions: Sequence[DrawnRegion], labels: dict[int, str]) -> None:
    """Write number, name and label of each region into the layer's features, and give each its colour.

    Nothing is written where nothing changes, since napari draws all texts again.
    """
    numbers = _numbers(layer)
    named = {region.id: region.name for region in regions}
    rows = {
        "id": numbers,
        "region": [named.get(number, "") for number in numbers],
        "label": [labels.get(number, named.get(number, "")) for number in numbers],
    }
    now = layer.features
    if set(now.columns) != set(rows) or any(list(now[name]) != column for name, column in rows.items()):
        layer.features = {"id": np.array(numbers, int)} | {
            name: np.array(rows[name], object) for name in ("region", "label")
        }
        layer.feature_defaults = _NEW_SHAPE
        layer.metadata[METADATA_KEY]["last id"] = max(
            [int(layer.metadata[METADATA_KEY].get("last id", 0)), *numbers], default=0
        )
        colours = [REGION_COLOURS[(n - 1) % len(REGION_COLOURS)] if n else LINE_COLOUR for n in numbers]
        if colours:
            layer.edge_color = colours
    if not layer.selected_data:
        # napari gives a new current colour to all shapes that are selected
        following = int(layer.metadata[METADATA_KEY].get("last id", 0))
        layer.current_edge_color = REGION_COLOURS[following % len(REGION_COLOURS)]


# --- lines that show results ---------------------------------------------------------------------------------------


def new_lines_layer(picture: Image, name: str, colour: str, width: float) -> Vectors:
    """Return an empty layer of plain lines that lies on a picture."""
    from napari.layers import Vectors

    return Vectors(
        np.empty((0, 2, 2)),
        ndim=2,
        name=name,
        edge_color=colour,
        edge_width=width * _line_width(picture),
        vector_style="line",
        opacity=0.9,
        metadata={METADATA_KEY: {"shows": name}},
        **_geometry_like(picture),
    )


def show_lines(layer: Vectors, ends: NDArray[np.float64]) -> None:
    """Show other lines.

    Parameters
    ----------
    layer : Vectors
    ends : ndarray, shape (n, 2, 2)
        For each line where it begins and ends, (row, column) in pixels.
    """
    layer.data = np.stack([ends[:, 0], ends[:, 1] - ends[:, 0]], axis=1) if len(ends) else np.empty((0, 2, 2))
