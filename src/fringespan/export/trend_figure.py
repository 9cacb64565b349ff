"""The figure of the log: pixel size against time, for each instrument, magnification and camera."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import RecordError
from fringespan.export.figure import REGION_COLOURS, SMALL_TYPE_PT, TYPE_PT, figure_style, new_figure
from fringespan.export.log_text import conditions_text
from fringespan.export.plain_text import shortened
from fringespan.magnification.log import Trend

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["trend_figure"]

_WIDTH_MM = 180.0
_PANEL_MM = 58.0
_MOST_PANELS = 12
_MOST_BARS = 500
"""Beyond, bars of uncertainty would hide the points."""

_AXES = (("rows", "o", REGION_COLOURS[6]), ("columns", "s", REGION_COLOURS[5]))


def trend_figure(trend: Trend) -> Figure:
    """Draw true over nominal pixel size against time.

    One panel for each set of conditions, at most twelve, those with most checks first; bars are standard uncertainties,
    lines the nominal pixel size and the tolerance of the last check that stated one.

    Raises
    ------
    RecordError
        If there is nothing to draw.
    """
    if not len(trend.checked_at):
        raise RecordError("the log holds no check of these conditions; ask for others, or list them all")
    count = np.bincount(trend.group, minlength=len(trend.groups))
    shown = np.argsort(-count, kind="stable")[:_MOST_PANELS]
    down = len(shown)
    with figure_style():
        figure = new_figure(_WIDTH_MM, _PANEL_MM * down + 8)
        panels = figure.subplots(down, 1, squeeze=False)[:, 0]
        for axes, group in zip(panels, shown, strict=True):
            _draw_group(axes, trend, int(group))
        panels[0].legend(fontsize=SMALL_TYPE_PT, frameon=False, ncols=4, loc="best")
        if left := len(trend.groups) - down:
            figure.supxlabel(f"{left} more sets of conditions in the log", fontsize=SMALL_TYPE_PT)
    return figure


def _draw_group(axes: Axes, trend: Trend, group: int) -> None:
    own = np.flatnonzero(trend.group == group)
    when = trend.checked_at[own]
    ratio = trend.pixel_size_nm[own] / trend.nominal_pixel_size_nm[own]
    sigma = trend.uncertainty_nm[own] / trend.nominal_pixel_size_nm[own]
    style: dict[str, Any] = {"markersize": 3.5 if len(own) <= _MOST_BARS else 1.5, "linestyle": "none"}
    for axis, (name, marker, colour) in enumerate(_AXES):
        value = 100 * (ratio[:, axis] - 1)
        bars = 100 * sigma[:, axis]
        if len(own) <= _MOST_BARS and np.isfinite(bars).any():
            axes.errorbar(
                when, value, np.nan_to_num(bars), marker=marker, color=colour, label=name, elinewidth=0.7, **style
            )
        else:
            axes.plot(when, value, marker=marker, color=colour, label=name, markeredgewidth=0, **style)
    axes.axhline(0.0, color="#444444", linewidth=0.6)
    tolerance = _last_finite(trend.tolerance[own])
    if tolerance is not None:
        for sign in (-1, 1):
            axes.axhline(
                100 * sign * tolerance,
                color="#444444",
                linewidth=0.8,
                linestyle=(0, (5, 3)),
                label="tolerance" if sign > 0 else None,
            )
    nominal = np.unique(trend.nominal_pixel_size_nm[own])
    title = shortened(conditions_text(trend.groups[group]), 90)
    size = f"{nominal[0]:.5g} nm" if len(nominal) == 1 else f"{nominal[0]:.5g} to {nominal[-1]:.5g} nm"
    axes.set_title(f"{title}; nominal {size}; {len(own)} checks", fontsize=TYPE_PT, parse_math=False)
    axes.set_ylabel("off nominal (%)", fontsize=SMALL_TYPE_PT)
    axes.tick_params(labelsize=SMALL_TYPE_PT, width=0.6, length=2.5)
    if len(own) == 1:
        day = np.timedelta64(15, "D")
        axes.set_xlim(when[0] - day, when[0] + day)


def _last_finite(values: NDArray[np.float64]) -> float | None:
    finite = values[np.isfinite(values)]
    return float(finite[-1]) if len(finite) and not math.isnan(finite[-1]) else None
