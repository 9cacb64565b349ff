"""Results on standard output: coloured on a terminal, as wide as it is."""

from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from fringespan.export.plain_text import Line

__all__ = ["print_lines", "print_text", "text_width"]

_WIDTH_ELSEWHERE = 80
_WIDEST = 140

_STYLES: dict[str, dict[str, Any]] = {
    "heading": {"bold": True},
    "subheading": {"underline": False, "bold": True},
    "quiet": {"dim": True},
    "grave": {"fg": "red", "bold": True},
    "warning": {"fg": "yellow"},
    "note": {"fg": "cyan"},
}


def text_width() -> int:
    """Return how many characters a line should have: those of the terminal, or what an e-mail shows."""
    return max(20, min(_WIDEST, shutil.get_terminal_size((_WIDTH_ELSEWHERE, 24)).columns))


def print_lines(lines: Iterable[Line]) -> None:
    """Print text for people; its emphasis becomes colour on a terminal, unless NO_COLOR is set."""
    print_text("\n".join(click.style(line.text, **_STYLES.get(line.emphasis, {})) for line in lines) + "\n")


def print_text(text: str) -> None:
    """Write to standard output; a reader that has gone away ends the output, not the work."""
    colour = False if os.environ.get("NO_COLOR") else None  # None: only on a terminal
    try:
        click.echo(text, nl=False, color=colour)
        sys.stdout.flush()
    except BrokenPipeError:
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, sys.stdout.fileno())
        os.close(nowhere)
