"""Beam and lens in words and tables."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

from fringespan.beam import BeamSummary, Lens, Reflection
from fringespan.export.plain_text import Column, Line, aligned_table, enumeration
from fringespan.export.table import Table
from fringespan.uncertainty import NOT_GIVEN

__all__ = ["beam_lines", "reflection_table"]

_ZEROS_SHOWN = 8

# field of a reflection: heading, unit, decimals, rank (of the highest, the first to go where the lines are short)
_COLUMNS = {
    "d_nm": ("d", "nm", 4, 0),
    "two_theta_mrad": ("2 theta", "mrad", 3, 0),
    "excitation_error_per_nm": ("off the sphere", "1/nm", 4, 3),
    "transfer": ("transfer", "", 3, 1),
    "envelope": ("envelope", "", 3, 4),
    "delocalisation_nm": ("shift", "nm", 2, 1),
    "focus_without_delocalisation_nm": ("unshifted at", "nm", 1, 2),
}


def beam_lines(summary: BeamSummary, width: int) -> list[Line]:
    """Return the text of a beam, and of a lens where it is known.

    Parameters
    ----------
    summary : BeamSummary
    width : int
        Characters that a line should have at most.
    """
    facts = [
        ("wavelength", f"{summary.wavelength_pm:.4f} pm"),
        ("  without relativity", f"{summary.nonrelativistic_wavelength_pm:.4f} pm"),
        ("speed", f"{summary.speed_over_light:.4f} of that of light"),
        ("interaction constant", f"{1000 * summary.interaction_constant_per_v_nm:.4f} mrad/(V nm)"),
    ]
    if summary.lens is not None:
        facts += _lens_facts(summary, summary.lens)
    longest = max(len(name) for name, _ in facts)
    lines = [Line(f"Beam of {summary.voltage_kv:g} kV", "heading")]
    lines += [Line(f"  {name.ljust(longest)}  {value}") for name, value in facts]
    if summary.transfer_zeros_nm:
        zeros = [f"{d:.4f}" for d in summary.transfer_zeros_nm[:_ZEROS_SHOWN]]
        if len(summary.transfer_zeros_nm) > _ZEROS_SHOWN:
            zeros.append(f"{len(summary.transfer_zeros_nm) - _ZEROS_SHOWN} finer ones")
        lines += enumeration(zeros, width, first="  nothing is transferred at d (nm): ")
    columns = [
        Column(heading, unit, _cells(summary.reflections, field, decimals), rank=rank)
        for field, (heading, unit, decimals, rank) in _COLUMNS.items()
        if any(getattr(reflection, field) is not None for reflection in summary.reflections)
    ]
    table, _ = aligned_table(columns, width, indent="  ")
    return [*lines, Line(""), *table]


def _lens_facts(summary: BeamSummary, lens: Lens) -> list[tuple[str, str]]:
    origin = "" if summary.defocus_origin == "given" else f" ({summary.defocus_origin})"
    facts = [
        ("spherical aberration", f"{lens.cs_mm:g} mm"),
        ("defocus", f"{lens.defocus_nm:.1f} nm{origin}"),
    ]
    if summary.scherzer_underfocus_nm is not None:
        facts.append(("Scherzer's underfocus", f"{summary.scherzer_underfocus_nm:.1f} nm"))
    if summary.point_resolution_nm is not None:
        facts.append(("point resolution there", f"{summary.point_resolution_nm:.4f} nm"))
    if summary.information_limit_nm is not None:
        facts.append(("information limit", f"{summary.information_limit_nm:.4f} nm"))
    return facts


def _cells(reflections: Sequence[Reflection], field: str, decimals: int) -> list[str]:
    values = [getattr(reflection, field) for reflection in reflections]
    return [NOT_GIVEN if value is None else f"{value:.{decimals}f}" for value in values]


def reflection_table(summary: BeamSummary) -> Table:
    """Return the spacings of a summary with every digit, one row each."""
    names = tuple(field.name for field in dataclasses.fields(Reflection))
    return Table(names, tuple(tuple(getattr(row, name) for name in names) for row in summary.reflections))
