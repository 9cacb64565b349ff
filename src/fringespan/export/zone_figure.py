"""The zone-axis pattern of a phase as a figure, one journal column wide."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fringespan.crystal.notation import four_index_direction
from fringespan.crystal.zone import ZonePattern
from fringespan.exceptions import SettingsError
from fringespan.export.figure import SMALL_TYPE_PT, TYPE_PT, figure_style, new_figure

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["indices_in_math", "zone_figure"]

_WIDTH_MM = 85.0
_ALLOWED, _FORBIDDEN = "#0072B2", "#D55E00"
_MOST_LABELS = 42
_LARGEST_MARK_PT = 13.0


def indices_in_math(indices: tuple[int, ...]) -> str:
    """Return indices as matplotlib's mathematical text, negative ones with a bar."""
    parts = [rf"\overline{{{-i}}}" if i < 0 else str(i) for i in indices]
    # a little room, so that the bars of neighbours don't run into one
    separator = r"\," if any(abs(i) > 9 for i in indices) else r"\hspace{0.1}"
    return rf"$\mathregular{{{separator.join(parts)}}}$"


def zone_figure(pattern: ZonePattern) -> Figure:
    """Draw a zone-axis pattern with indexed spots.

    The area of a spot follows the square root of its kinematic intensity; reflections without intensity that double
    scattering brings back are drawn as rings, others without intensity not at all.

    Raises
    ------
    SettingsError
        If the zone has no reflection down to the spacing that was asked for.
    """
    shown = [spot for spot in pattern.spots if spot.forbidden in (False, "absence, reachable by double scattering")]
    if not shown:
        raise SettingsError("the zone has no reflection down to this spacing; choose a smaller one")
    figure = new_figure(_WIDTH_MM, 1.05 * _WIDTH_MM)
    with figure_style():
        axes = figure.add_subplot()
        x = np.array([spot.g_per_nm[1] for spot in shown])
        y = np.array([-spot.g_per_nm[0] for spot in shown])
        strength = np.array([1.0 if s.relative_intensity is None else s.relative_intensity for s in shown])
        area = (_LARGEST_MARK_PT * np.maximum(strength, 1e-6) ** 0.25) ** 2 / 2 + 4
        is_allowed = np.array([not spot.forbidden for spot in shown])
        axes.scatter(x[is_allowed], y[is_allowed], s=area[is_allowed], color=_ALLOWED, linewidths=0, label="allowed")
        if not is_allowed.all():
            axes.scatter(
                x[~is_allowed],
                y[~is_allowed],
                s=16,
                facecolors="none",
                edgecolors=_FORBIDDEN,
                linewidths=0.8,
                label="double scattering",
            )
        axes.scatter([0], [0], s=20, color="black", marker="+", linewidths=0.8)
        hexagonal = pattern.phase.has_hexagonal_axes
        # of a crowded pattern the coarsest spots are labelled; the others follow by adding
        for spot in shown[:_MOST_LABELS]:
            axes.annotate(
                indices_in_math(spot.hkil if hexagonal and spot.hkil is not None else spot.hkl),
                (spot.g_per_nm[1], -spot.g_per_nm[0]),
                xytext=(0, 5),
                textcoords="offset points",
                ha="center",
                fontsize=SMALL_TYPE_PT - 1,
            )
        reach = 1.12 * max(np.abs(x).max(), np.abs(y).max())
        axes.set(xlim=(-reach, reach), ylim=(-reach, reach), aspect="equal", xlabel="1/nm", ylabel="1/nm")
        axes.tick_params(labelsize=SMALL_TYPE_PT)
        zone = four_index_direction(pattern.zone) if hexagonal else pattern.zone
        axes.set_title(f"{pattern.phase.name}, [{indices_in_math(zone)}], expected", fontsize=TYPE_PT)
        if not is_allowed.all():
            figure.legend(fontsize=SMALL_TYPE_PT, frameon=False, loc="outside lower center", ncols=2)
    return figure
