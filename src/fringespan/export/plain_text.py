"""Text for people: lines of a given width that read as well on a terminal as in an e-mail."""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

__all__ = ["Column", "Emphasis", "Line", "aligned_table", "enumeration", "one_line", "paragraph", "shortened"]

Emphasis = Literal["heading", "subheading", "plain", "quiet", "grave", "warning", "note"]

_GAP = "  "


@dataclass(frozen=True, slots=True)
class Line:
    """One line of text and what it is; a terminal may show that by colour."""

    text: str
    emphasis: Emphasis = "plain"


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table.

    Attributes
    ----------
    heading, unit : str
        Above each other.
    cells : sequence of str
    alignment : {"point", "left"}
        Numbers stand with their decimal points beneath each other.
    rank : int
        Where the table is too wide, columns of the highest rank are left out first; those of rank 0 never are.
    """

    heading: str
    unit: str
    cells: Sequence[str]
    alignment: Literal["point", "left"] = "point"
    rank: int = 0


def one_line(text: str) -> str:
    """Return a text without line breaks or control characters, safe to print."""
    return "".join(c if c.isprintable() else " " if c.isspace() else "\N{REPLACEMENT CHARACTER}" for c in text).strip()


def shortened(text: str, width: int) -> str:
    """Return a text on one line, its middle left out where it is longer than `width`."""
    text = one_line(text)
    if len(text) <= width:
        return text
    kept = max(width, 5) - 3
    return f"{text[: (kept + 1) // 2]}...{text[len(text) - kept // 2 :]}"


def paragraph(text: str, width: int, *, first: str = "", emphasis: Emphasis = "plain") -> list[Line]:
    """Return a text broken into lines; the first begins with `first`, the others are set in by its length."""
    return _set_in(one_line(text).split(), width, first, emphasis)


def enumeration(pieces: Sequence[str], width: int, *, first: str = "", emphasis: Emphasis = "plain") -> list[Line]:
    """Return pieces of text one after the other, separated by commas; no piece is broken."""
    return _set_in([f"{piece}," for piece in pieces[:-1]] + list(pieces[-1:]), width, first, emphasis)


def _set_in(words: Sequence[str], width: int, first: str, emphasis: Emphasis) -> list[Line]:
    lines, line = [], first
    for word in words:
        if len(line) + 1 + len(word) > width and len(line) > len(first):
            lines.append(line)
            line = " " * len(first)
        line += word if len(line) == len(first) else f" {word}"
    return [Line(text, emphasis) for text in [*lines, line]]


def aligned_table(columns: Sequence[Column], width: int, *, indent: str = "") -> tuple[list[Line], list[str]]:
    """Set columns beside each other.

    Parameters
    ----------
    columns : sequence of Column
        All with the same number of cells.
    width : int
        Characters that a line may have.
    indent : str, optional
        What each line begins with.

    Returns
    -------
    lines : list of Line
        The headings, their units if there are any, then a line a row.
    left_out : list of str
        Headings of the columns for which there was no room, in their order.
    """
    blocks = [_set_column(column) for column in columns]
    shown = list(range(len(columns)))

    def needed() -> int:
        return len(indent) + sum(len(blocks[i][0]) for i in shown) + len(_GAP) * (len(shown) - 1)

    while needed() > width and any(columns[i].rank for i in shown):
        # of columns of the same rank the last one goes first
        shown.remove(max(shown, key=lambda i: (columns[i].rank, i)))
    texts = [(indent + _GAP.join(cells)).rstrip() for cells in zip(*(blocks[i] for i in shown), strict=True)]
    left_out = [column.heading for i, column in enumerate(columns) if i not in shown]
    heads = texts[:2] if texts[1].strip() else texts[:1]
    return [*(Line(text, "subheading") for text in heads), *(Line(text) for text in texts[2:])], left_out


def _set_column(column: Column) -> list[str]:
    unit = f"({column.unit})" if column.unit else ""
    if column.alignment == "left":
        texts = [column.heading, unit, *column.cells]
        width = max(map(_shown_width, texts))
        return [text + " " * (width - _shown_width(text)) for text in texts]
    before = [_length_before_point(cell) for cell in column.cells]
    longest = max(before, default=0)
    texts = [" " * (longest - n) + cell for n, cell in zip(before, column.cells, strict=True)]
    inner = max(map(len, texts), default=0)
    width = max(inner, len(column.heading), len(unit))
    # the numbers stand as a block under the end of their heading
    return [column.heading.rjust(width), unit.rjust(width), *(text.ljust(inner).rjust(width) for text in texts)]


def _shown_width(text: str) -> int:
    """Return how many places a text takes; a bar over an index takes none."""
    return sum(not unicodedata.combining(character) for character in text)


def _length_before_point(cell: str) -> int:
    number = re.match(r"[-+]?\d+", cell)
    # words begin where the whole numbers end, so that they don't push the numbers aside
    return len(number[0]) if number else min(len(cell), 1)
