"""`fringespan demo`: the main job on a sample picture."""

from __future__ import annotations

import shutil
from pathlib import Path

import click

from fringespan.command_line.view import refuse_without_viewer, show

__all__ = ["demo"]

_PICTURE = "two_grains"
# what a good lattice calibration reaches: 1 to 2 per cent at 95 % confidence (common practice)
_PIXEL_SIZE_UNCERTAINTY = 0.0075
_VOLTAGE_KV = 300.0

_HELP = """Measure a sample picture into a new folder, and print the table and what was written.

The picture is simulated: a particle of gold and one of ceria on a carbon film, as a microscope at 300 kV would show
them. It is copied into the folder, so that you can go on with it. Files that are already there are never touched: if
the folder exists, a new one gets a number. No window opens unless you ask for it.

\b
Examples:
  fringespan demo
  fringespan demo --out first_look
"""


@click.command(help=_HELP)
@click.option(
    "--out", metavar="FOLDER", default="fringespan-demo", show_default=True, help="Folder to make for the results."
)
@click.option("--view", is_flag=True, help="Open the picture in napari afterwards.")
def demo(out: str, view: bool) -> None:
    """Measure the two grains of the sample picture."""
    if view:
        refuse_without_viewer()
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.figure import write_figure
    from fringespan.export.measurement_figure import measurement_figure
    from fringespan.export.measurement_text import measurement_lines
    from fringespan.export.plain_text import Line, paragraph
    from fringespan.export.table import csv_text, peak_table
    from fringespan.measurement import measure
    from fringespan.output_file import write_whole_file
    from fringespan.reading import read
    from fringespan.record import read_regions, record_of, write_record
    from fringespan.sample_pictures import sample_file

    source, truth = sample_file(f"{_PICTURE}.ome.tif"), sample_file(f"{_PICTURE}.json")
    folder = _new_folder(Path(out))
    picture = folder / source.name
    shutil.copyfile(source, picture)
    micrograph = read(picture, pixel_size_relative_uncertainty=_PIXEL_SIZE_UNCERTAINTY, voltage_kv=_VOLTAGE_KV)
    regions = read_regions(truth)
    measurements = [measure(micrograph, region) for region in regions]
    record = record_of(measurements)
    written = {
        picture: "the picture",
        write_record(record, folder / "record.json"): "all that is needed to repeat the measurement",
        write_whole_file(folder / "peaks.csv", csv_text(peak_table([record])).encode()): "the table, with every digit",
        write_figure(measurement_figure(measurements), folder / "figure.png"): "picture, regions and spectra",
    }
    width = text_width()
    print_lines(
        [
            *paragraph(
                "A simulated picture, no measurement of a real specimen. Its pixel size is taken as known to "
                f"{100 * _PIXEL_SIZE_UNCERTAINTY:g} %, as after a good calibration.",
                width,
                emphasis="quiet",
            ),
            Line(""),
            *measurement_lines(record, width),
            Line(""),
            Line("Written:", "heading"),
            *(Line(f"  {path}  {what}") for path, what in written.items()),
            Line(""),
            Line("To go on from here, change a region or an option and measure again:", "heading"),
            Line(f"  fringespan measure {picture} --regions {folder / 'record.json'}"),
        ]
    )
    if view:
        show(micrograph, regions, str(picture))


def _new_folder(wanted: Path) -> Path:
    """Make a folder that did not exist, with a number behind its name where that is taken."""
    number = 1
    wanted = wanted.resolve()
    if not wanted.name:
        raise click.UsageError("--out must name a folder to make, not the root of a disk")
    while True:
        folder = wanted if number == 1 else wanted.with_name(f"{wanted.name}-{number}")
        try:
            folder.mkdir(parents=True)
        except FileExistsError:
            number += 1
            continue
        return folder
