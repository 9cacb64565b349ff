"""The trend: one panel for each set of conditions, with the lines of the tolerance."""

import numpy as np
import pytest

from fringespan.exceptions import RecordError
from fringespan.export.trend_figure import trend_figure
from fringespan.magnification.conditions import Conditions
from fringespan.magnification.log import Trend


def trend(groups, tolerance=0.01, uncertainty=1e-5):
    n = len(groups)
    count = max(groups, default=-1) + 1
    return Trend(
        checked_at=np.datetime64("2024-01-01T00:00:00") + np.arange(n) * np.timedelta64(86400, "s"),
        pixel_size_nm=np.full((n, 2), 0.0251),
        uncertainty_nm=np.full((n, 2), uncertainty),
        nominal_pixel_size_nm=np.full((n, 2), 0.025),
        tolerance=np.full(n, tolerance),
        group=np.array(groups, dtype=np.int64),
        groups=tuple(Conditions(instrument=f"TEM {k}") for k in range(count)),
    )


def test_a_panel_for_each_set_of_conditions_the_most_checked_first():
    figure = trend_figure(trend([0, 1, 1, 1, 0, 2]))
    titles = [axes.get_title() for axes in figure.axes]
    assert [title.split(";")[0] for title in titles] == ["TEM 1", "TEM 0", "TEM 2"]
    assert "3 checks" in titles[0]


def test_points_are_per_cent_off_the_nominal_pixel_size_between_the_lines_of_the_tolerance():
    (axes,) = trend_figure(trend([0, 0, 0])).axes
    heights = {round(float(line.get_ydata()[0]), 6) for line in axes.get_lines()}
    assert heights == {0.4, 0.0, 1.0, -1.0}


@pytest.mark.parametrize(("tolerance", "uncertainty"), [(np.nan, 1e-5), (0.01, np.nan)])
def test_what_was_not_stated_is_not_drawn(tolerance, uncertainty):
    (axes,) = trend_figure(trend([0, 0], tolerance, uncertainty)).axes
    heights = {round(float(line.get_ydata()[0]), 6) for line in axes.get_lines()}
    assert heights == ({0.4, 0.0} if np.isnan(tolerance) else {0.4, 0.0, 1.0, -1.0})


def test_more_than_twelve_sets_are_counted():
    figure = trend_figure(trend(list(range(15))))
    assert len(figure.axes) == 12
    assert "3 more sets" in figure.get_supxlabel()


def test_nothing_to_draw_is_refused():
    with pytest.raises(RecordError, match="no check of these conditions"):
        trend_figure(trend([]))
