"""`fringespan log`: the log of magnification checks."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fringespan.command_line.output_options import STANDARD_OUTPUT, deliver

if TYPE_CHECKING:
    from fringespan.magnification.log import CheckLog, LogFilter

__all__ = ["log"]

_HELP = """List, plot, export and import the log of magnification checks.

The log is a file of your own; its place is printed by `list`. `--log FILE` names another, the environment variable
FRINGESPAN_LOG another one for good. Several programs may use it at once. Nothing is ever deleted: an entry found wrong is
withdrawn and stays in it.

\b
Examples:
  fringespan log list --instrument "TEM 2"
  fringespan log list --overdue 90
  fringespan log plot trend.pdf --magnification 400000
  fringespan log export checks.csv
  fringespan log import checks.csv
  fringespan log withdraw 12 --because "wrong specimen"
"""


def _takes_log(command: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--log", "file", metavar="FILE", help="Another log than your own.")(command)


def _takes_filter(command: Callable[..., Any]) -> Callable[..., Any]:
    for option in reversed(
        [
            click.option("--instrument", metavar="TEXT"),
            click.option("--mode", metavar="TEXT"),
            click.option("--magnification", "indicated_magnification", type=float, metavar="X"),
            click.option("--camera-length", "camera_length_mm", type=float, metavar="MM"),
            click.option("--camera", metavar="TEXT"),
            click.option("--binning", type=int),
            click.option("--voltage", "voltage_kv", type=float, metavar="KV"),
            click.option("--since", metavar="DATE", help="From this day on, as 2025-03-01."),
            click.option("--until", metavar="DATE", help="Before this day."),
            click.option("--withdrawn", is_flag=True, help="Show also entries that were withdrawn."),
        ]
    ):
        command = option(command)
    return command


@click.group(help=_HELP)
def log() -> None:
    """Carry the commands of the log."""


@log.command("list")
@_takes_log
@_takes_filter
@click.option("--most", type=click.IntRange(min=1), default=50, show_default=True, help="Show at most this many.")
@click.option(
    "--overdue", type=click.FloatRange(min=0), metavar="DAYS", help="Show the magnifications not checked for this long."
)
@click.option("--json", "json_file", metavar="FILE", help="Write the entries with every value, - for standard output.")
def list_entries(file: str | None, most: int, overdue: float | None, json_file: str | None, **wanted: Any) -> None:
    """List checks, newest first."""
    from dataclasses import asdict

    from fringespan.command_line.printing import print_lines, text_width
    from fringespan.export.log_text import log_lines, overdue_lines
    from fringespan.export.plain_text import Line, paragraph
    from fringespan.record import json_text

    width = text_width()
    with _opened(file) as book:
        entries = book.entries(_filter(wanted), most=most)
        late = None if overdue is None else book.overdue(overdue)
        lines = paragraph(
            f"{len(book)} {'entry' if len(book) == 1 else 'entries'} in {book.path}", width, emphasis="heading"
        )
    lines += log_lines(entries, width) if late is None else overdue_lines(late, overdue or 0.0, width)
    if late is None and len(entries) == most:
        lines.append(Line(f"Only the newest {most} are shown (--most).", "quiet"))
    if json_file != STANDARD_OUTPUT:
        print_lines(lines)
    shown = entries if late is None else late
    deliver(lambda: json_text({"entries": [asdict(item) for item in shown]}), json_file)


@log.command("plot")
@click.argument("figure", metavar="FIGURE")
@_takes_log
@_takes_filter
def plot(figure: str, file: str | None, **wanted: Any) -> None:
    """Draw pixel size against time into FIGURE (.png, .svg or .pdf)."""
    from fringespan.exceptions import SettingsError
    from fringespan.export.figure import figure_format, write_figure
    from fringespan.export.trend_figure import trend_figure

    try:
        figure_format(figure)
    except SettingsError as problem:
        raise click.UsageError(str(problem), click.get_current_context()) from problem
    with _opened(file) as book:
        trend = book.trend(_filter(wanted))
    write_figure(trend_figure(trend), figure)
    click.echo(f"{len(trend.checked_at)} checks drawn in {figure}", err=True)


@log.command("export")
@click.argument("table", metavar="TABLE.csv")
@_takes_log
def export(table: str, file: str | None) -> None:
    """Write all entries, withdrawn ones too, into TABLE.csv, - for standard output."""
    with _opened(file) as book:
        text = book.csv_text()
    deliver(lambda: text, table)


@log.command("import")
@click.argument("table", metavar="TABLE.csv")
@_takes_log
def import_table(table: str, file: str | None) -> None:
    """Add the entries of TABLE.csv that are not in the log yet."""
    from fringespan.exceptions import RecordError

    try:
        with open(table, encoding="utf-8-sig", newline="") as source:
            text = source.read()
    except UnicodeDecodeError:
        raise RecordError(f"{table}: not a text in UTF-8; save the table as CSV in UTF-8") from None
    with _opened(file, new=True) as book:
        added, known = book.add_csv(text, table)
    click.echo(f"{added} entries added to {book.path}, {known} were there already", err=True)


@log.command("withdraw")
@click.argument("number", type=int)
@click.option("--because", required=True, metavar="TEXT", help="Why it is not to be used.")
@_takes_log
def withdraw(number: int, because: str, file: str | None) -> None:
    """Mark the entry NUMBER as not to be used; it stays in the log."""
    with _opened(file) as book:
        book.withdraw(number, because)
    click.echo(f"entry {number} is withdrawn; fringespan log restore {number} takes that back", err=True)


@log.command("restore")
@click.argument("number", type=int)
@_takes_log
def restore(number: int, file: str | None) -> None:
    """Take back that the entry NUMBER was withdrawn."""
    with _opened(file) as book:
        book.restore(number)
    click.echo(f"entry {number} is in use again", err=True)


def _opened(file: str | None, *, new: bool = False) -> CheckLog:
    from fringespan.exceptions import RecordError
    from fringespan.magnification.log import CheckLog, log_path

    path = log_path() if file is None else Path(file)
    if not new and not path.is_file():
        raise RecordError(
            f"{path}: there is no log of magnification checks yet; make one with fringespan check IMAGE --reference PHASE "
            "--log own, or name another with --log FILE"
        )
    return CheckLog(path)


def _filter(wanted: dict[str, Any]) -> LogFilter:
    from fringespan.magnification.log import LogFilter

    return LogFilter(**wanted)
