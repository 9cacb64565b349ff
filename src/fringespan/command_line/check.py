"""`fringespan check`: is the magnification right."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import click

from fringespan.command_line import complain
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
    from datetime import datetime

    from fringespan.crystal.phase import Phase
    from fringespan.magnification.budget import Acceptance, Coverage
    from fringespan.magnification.check import MagnificationCheck
    from fringespan.magnification.conditions import Conditions
    from fringespan.magnification.internal_standard import InternalStandard
    from fringespan.magnification.log import LogEntry
    from fringespan.magnification.reference import ReferenceSpacing
    from fringespan.measurement import Measurement

__all__ = ["check"]

OWN_LOG = "own"

_HELP = """Check the magnification by pictures of a reference material.

The fringes in each IMAGE (all of the same nominal pixel size) are measured in the given regions, or over the whole picture,
and compared with the reference, with the magnification off by up to 10 %. The result is the true pixel size along rows
and columns and the shear, each with its uncertainty budget; fringes of one direction give one factor for both.

\b
Examples:
  fringespan check gold.tif --reference gold
  fringespan check gold1.tif gold2.tif gold3.tif --reference gold --temperature 22 --tolerance 1 --log own
  fringespan check carbon.tif --reference 0.3400 --reference-uncertainty 0.5
  fringespan check gold.tif --reference gold --report check.pdf --instrument "TEM 2" --magnification 400000
  fringespan measure particle.tif --from-log            uses the checked pixel size

