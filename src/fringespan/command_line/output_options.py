"""The options that say where results go: record, table, figure."""

from __future__ import annotations

import functools
import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click

from fringespan.exceptions import SettingsError

__all__ = ["STANDARD_OUTPUT", "OutputOptions", "deliver", "refuse_to_overwrite", "takes_output_options"]

STANDARD_OUTPUT = "-"


@dataclass(frozen=True, slots=True, kw_only=True)
class OutputOptions:
    """Where results go; each None where not wanted, "-" for standard output.

    Attributes
    ----------
    json, csv, figure : str or None
    """

    json: str | None
    csv: str | None
    figure: str | None

    @property
    def to_standard_output(self) -> bool:
        """Whether a file's content takes the place of the text for people."""
        return STANDARD_OUTPUT in (self.json, self.csv)

    @property
    def files(self) -> tuple[str, ...]:
        """Names of the files to be written."""
        return tuple(name for name in (self.json, self.csv, self.figure) if name not in (None, STANDARD_OUTPUT))


def takes_output_options(*, json: str, csv: str, figure: str) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Give a command `--json`, `--csv` and `--figure` with these help texts, collected as its argument `output`."""
    options = [
        click.option("--json", metavar="FILE", help=json),
        click.option("--csv", metavar="FILE", help=csv),
        click.option("--figure", metavar="FILE", help=figure),
    ]

    def decorate(command: Callable[..., Any]) -> Callable[..., Any]:
        @functools.wraps(command)
        def with_collected_options(
            *arguments: Any, json: str | None, csv: str | None, figure: str | None, **others: Any
        ) -> Any:
            output = OutputOptions(json=json, csv=csv, figure=figure)
            _refuse_impossible_names(output)
            return command(*arguments, output=output, **others)

        for option in reversed(options):
            with_collected_options = option(with_collected_options)
        return with_collected_options

    return decorate


def _refuse_impossible_names(output: OutputOptions) -> None:
    if output.json == output.csv == STANDARD_OUTPUT:
        raise click.UsageError(
            "--json and --csv cannot both be written to standard output", click.get_current_context()
        )
    if output.figure is not None:
        from fringespan.export.figure import figure_format

        try:
            figure_format(output.figure)
        except SettingsError as problem:
            raise click.BadParameter(str(problem), click.get_current_context(), param_hint="'--figure'") from problem
    for name in output.files:
        if not Path(name).name:
            raise click.UsageError(f"{name!r} is no name of a file", click.get_current_context())
    places = [os.path.realpath(name) for name in output.files]
    if len(set(places)) < len(places):
        raise click.UsageError("two results cannot be written to the same file", click.get_current_context())


def deliver(text: Callable[[], str], destination: str | None) -> None:
    """Write a text to the file, or to standard output for "-"; None: not wanted, and the text is not made."""
    from fringespan.command_line.printing import print_text
    from fringespan.output_file import write_whole_file

    if destination == STANDARD_OUTPUT:
        print_text(text())
    elif destination is not None:
        # a name that is no text in UTF-8 is written as its code
        write_whole_file(destination, text().encode("utf-8", errors="backslashreplace"))


def refuse_to_overwrite(pictures: Sequence[str], files: Sequence[str | Path]) -> None:
    """Refuse to write a result in the place of a picture.

    Raises
    ------
    click.UsageError
    """
    places = {os.path.realpath(name) for name in files}
    for picture in pictures:
        if os.path.realpath(picture) in places:
            raise click.UsageError(
                f"{picture} is a picture to be measured and would be overwritten; give the result another name",
                click.get_current_context(),
            )
