"""`fringespan profile`: the fringes along a line."""

from __future__ import annotations

import click

from fringespan.command_line import complain
from fringespan.command_line.output_options import (
    OutputOptions,
    deliver,
    refuse_to_overwrite,
    takes_output_options,
)
from fringespan.command_line.picture_options import PictureOptions, takes_picture_options
from fringespan.exceptions import FringespanError

__all__ = ["profile"]

_HELP = """Measure the fringes along a line in a picture.

Pixel values are averaged across the width of a strip along the line; the spacing is that of fringes fitted to the whole
profile, not of a count between two of them. It is the distance along the line; where the strip is wide enough to see
how the fringes lie in it, the spacing across them is given too. Lay the line along the normal of the fringes.

\b
Examples:
  fringespan profile picture.tif --line 120,80,120,300 --width 20
  fringespan profile picture.tif --line 40,40,200,180 --figure profile.pdf --csv profile.csv
"""


def _line(
    _context: click.Context, _option: click.Parameter, value: str
) -> tuple[tuple[float, float], tuple[float, float]]:
    try:
        r0, c0, r1, c1 = (float(part) for part in value.split(","))
    except ValueError:
        raise click.BadParameter(
            f"{value!r} must be four numbers row,column,row,column: where the line begins and ends"
        ) from None
    return (r0, c0), (r1, c1)


@click.command(help=_HELP)
@click.argument("image", metavar="IMAGE")
@click.option(
    "--line", callback=_line, required=True, metavar="R,C,R,C", help="Where the line begins and ends, in pixels."
)
@click.option(
    "--width", type=click.FloatRange(min=1), default=11.0, show_default=True, metavar="PX", help="Width of the strip."
)
@takes_picture_options
@takes_output_options(
    json="Write the result with the profile.",
    csv="Write the profile: positions, mean and fitted values.",
    figure="Draw picture and profile (.png, .svg or .pdf).",
)
def profile(
    image: str,
    line: tuple[tuple[float, float], tuple[float, float]],
    width: float,
    picture: PictureOptions,
    output: OutputOptions,
) -> None:
    """Measure along the line, print it, and write what was asked for."""
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.measurement_text import caution_lines, picture_heading
    from fringespan.export.profile_text import profile_document, profile_lines, profile_table
    from fringespan.export.table import csv_text
    from fringespan.profile import measure_profile
    from fringespan.record import RecordedPicture, json_text

    refuse_to_overwrite([image], output.files)
    if picture.regions:
        complain("regions play no part in a profile", "fringespan profile")
    if picture.phases.strip().lower() != "none":
        complain("a profile is not compared with phases", "fringespan profile")
    micrograph = picture.open(image)
    try:
        measured = measure_profile(micrograph, line, width_px=width)
    except FringespanError as problem:
        raise type(problem)(f"{image}: {problem}") from problem
    recorded = RecordedPicture.of(micrograph)
    if not output.to_standard_output:
        columns = text_width()
        about_picture = caution_lines([(caution, "") for caution in micrograph.cautions], columns)
        print_lines([*picture_heading(recorded, columns), *about_picture, *profile_lines(measured, columns)])
    deliver(lambda: json_text(profile_document(recorded, measured)), output.json)
    deliver(lambda: csv_text(profile_table(micrograph, measured)), output.csv)
    if output.figure is not None:
        from fringespan.export.figure import write_figure
        from fringespan.export.profile_figure import profile_figure

        write_figure(profile_figure(micrograph, measured), output.figure)
