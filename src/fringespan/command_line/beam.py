"""`fringespan beam`: what the beam and the lens do."""

from __future__ import annotations

import dataclasses

import click

from fringespan.command_line.output_options import OutputOptions, deliver, takes_output_options
from fringespan.exceptions import CalibrationError

__all__ = ["beam"]

_HELP = """Show the wavelength, scattering angles, and contrast transfer of a beam of KV kilovolts.

The table lists spacings d with their scattering angle (2 theta), the distance of the reflection from the Ewald sphere
with the beam along the zone axis, and, where the lens is known, the transfer of phase contrast (negative: reversed),
how far the fringes are shifted sideways, and the underfocus at which they are not. Without --defocus, Scherzer's is
taken.

\b
Examples:
  fringespan beam 300
  fringespan beam 300 --cs 1.2 --defocus 60
  fringespan beam 200 --cs 0.5 --focal-spread 4 --convergence 0.3 --figure transfer.pdf
  fringespan beam 200 --d 0.2355,0.2039
"""


def _spacings(_context: click.Context, _option: click.Parameter, value: str | None) -> tuple[float, ...] | None:
    if value is None:
        return None
    try:
        return tuple(float(part) for part in value.split(","))
    except ValueError:
        raise click.BadParameter(f"{value!r} must be spacings in nm with commas between") from None


@click.command(help=_HELP)
@click.argument("kv", type=float, metavar="KV")
@click.option("--cs", type=float, metavar="MM", help="Spherical aberration of the objective lens; 0 if corrected.")
@click.option("--defocus", type=float, metavar="NM", help="Defocus, positive for underfocus; default Scherzer's.")
@click.option("--focal-spread", type=float, default=0.0, metavar="NM", help="Standard deviation of the focus.")
@click.option("--convergence", type=float, default=0.0, metavar="MRAD", help="Half angle of the illumination.")
@click.option("--image-spread", type=float, default=0.0, metavar="NM", help="Blur of the picture by stray fields.")
@click.option("--d", callback=_spacings, metavar="NM,...", help="Spacings to list, instead of a choice.")
@takes_output_options(
    json="Write all values.", csv="Write the table of spacings.", figure="Draw the transfer (.png, .svg or .pdf)."
)
def beam(
    kv: float,
    cs: float | None,
    defocus: float | None,
    focal_spread: float,
    convergence: float,
    image_spread: float,
    d: tuple[float, ...] | None,
    output: OutputOptions,
) -> None:
    """Print the summary and write what was asked for."""
    from fringespan.beam import beam_summary
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.beam_text import beam_lines, reflection_table
    from fringespan.export.table import csv_text
    from fringespan.record import json_text

    if output.figure is not None and cs is None:
        raise click.UsageError("--figure draws the transfer of a lens; give --cs", click.get_current_context())
    listed = {} if d is None else {"d_nm": d}
    try:
        summary = beam_summary(
            kv,
            cs_mm=cs,
            defocus_nm=defocus,
            focal_spread_nm=focal_spread,
            convergence_mrad=convergence,
            image_spread_nm=image_spread,
            **listed,
        )
    except CalibrationError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem
    if not output.to_standard_output:
        print_lines(beam_lines(summary, text_width()))
    deliver(lambda: json_text(dataclasses.asdict(summary)), output.json)
    deliver(lambda: csv_text(reflection_table(summary)), output.csv)
    if output.figure is not None:
        from fringespan.export.figure import write_figure
        from fringespan.export.transfer_figure import transfer_figure

        write_figure(transfer_figure(summary), output.figure)
