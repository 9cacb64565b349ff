"""`fringespan rank`: phases for spacings and angles that are typed in."""

from __future__ import annotations

import click

from fringespan.command_line.output_options import OutputOptions, deliver, takes_output_options
from fringespan.exceptions import SettingsError

__all__ = ["rank"]

_HELP = """Rank phases for spacings (nm) and angles (degrees), without a picture.

SPACINGS are separated by spaces, each with its standard uncertainty in parentheses; an angle after @ belongs to the
spacing before it and is counted from the first spacing's direction, counter-clockwise. Several regions of one picture
are separated by semicolons and share their scale. Without angles, or with one spacing, only a list of candidates is
possible.

A match is evidence for a phase, not a certificate: where health or safety hangs on it, the accredited method, local
rules and licensed laboratories decide.

\b
Examples:
  fringespan rank "0.2355(4) 0.2039(5) @54.7(3)" --scale-uncertainty 1
  fringespan rank "0.352(1) 0.352(1) @136.6(5)" --phases tio2_a,tio2_r,tio2_b
  fringespan rank "0.2355(4)" --elements Au,Pd,O
"""


@click.command(help=_HELP)
@click.argument("spacings", metavar="SPACINGS")
@click.option(
    "--phases", default="all", show_default=True, metavar="all|NAME,FILE.cif,...", help="Phases to compare with."
)
@click.option("--elements", metavar="El,El,...", help="Elements in the specimen: phases with any other are left out.")
@click.option(
    "--scale-uncertainty",
    type=float,
    metavar="PERCENT",
    help="Standard uncertainty common to all spacings, that of the pixel size; 5 % is assumed without it.",
)
@takes_output_options(
    json="Write all values.", csv="Write the table of hypotheses.", figure="Draw the pattern that fits best."
)
def rank(
    spacings: str, phases: str, elements: str | None, scale_uncertainty: float | None, output: OutputOptions
) -> None:
    """Print the ranking and write what was asked for."""
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.crystal.library import find_phases, load_phases
    from fringespan.export.plain_text import Line
    from fringespan.export.ranking_text import ranking_document, ranking_lines, ranking_table
    from fringespan.export.table import csv_text
    from fringespan.ranking.rank import rank_regions
    from fringespan.ranking.typed_values import observations_from_text
    from fringespan.record import json_text

    scale = None if scale_uncertainty is None else scale_uncertainty / 100
    try:
        observations = observations_from_text(spacings, pixel_size_relative_uncertainty=scale)
    except SettingsError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem
    chosen = load_phases(name for name in phases.split(",") if name.strip())
    if elements is not None:
        chosen = find_phases(only_elements=elements.split(","), phases=chosen)
    rankings = rank_regions(observations, chosen)
    if not output.to_standard_output:
        lines: list[Line] = []
        for number, ranking in enumerate(rankings, start=1):
            if len(rankings) > 1:
                lines.append(Line(f"Region {number}", "heading"))
            lines += [*ranking_lines(ranking, text_width()), Line("")]
        print_lines(lines[:-1])
    deliver(lambda: json_text({"regions": [ranking_document(ranking) for ranking in rankings]}), output.json)
    deliver(lambda: "".join(csv_text(ranking_table(ranking)) for ranking in rankings), output.csv)
    if output.figure is not None:
        from fringespan.crystal.zone import zone_pattern
        from fringespan.export.figure import write_figure
        from fringespan.export.zone_figure import zone_figure

        best = next((m for ranking in rankings for m in ranking.matches[:1] if m.zone is not None), None)
        if best is None or best.zone is None:
            raise SettingsError("there is no zone to draw: give at least two spacings and the angle between them")
        write_figure(zone_figure(zone_pattern(best.structure, best.zone)), output.figure)
