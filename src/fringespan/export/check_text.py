"""A magnification check in words and tables."""

from __future__ import annotations

import math
from collections.abc import Sequence

from fringespan.crystal.notation import direction_text, indices_text
from fringespan.export.measurement_text import caution_lines
from fringespan.export.plain_text import Column, Line, aligned_table, one_line, paragraph, shortened
from fringespan.export.table import Table
from fringespan.magnification.budget import Budget
from fringespan.magnification.check import CheckedReflection, CheckedRegion, MagnificationCheck
from fringespan.magnification.internal_standard import InternalStandard
from fringespan.uncertainty import NOT_GIVEN, value_text

__all__ = ["check_lines", "internal_standard_lines", "reflection_table", "what_to_do"]


def check_lines(check: MagnificationCheck, width: int) -> list[Line]:
    """Return the text of a check: the result, residuals, regions, budgets, cautions."""
    row, column = check.nominal_pixel_size_nm
    temperature = f"{check.temperature_c:g} degrees Celsius{'' if check.temperature_stated else ' (assumed)'}"
    lines = [
        Line(f"Magnification check on {one_line(check.reference)}", "heading"),
        *paragraph(
            f"nominal pixel size {row:.6g} (down) x {column:.6g} (right) nm, specimen at {temperature}",
            width,
            first="  ",
        ),
        *paragraph(check.sentence, width, first="  ", emphasis="subheading"),
        Line(""),
        *_reflection_lines(check.reflections, width),
    ]
    if len(check.regions) > 1 or check.regions[0].rotation_deg is not None:
        lines += [Line(""), *_region_lines(check.regions, width)]
    for budget in check.budgets:
        if budget.quantity != "shear":
            lines += [Line(""), *_budget_lines(budget, check, width)]
    lines += paragraph(what_to_do(check), width, first="  ")
    return lines + caution_lines([(caution, "") for caution in check.cautions], width)


def what_to_do(check: MagnificationCheck) -> str:
    """Return what contributes most to the uncertainty, and what would reduce it, in a sentence."""
    largest = check.budgets[0].largest
    share = 100 * largest.contribution**2 / check.budgets[0].standard_uncertainty ** 2
    return f"Largest contribution: {largest.source} ({share:.0f} % of the variance); it falls with {largest.remedy}."


def _reflection_lines(reflections: Sequence[CheckedReflection], width: int) -> list[Line]:
    used = [r for r in reflections if r.expected_d_nm is not None]
    columns = [
        Column("region", "", [shortened(r.region, 18) for r in used], "left", rank=3),
        Column("hkl", "", [NOT_GIVEN if r.hkl is None else indices_text(r.hkl) for r in used], "left"),
        Column("expected", "nm", [f"{r.expected_d_nm:.5f}" for r in used]),
        Column("nominal", "nm", [f"{r.nominal_d_nm:.5f}" for r in used], rank=1),
        Column("corrected", "nm", [f"{r.corrected_d_nm:.5f}" for r in used], rank=2),
        Column("residual", "%", [f"{r.deviation_percent:+.3f}" for r in used]),
        Column("in u", "", [f"{r.pull:+.1f}" for r in used], rank=1),
        Column("used", "", ["yes" if r.used else "NO" for r in used], "left"),
    ]
    if len({r.region for r in used}) < 2:
        columns = columns[1:]
    lines, _ = aligned_table(columns, width, indent="  ")
    reasons: dict[str, list[str]] = {}
    for r in reflections:
        if r.reason:
            reasons.setdefault(r.reason, []).append(f"{r.nominal_d_nm:.4f}")
    for reason, spacings in reasons.items():
        shown = ", ".join(spacings[:6]) + (f" and {len(spacings) - 6} more" if len(spacings) > 6 else "")
        lines += paragraph(f"{shown} nm (nominal): {reason}", width, first="  not used: ", emphasis="quiet")
    return lines


