"""A region: the closed outline that is measured, and the pixels of a picture that belong to it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Literal, cast, get_args

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.exceptions import RegionError

__all__ = [
    "SMALLEST_WIDTH_PX",
    "Footprint",
    "PlacedRegion",
    "Region",
    "RegionKind",
    "place_region",
    "rectangle_footprint",
]

RegionKind = Literal["polygon", "rectangle", "ellipse", "whole picture"]

SMALLEST_WIDTH_PX = 24
"""A narrower region holds too few fringes and too few spectrum bins to tell a fringe from noise."""

_ELLIPSE_CORNERS = 180
_ON_OUTLINE = 1e-9
_FARTHEST_PX = 1e9


@dataclass(frozen=True)
class Region:
    """A named closed polygon in pixel coordinates.

    Parameters
    ----------
    name : str
        What to call it.
    vertices_px : sequence of (float, float)
        Corners as (row, column); pixel centres are at whole numbers. A pixel belongs to the region when its centre lies
        inside or on the outline.
    kind : {"polygon", "rectangle", "ellipse", "whole picture"}, optional
        What it was drawn as.

    Raises
    ------
    RegionError
        If the outline has fewer than three corners, a corner that is not finite, no area, or crosses or touches itself.
    """

    name: str
    vertices_px: tuple[tuple[float, float], ...]
    kind: RegionKind = "polygon"

    def __post_init__(self) -> None:
        try:
            corners = np.asarray(self.vertices_px, dtype=float)
        except (TypeError, ValueError):
            raise RegionError(f"region {self.name!r}: corners must be (row, column) pairs of numbers") from None
        if corners.ndim != 2 or corners.shape[1:] != (2,) or len(corners) < 3:
            raise RegionError(
                f"region {self.name!r}: an outline needs at least three (row, column) corners, got an array of shape "
                f"{corners.shape}"
            )
        if not (np.abs(corners) < _FARTHEST_PX).all():
            raise RegionError(
                f"region {self.name!r}: every corner must be finite and within {_FARTHEST_PX:g} px; draw it again"
            )
        if self.kind not in get_args(RegionKind):
            raise RegionError(f"region {self.name!r}: kind must be one of {get_args(RegionKind)}, got {self.kind!r}")
        object.__setattr__(self, "name", str(self.name))
        object.__setattr__(self, "vertices_px", tuple((float(r), float(c)) for r, c in corners))
        if _crosses_itself(corners):
            raise RegionError(
                f"region {self.name!r}: its outline crosses or touches itself; draw it so that it does not"
            )
        if _area(corners) <= 0:
            raise RegionError(f"region {self.name!r}: its outline encloses no area; draw it again")

    @classmethod
    def rectangle(cls, name: str, top: float, left: float, bottom: float, right: float) -> Region:
        """Return the upright rectangle with these edges (rows and columns, outline included)."""
        return cls(name, ((top, left), (top, right), (bottom, right), (bottom, left)), "rectangle")

    @classmethod
    def ellipse(
        cls, name: str, centre: Sequence[float], semi_axes: Sequence[float], rotation_deg: float = 0.0
    ) -> Region:
        """Return the ellipse around `centre` (row, column).

        `semi_axes` are its half widths along (rows, columns) before it is turned counter-clockwise on the screen by
        `rotation_deg`.
        """
        angle = np.linspace(0, 2 * np.pi, _ELLIPSE_CORNERS, endpoint=False)
        row, column = semi_axes[0] * np.sin(angle), semi_axes[1] * np.cos(angle)
        turn = math.radians(rotation_deg)
        rows = centre[0] + row * math.cos(turn) - column * math.sin(turn)
        columns = centre[1] + row * math.sin(turn) + column * math.cos(turn)
        return cls(name, tuple(zip(rows.tolist(), columns.tolist(), strict=True)), "ellipse")

    @classmethod
    def whole(cls, shape: Sequence[int], name: str = "whole picture") -> Region:
        """Return the region that holds every pixel of a picture of this shape (rows, columns)."""
        return _whole(int(shape[0]), int(shape[1]), name)


@dataclass(frozen=True, eq=False)
class Footprint:
    """Which pixels of a rectangle a region covers, wherever in the picture that rectangle lies.

    Regions that were only moved by whole pixels share one footprint object, so that whatever depends on the outline
    alone can be kept with it.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns of the rectangle.
    mask : ndarray of bool, shape (rows, columns), or None
        Which pixels belong; None if all do.
    spans : ndarray of int32, shape (n, 3)
        The same as runs of pixels: row, first column, column after the last.
    """

    shape: tuple[int, int]
    mask: NDArray[np.bool_] | None
    spans: NDArray[np.int32]

    @cached_property
    def count(self) -> int:
        """Number of pixels that belong."""
        return int((self.spans[:, 2] - self.spans[:, 1]).sum())

    @cached_property
    def second_moments(self) -> tuple[float, float, float]:
        """Mean of y y, y x and x x over the pixels, from their middle."""
        row, start, stop = (self.spans[:, i].astype(float) for i in range(3))
        count, middle = stop - start, (start + stop - 1) / 2
        total = count.sum()
        y, x = row - (count * row).sum() / total, middle - (count * middle).sum() / total
        within = (count**2 - 1) / 12
        return tuple(float((count * m).sum() / total) for m in (y * y, y * x, x * x + within))  # type: ignore[return-value]

    @classmethod
    def from_mask(cls, mask: NDArray[np.bool_]) -> Footprint:
        """Return the footprint of a mask."""
        padded = np.zeros((mask.shape[0], mask.shape[1] + 2), dtype=np.int8)
        padded[:, 1:-1] = mask
        step = np.diff(padded, axis=1)
        row, start = np.nonzero(step == 1)
        stop = np.nonzero(step == -1)[1]
        spans = np.stack([row, start, stop], axis=1).astype(np.int32)
        return cls((mask.shape[0], mask.shape[1]), mask, spans)


@dataclass(frozen=True, eq=False)
class PlacedRegion:
    """The pixels of one picture that belong to a region.

    Parameters
    ----------
    rows, columns : slice
        The rectangle of the picture that just holds them.
    footprint : Footprint
        Which pixels of that rectangle belong.
    cautions : tuple of Caution
        What placing it brought to light.
    """

    rows: slice
    columns: slice
    footprint: Footprint
    cautions: tuple[Caution, ...] = ()


@lru_cache(maxsize=16)
def _whole(rows: int, columns: int, name: str) -> Region:
    bottom, right = rows - 0.5, columns - 0.5
    return Region(name, ((-0.5, -0.5), (-0.5, right), (bottom, right), (bottom, -0.5)), "whole picture")


def place_region(region: Region, picture_shape: tuple[int, int]) -> PlacedRegion:
    """Find the pixels of a picture that belong to a region.

    Parameters
    ----------
    region : Region
    picture_shape : (int, int)
        Rows and columns of the picture.

    Returns
    -------
    PlacedRegion

    Raises
    ------
    RegionError
        If it lies outside the picture or is less than `SMALLEST_WIDTH_PX` wide in any direction.
    """
    return _placed(region, (int(picture_shape[0]), int(picture_shape[1])))


@lru_cache(maxsize=64)
def _placed(region: Region, picture_shape: tuple[int, int]) -> PlacedRegion:
    corners = np.array(region.vertices_px)
    low, high = corners.min(axis=0), corners.max(axis=0)
    clipped = bool((low < -0.5).any() or (high > np.array(picture_shape) - 0.5).any())
    first = [max(0, math.ceil(v - _ON_OUTLINE)) for v in low]
    last = [min(n - 1, math.floor(v + _ON_OUTLINE)) for v, n in zip(high, picture_shape, strict=True)]
    if first[0] > last[0] or first[1] > last[1]:
        raise RegionError(
            f"region {region.name!r}: no pixel of the picture ({picture_shape[0]} x {picture_shape[1]}) lies inside it; "
            f"its rows run from {low[0]:g} to {high[0]:g}, its columns from {low[1]:g} to {high[1]:g}"
        )
    shape = last[0] - first[0] + 1, last[1] - first[1] + 1
    offset = (0, 0)
    if _is_upright_rectangle(corners):
        footprint = rectangle_footprint(shape)
        width: float = min(shape)
    else:
        relative = np.round(corners - first, 6)
        found = _footprint(tuple(map(tuple, relative.tolist())), shape)
        if found is None:
            raise RegionError(f"region {region.name!r}: no pixel of the picture lies inside it; draw it larger")
        footprint, offset, width = found
    if width < SMALLEST_WIDTH_PX:
        raise RegionError(
            f"region {region.name!r}: {width:.0f} px across, at least {SMALLEST_WIDTH_PX} px are needed in every "
            "direction to tell fringes from noise; draw it larger"
        )
    top, left = first[0] + offset[0], first[1] + offset[1]
    cautions: tuple[Caution, ...] = ()
    if clipped:
        cautions = (
            Caution(
                "region-clipped",
                "note",
                "The region reaches beyond the edge of the picture; only the part inside was measured.",
                "Move it inside if the cut part matters.",
            ),
        )
    rows, columns = footprint.shape
    return PlacedRegion(slice(top, top + rows), slice(left, left + columns), footprint, cautions)


@lru_cache(maxsize=64)
def rectangle_footprint(shape: tuple[int, int]) -> Footprint:
    """Return the footprint of an upright rectangle of `shape` (rows, columns)."""
    rows = np.arange(shape[0], dtype=np.int32)
    return Footprint(shape, None, np.stack([rows, np.zeros_like(rows), np.full_like(rows, shape[1])], axis=1))


@lru_cache(maxsize=64)
def _footprint(
    corners: tuple[tuple[float, float], ...], shape: tuple[int, int]
) -> tuple[Footprint, tuple[int, int], float] | None:
    """Return footprint, its offset in the rectangle of `shape`, and its smallest width; None if it holds no pixel."""
    runs = _inside(np.array(corners), shape)
    if not len(runs):
        return None
    top, left = int(runs[0, 0]), int(runs[:, 1].min())
    rows, columns = int(runs[-1, 0]) + 1 - top, int(runs[:, 2].max()) - left
    spans = (runs - (top, left, left)).astype(np.int32)
    mask = np.zeros((rows, columns), bool)
    for row, first, stop in spans.tolist():
        mask[row, first:stop] = True
    mask.setflags(write=False)
    return Footprint((rows, columns), mask, spans), (top, left), _narrowest(spans)


def _is_upright_rectangle(corners: NDArray[np.float64]) -> bool:
    if len(corners) != 4:
        return False
    steps = np.roll(corners, -1, axis=0) - corners
    level = steps == 0
    return bool((level.sum(axis=1) == 1).all() and (level[:, 0] == [level[0, 0], level[0, 1]] * 2).all())


def _inside(corners: NDArray[np.float64], shape: tuple[int, int]) -> NDArray[np.int64]:
    """Return the runs of pixels inside or on an outline as (row, first column, column after the last), by scan lines.

    A pixel is inside where it is inside just above or just below its row, so that outlines along a row count.
    """
    height, width = shape
    start, end = corners, np.roll(corners, -1, axis=0)
    sloped = start[:, 0] != end[:, 0]
    start, end = start[sloped], end[sloped]
    top, bottom = np.minimum(start[:, 0], end[:, 0]), np.maximum(start[:, 0], end[:, 0])
    slope = (end[:, 1] - start[:, 1]) / (end[:, 0] - start[:, 0])
    y = np.arange(height)[:, None]
    runs = []
    for crossed in ((top <= y) & (y < bottom), (top < y) & (y <= bottom)):
        row, edge = np.nonzero(crossed)
        x = start[edge, 1] + slope[edge] * (y[row, 0] - start[edge, 0])
        order = np.lexsort((x, row))
        row, x = row[order], x[order]
        first = np.clip(np.ceil(x[0::2] - _ON_OUTLINE).astype(np.int64), 0, width)
        stop = np.clip(np.floor(x[1::2] + _ON_OUTLINE).astype(np.int64) + 1, 0, width)
        runs.append(np.stack([row[0::2], first, stop], axis=1)[first < stop])
    both = np.concatenate(runs)
    both = both[np.lexsort((both[:, 1], both[:, 0]))]
    if not len(both):
        return both
    # runs that overlap or touch become one: a run starts anew where it begins beyond all that ended before in its row
    reach = np.maximum.accumulate(both[:, 0] * (width + 2) + both[:, 2])
    begins = np.ones(len(both), bool)
    begins[1:] = both[1:, 0] * (width + 2) + both[1:, 1] > reach[:-1]
    last = np.append(np.flatnonzero(begins)[1:], len(both)) - 1
    joined = both[begins]
    joined[:, 2] = reach[last] - joined[:, 0] * (width + 2)
    return joined


def _narrowest(spans: NDArray[np.int32]) -> float:
    """Return the smallest width in pixels over all directions, from the ends of the runs."""
    ends = np.concatenate([spans[:, :2], np.stack([spans[:, 0], spans[:, 2] - 1], axis=1)]).astype(float)
    angle = np.linspace(0, np.pi, 36, endpoint=False)
    along = ends @ np.stack([np.sin(angle), np.cos(angle)])
    # one pixel is added because a line of n pixel centres spans n - 1 steps
    return float((np.ptp(along, axis=0) + 1).min())


def _area(corners: NDArray[np.float64]) -> float:
    y, x = (corners - corners[0]).T
    return float(abs(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1))) / 2)


def _crosses_itself(corners: NDArray[np.float64]) -> bool:
    """Say whether two edges that are not neighbours touch or cross."""
    # a corner clicked twice, or repeated to close the outline, makes no edge
    corners = corners[(corners != np.roll(corners, 1, axis=0)).any(axis=1)]
    count = len(corners)
    if count < 4 or _is_convex(corners):
        return False
    p, q = corners, np.roll(corners, -1, axis=0)

    def meets(a: NDArray[np.float64], b: NDArray[np.float64], c: NDArray[np.float64]) -> NDArray[np.bool_]:
        within = (np.minimum(a, b) <= c) & (c <= np.maximum(a, b))
        return cast("NDArray[np.bool_]", (_side(a, b, c) == 0) & within.all(axis=-1))

    for i in range(count - 2):
        others = np.arange(i + 2, count - (1 if i == 0 else 0))
        if not others.size:
            continue
        a, b, c, d = p[i], q[i], p[others], q[others]
        apart = _side(a, b, c) * _side(a, b, d) < 0
        across = _side(c, d, a) * _side(c, d, b) < 0
        if (apart & across | meets(a, b, c) | meets(a, b, d) | meets(c, d, a) | meets(c, d, b)).any():
            return True
    return False


def _is_convex(corners: NDArray[np.float64]) -> bool:
    """Say whether an outline turns to one side only, and once around."""
    step = np.roll(corners, -1, axis=0) - corners
    following = np.roll(step, -1, axis=0)
    cross = step[:, 0] * following[:, 1] - step[:, 1] * following[:, 0]
    if (cross < 0).any() and (cross > 0).any():
        return False
    turn = np.arctan2(np.abs(cross), (step * following).sum(axis=1))
    return bool(turn.max() < np.pi and turn.sum() < 3 * np.pi)


def _side(a: NDArray[np.float64], b: NDArray[np.float64], c: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return on which side of the line from a to b each point c lies: -1, 0 on it, 1."""
    cross = (b[..., 0] - a[..., 0]) * (c[..., 1] - a[..., 1]) - (b[..., 1] - a[..., 1]) * (c[..., 0] - a[..., 0])
    return cast("NDArray[np.float64]", np.sign(cross))
