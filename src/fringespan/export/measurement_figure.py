"""The figure of a measurement: the picture with its regions, and the spectrum of each with its peaks numbered."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import RecordError
from fringespan.export.figure import REGION_COLOURS, SMALL_TYPE_PT, TYPE_PT, draw_picture, figure_style, new_figure
from fringespan.export.measurement_text import spacing_text
from fringespan.export.plain_text import shortened
from fringespan.measurement import Measurement
from fringespan.spacings import Peak
from fringespan.spectrum import PowerSpectrum

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D
    from matplotlib.patches import Polygon

__all__ = ["measurement_figure"]

_WIDTH_MM = 180.0
_HALF_MM = _WIDTH_MM / 2
_TOP_MM = 105.0
_LISTED_PEAKS = 9
_LISTED_REGIONS = 10
_LEGEND_STYLE: dict[str, Any] = {"fontsize": SMALL_TYPE_PT, "frameon": False}
_LEGEND_INK = "#444444"
_DASHES = (0, (4, 3))
_DRAWN_BINS = 400
"""Bins of the spectrum along one side that are drawn; of more the brightest in each block is kept."""

# kind of peak: marker, colour, name; the marker tells the kind, the colour only helps
_MARKS = {
    "found": ("o", "#E69F00", "found"),
    "lattice point": ("s", "#56B4E9", "lattice point"),
    "added by hand": ("^", "#CC79A7", "added by hand"),
    "off the lattice": ("D", "#F0E442", "off the lattice"),
    "withheld": ("X", "#D55E00", "no d given"),
}


def measurement_figure(measurements: Sequence[Measurement]) -> Figure:
    """Draw the measurements of one picture.

    Left the picture with each region outlined, its crystal dashed; right the spectrum of each region, with the peaks
    numbered as in the table and their spacings beneath.

    Parameters
    ----------
    measurements : sequence of Measurement
        At least one, all of the same picture.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    RecordError
        If there is no measurement, or they are of different pictures.
    """
    if not measurements or any(m.micrograph is not measurements[0].micrograph for m in measurements):
        raise RecordError("a figure needs at least one measurement, all of the same picture")
    with figure_style():
        return _composed(measurements)


def _composed(measurements: Sequence[Measurement]) -> Figure:
    if len(measurements) == 1:
        figure = new_figure(_WIDTH_MM, _HALF_MM + 34)
        picture_axes, spectrum_axes = figure.subplots(1, 2)
        _draw_regions(picture_axes, measurements)
        _draw_spectrum(spectrum_axes, measurements[0], _colour(0))
        figure.legend(handles=_legend(measurements), loc="outside lower left", ncols=7, **_LEGEND_STYLE)
        return figure
    across = 2 if len(measurements) in (2, 4) else 3 if len(measurements) <= 9 else 4
    down = math.ceil(len(measurements) / across)
    spectra_mm = down * (_WIDTH_MM / across + 22)
    figure = new_figure(_WIDTH_MM, _TOP_MM + spectra_mm)
    ((top,), (bottom,)) = figure.subfigures(2, 1, squeeze=False, height_ratios=(_TOP_MM, spectra_mm))
    picture_axes, words_axes = top.subplots(1, 2, width_ratios=(_TOP_MM, _WIDTH_MM - _TOP_MM))
    _draw_regions(picture_axes, measurements)
    _write_regions(words_axes, measurements)
    for number, axes in enumerate(bottom.subplots(down, across, squeeze=False).ravel()):
        if number < len(measurements):
            _draw_spectrum(axes, measurements[number], _colour(number))
        else:
            axes.set_axis_off()
    return figure


def _write_regions(axes: Axes, measurements: Sequence[Measurement]) -> None:
    """Write each region's strongest spacing beside the picture, and the legend beneath."""
    axes.set_axis_off()
    unit = _unit(measurements[0])
    listed = measurements[:_LISTED_REGIONS]
    for line, measurement in enumerate(listed):
        strongest = spacing_text(measurement.peaks[0], unit) + f" {unit}" if measurement.peaks else "no fringe found"
        height = 1 - 0.062 * line
        axes.plot(0.02, height, "s", markersize=5, color=_colour(line), transform=axes.transAxes, clip_on=False)
        axes.text(
            0.07,
            height,
            f"{shortened(measurement.region.name, 24)}: {strongest}",
            transform=axes.transAxes,
            fontsize=SMALL_TYPE_PT,
            va="center",
            parse_math=False,
        )
    if more := len(measurements) - len(listed):
        axes.text(0.07, 1 - 0.062 * len(listed), f"and {more} more regions", fontsize=SMALL_TYPE_PT, va="center")
    axes.legend(handles=_legend(measurements), loc="lower left", bbox_to_anchor=(-0.05, 0.0), **_LEGEND_STYLE)


