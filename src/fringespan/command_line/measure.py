"""`fringespan measure`: the main job."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
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
from fringespan.exceptions import FringespanError, SettingsError

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
  fringespan measure f1.tif f2.tif f3.tif --focal-series --defocus-each 20,45,70 --voltage 200 --cs 0.5

With several pictures, one record and one figure a picture are written, with the picture's name put into FILE
(records.particle.json), but a single table. "-" as FILE writes to standard output, in place of the text: with
several pictures a JSON list of their records.

Thickness and lens shift the fringes of a small crystal, at each defocus in another way. With --focal-series pictures of
the same region at different defocus (or the frames of one stack) are combined; one JSON document then holds what they show
together and the record of each.
"""


@click.command(help=_HELP)
@click.argument("images", nargs=-1, required=True, metavar="IMAGE...")
@click.option("--focal-series", is_flag=True, help="Combine the pictures: the same region at different defocus.")
@click.option(
    "--defocus-each",
    metavar="NM,NM,...",
    callback=lambda _context, _option, value: _numbers(value),
    help="With --focal-series: the defocus of each picture in their order, positive for underfocus.",
)
@takes_picture_options
@takes_output_options(
    json="Write the record: all that is needed to repeat and defend the measurement.",
    csv="Write the table of peaks with every digit.",
    figure="Draw picture, regions and spectra (.png, .svg or .pdf).",
)
def measure(
    images: tuple[str, ...],
    picture: PictureOptions,
    output: OutputOptions,
    focal_series: bool,
    defocus_each: tuple[float, ...],
) -> int:
    """Measure each picture, print it, and write what was asked for."""
    if focal_series:
        return _measure_series(images, picture, output, defocus_each)
    if defocus_each:
        raise click.UsageError("--defocus-each goes with --focal-series", click.get_current_context())
    return _measure_each(images, picture, output)


def _measure_each(images: tuple[str, ...], picture: PictureOptions, output: OutputOptions) -> int:
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


def _measure_series(
    images: tuple[str, ...], picture: PictureOptions, output: OutputOptions, defocus_each: tuple[float, ...]
) -> int:
    """Measure the pictures of a focal series and print what they show together."""
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.focal_series_text import focal_series_lines
    from fringespan.export.table import csv_text, peak_table
    from fringespan.focal_series import combine_focal_series
    from fringespan.record import json_text
    from fringespan.record.series_document import series_document

    shots = _shots(images, picture, defocus_each)
    figure_files = _one_file_a_picture(output.figure, [shot.label for shot in shots])
    refuse_to_overwrite(images, [*figure_files, *(f for f in (output.json, output.csv) if f is not None)])
    phases = picture.phases_to_compare()
    measured = [_measured(shot.image, shot.picture, phases) for shot in shots]
    by_region = list(zip(*(measurements for measurements, _ in measured), strict=True))
    series = [(one[0].region.name, combine_focal_series(one)) for one in by_region]
    records = [record for _, record in measured]
    if not output.to_standard_output:
        print_lines(focal_series_lines(series, text_width()))
    deliver(lambda: json_text(series_document(series, records)), output.json)
    deliver(lambda: csv_text(peak_table(records)), output.csv)
    for (measurements, _), file in zip(measured, figure_files, strict=False):
        _draw(measurements, file)
    return 0


@dataclass(frozen=True, slots=True)
class _Shot:
    """One picture of a focal series, and what to call it in the names of files."""

    image: str
    picture: PictureOptions
    label: str


def _shots(images: tuple[str, ...], picture: PictureOptions, defocus_each: tuple[float, ...]) -> list[_Shot]:
    """Return the pictures of a series: the files, or the frames of a single one."""
    shots = [_Shot(image, picture, image) for image in images]
    if len(images) == 1:
        frames = picture.open(images[0]).frame_count
        name = os.path.basename(os.path.normpath(images[0])).partition(".")[0]
        shots = [_Shot(images[0], replace(picture, frame=n), f"{name}-{n}") for n in range(frames)]
        if frames < 2:
            raise SettingsError(
                f"{images[0]}: a focal series needs at least two pictures, and this is one; name them all, or a stack"
            )
    if not defocus_each:
        return shots
    if len(defocus_each) != len(shots):
        raise SettingsError(
            f"--defocus-each must have one number for each of the {len(shots)} pictures, got {len(defocus_each)}"
        )
    return [
        replace(shot, picture=replace(shot.picture, defocus_nm=defocus))
        for shot, defocus in zip(shots, defocus_each, strict=True)
    ]


def _numbers(text: str | None) -> tuple[float, ...]:
    try:
        return tuple(float(part) for part in text.split(",")) if text is not None else ()
    except ValueError:
        raise click.BadParameter(f"{text!r} is no list of numbers with commas between them") from None


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
