"""Planes and directions in writing."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.crystal.notation import (
    direction_text,
    four_index_direction,
    four_index_plane,
    parse_indices,
    plane_text,
    three_index_direction,
    three_index_plane,
)
from fringespan.exceptions import PhaseError

INDICES = st.tuples(*[st.integers(-12, 12)] * 3).filter(any)


@pytest.mark.parametrize(
    ("text", "indices"),
    [
        ("1,-1,0", (1, -1, 0)),
        ("1 -1 0", (1, -1, 0)),
        ("[1-10]", (1, -1, 0)),
        ("(11\u03050)", (1, -1, 0)),
        ("0002", (0, 0, 0, 2)),
        ("{2 -1 -1 0}", (2, -1, -1, 0)),
        ("<1\u221210>", (1, -1, 0)),
        ("10,0,-12", (10, 0, -12)),
    ],
)
def test_indices_are_read_as_people_write_them(text: str, indices: tuple[int, ...]) -> None:
    assert parse_indices(text) == indices


@pytest.mark.parametrize("text", ["", "0,0,0", "1,2", "a,b,c", "1,2,3,4,5", "1.5,0,0"])
def test_indices_that_are_none_are_refused(text: str) -> None:
    with pytest.raises(PhaseError, match="indices"):
        parse_indices(text)


def test_negative_indices_get_an_overbar() -> None:
    assert plane_text((1, -1, 1)) == "(11\u03051)"
    assert direction_text((1, 1, 0)) == "[110]"
    assert plane_text((1, 0, -12)) == "(1 0 1\u03052\u0305)"


# basal plane, prism planes, and close-packed direction of hexagonal metals, as every textbook writes them
@pytest.mark.parametrize(
    ("three", "four"),
    [((0, 0, 2), (0, 0, 0, 2)), ((1, 0, 0), (1, 0, -1, 0)), ((1, 1, 0), (1, 1, -2, 0)), ((1, 0, 1), (1, 0, -1, 1))],
)
def test_four_index_planes(three: tuple[int, ...], four: tuple[int, ...]) -> None:
    assert four_index_plane(three) == four
    assert three_index_plane(four) == three


@pytest.mark.parametrize(
    ("three", "four"),
    [((1, 0, 0), (2, -1, -1, 0)), ((0, 0, 1), (0, 0, 0, 1)), ((2, 1, 0), (1, 0, -1, 0)), ((1, 1, 0), (1, 1, -2, 0))],
)
def test_four_index_directions(three: tuple[int, ...], four: tuple[int, ...]) -> None:
    assert four_index_direction(three) == four
    assert three_index_direction(four) == three


@given(INDICES)
def test_written_planes_read_back(hkl: tuple[int, int, int]) -> None:
    assert parse_indices(plane_text(hkl)) == hkl
    assert three_index_plane(parse_indices(plane_text(hkl, hexagonal=True))) == hkl


@given(INDICES)
def test_four_index_directions_keep_the_direction(uvw: tuple[int, int, int]) -> None:
    back = three_index_direction(four_index_direction(uvw))
    assert np.all(np.cross(back, uvw) == 0)
    assert np.dot(back, uvw) > 0
