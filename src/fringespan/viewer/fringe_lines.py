"""Lines that show a measurement on the picture: fringes at their fitted phase, dashes along an outline."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fringespan.spacings import Peak

__all__ = ["dashes", "fringe_lines"]

_MOST_LINES = 400


def fringe_lines(peak: Peak, outline_px: Sequence[Sequence[float]] | NDArray[np.float64]) -> NDArray[np.float64]:
    """Return a line along the brightest of each fringe, cut to an outline.

    Parameters
    ----------
    peak : Peak
    outline_px : array_like, shape (m, 2)
        Corners (row, column).

    Returns
    -------
    ndarray, shape (n, 2, 2)
        Both ends (row, column) of each line. Of more than 400 fringes every second, third, ... is drawn.

    Notes
    -----
    The fitted wave A cos(2 pi g (r - r0) + phase) is brightest where g (r - r0) + phase / 2 pi is a whole number.
    """
    corners = np.asarray(outline_px, dtype=float)
    g, origin = peak.g_per_px, np.array(peak.phase_origin_px)
    cycles = (corners - origin) @ g + peak.phase_rad / (2 * math.pi)
    first, last = math.ceil(cycles.min()), math.floor(cycles.max())
    step = max(1, math.ceil((last - first + 1) / _MOST_LINES))
    following = np.roll(corners, -1, axis=0)
    next_cycles = np.roll(cycles, -1)
    along = np.array([-g[1], g[0]])
    lines = []
    for order in range(first, last + 1, step):
        crossed = (cycles <= order) != (next_cycles <= order)
        if not crossed.any():
            continue
        share = (order - cycles[crossed]) / (next_cycles[crossed] - cycles[crossed])
        points = corners[crossed] + share[:, None] * (following[crossed] - corners[crossed])
        points = points[np.argsort(points @ along)]
        lines += [points[i : i + 2] for i in range(0, len(points) - 1, 2)]
    return np.array(lines).reshape(-1, 2, 2)


def dashes(outline_px: NDArray[np.float64], dash: float) -> NDArray[np.float64]:
    """Return dashes along a closed outline, shape (n, 2, 2), each about `dash` pixels long with as much between."""
    corners = np.vstack([outline_px, outline_px[:1]])
    length = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(corners, axis=0).T))])
    if length[-1] == 0:
        return np.empty((0, 2, 2))
    count = max(4, round(length[-1] / (2 * dash)))
    begin = np.arange(count) * length[-1] / count
    at = np.stack([begin, begin + 0.5 * length[-1] / count], axis=1)
    return np.stack([np.interp(at, length, corners[:, axis]) for axis in range(2)], axis=-1)
