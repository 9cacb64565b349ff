"""The log of magnification checks in tables for people."""

from __future__ import annotations

from collections.abc import Sequence

from fringespan.export.plain_text import Column, Line, aligned_table, one_line, paragraph, shortened
from fringespan.magnification.conditions import Conditions
from fringespan.magnification.log import LogEntry, Overdue
from fringespan.uncertainty import NOT_GIVEN, value_text

__all__ = ["conditions_text", "log_lines", "overdue_lines"]


def conditions_text(conditions: Conditions) -> str:
    """Return what is known of the conditions, with commas between."""
    parts = [conditions.instrument, conditions.mode]
    if conditions.voltage_kv is not None:
        parts.append(f"{conditions.voltage_kv:g} kV")
    if conditions.indicated_magnification is not None:
        parts.append(f"x{conditions.indicated_magnification:,.0f}".replace(",", " "))
    if conditions.camera_length_mm is not None:
        parts.append(f"camera length {conditions.camera_length_mm:g} mm")
    parts.append(conditions.camera)
    if conditions.binning is not None:
        parts.append(f"binning {conditions.binning}")
    return one_line(", ".join(part for part in parts if part)) or "conditions not stated"


def log_lines(entries: Sequence[LogEntry], width: int) -> list[Line]:
    """Return entries as a table, in the order given."""
    if not entries:
        return [Line("  no entry")]

    def size(entry: LogEntry, axis: int) -> str:
        u = entry.relative_uncertainty
        value = entry.pixel_size_nm[axis]
        return value_text(value, None if u is None else value * u[axis], digits=6)

    columns = [
        Column("no.", "", [NOT_GIVEN if e.number is None else str(e.number) for e in entries]),
        Column("date", "", [e.checked_at[:10] for e in entries], "left"),
        Column("conditions", "", [shortened(conditions_text(e.conditions), 36) for e in entries], "left", rank=1),
        Column("reference", "", [shortened(e.reference, 14) for e in entries], "left", rank=2),
        Column("nominal", "nm", [f"{e.nominal_pixel_size_nm[0]:.5g}" for e in entries], rank=2),
        Column("rows", "nm", [size(e, 0) for e in entries]),
        Column("columns", "nm", [size(e, 1) for e in entries]),
        Column("verdict", "", ["withdrawn" if e.withdrawn_at else e.verdict for e in entries], "left", rank=1),
    ]
    lines, left_out = aligned_table(columns, width)
    if left_out:
        lines += paragraph(
            f"No room for: {', '.join(left_out)}; widen the window, or export the log.", width, emphasis="quiet"
        )
    return lines


def overdue_lines(overdue: Sequence[Overdue], days: float, width: int) -> list[Line]:
    """Return which magnifications have not been checked for long."""
    if not overdue:
        return [Line(f"Nothing is overdue: all magnifications in the log were checked within {days:g} days.")]
    lines = [Line(f"Not checked for more than {days:g} days:", "warning")]
    for item in overdue:
        lines += paragraph(
            f"{conditions_text(item.conditions)}: last on {item.last_checked_at[:10]}, {item.days:.0f} days ago",
            width,
            first="  ",
        )
    return lines
