"""Which planes lie along a line drawn on the picture: a facet, an interface, a growth front."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fringespan.crystal.zone import zone_pattern
from fringespan.exceptions import SettingsError
from fringespan.micrograph import Micrograph
from fringespan.ranking.hypotheses import Hypothesis

__all__ = ["PlaneAlongLine", "planes_along_line", "screen_direction_deg"]

_D_MIN_NM = 0.05
_LARGEST_INDEX = 4


@dataclass(frozen=True, slots=True, kw_only=True)
class PlaneAlongLine:
    """A plane seen edge-on, and how far its trace is from a line.

    Attributes
    ----------
    hkl : (int, int, int)
        Lowest terms.
    deviation_deg : float
        From the line to the trace, counter-clockwise, between -90 and 90.
    """

    hkl: tuple[int, int, int]
    deviation_deg: float


def screen_direction_deg(start: Sequence[float], end: Sequence[float], micrograph: Micrograph | None = None) -> float:
    """Return the direction of a line drawn from one (row, column) to another, in degrees counter-clockwise, 0 to 180.

    Parameters
    ----------
    start, end : (row, column)
    micrograph : Micrograph, optional
        Its pixels need not be square; without it they are taken as such.

    Raises
    ------
    SettingsError
        If the points coincide.
    """
    step = np.asarray(end, dtype=np.float64) - np.asarray(start, dtype=np.float64)
    geometry = None if micrograph is None else micrograph.geometry_nm_per_px
    if geometry is not None:
        step = geometry @ step
    if not np.all(np.isfinite(step)) or not np.any(step):
        raise SettingsError(f"a line needs two different points, got {tuple(start)} and {tuple(end)}")
    return math.degrees(math.atan2(-step[0], step[1])) % 180


def planes_along_line(
    hypothesis: Hypothesis, direction_deg: float, *, within_deg: float = 15.0
) -> tuple[PlaneAlongLine, ...]:
    """Return the planes of a zone whose traces run along a line, the nearest of the simplest first.

    Only planes that contain the zone axis are seen edge-on; a facet that is inclined has another trace.

    Parameters
    ----------
    hypothesis : Hypothesis
        With a zone.
    direction_deg : float
        Of the line on the screen, counter-clockwise from the right.
    within_deg : float, optional
        Largest deviation.

    Raises
    ------
    SettingsError
        If the hypothesis has no zone, or a number is out of range.
    """
    if hypothesis.zone is None or hypothesis.rotation_deg is None:
        raise SettingsError("planes along a line need the zone axis; rank at least two sets of fringes first")
    if not (math.isfinite(direction_deg) and 0 <= within_deg <= 90):
        raise SettingsError(f"direction and limit must be angles, got {direction_deg!r} and {within_deg!r}")
    found: dict[tuple[int, int, int], float] = {}
    for spot in zone_pattern(hypothesis.structure, hypothesis.zone, d_min_nm=_D_MIN_NM).spots:
        common = math.gcd(*spot.hkl)
        h, k, m = (i // common for i in spot.hkl)
        if max(abs(h), abs(k), abs(m)) > _LARGEST_INDEX:
            continue
        trace = spot.direction_deg + hypothesis.rotation_deg + 90
        deviation = (trace - direction_deg + 90) % 180 - 90
        if abs(deviation) <= within_deg and (-h, -k, -m) not in found:
            found[h, k, m] = deviation
    order = sorted(found, key=lambda hkl: abs(found[hkl]) + 1.5 * sum(map(abs, hkl)))
    return tuple(PlaneAlongLine(hkl=hkl, deviation_deg=found[hkl]) for hkl in order)
