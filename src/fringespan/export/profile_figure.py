"""The figure of a fringe profile: where the line lies, and the fringes along it with the fitted ones."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fringespan.export.figure import (
    REGION_COLOURS,
    SMALL_TYPE_PT,
    TYPE_PT,
    draw_picture,
    figure_style,
    new_figure,
)
from fringespan.export.plain_text import shortened
from fringespan.export.profile_text import nm_per_px_along
from fringespan.micrograph import Micrograph
from fringespan.profile import FringeProfile
from fringespan.uncertainty import value_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["profile_figure"]

_WIDTH_MM, _HEIGHT_MM = 180.0, 70.0


def profile_figure(micrograph: Micrograph, profile: FringeProfile) -> Figure:
    """Draw the picture with the strip, and the profile with the fitted fringes.

    Parameters
    ----------
    micrograph : Micrograph
    profile : FringeProfile
        Of this picture.

    Returns
    -------
    matplotlib.figure.Figure
    """
    with figure_style():
        figure = new_figure(_WIDTH_MM, _HEIGHT_MM)
        picture_axes, profile_axes = figure.subplots(1, 2, width_ratios=(1, 1.9))
        draw_picture(picture_axes, micrograph)
        picture_axes.set_title(shortened(micrograph.name, 32), fontsize=TYPE_PT, parse_math=False)
        _draw_strip(picture_axes, micrograph, profile)
        _draw_profile(profile_axes, micrograph, profile)
        figure.legend(loc="outside lower right", ncols=2, fontsize=SMALL_TYPE_PT, frameon=False)
    return figure


def _draw_strip(axes: Axes, micrograph: Micrograph, profile: FringeProfile) -> None:
    from matplotlib.patches import Polygon

    start, end = np.array(profile.line_px)
    geometry = micrograph.geometry_nm_per_px
    geometry = np.eye(2) if geometry is None else geometry
    y, x = geometry @ (end - start)
    across = np.linalg.solve(geometry, [-x, y])
    across *= profile.width_px / 2 / np.hypot(*across)
    corners = np.array([start + across, end + across, end - across, start - across])[:, ::-1]
    axes.add_patch(Polygon(corners, closed=True, facecolor=REGION_COLOURS[0], alpha=0.25, linewidth=0))
    axes.add_patch(Polygon(corners, closed=True, fill=False, edgecolor=REGION_COLOURS[0], linewidth=0.8))
    axes.annotate(
        "",
        xy=end[::-1],
        xytext=start[::-1],
        arrowprops={"arrowstyle": "-|>", "color": REGION_COLOURS[0], "linewidth": 1.0, "shrinkA": 0, "shrinkB": 0},
    )


def _draw_profile(axes: Axes, micrograph: Micrograph, profile: FringeProfile) -> None:
    factor = nm_per_px_along(micrograph, profile)
    positions = profile.positions_px * (factor or 1.0)
    axes.plot(positions, profile.values, color="black", linewidth=0.8, label="mean across the strip")
    if profile.fitted_values is not None:
        axes.plot(
            positions,
            profile.fitted_values,
            color=REGION_COLOURS[5],
            linewidth=1.2,
            linestyle="--",
            label="fitted fringes",
        )
    axes.set_xlim(positions[0], positions[-1])
    axes.set_xlabel("nm along the line" if factor is not None else "px along the line", fontsize=TYPE_PT)
    axes.set_ylabel("pixel value", fontsize=TYPE_PT)
    axes.tick_params(labelsize=SMALL_TYPE_PT, width=0.6, length=2.5)
    axes.set_title(_result(profile), fontsize=TYPE_PT)


def _result(profile: FringeProfile) -> str:
    if profile.fringe_count is None:
        return "no fringe found"
    if profile.spacing_nm is None:
        spacing = f"{value_text(profile.period_px, profile.period_uncertainty_px)} px"
    else:
        stated = profile.spacing_uncertainty_nm
        uncertainty = profile.spacing_fit_uncertainty_nm if stated is None else stated
        spacing = f"{value_text(profile.spacing_nm, uncertainty)} nm"
    return f"{profile.fringe_count:.1f} fringes, {spacing} from fringe to fringe"