def _colour(number: int) -> str:
    return REGION_COLOURS[number % len(REGION_COLOURS)]


def _draw_regions(axes: Axes, measurements: Sequence[Measurement]) -> None:
    micrograph = measurements[0].micrograph
    draw_picture(axes, micrograph)
    axes.set_title(shortened(micrograph.name, 44), fontsize=TYPE_PT, parse_math=False)
    for number, measurement in enumerate(measurements):
        outline = np.array(measurement.region.vertices_px)[:, ::-1]
        axes.add_patch(_outline(outline, _colour(number), linewidth=1.2))
        if measurement.crystal_outline_px is not None:
            crystal = measurement.crystal_outline_px[:, ::-1]
            axes.add_patch(_outline(crystal, "white", linewidth=1.0, linestyle=_DASHES))
        # beside the topmost corner, but inside the picture
        column, row = outline[np.argmin(outline[:, 1])]
        axes.text(
            min(max(column, 0), micrograph.shape[1]),
            max(row, 0),
            shortened(measurement.region.name, 24),
            color="white",
            fontsize=SMALL_TYPE_PT,
            va="top",
            clip_on=True,
            parse_math=False,
            bbox={"facecolor": "black", "edgecolor": _colour(number), "linewidth": 0.6, "alpha": 0.7, "pad": 1.2},
        )


def _outline(corners: NDArray[np.float64], colour: str, **style: Any) -> Polygon:
    from matplotlib.patches import Polygon
    from matplotlib.patheffects import withStroke

    # a dark rim keeps the line apart from bright fringes
    rim = withStroke(linewidth=style["linewidth"] + 1.2, foreground="black", alpha=0.6)
    return Polygon(corners, closed=True, fill=False, edgecolor=colour, path_effects=[rim], **style)


def _draw_spectrum(axes: Axes, measurement: Measurement, colour: str) -> None:
    nm = measurement.micrograph.pixel_size_nm
    unit = "1/nm" if nm is not None else "1/px"
    per_row, per_column = (1.0, 1.0) if nm is None else (1 / nm[0], 1 / nm[1])
    shown = _shown_radius(measurement, per_row, per_column)
    power, extent = _centred_log_power(measurement.spectrum, per_row, per_column, shown)
    low, high = np.percentile(power, (30, 99.9))
    axes.imshow(
        power, cmap="gray", vmin=low, vmax=max(high, low + 1e-6), extent=extent, aspect="equal", interpolation="nearest"
    )
    axes.set_xlim(-shown, shown)
    axes.set_ylim(shown, -shown)
    axes.autoscale(False)
    for number, peak in enumerate(measurement.peaks, start=1):
        _mark_peak(axes, number, peak, measurement)
    for spine in axes.spines.values():
        spine.set_edgecolor(colour)
        spine.set_linewidth(1.2)
    axes.tick_params(labelsize=SMALL_TYPE_PT, width=0.6, length=2.5)
    axes.locator_params(nbins=5)
    axes.set_title(shortened(measurement.region.name, 28), fontsize=TYPE_PT, parse_math=False, pad=3)
    axes.set_xlabel(f"{unit}\n{_spacing_list(measurement)}", fontsize=SMALL_TYPE_PT, linespacing=1.25)


def _mark_peak(axes: Axes, number: int, peak: Peak, measurement: Measurement) -> None:
    row, column = _in_units(peak, measurement)
    marker, colour, _ = _MARKS[_kind(peak, measurement)]
    axes.plot(
        column,
        row,
        marker=marker,
        markersize=6,
        markerfacecolor=colour if marker == "X" else "none",
        markeredgecolor=colour,
        markeredgewidth=1.0,
        linestyle="none",
    )
    # the number stands outwards of its peak, where no other peak of the same set hides it
    length = math.hypot(row, column) or 1.0
    axes.annotate(
        str(number),
        (column, row),
        xytext=(8 * column / length, -8 * row / length),
        textcoords="offset points",
        color="white",
        fontsize=SMALL_TYPE_PT,
        ha="center",
        va="center",
        annotation_clip=True,
    )


