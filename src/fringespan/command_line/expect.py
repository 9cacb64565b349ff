"""`fringespan expect`: the reflections that a phase would show."""

from __future__ import annotations

import dataclasses

import click

from fringespan.command_line.output_options import OutputOptions, deliver, takes_output_options
from fringespan.exceptions import CalibrationError, PhaseError, SettingsError

__all__ = ["expect"]

_HELP = """List the reflections that PHASE would show.

PHASE is a built-in id, name or formula (gold, rutile, tio2_a, SrTiO3), or a CIF file. Listed are the indices, the
spacing d, the number of equivalent planes, and the kinematic intensity relative to the strongest, which tells strong
from weak and no more; reflections that only double scattering shows are marked. With --zone the pattern of one zone
axis is listed, and --figure draws it.

\b
Examples:
  fringespan expect gold
  fringespan expect tio2_a --zone 1,0,0 --voltage 300 --figure anatase.png
  fringespan expect specimen.cif --d-min 0.08
"""


@click.command(help=_HELP)
@click.argument("phase", metavar="PHASE")
@click.option("--zone", metavar="u,v,w", help="Zone axis, three indices or four, towards the viewer.")
@click.option("--d-min", type=float, default=0.1, show_default=True, metavar="NM", help="Smallest spacing listed.")
@click.option("--voltage", type=float, metavar="KV", help="Beam voltage, for scattering angles.")
@takes_output_options(
    json="Write all values.", csv="Write the table.", figure="Draw the pattern of the zone (.png, .svg or .pdf)."
)
def expect(phase: str, zone: str | None, d_min: float, voltage: float | None, output: OutputOptions) -> None:
    """Print the table and write what was asked for."""
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.crystal.library import load_phase
    from fringespan.crystal.notation import parse_indices
    from fringespan.crystal.reflections import expected_reflections
    from fringespan.crystal.zone import zone_pattern
    from fringespan.export.phase_text import phase_lines, reflection_lines, reflections_table, zone_lines, zone_table
    from fringespan.export.table import csv_text
    from fringespan.record import json_text

    if output.figure is not None and zone is None:
        raise click.UsageError("--figure draws the pattern of a zone; give --zone", click.get_current_context())
    structure = load_phase(phase)
    try:
        pattern = (
            None
            if zone is None
            else zone_pattern(structure, parse_indices(zone, what="--zone"), d_min_nm=d_min, voltage_kv=voltage)
        )
        families = expected_reflections(structure, d_min, voltage_kv=voltage) if pattern is None else ()
    except (PhaseError, SettingsError, CalibrationError) as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem
    if not output.to_standard_output:
        width = text_width()
        table = zone_lines(pattern, width) if pattern is not None else reflection_lines(families, width)
        print_lines([*phase_lines(structure, width), *table])
    rows = [dataclasses.asdict(row) for row in (families if pattern is None else pattern.spots)]
    document = {
        "phase": structure.id,
        "name": structure.name,
        "source": structure.source,
        "source_status": structure.source_status,
        "cell_nm_deg": [*structure.lengths_nm, *structure.angles_deg],
        "voltage_kv": voltage,
        "zone": None if pattern is None else pattern.zone,
        "d_min_nm": d_min,
        "reflections": rows,
    }
    deliver(lambda: json_text(document), output.json)
    deliver(lambda: csv_text(reflections_table(families) if pattern is None else zone_table(pattern)), output.csv)
    if output.figure is not None and pattern is not None:
        from fringespan.export.figure import write_figure
        from fringespan.export.zone_figure import zone_figure

        write_figure(zone_figure(pattern), output.figure)
