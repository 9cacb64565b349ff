"""`fringespan measure`: the main job."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from fringespan.command_line import complain, in_words
from fringespan.command_line.output_options import (
    STANDARD_OUTPUT,
    OutputOptions,
    deliver,
    refuse_to_overwrite,
    takes_output_options,
)
from fringespan.command_line.picture_options import PictureOptions, takes_picture_options
from fringespan.exceptions import FringespanError

if TYPE_CHECKING:
    from fringespan.crystal.phase import Phase
    from fringespan.measurement import Measurement
    from fringespan.record import Record

__all__ = ["measure"]

_HELP = """Measure fringe spacings and angles in pictures.

Each IMAGE is measured in the given regions, or as a whole, and printed as a table: the spacing d of each set of
fringes with its standard uncertainty in parentheses, what that consists of (the fit to the picture; what one picture
cannot show of a small crystal; the pixel size) in per cent of d, the direction of the spacing, and the angles.

\b
Examples:
  fringespan measure particle.tif
  fringespan measure particle.tif --region "grain A: 40,30 40,286 296,286 296,30"
  fringespan measure particle.tif --pixel-size 0.021 --pixel-size-uncertainty 1.5 --voltage 300
  fringespan measure particle.tif --pixel-size-uncertainty 1 --phases gold,tio2_a,specimen.cif
  fringespan measure particle.tif --regions earlier_record.json --json record.json --figure figure.pdf
  fringespan measure series/*.tif --json records.json --csv table.csv

With several pictures, one record and one figure a picture are written, with the picture's name put into FILE
(records.particle.json), but a single table. "-" as FILE writes to standard output, in place of the text: with
several pictures a JSON list of their records.
"""


@click.command(help=_HELP)
@click.argument("images", nargs=-1, required=True, metavar="IMAGE...")
@takes_picture_options
@takes_output_options(
    json="Write the record: all that is needed to repeat and defend the measurement.",
    csv="Write the table of peaks with every digit.",
    figure="Draw picture, regions and spectra (.png, .svg or .pdf).",
)
def measure(images: tuple[str, ...], picture: PictureOptions, output: OutputOptions) -> int:
    """Measure each picture, print it, and write what was asked for."""
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.measurement_text import measurement_lines
    from fringespan.export.plain_text import Line
    from fringespan.export.table import csv_text, peak_table
    from fringespan.record import document_of, json_text, write_record

    record_files = _one_file_a_picture(output.json, images)
    figure_files = _one_file_a_picture(output.figure, images)
    refuse_to_overwrite(images, [*record_files, *figure_files, *([output.csv] if output.csv is not None else [])])
    phases = picture.phases_to_compare()
    records: list[Record] = []
    for number, image in enumerate(images):
        try:
            measurements, record = _measured(image, picture, phases)
        except (FringespanError, OSError, MemoryError) as problem:
            complain(_about(image, in_words(problem)))
            continue
        if not output.to_standard_output:
            print_lines([*([Line("")] if records else []), *measurement_lines(record, text_width())])
        records.append(record)
        if record_files:
            write_record(record, record_files[number])
        if figure_files:
            _draw(measurements, figure_files[number])
    if records:
        if output.json == STANDARD_OUTPUT:
            documents = [document_of(record) for record in records]
            deliver(lambda: json_text(documents[0] if len(images) == 1 else documents), STANDARD_OUTPUT)
        deliver(lambda: csv_text(peak_table(records)), output.csv)
    return 0 if len(records) == len(images) else 1


def _measured(image: str, picture: PictureOptions, phases: Sequence[Phase]) -> tuple[list[Measurement], Record]:
    from fringespan.measurement import measure as measure_region
    from fringespan.record import identifications_of, record_of

    micrograph = picture.open(image)
    measurements = [measure_region(micrograph, region) for region in picture.regions_of(micrograph)]
    return measurements, record_of(measurements, identifications_of(measurements, phases))


def _draw(measurements: Sequence[Measurement], file: Path) -> None:
    from fringespan.export.figure import write_figure
    from fringespan.export.measurement_figure import measurement_figure

    write_figure(measurement_figure(measurements), file)


def _about(image: str, words: str) -> str:
    """Return a message that names the picture."""
    return words if image in words else f"{image}: {words}"


def _one_file_a_picture(file: str | None, images: Sequence[str]) -> list[Path]:
    """Return the file to write for each picture: the one named, or one with the picture's name put into it."""
    if file is None or file == STANDARD_OUTPUT:
        return []
    path = Path(file)
    if len(images) == 1:
        return [path]
    files: list[Path] = []
    for image in images:
        name = os.path.basename(os.path.normpath(image)).partition(".")[0] or "picture"
        beside, number = path.with_name(f"{path.stem}.{name}{path.suffix}"), 1
        while beside in files:
            number += 1
            beside = path.with_name(f"{path.stem}.{name}-{number}{path.suffix}")
        files.append(beside)
    return files
