"""Text that reads as well on a terminal as in an e-mail."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.export.plain_text import Column, aligned_table, enumeration, one_line, paragraph, shortened

SPACINGS = Column("d", "nm", ["0.2355(4)", "10.20(5)", "withheld", "-"])
NUMBERS = Column("", "", ["1", "2", "3", "4"])
SIGNAL = Column("S/N", "", ["23", "7", "105", "4"], rank=2)
ORIGIN = Column("origin", "", ["found", "found", "lattice point", "found"], "left", rank=1)


def texts(lines):
    return [line.text for line in lines]


def test_decimal_points_stand_beneath_each_other_and_headings_above_their_numbers():
    lines, left_out = aligned_table([NUMBERS, SPACINGS, SIGNAL, ORIGIN], 80, indent="  ")
    assert texts(lines) == [
        "              d  S/N  origin",
        "           (nm)",
        "  1   0.2355(4)   23  found",
        "  2  10.20(5)      7  found",
        "  3   withheld   105  lattice point",
        "  4   -            4  found",
    ]
    assert left_out == []


def test_columns_of_the_highest_rank_are_left_out_first_where_there_is_no_room():
    lines, left_out = aligned_table([NUMBERS, SPACINGS, SIGNAL, ORIGIN], 30)
    assert left_out == ["S/N"]
    assert max(map(len, texts(lines))) <= 30
    lines, left_out = aligned_table([NUMBERS, SPACINGS, SIGNAL, ORIGIN], 5)
    assert left_out == ["S/N", "origin"]
    assert texts(lines)[2] == "1   0.2355(4)"


def test_a_table_without_rows_is_its_headings():
    lines, _ = aligned_table([Column("d", "nm", []), Column("origin", "", [], "left")], 80)
    assert texts(lines) == ["   d  origin", "(nm)"]


@pytest.mark.parametrize(
    ("text", "safe"),
    [
        ("a.tif", "a.tif"),
        ("two\nlines\r\n", "two lines"),
        ("\x1b[31mred\x07", "\N{REPLACEMENT CHARACTER}[31mred\N{REPLACEMENT CHARACTER}"),
        ("\udcff.tif", "\N{REPLACEMENT CHARACTER}.tif"),
        ("grün 晶粒", "grün 晶粒"),
    ],
)
def test_names_cannot_break_the_line_or_the_terminal(text, safe):
    assert one_line(text) == safe


def test_long_names_keep_their_beginning_and_end():
    assert shortened("particle_2026_07_04_overview_frame_000123.tif", 21) == "particle_...00123.tif"
    assert shortened("short.tif", 21) == "short.tif"


@given(text=st.text(max_size=300), width=st.integers(10, 120))
def test_a_paragraph_keeps_the_words_and_the_width(text, width):
    lines = texts(paragraph(text, width, first="  note: "))
    assert "".join(lines).replace("note:", "", 1).split() == "".join(lines).replace("note:", "", 1).split()
    assert " ".join(" ".join(lines).split()[1:]) == " ".join(one_line(text).split())
    for line in lines:
        assert len(line) <= width or len(line.removeprefix("  note: ").split()) <= 1


def test_options_are_not_broken_at_their_hyphens():
    assert texts(paragraph("give --pixel-size NM", 15)) == ["give", "--pixel-size NM"]


def test_pieces_of_an_enumeration_are_never_broken():
    pieces = ["1-2 70.5(1)", "1-3 54.7(1)", "2-3 54.7(1)"]
    assert texts(enumeration(pieces, 36, first="angles: ")) == [
        "angles: 1-2 70.5(1), 1-3 54.7(1),",
        "        2-3 54.7(1)",
    ]
