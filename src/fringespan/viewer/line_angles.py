"""Angles of sets of planes to a line drawn on the picture: an interface, a facet, a growth direction."""

from __future__ import annotations

import math

import numpy as np

from fringespan.micrograph import Micrograph
from fringespan.spacings import Peak

__all__ = ["Line", "planes_to_line_deg"]

Line = tuple[tuple[float, float], tuple[float, float]]
"""Where a line begins and ends, (row, column) in pixels."""


def planes_to_line_deg(peak: Peak, line_px: Line, micrograph: Micrograph) -> tuple[float, float] | None:
    """Return the angle between the planes of a peak and a line, in the specimen, and its standard uncertainty.

    Parameters
    ----------
    peak : Peak
    line_px : ((float, float), (float, float))
        Taken as exact: how well it was drawn is not in the uncertainty.
    micrograph : Micrograph
        Whose pixels need not be square.

    Returns
    -------
    (float, float) or None
        Degrees from 0 (the fringes run along the line) to 90; None for a line without length.
    """
    step = np.subtract(line_px[1], line_px[0])
    geometry = micrograph.geometry_nm_per_px
    y, x = step if geometry is None else geometry @ step
    if y == 0 and x == 0:
        return None
    line = math.degrees(math.atan2(-y, x))
    # the fringes run at right angles to the direction of their spacing
    between = (peak.direction_deg + 90 - line) % 180
    return min(between, 180 - between), peak.direction_uncertainty_deg
