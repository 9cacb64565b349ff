"""Planes along a line drawn on the picture."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from fringespan.crystal.library import load_phase
from fringespan.exceptions import SettingsError
from fringespan.micrograph import Micrograph
from fringespan.ranking.facets import planes_along_line, screen_direction_deg
from fringespan.ranking.observation import Observation
from fringespan.ranking.rank import rank_phases

Observe = Callable[..., Observation]


@pytest.mark.parametrize(
    ("start", "end", "direction"),
    [((10, 0), (10, 50), 0), ((50, 0), (0, 50), 45), ((0, 7), (40, 7), 90), ((0, 0), (50, 50), 135)],
)
def test_directions_are_counter_clockwise_from_the_right(
    start: tuple[float, float], end: tuple[float, float], direction: float
) -> None:
    assert screen_direction_deg(start, end) == pytest.approx(direction)
    assert screen_direction_deg(end, start) == pytest.approx(direction)


def test_pixels_that_are_not_square_turn_the_line() -> None:
    tall = Micrograph(np.zeros((64, 64)), pixel_size_nm=(0.04, 0.02))
    assert screen_direction_deg((10, 0), (0, 20), tall) == pytest.approx(45)


def test_the_facets_of_gold_along_110(observe: Observe) -> None:
    # edge-on along [110]: two {111}, one {100}, one {110}; the line is drawn along the trace of (1 -1 1)
    seen = observe("au", (1, 1, 0), [(1, -1, 1), (-1, 1, 1), (0, 0, 2)], rotation_deg=20.0, noise=1e-5)
    gold = rank_phases(seen, [load_phase("au")]).matches[0]
    row, column = seen.reflections[0].g_per_nm  # normal of the first {111}
    trace = screen_direction_deg((0, 0), (-column, row)) % 180
    [first, *_] = planes_along_line(gold, trace)
    assert sorted(map(abs, first.hkl)) == [1, 1, 1]
    assert first.deviation_deg == pytest.approx(0, abs=0.2)
    # angles between the traces are those between the planes: 54.74 from {111} to {100} (handbook)
    nearby = {
        tuple(sorted(map(abs, p.hkl))): p.deviation_deg
        for p in planes_along_line(gold, trace + 54.7356, within_deg=1.0)
    }
    far = {
        tuple(sorted(map(abs, p.hkl))): p.deviation_deg
        for p in planes_along_line(gold, trace - 54.7356, within_deg=1.0)
    }
    assert (0, 0, 1) in {**nearby, **far}


def test_lines_and_hypotheses_that_make_no_sense_are_refused(observe: Observe) -> None:
    with pytest.raises(SettingsError, match="two different points"):
        screen_direction_deg((1, 1), (1, 1))
    single = rank_phases(observe("au", (1, 1, 0), [(1, -1, 1)]), [load_phase("au")]).matches[0]
    with pytest.raises(SettingsError, match="zone axis"):
        planes_along_line(single, 0.0)