def _in_units(peak: Peak, measurement: Measurement) -> tuple[float, float]:
    """Return (row, column) of a peak on the axes of its spectrum, which know pixel sizes but no shear."""
    nm = measurement.micrograph.pixel_size_nm or (1.0, 1.0)
    return float(peak.g_per_px[0]) / nm[0], float(peak.g_per_px[1]) / nm[1]


def _kind(peak: Peak, measurement: Measurement) -> str:
    if peak.withheld is not None:
        return "withheld"
    if peak.origin == "found" and measurement.lattice is not None and peak.lattice_index is None:
        return "off the lattice"
    return peak.origin


def _shown_radius(measurement: Measurement, per_row: float, per_column: float) -> float:
    """Return how far from the origin the spectrum is drawn: beyond the last peak, at most to the finest fringes."""
    finest = 0.5 * min(per_row, per_column)
    if not measurement.peaks:
        return finest
    last = max(max(abs(row), abs(column)) for row, column in (_in_units(p, measurement) for p in measurement.peaks))
    return min(1.25 * last, 0.5 * max(per_row, per_column)) if last < finest else 0.5 * max(per_row, per_column)


def _centred_log_power(
    spectrum: PowerSpectrum, per_row: float, per_column: float, shown: float
) -> tuple[NDArray[np.float32], tuple[float, float, float, float]]:
    """Return the logarithm of the power around the origin, shape (rows, columns), and its extent on the axes.

    The half that a real transform leaves out is its mirror image.
    """
    rows, columns = spectrum.shape
    half_rows = min(math.ceil(shown / per_row * rows), (rows - 1) // 2)
    half_columns = min(math.ceil(shown / per_column * columns), (columns - 1) // 2)
    right = spectrum.power[np.arange(-half_rows, half_rows + 1), : half_columns + 1]
    power = np.concatenate([right[::-1, :0:-1], right], axis=1)
    power, block = _brightest(power)
    smallest = np.min(power[power > 0], initial=np.inf)
    power = np.log(np.maximum(power, smallest if math.isfinite(smallest) else 1.0))
    step_row, step_column = per_row / rows, per_column / columns
    left, top = -(half_columns + 0.5) * step_column, -(half_rows + 0.5) * step_row
    right_end = left + power.shape[1] * block * step_column
    bottom = top + power.shape[0] * block * step_row
    return power.astype(np.float32), (left, right_end, bottom, top)


def _brightest(power: NDArray[np.float32]) -> tuple[NDArray[np.float32], int]:
    """Return the maxima of square blocks, and the blocks' size; a mean would dim the peaks."""
    block = math.ceil(max(power.shape) / _DRAWN_BINS)
    if block == 1:
        return power, 1
    rows, columns = power.shape
    maxima = np.maximum.reduceat(power, np.arange(0, rows, block), axis=0)
    return np.maximum.reduceat(maxima, np.arange(0, columns, block), axis=1), block


def _spacing_list(measurement: Measurement) -> str:
    peaks = measurement.peaks
    if not peaks:
        return "no fringe found"
    unit = _unit(measurement)
    shown = peaks[:_LISTED_PEAKS]
    pieces = [f"{number}: {spacing_text(peak, unit)}" for number, peak in enumerate(shown, start=1)]
    if len(peaks) > len(shown):
        pieces.append(f"and {len(peaks) - len(shown)} more")
    across = 3
    lines = ["   ".join(pieces[i : i + across]) for i in range(0, len(pieces), across)]
    return "\n".join([*lines[:-1], f"{lines[-1]}   ({unit})"])


def _unit(measurement: Measurement) -> Literal["nm", "px"]:
    return "px" if measurement.micrograph.pixel_size_nm is None else "nm"


def _legend(measurements: Sequence[Measurement]) -> list[Line2D]:
    from matplotlib.lines import Line2D

    entries = [Line2D([], [], color=_LEGEND_INK, linewidth=1.2, label="region")]
    if any(m.crystal_outline_px is not None for m in measurements):
        entries.append(Line2D([], [], color=_LEGEND_INK, linewidth=1.0, linestyle=_DASHES, label="crystal"))
    present = {_kind(peak, m) for m in measurements for peak in m.peaks}
    for kind, (marker, colour, name) in _MARKS.items():
        if kind in present:
            filled = marker == "X"
            mark = Line2D([], [], linestyle="none", marker=marker, markersize=6, label=f"peak: {name}")
            mark.set_markerfacecolor(colour if filled else "none")
            mark.set_markeredgecolor(colour if filled else _LEGEND_INK)
            entries.append(mark)
    return entries
