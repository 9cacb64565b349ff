"""Phases, expected reflections and zone patterns in words and tables."""

from __future__ import annotations

from collections.abc import Sequence

from fringespan.crystal.notation import direction_text, indices_text
from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import Reflection
from fringespan.crystal.zone import ZonePattern
from fringespan.export.plain_text import Column, Line, aligned_table, paragraph
from fringespan.export.table import Table
from fringespan.uncertainty import NOT_GIVEN

__all__ = ["phase_lines", "reflection_lines", "reflections_table", "zone_lines", "zone_table"]

_SHOWN = (False, "absence, reachable by double scattering")


def phase_lines(phase: Phase, width: int) -> list[Line]:
    """Return what is known of a phase, where from, and how far it was checked."""
    a, b, c = (f"{v:.5f}" for v in phase.lengths_nm)
    alpha, beta, gamma = (f"{v:g}" for v in phase.angles_deg)
    lines = [Line(f"{phase.name} ({phase.formula})" if phase.formula != phase.name else phase.name, "heading")]
    lines += paragraph(phase.space_group or "not named", width, first="  space group  ")
    lines += paragraph(f"a {a}  b {b}  c {c} nm, {alpha}  {beta}  {gamma} degrees", width, first="  cell         ")
    lines += paragraph(f"{phase.source}; {phase.source_status}", width, first="  source       ")
    for agreement in phase.confirmations[:2]:
        lines += paragraph(agreement, width, first="  agrees       ")
    for contradiction in phase.contradictions:
        lines += paragraph(contradiction, width, first="  disagrees    ", emphasis="note")
    if phase.calibration is not None:
        role = f"{phase.calibration.role}, lattice parameter to {100 * phase.calibration.relative_uncertainty:.2g} %"
        note = f"; {phase.calibration.note}" if phase.calibration.note else ""
        lines += paragraph(role + note, width, first="  reference    ")
    if phase.note:
        lines += paragraph(phase.note, width, first="  note         ")
    if phase.hazard:
        lines += paragraph(
            f"{phase.hazard} Follow local rules, and leave work and disposal to those licensed for it.",
            width,
            first="  care         ",
            emphasis="warning",
        )
    for caution in phase.cautions:
        lines += paragraph(f"{caution.text} {caution.remedy}", width, first="  caution      ", emphasis=caution.gravity)
    return lines


def reflection_lines(reflections: Sequence[Reflection], width: int) -> list[Line]:
    """Return the table of the families that can be seen; those that nothing brings back are left out."""
    shown = [r for r in reflections if r.forbidden in _SHOWN]
    columns = [Column("hkl", "", [indices_text(r.hkl) for r in shown], "left")]
    if any(r.hkil is not None for r in shown):
        columns.append(Column("hkil", "", [indices_text(r.hkil or r.hkl) for r in shown], "left"))
    columns.append(Column("d", "nm", [f"{r.d_nm:.5f}" for r in shown]))
    columns.append(Column("members", "", [str(r.multiplicity) for r in shown], rank=2))
    columns.append(Column("intensity", "", [_intensity(r.relative_intensity) for r in shown]))
    if any(r.two_theta_mrad is not None for r in shown):
        columns.append(Column("2 theta", "mrad", [_number(r.two_theta_mrad, 3) for r in shown], rank=1))
    columns.append(Column("remark", "", ["double scattering" if r.forbidden else "" for r in shown], "left"))
    table, _ = aligned_table(columns, width, indent="  ")
    return table


def reflections_table(reflections: Sequence[Reflection]) -> Table:
    """Return every family with every digit."""
    names = ("h", "k", "l", "d_nm", "multiplicity", "relative_intensity", "forbidden", "two_theta_mrad")
    rows = tuple(
        (*r.hkl, r.d_nm, r.multiplicity, r.relative_intensity, r.forbidden or None, r.two_theta_mrad)
        for r in reflections
    )
    return Table(names, rows)


def zone_lines(pattern: ZonePattern, width: int) -> list[Line]:
    """Return the table of a zone's reflections, of g and -g one."""
    shown = [s for s in _halved(pattern) if s.forbidden in _SHOWN]
    hexagonal = pattern.phase.has_hexagonal_axes
    name = direction_text(pattern.zone)
    if hexagonal:
        name += f" = {direction_text(pattern.zone, hexagonal=True)}"
    columns = [
        Column("hkl", "", [indices_text(s.hkl) for s in shown], "left"),
        Column("d", "nm", [f"{s.d_nm:.5f}" for s in shown]),
        Column("direction", "deg", [f"{s.direction_deg:.2f}" for s in shown]),
        Column("intensity", "", [_intensity(s.relative_intensity) for s in shown]),
    ]
    if hexagonal:
        columns.insert(1, Column("hkil", "", [indices_text(s.hkil or s.hkl) for s in shown], "left", rank=2))
    if pattern.voltage_kv is not None:
        columns.append(Column("2 theta", "mrad", [_number(s.two_theta_mrad, 3) for s in shown], rank=1))
        errors = [_number(s.excitation_error_per_nm, 4) for s in shown]
        columns.append(Column("off the sphere", "1/nm", errors, rank=3))
    columns.append(Column("remark", "", ["double scattering" if s.forbidden else "" for s in shown], "left"))
    table, _ = aligned_table(columns, width, indent="  ")
    text = f"Seen along {name}: directions counter-clockwise, with the coarsest allowed reflection to the right."
    return [*paragraph(text, width), *table]


def zone_table(pattern: ZonePattern) -> Table:
    """Return every reflection of a zone, g and -g both, with every digit."""
    names = (
        "h",
        "k",
        "l",
        "g_row_per_nm",
        "g_column_per_nm",
        "d_nm",
        "direction_deg",
        "relative_intensity",
        "forbidden",
        "excitation_error_per_nm",
        "two_theta_mrad",
    )
    rows = tuple(
        (
            *s.hkl,
            *s.g_per_nm,
            s.d_nm,
            s.direction_deg,
            s.relative_intensity,
            s.forbidden or None,
            s.excitation_error_per_nm,
            s.two_theta_mrad,
        )
        for s in pattern.spots
    )
    return Table(names, rows)


def _halved(pattern: ZonePattern) -> list:  # type: ignore[type-arg]
    return [s for s in pattern.spots if s.direction_deg < 180 - 1e-6]


def _intensity(value: float | None) -> str:
    return NOT_GIVEN if value is None else f"{value:.3f}"


def _number(value: float | None, decimals: int) -> str:
    return NOT_GIVEN if value is None else f"{value:.{decimals}f}"
