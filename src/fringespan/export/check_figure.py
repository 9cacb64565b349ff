"""The figure of a magnification check: how far each reflection lies from the ellipse that fits them."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from fringespan.crystal.notation import indices_text
from fringespan.export.figure import REGION_COLOURS, SMALL_TYPE_PT, TYPE_PT, figure_style, new_figure
from fringespan.magnification.check import CheckedReflection, MagnificationCheck

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["check_figure"]

_WIDTH_MM, _HEIGHT_MM = 180.0, 82.0
_USED, _LEFT_OUT, _LINE = REGION_COLOURS[6], REGION_COLOURS[5], "#444444"
_LABELLED = 12
_MOST_RINGS = 12


def check_figure(check: MagnificationCheck) -> Figure:
    """Draw the reflections on their ellipses, and each one's length against its direction.

    Left the spectrum's plane by the nominal pixel size, with the ellipse of each spacing of the reference. Right the
    length of each reflection over the expected one; the line is the fit, a dashed line the nominal pixel size. What was
    left out is drawn as a cross.
    """
    with figure_style():
        figure = new_figure(_WIDTH_MM, _HEIGHT_MM)
        plane, lengths = figure.subplots(1, 2, width_ratios=(1, 1.25))
        _draw_plane(plane, check)
        _draw_lengths(lengths, check)
    return figure


def _shown(check: MagnificationCheck) -> list[CheckedReflection]:
    return [r for r in check.reflections if r.expected_d_nm is not None]


def _draw_plane(axes: Axes, check: MagnificationCheck) -> None:
    reflections = _shown(check)
    for d in sorted({round(r.expected_d_nm or 0.0, 5) for r in reflections}, reverse=True)[:_MOST_RINGS]:
        ellipse = check.ellipse_per_nm(d)
        axes.plot(ellipse[:, 1], ellipse[:, 0], color=_LINE, linewidth=0.5)
    for r in reflections:
        for sign in (1, -1):
            axes.plot(
                sign * r.g_per_nm[1],
                sign * r.g_per_nm[0],
                linestyle="none",
                marker="o" if r.used else "x",
                markersize=4,
                color=_USED if r.used else _LEFT_OUT,
            )
    axes.set_aspect("equal")
    axes.invert_yaxis()
    axes.set_xlabel("right (1/nm, nominal)", fontsize=SMALL_TYPE_PT)
    axes.set_ylabel("down (1/nm, nominal)", fontsize=SMALL_TYPE_PT)
    axes.set_title(f"Ellipses of {check.reference}", fontsize=TYPE_PT, parse_math=False)
    axes.tick_params(labelsize=SMALL_TYPE_PT, width=0.6, length=2.5)


def _draw_lengths(axes: Axes, check: MagnificationCheck) -> None:
    direction = np.linspace(0, 180, 181)
    circle = check.ellipse_per_nm(1.0, 721)
    angle = np.degrees(np.arctan2(-circle[:, 0], circle[:, 1])) % 180
    order = np.argsort(angle)
    fitted = np.interp(direction, angle[order], np.hypot(circle[:, 0], circle[:, 1])[order], period=180)
    axes.plot(direction, 100 * (fitted - 1), color=_LINE, linewidth=0.9, label="fit")
    axes.axhline(0.0, color=_LINE, linewidth=0.7, linestyle=(0, (5, 3)), label="nominal")
    labelled: set[bool] = set()
    named: list[float] = []
    for number, r in enumerate(_shown(check)):
        length = math.hypot(*r.g_per_nm) * (r.expected_d_nm or 0.0)
        at = math.degrees(math.atan2(-r.g_per_nm[0], r.g_per_nm[1])) % 180
        # the residual over its pull is its standard uncertainty
        bar = abs((r.deviation_percent or 0.0) / r.pull) if r.pull else 0.0
        axes.errorbar(
            at,
            100 * (length - 1),
            bar,
            linestyle="none",
            marker="o" if r.used else "x",
            markersize=4,
            elinewidth=0.7,
            color=_USED if r.used else _LEFT_OUT,
            label=None if r.used in labelled else "used" if r.used else "left out",
        )
        labelled.add(r.used)
        # reflections of one direction lie over each other: the strongest is named
        is_free = all(abs((at - other + 90) % 180 - 90) > 2 for other in named)
        if number < _LABELLED and r.hkl is not None and is_free:
            named.append(at)
            axes.annotate(
                indices_text(r.hkl),
                (at, 100 * (length - 1)),
                xytext=(4, 4),
                textcoords="offset points",
                fontsize=SMALL_TYPE_PT,
            )
    axes.set_xlabel("direction (degrees counter-clockwise from the right)", fontsize=SMALL_TYPE_PT)
    axes.set_ylabel("length over expected, less 1 (%)", fontsize=SMALL_TYPE_PT)
    axes.set_xlim(0, 180)
    axes.set_title("True / nominal pixel size by direction", fontsize=TYPE_PT)
    axes.tick_params(labelsize=SMALL_TYPE_PT, width=0.6, length=2.5)
    axes.legend(fontsize=SMALL_TYPE_PT, frameon=False)
