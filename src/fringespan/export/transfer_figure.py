"""The contrast transfer of a lens as a figure."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from fringespan.beam import (
    BeamSummary,
    Lens,
    envelopes,
    information_limit_nm,
    phase_contrast_transfer,
    point_resolution_nm,
    transfer_zeros_per_nm,
)
from fringespan.exceptions import CalibrationError
from fringespan.export.figure import SMALL_TYPE_PT, TYPE_PT, figure_style, new_figure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["draw_transfer", "transfer_figure"]

_COLUMN_MM = 85.0
_HEIGHT_MM = 72.0

# Okabe & Ito's colours; each line also has a dash of its own
_TRANSFER = {"color": "#0072B2", "linewidth": 1.1}
_ENVELOPE = {"color": "#D55E00", "linewidth": 0.9, "linestyle": "--"}
_POINT_RESOLUTION = {"color": "#009E73", "linewidth": 0.9, "linestyle": ":"}
_INFORMATION_LIMIT = {"color": "#CC79A7", "linewidth": 0.9, "linestyle": "-."}

_SPACING_TICKS_NM = (1.0, 0.5, 0.3, 0.2, 0.15, 0.12, 0.1, 0.08, 0.07, 0.06, 0.05, 0.04, 0.03, 0.02)
_NEAREST_TICKS = 0.075
_ZEROS_SHOWN = 9
_HIGHEST = 1.3
"""Leaves room for words above the curves."""
_G_MAX_LIMITS_PER_NM = (2.0, 50.0)


def transfer_figure(summary: BeamSummary) -> Figure:
    """Return the transfer of a summary's lens as a figure.

    Raises
    ------
    CalibrationError
        If the summary knows no lens.
    """
    if summary.lens is None:
        raise CalibrationError(
            "cs_mm must be given to draw the contrast transfer, got None; give the spherical aberration in mm, 0 for a "
            "corrected lens"
        )
    return draw_transfer(summary.lens)


def draw_transfer(lens: Lens, *, g_max_per_nm: float | None = None) -> Figure:
    """Return the phase-contrast transfer over g, with its envelopes and limits, as wide as a journal's column (85 mm).

    Parameters
    ----------
    lens : Lens
    g_max_per_nm : float, optional
        How far to draw, 1/nm. Default: a little beyond the information limit or, without envelopes, some zeros.

    Returns
    -------
    matplotlib.figure.Figure
        Drawn without any window; `fringespan.export.figure.write_figure` writes it.

    Raises
    ------
    CalibrationError
        If `g_max_per_nm` is not a positive number.
    """
    limit = information_limit_nm(lens)
    g_max = _reach(lens, limit) if g_max_per_nm is None else float(g_max_per_nm)
    if not (math.isfinite(g_max) and g_max > 0):
        raise CalibrationError(f"g_max_per_nm must be a positive number, got {g_max_per_nm!r}; give it in 1/nm")
    figure = new_figure(_COLUMN_MM, _HEIGHT_MM)
    with figure_style():
        axes = figure.subplots()
        _draw_curves(axes, lens, g_max)
        point = point_resolution_nm(lens.voltage_kv, lens.cs_mm) if lens.cs_mm != 0 else None
        for name, d_nm, style in (
            ("point resolution", point, _POINT_RESOLUTION),
            ("information limit", limit, _INFORMATION_LIMIT),
        ):
            if d_nm is not None and 1 / d_nm <= g_max:
                axes.axvline(1 / d_nm, label=f"{name} {d_nm:.3f} nm", **style)  # type: ignore[arg-type]
        _dress(axes, lens, g_max)
        figure.legend(loc="outside lower center", ncols=2, fontsize=SMALL_TYPE_PT, frameon=False, handlelength=2.4)
    return figure


def _reach(lens: Lens, limit_nm: float | None) -> float:
    low, high = _G_MAX_LIMITS_PER_NM
    if limit_nm is not None:
        return min(max(1.15 / limit_nm, low), high)
    for g in np.geomspace(low, high, 60):
        zeros = transfer_zeros_per_nm(lens, float(g))
        if len(zeros) >= _ZEROS_SHOWN:
            return float(zeros[_ZEROS_SHOWN - 1])
    return 10.0


def _draw_curves(axes: Axes, lens: Lens, g_max: float) -> None:
    # enough points for every half wave, few enough for a small file
    points = int(np.clip(24 * len(transfer_zeros_per_nm(lens, g_max)), 1200, 20_000))
    g = np.linspace(0, g_max, points)
    envelope = envelopes(g, lens).total
    axes.axhline(0, color="black", linewidth=0.5)
    axes.plot(g, phase_contrast_transfer(g, lens), label="transfer", **_TRANSFER)  # type: ignore[arg-type]
    if envelope.min() < 1:
        axes.plot(g, envelope, label="envelope", **_ENVELOPE)  # type: ignore[arg-type]
        axes.plot(g, -envelope, **_ENVELOPE)  # type: ignore[arg-type]


def _dress(axes: Axes, lens: Lens, g_max: float) -> None:
    axes.set_xlim(0, g_max)
    axes.set_ylim(-_HIGHEST, _HIGHEST)
    axes.set_xlabel("g = 1/d (1/nm)", fontsize=TYPE_PT)
    axes.set_ylabel("transfer of phase contrast", fontsize=TYPE_PT)
    axes.tick_params(labelsize=SMALL_TYPE_PT)
    for height, edge, atoms in ((0.97, "top", "atoms bright"), (0.03, "bottom", "atoms dark")):
        axes.text(0.015, height, atoms, transform=axes.transAxes, ha="left", va=edge, fontsize=SMALL_TYPE_PT)
    spacings = axes.secondary_xaxis("top")
    ticks = _spacing_ticks(g_max)
    spacings.set_xticks([1 / d for d in ticks], [f"{d:g}" for d in ticks])
    spacings.tick_params(labelsize=SMALL_TYPE_PT)
    spacings.set_xlabel("d (nm)", fontsize=TYPE_PT)
    axes.figure.suptitle(_conditions(lens), fontsize=SMALL_TYPE_PT)


def _spacing_ticks(g_max: float) -> list[float]:
    """Return round spacings whose labels do not run into each other."""
    ticks: list[float] = []
    for d in _SPACING_TICKS_NM:
        if 1 / d <= g_max and (not ticks or (1 / d - 1 / ticks[-1]) > _NEAREST_TICKS * g_max):
            ticks.append(d)
    return ticks


def _conditions(lens: Lens) -> str:
    focus = f"{'underfocus' if lens.defocus_nm >= 0 else 'overfocus'} {abs(lens.defocus_nm):.4g} nm"
    spreads = [
        f"{name} {value:g} {unit}"
        for name, value, unit in (
            ("focal spread", lens.focal_spread_nm, "nm"),
            ("convergence", lens.convergence_mrad, "mrad"),
            ("image spread", lens.image_spread_nm, "nm"),
        )
        if value
    ]
    first = f"{lens.voltage_kv:g} kV, Cs {lens.cs_mm:g} mm, {focus}"
    return "\n".join([first, ", ".join(spreads)] if spreads else [first])