A check holds for the conditions it was made under. Several pictures, with the lenses normalised and the specimen's height
set before each, and several regions in the middle of each, show what one picture cannot.
"""


def _reference(_context: click.Context, _option: click.Parameter, value: str) -> str | float:
    try:
        return float(value)
    except ValueError:
        return value


def _takes_conditions(command: Callable[..., Any]) -> Callable[..., Any]:
    for option in reversed(
        [
            click.option("--instrument", default="", metavar="TEXT", help="For the log and the report."),
            click.option("--mode", default="", metavar="TEXT", help="Such as TEM or STEM."),
            click.option("--magnification", type=float, metavar="X", help="The one that the microscope indicates."),
            click.option("--camera-length", type=float, metavar="MM", help="The one that the microscope indicates."),
            click.option("--camera", default="", metavar="TEXT"),
            click.option("--binning", type=click.IntRange(min=1)),
            click.option(
                "--date", metavar="DATE", help="When the pictures were taken, as 2025-03-01; now, if left out."
            ),
            click.option("--specimen", default="", metavar="TEXT", help="Which piece of the reference material."),
            click.option("--remark", default="", metavar="TEXT"),
        ]
    ):
        command = option(command)
    return command


@click.command(help=_HELP)
@click.argument("images", nargs=-1, required=True, metavar="IMAGE...")
@click.option(
    "--reference",
    callback=_reference,
    required=True,
    metavar="PHASE|NM",
    help="Phase (built-in name or CIF file) of the reference material, or the one spacing that its certificate states, in nm.",
)
@click.option(
    "--reference-uncertainty",
    type=click.FloatRange(0, 20, max_open=True),
    metavar="PERCENT",
    help="Standard uncertainty (k = 1) of its spacings; needed with a spacing in nm. A certificate's expanded one is divided by "
    "its k.",
)
@click.option("--temperature", type=float, metavar="C", help="Of the specimen; a room's (22.5) is assumed without it.")
@click.option(
    "--tilt",
    type=click.FloatRange(0, 20),
    metavar="DEG",
    help="Standard uncertainty of the tilt off the zone about each axis.  [default: 0.5]",
)
@click.option(
    "--tolerance", type=click.FloatRange(0, min_open=True), metavar="PERCENT", help="Largest deviation allowed."
)
@click.option(
    "--acceptance",
    type=click.Choice(["simple", "guarded"]),
    default="simple",
    show_default=True,
    help="Whether the value alone must lie within the tolerance, or the value with its expanded uncertainty.",
)
@click.option(
    "--coverage",
    type=click.Choice(["k = 2", "from t"]),
    default="k = 2",
    show_default=True,
    help="Factor of the expanded uncertainty: 2, or that of Student's t for 95.45 %.",
)
@click.option("--log", "log_file", metavar="FILE|own", help="Add the check to this log, or to your own.")
@click.option("--report", metavar="FILE.html|FILE.pdf", help="Write the report.")
@click.option(
    "--standard",
    metavar="NAME",
    help="Name of the region that shows the reference; the others are measured by it, and their mismatch is given.",
)
@_takes_conditions
@takes_picture_options
@takes_output_options(
    json="Write the record with the check.",
    csv="Write the table of reflections.",
    figure="Draw the reflections on their ellipses (.png, .svg or .pdf).",
)
def check(
    images: tuple[str, ...],
    reference: str | float,
    reference_uncertainty: float | None,
    temperature: float | None,
    tilt: float | None,
    tolerance: float | None,
    acceptance: str,
    coverage: str,
    log_file: str | None,
    report: str | None,
    standard: str | None,
    date: str | None,
    picture: PictureOptions,
    output: OutputOptions,
    **about: Any,
) -> None:
    """Check, print, and write what was asked for."""
    from fringespan.magnification.check import TILT_DEG, check_magnification
    from fringespan.measurement import measure

    _refuse_impossible(report, output, images)
    moment = _moment(date)
    if picture.phases.strip().lower() != "none":
        complain("--phases plays no part in a check; --reference names the material", "fringespan check")
    conditions = _conditions(about, picture)
    chosen, uncertainty = _chosen_reference(reference, reference_uncertainty)
    pictures: list[list[Measurement]] = []
    for image in images:
        micrograph = picture.open(image)
        try:
            pictures.append([measure(micrograph, region) for region in picture.regions_of(micrograph)])
        except FringespanError as problem:
            raise type(problem)(f"{image}: {problem}") from problem
    measured = [m for group in pictures for m in group]
    used = measured if standard is None else [m for m in measured if m.region.name == standard]
    if not used:
        names = ", ".join(dict.fromkeys(m.region.name for m in measured))
        raise click.UsageError(f"--standard {standard!r} is none of the regions ({names})", click.get_current_context())
    result = check_magnification(
        used,
        chosen,
        temperature_c=temperature,
        reference_relative_uncertainty=uncertainty,
        tilt_deg=TILT_DEG if tilt is None else tilt,
        tolerance=None if tolerance is None else tolerance / 100,
        acceptance=cast("Acceptance", acceptance),
        coverage=cast("Coverage", coverage),
    )
    inside = [] if standard is None else _measured_by_standard(pictures, standard, chosen, temperature)
    _print(result, conditions, inside, output)
    _write(result, pictures, images, inside, output)
    if report is not None:
        from fringespan.export.check_report import CheckReport, write_check_report

        write_check_report(CheckReport(check=result, measurements=used, conditions=conditions, made_at=moment), report)
    if log_file is not None:
        _add_to_log(_entry(result, used, conditions, moment), log_file)


def _refuse_impossible(report: str | None, output: OutputOptions, images: Sequence[str]) -> None:
    files: list[str | Path] = [*output.files, *([report] if report is not None else [])]
    refuse_to_overwrite(images, files)
    if report is not None and Path(report).suffix.lower() not in (".html", ".pdf"):
        raise click.BadParameter(
            f"a report's file name must end in .html or .pdf, got {report!r}",
            click.get_current_context(),
            param_hint="'--report'",
        )
    if report is not None and os.path.realpath(report) in {os.path.realpath(name) for name in output.files}:
        raise click.UsageError("two results cannot be written to the same file", click.get_current_context())


def _conditions(about: dict[str, Any], picture: PictureOptions) -> Conditions:
    from fringespan.exceptions import SettingsError
    from fringespan.magnification.conditions import Conditions

    renamed = {
        **about,
        "indicated_magnification": about.pop("magnification"),
        "camera_length_mm": about.pop("camera_length"),
    }
    names = {f.name for f in fields(Conditions)}
    try:
        return Conditions(voltage_kv=picture.voltage_kv, **{k: v for k, v in renamed.items() if k in names})
    except SettingsError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem


def _chosen_reference(
    reference: str | float, uncertainty_percent: float | None
) -> tuple[Phase | ReferenceSpacing, float | None]:
    from fringespan.crystal.library import load_phase
    from fringespan.exceptions import SettingsError
    from fringespan.magnification.reference import ReferenceSpacing

    uncertainty = None if uncertainty_percent is None else uncertainty_percent / 100
    if isinstance(reference, str):
        return load_phase(reference), uncertainty
    if uncertainty is None:
        raise click.UsageError(
            "a reference spacing needs --reference-uncertainty PERCENT: its certificate's, divided by k",
            click.get_current_context(),
        )
    try:
        return ReferenceSpacing(reference, uncertainty), uncertainty
    except SettingsError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem


def _measured_by_standard(
    pictures: Sequence[Sequence[Measurement]],
    standard: str,
    reference: Phase | ReferenceSpacing,
    temperature: float | None,
) -> list[InternalStandard]:
    """Return the other regions of each picture, measured by the one of that name."""
    from fringespan.magnification.internal_standard import calibrate_within_picture

    found = []
    for group in pictures:
        own = [m for m in group if m.region.name == standard]
        others = [m for m in group if m.region.name != standard]
        if own and others:
            found.append(calibrate_within_picture(own[0], reference, others, temperature_c=temperature))
    return found


def _print(
    result: MagnificationCheck, conditions: Conditions, inside: Sequence[InternalStandard], output: OutputOptions
) -> None:
    if output.to_standard_output:
        return
    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.check_text import check_lines, internal_standard_lines
    from fringespan.export.log_text import conditions_text
    from fringespan.export.plain_text import Line, paragraph

    width = text_width()
    lines = check_lines(result, width)
    lines += paragraph(conditions_text(conditions), width, first="  conditions: ", emphasis="quiet")
    for one in inside:
        lines += [Line(""), *internal_standard_lines(one, width)]
    print_lines(lines)


def _write(
    result: MagnificationCheck,
    pictures: Sequence[Sequence[Measurement]],
    images: Sequence[str],
    inside: Sequence[InternalStandard],
    output: OutputOptions,
) -> None:
    from fringespan.export.check_text import reflection_table
    from fringespan.export.table import csv_text
    from fringespan.record import document_of, json_text, magnification_values, plain_values, record_of

    if output.json is not None:
        values = magnification_values(result)
        if inside:
            values["mismatches"] = plain_values([m for one in inside for m in one.mismatches], "mismatches")
        documents = [document_of(record_of(group, magnification=values)) for group in pictures]
        files = _one_file_a_picture(output.json, images)
        for document, file in zip(documents, files, strict=False):
            deliver(lambda document=document: json_text(document), str(file))  # type: ignore[misc]
        if output.json == STANDARD_OUTPUT:
            deliver(lambda: json_text(documents[0] if len(documents) == 1 else documents), STANDARD_OUTPUT)
    deliver(lambda: csv_text(reflection_table(result)), output.csv)
    if output.figure is not None:
        from fringespan.export.check_figure import check_figure
        from fringespan.export.figure import write_figure

        write_figure(check_figure(result), output.figure)


def _one_file_a_picture(file: str, images: Sequence[str]) -> list[Path]:
    """Return the record's file, or one a picture with the picture's name put into it."""
    path = Path(file)
    if file == STANDARD_OUTPUT:
        return []
    if len(images) == 1:
        return [path]
    names = [os.path.basename(os.path.normpath(image)).partition(".")[0] or "picture" for image in images]
    return [
        path.with_name(f"{path.stem}.{name}{f'-{names[:i].count(name) + 1}' if name in names[:i] else ''}{path.suffix}")
        for i, name in enumerate(names)
    ]


def _add_to_log(entry: LogEntry, log_file: str) -> None:
    from fringespan.magnification.log import CheckLog, log_path

    path = log_path() if log_file == OWN_LOG else Path(log_file)
    with CheckLog(path) as log:
        added = log.add(entry)
    click.echo(f"entry {added.number} added to the log {path}", err=True)


def _moment(date: str | None) -> datetime:
    """Return when the pictures were taken; a date without a zone is local time."""
    from datetime import UTC, datetime

    if date is None:
        return datetime.now(UTC)
    try:
        return datetime.fromisoformat(date).astimezone(UTC)
    except ValueError:
        raise click.BadParameter(
            f"{date!r} is no date as 2025-03-01 or 2025-03-01T10:20", click.get_current_context(), param_hint="'--date'"
        ) from None


def _entry(
    result: MagnificationCheck, measured: Sequence[Measurement], conditions: Conditions, moment: datetime
) -> LogEntry:
    import json
    from importlib import metadata

    from fringespan.magnification.log import LogEntry
    from fringespan.record import magnification_values

    pictures = {id(m.micrograph): m.micrograph for m in measured}.values()
    row, column = (u / s for u, s in zip(result.scale_uncertainty, result.scale, strict=True))
    return LogEntry(
        checked_at=moment.isoformat(),
        conditions=conditions,
        pictures=", ".join(p.name for p in pictures),
        sha256=", ".join(p.sha256() for p in pictures),
        reference=result.reference,
        temperature_c=result.temperature_c if result.temperature_stated else None,
        nominal_pixel_size_nm=result.nominal_pixel_size_nm,
        pixel_size_nm=result.pixel_size_nm,
        relative_uncertainty=(row, column),
        shared_error=isinstance(result.pixel_size_relative_uncertainty, float),
        shear=result.shear,
        shear_uncertainty=result.shear_uncertainty,
        coverage_factor=result.coverage_factor,
        tolerance=result.tolerance,
        verdict=result.verdict,
        program_version=metadata.version("fringespan"),
        details=json.dumps(magnification_values(result)),
    )