def _region_lines(regions: Sequence[CheckedRegion], width: int) -> list[Line]:
    columns = [
        Column("region", "", [shortened(r.name, 24) for r in regions], "left"),
        Column("picture", "", [shortened(r.picture, 24) for r in regions], "left", rank=3),
        Column("zone", "", [NOT_GIVEN if r.zone is None else direction_text(r.zone) for r in regions], "left", rank=1),
        Column("rows", "", [value_text(r.scale[0], r.scale_uncertainty[0]) for r in regions]),
        Column("columns", "", [value_text(r.scale[1], r.scale_uncertainty[1]) for r in regions]),
        Column("shear", "", [value_text(r.shear, r.shear_uncertainty) for r in regions], rank=1),
        Column(
            "turn", "deg", [NOT_GIVEN if r.rotation_deg is None else f"{r.rotation_deg:.2f}" for r in regions], rank=2
        ),
    ]
    return aligned_table(columns, width, indent="  ")[0]


def _budget_lines(budget: Budget, check: MagnificationCheck, width: int) -> list[Line]:
    lines = list(budget.lines)
    freedom = ["" if math.isinf(line.degrees_of_freedom) else f"{line.degrees_of_freedom:.3g}" for line in lines]
    columns = [
        Column(f"budget of the {budget.quantity}", "", [line.source for line in lines], "left"),
        Column("u", "", [f"{line.standard_uncertainty:.2e}" for line in lines], "left", rank=2),
        Column("sensitivity", "", [f"{line.sensitivity:.3g}" for line in lines], "left", rank=2),
        Column("u of result", "%", [f"{100 * line.contribution:.4f}" for line in lines]),
        Column("dof", "", freedom, "left", rank=1),
        Column("", "", [shortened(line.note, 48) for line in lines], "left", rank=3),
    ]
    table, _ = aligned_table(columns, width, indent="  ")
    degrees = budget.degrees_of_freedom
    expanded = budget.expanded_uncertainty(check.coverage)
    total = (
        f"combined {100 * budget.standard_uncertainty:.3f} %, effective degrees of freedom "
        f"{'infinite' if math.isinf(degrees) else f'{degrees:.3g}'}, expanded {100 * expanded:.3f} % ({check.coverage})"
    )
    return [*table, *paragraph(total, width, first="  ")]


def reflection_table(check: MagnificationCheck) -> Table:
    """Return every peak with every digit, one row each."""
    names = (
        "picture",
        "region",
        "peak",
        "h",
        "k",
        "l",
        "g_row_per_nm",
        "g_column_per_nm",
        "nominal_d_nm",
        "expected_d_nm",
        "corrected_d_nm",
        "deviation_percent",
        "pull",
        "used",
        "reason",
    )
    rows = tuple(
        (
            r.picture,
            r.region,
            r.peak + 1,
            *(r.hkl or (None, None, None)),
            *r.g_per_nm,
            r.nominal_d_nm,
            r.expected_d_nm,
            r.corrected_d_nm,
            r.deviation_percent,
            r.pull,
            "yes" if r.used else "no",
            r.reason,
        )
        for r in check.reflections
    )
    return Table(names, rows)


def internal_standard_lines(result: InternalStandard, width: int) -> list[Line]:
    """Return the mismatch of other regions against the standard."""
    found = result.mismatches
    if not found:
        return paragraph(
            "No spacing of the other regions lies near one of the standard (30 % in length, 30 degrees).", width
        )
    columns = [
        Column("region", "", [shortened(m.region, 20) for m in found], "left"),
        Column("peak", "", [str(m.peak + 1) for m in found]),
        Column("d", "nm", [value_text(m.d_nm, m.d_uncertainty_nm) for m in found]),
        Column(
            "against",
            "hkl",
            [NOT_GIVEN if m.standard_hkl is None else indices_text(m.standard_hkl) for m in found],
            "left",
        ),
        Column("at", "nm", [f"{m.standard_d_nm:.5f}" for m in found], rank=1),
        Column("angle", "deg", [f"{m.angle_deg:.2f}" for m in found], rank=1),
        Column("mismatch", "%", [value_text(m.mismatch_percent, m.mismatch_uncertainty_percent) for m in found]),
    ]
    lines, _ = aligned_table(columns, width, indent="  ")
    return [
        Line(f"Mismatch against {one_line(result.check.reference)} in the same picture", "heading"),
        *lines,
        *paragraph(
            "The pixel size and the reference's spacing cancel in the mismatch; its uncertainty is that of the fringes.",
            width,
            first="  ",
            emphasis="quiet",
        ),
    ]
