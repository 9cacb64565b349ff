"""A focal series in words and figures for people: what the pictures show together, and what that gained."""

from __future__ import annotations

import math
from collections.abc import Sequence

from fringespan.export.measurement_text import caution_lines
from fringespan.export.plain_text import Column, Line, aligned_table, enumeration, paragraph, shortened
from fringespan.focal_series import FocalSeries, SeriesReflection
from fringespan.uncertainty import NOT_GIVEN, value_text

__all__ = ["focal_series_lines"]

_REFLECTIONS_WITH_ANGLES = 4


def focal_series_lines(series: Sequence[tuple[str, FocalSeries]], width: int) -> list[Line]:
    """Return the text of a focal series.

    Parameters
    ----------
    series : sequence of (str, FocalSeries)
        Name of the region and what was combined there; at least one, all of the same pictures.
    width : int
        Characters that a line should have at most.

    Returns
    -------
    list of Line
        The pictures with their defocus, then for each region the table of its reflections, the angles between the strongest,
        and at most three cautions.
    """
    first = series[0][1]
    lines = [Line(f"Focal series of {len(first.names)} pictures", "heading")]
    lines += enumeration(
        [
            f"{shortened(name, max(20, width // 3))} ({'defocus not stated' if defocus is None else f'{defocus:g} nm'})"
            for name, defocus in zip(first.names, first.defocus_nm, strict=True)
        ],
        width,
        first="  underfocus: ",
    )
    for name, one in series:
        lines += [Line(""), Line(shortened(name, max(20, width // 2)), "heading")]
        lines += _region_lines(one, width)
    return lines


def _region_lines(series: FocalSeries, width: int) -> list[Line]:
    if not series.reflections:
        return [Line("  no reflection in two pictures"), *caution_lines([(c, "") for c in series.cautions], width)]
    pictures = len(series.names)
    count = len(series.reflections)
    lines = [Line(f"  {count} reflection{'s' if count > 1 else ''} in at least two pictures")]
    shown = series.reflections
    columns = [
        Column("", "", [str(number) for number in range(1, count + 1)]),
        Column("d", "nm", [_spacing(r) for r in shown]),
        Column("fit", "%", [_per_cent(r.d_fit_uncertainty_nm, r) for r in shown], rank=3),
        Column("crystal", "%", [_per_cent(r.d_crystal_uncertainty_nm, r) for r in shown], rank=2),
        Column("of one", "%", [_per_cent(r.single_crystal_uncertainty_nm, r) for r in shown], rank=4),
    ]
    if any(r.d_lattice_nm is not None for r in shown):
        columns.append(
            Column("d lattice", "nm", [value_text(r.d_lattice_nm, r.d_lattice_uncertainty_nm) for r in shown], rank=2)
        )
    columns.append(
        Column("direction", "deg", [value_text(r.direction_deg, r.direction_uncertainty_deg) for r in shown], rank=1)
    )
    columns.append(Column("pictures", f"of {pictures}", [str(r.used) for r in shown], rank=5))
    if any(r.calmest_defocus_nm is not None for r in shown):
        calmest = [NOT_GIVEN if r.calmest_defocus_nm is None else f"{r.calmest_defocus_nm:.1f}" for r in shown]
        columns.append(Column("calmest", "nm", calmest, rank=6))
    table, left_out = aligned_table(columns, width, indent=" ")
    lines += table
    explained = "crystal: what the pictures together cannot show of an uneven crystal; of one: what one picture cannot."
    if columns[-1].heading == "calmest" and "calmest" not in left_out:
        explained += " calmest: the underfocus at which the lens does not shift these fringes."
    lines += paragraph(explained, width, first="  ", emphasis="quiet")
    angles = [
        f"{angle.peaks[0] + 1}-{angle.peaks[1] + 1} {value_text(angle.angle_deg, angle.angle_uncertainty_deg)}"
        for angle in series.angles
        if max(angle.peaks) < _REFLECTIONS_WITH_ANGLES
    ]
    if angles:
        lines += enumeration(angles, width, first="  angles (deg): ")
    return [*lines, *caution_lines([(caution, "") for caution in series.cautions], width)]


def _spacing(reflection: SeriesReflection) -> str:
    stated = reflection.d_uncertainty_nm
    if stated is None:
        stated = math.hypot(reflection.d_fit_uncertainty_nm, reflection.d_crystal_uncertainty_nm)
    return value_text(reflection.d_nm, stated)


def _per_cent(part: float, reflection: SeriesReflection) -> str:
    return f"{100 * part / reflection.d_nm:.2f}"
