"""The strip of a picture along a line, sampled by quintic splines."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import RegionError
from fringespan.micrograph import Micrograph

__all__ = ["SHORTEST_LINE_PX", "Strip"]

SHORTEST_LINE_PX = 24.0
"""A shorter line has too few points to tell a fringe from noise."""

_MARGIN_PX = 24
"""Pixels read around the strip: the quintic spline forgets by 0.43 a pixel, so that 1e-9 of the edge remains."""

_SEGMENT_POINTS = 512
"""Points of a line that are interpolated at a time, so that a long oblique line does not read its whole rectangle."""


@dataclass(frozen=True, eq=False)
class Strip:
    """A strip of a picture: sampling points along a line and across it.

    Attributes
    ----------
    ends : ((float, float), (float, float))
        Of the line, (row, column).
    width : float
        In pixels.
    along, across : ndarray, shape (2,)
        Unit vectors in pixels; at right angles in the specimen.
    offsets : ndarray, shape (lines,)
        Of the parallel lines, in pixels across.
    positions : ndarray, shape (points,)
        Along each line, in pixels.
    geometry : ndarray, shape (2, 2)
        From pixels to nm, or to themselves without a pixel size.
    """

    ends: tuple[tuple[float, float], tuple[float, float]]
    width: float
    along: NDArray[np.float64]
    across: NDArray[np.float64]
    offsets: NDArray[np.float64]
    positions: NDArray[np.float64]
    geometry: NDArray[np.float64]

    @classmethod
    def of(cls, micrograph: Micrograph, line_px: Sequence[Sequence[float]], width_px: float) -> Strip:
        """Lay a strip along a line.

        Raises
        ------
        RegionError
            If it is too short, too narrow, or reaches beyond the picture.
        """
        ends = _ends(line_px)
        if not (math.isfinite(width_px) and width_px >= 1):
            raise RegionError(f"width_px must be at least 1 px, got {width_px!r}")
        start, end = np.array(ends)
        length = float(np.hypot(*(end - start)))
        if length < SHORTEST_LINE_PX:
            raise RegionError(
                f"line_px: {length:.1f} px long, at least {SHORTEST_LINE_PX:g} px are needed; draw it longer"
            )
        along = np.asarray((end - start) / length, dtype=np.float64)
        geometry = micrograph.geometry_nm_per_px
        geometry = np.eye(2) if geometry is None else geometry
        # at right angles in the specimen, not on the pixels, which may not be square
        y, x = geometry @ along
        across = np.linalg.solve(geometry, [-x, y])
        across = np.asarray(across / np.hypot(*across), dtype=np.float64)
        count = max(1, round(width_px))
        # a picture holds up to half a cycle a pixel along its axes, more along its diagonals
        points = math.ceil(length * float(np.abs(along).sum())) + 1
        strip = cls(
            ends,
            float(width_px),
            along,
            across,
            np.arange(count, dtype=np.float64) - (count - 1) / 2,
            np.linspace(0.0, length, points, dtype=np.float64),
            geometry,
        )
        strip._refuse_outside(micrograph.shape)
        return strip

    @property
    def length(self) -> float:
        """Of the line, in pixels."""
        return float(self.positions[-1])

    @property
    def step(self) -> float:
        """From point to point along the line, in pixels."""
        return float(self.positions[1])

    @property
    def direction_deg(self) -> float:
        """Of the line on the screen, counter-clockwise from the right, in [0, 180)."""
        y, x = self.geometry @ self.along
        return math.degrees(math.atan2(-y, x)) % 180.0

    def coordinates(self, first: int, last: int) -> NDArray[np.float64]:
        """Return the sampling points, shape (2, lines, points)."""
        start = np.array(self.ends[0])
        return (
            start[:, None, None]
            + self.across[:, None, None] * self.offsets[None, :, None]
            + self.along[:, None, None] * self.positions[None, None, first:last]
        )

    def _refuse_outside(self, shape: tuple[int, int]) -> None:
        corners = self.coordinates(0, len(self.positions))[
            :, :: max(1, len(self.offsets) - 1), :: len(self.positions) - 1
        ]
        low, high = corners.min(axis=(1, 2)), corners.max(axis=(1, 2))
        if (low < -0.5).any() or (high > np.array(shape) - 0.5).any():
            raise RegionError(
                f"line_px: the strip reaches over rows {low[0]:.1f} to {high[0]:.1f} and columns {low[1]:.1f} to "
                f"{high[1]:.1f}, beyond the picture of {shape[0]} x {shape[1]} px; draw the line further inside or "
                "narrower"
            )

    def sampled(self, micrograph: Micrograph) -> tuple[NDArray[np.float64], int]:
        """Return the values, shape (lines, points), and how many pixels had to be replaced."""
        import scipy.ndimage

        lines = np.empty((len(self.offsets), len(self.positions)))
        defects = 0
        for first in range(0, len(self.positions), _SEGMENT_POINTS):
            points = self.coordinates(first, first + _SEGMENT_POINTS)
            low = np.maximum(np.floor(points.min(axis=(1, 2))).astype(int) - _MARGIN_PX, 0)
            high = np.ceil(points.max(axis=(1, 2))).astype(int) + _MARGIN_PX + 1
            pixels = micrograph.crop(slice(low[0], high[0]), slice(low[1], high[1])).astype(np.float64)
            bad = ~np.isfinite(pixels)
            if bad.all():
                raise RegionError("line_px: no pixel near the line has a finite value; draw it elsewhere")
            if bad.any():
                pixels[bad] = np.median(pixels[~bad])
                defects += int(bad.sum())
            lines[:, first : first + _SEGMENT_POINTS] = scipy.ndimage.map_coordinates(
                pixels, points - low[:, None, None], order=5, mode="mirror"
            )
        return lines, defects


def _ends(line_px: Sequence[Sequence[float]]) -> tuple[tuple[float, float], tuple[float, float]]:
    try:
        ends = np.asarray(line_px, dtype=float)
    except (TypeError, ValueError):
        ends = np.empty(0)
    if ends.shape != (2, 2) or not np.isfinite(ends).all():
        raise RegionError(f"line_px must be two (row, column) points of finite numbers, got {line_px!r}")
    (r0, c0), (r1, c1) = ends.tolist()
    return (r0, c0), (r1, c1)
