"""The command line: arguments in, tables, records and figures out.

Only click is imported before a command is known; each command imports what it needs when it runs.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from importlib import import_module
from typing import Any, NoReturn

import click

from fringespan.exceptions import FringespanError

__all__ = ["main", "program"]

DONE, UNUSABLE_INPUT, WRONG_USAGE, INTERRUPTED = 0, 1, 2, 130

# command: what it does, in a line; the module and the function in it bear its name
_COMMANDS = {
    "demo": "Measure a sample picture into a new folder, to see how it works.",
    "measure": "Measure fringe spacings and angles in pictures.",
    "profile": "Measure the fringes along a line.",
    "check": "Check the magnification by a reference material.",
    "log": "List, plot, export and import the log of magnification checks.",
    "expect": "List the reflections that a phase would show.",
    "rank": "Rank phases for typed spacings and angles.",
    "view": "Open a picture in napari and measure with the mouse.",
    "beam": "Show wavelength, scattering angles and contrast transfer.",
}

_HELP = """Measure lattice-fringe spacings and angles in TEM and STEM pictures, with uncertainties one can defend.

\b
First steps:
  fringespan demo                            measure a sample picture, look at the results
  fringespan measure picture.tif             everything in the picture
  fringespan measure picture.tif --pixel-size 0.021 --pixel-size-uncertainty 1.5
      --region "grain A: 40,30 40,286 296,286 296,30" --json record.json

Positions are (row, column) in pixels, counted from 0 at the top left. Spacings are in nm. Directions are in degrees
counter-clockwise from the right and are those of the spacing, at right angles to the fringes. Uncertainties are
standard uncertainties: 0.2355(4) nm means 0.2355 nm with 0.0004 nm.

The exit status is 0 when done (also when no fringe was found), 1 when the input could not be used, 2 for wrong usage.
"""


class _Commands(click.Group):
    """The commands, each loaded when it is called; every error becomes one line and an exit status."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = getattr(import_module(f"fringespan.command_line.{cmd_name}"), cmd_name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        # written from the table above: help does not load the commands
        with formatter.section("Commands"):
            formatter.write_dl(list(_COMMANDS.items()))

    def main(
        self,
        args: Sequence[str] | None = None,
        prog_name: str | None = None,
        complete_var: str | None = None,
        standalone_mode: bool = True,
        **extra: Any,
    ) -> Any:
        def run() -> Any:
            return super(_Commands, self).main(args, prog_name, complete_var, standalone_mode=False, **extra)

        return sys.exit(_status_of(run)) if standalone_mode else run()


def _status_of(run: Any) -> int:
    try:
        status = run()
    except click.UsageError as problem:
        command = problem.ctx.command_path if problem.ctx is not None else "fringespan"
        complain(f"{problem.format_message()} (see {command} --help)", command)
        return WRONG_USAGE
    except click.ClickException as problem:
        complain(problem.format_message())
        return problem.exit_code
    except (click.Abort, KeyboardInterrupt):
        complain("stopped")
        return INTERRUPTED
    except (FringespanError, OSError, MemoryError) as problem:
        complain(in_words(problem))
        return UNUSABLE_INPUT
    return status if isinstance(status, int) else DONE


def in_words(problem: FringespanError | OSError | MemoryError) -> str:
    """Return what went wrong with the input, in words."""
    if isinstance(problem, MemoryError):
        return "not enough memory; measure a smaller region"
    if isinstance(problem, OSError):
        name = f"{problem.filename}: " if problem.filename is not None else ""
        return f"{name}{problem.strerror or problem}; check the name and whether it may be read"
    return str(problem)


def complain(message: str, about: str = "fringespan") -> None:
    """Write one line to standard error."""
    from fringespan.export.plain_text import one_line

    click.echo(f"{about}: {one_line(message)}", err=True)


@click.group(
    cls=_Commands, help=_HELP, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.version_option(package_name="fringespan")
def program() -> None:
    """Carry the options that stand before a command."""


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Run the command line and end the process with its exit status.

    Parameters
    ----------
    arguments : sequence of str, optional
        Without the program's name; those of the process by default.
    """
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            # a name that the terminal cannot show is written as its code, instead of breaking the output
            stream.reconfigure(errors="backslashreplace")
    program.main(arguments, prog_name="fringespan")
    raise AssertionError("the line above ends the process")
