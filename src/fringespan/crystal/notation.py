"""Planes and directions in writing: overbars, four indices."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence

from fringespan.exceptions import PhaseError

__all__ = [
    "direction_text",
    "four_index_direction",
    "four_index_plane",
    "indices_text",
    "parse_indices",
    "plane_text",
    "three_index_direction",
    "three_index_plane",
]

_OVERBAR = "\u0305"


def indices_text(indices: Sequence[int]) -> str:
    """Write indices side by side, negative ones with an overbar; with spaces as soon as one has two digits.

    >>> indices_text((1, -1, 0)) == "11\u03050"
    True
    """
    digits = ["".join(d + _OVERBAR for d in str(-i)) if i < 0 else str(i) for i in indices]
    return (" " if any(abs(i) > 9 for i in indices) else "").join(digits)


def plane_text(hkl: Sequence[int], *, hexagonal: bool = False) -> str:
    """Write a plane as (hkl), or as (hkil) on hexagonal axes."""
    return f"({indices_text(four_index_plane(hkl) if hexagonal else hkl)})"


def direction_text(uvw: Sequence[int], *, hexagonal: bool = False) -> str:
    """Write a direction as [uvw], or as [uvtw] on hexagonal axes."""
    return f"[{indices_text(four_index_direction(uvw) if hexagonal else uvw)}]"


def four_index_plane(hkl: Sequence[int]) -> tuple[int, int, int, int]:
    """Return (h, k, i, l) with i = -(h + k).

    >>> four_index_plane((1, 0, 0))
    (1, 0, -1, 0)
    """
    h, k, third = (int(v) for v in hkl)
    return h, k, -h - k, third


def three_index_plane(hkil: Sequence[int]) -> tuple[int, int, int]:
    """Return (h, k, l) of four indices, refusing those with h + k + i unequal to 0."""
    h, k, i, last = (int(v) for v in hkil)
    if h + k + i:
        raise PhaseError(f"the first three of four indices add up to 0, got {tuple(hkil)}; check the third")
    return h, k, last


def four_index_direction(uvw: Sequence[int]) -> tuple[int, int, int, int]:
    """Return the smallest whole [u, v, t, w] along [uvw] of a hexagonal cell, with u + v + t = 0.

    >>> four_index_direction((1, 0, 0))
    (2, -1, -1, 0)
    >>> four_index_direction((0, 0, 1))
    (0, 0, 0, 1)
    """
    u, v, w = (int(x) for x in uvw)
    four = (2 * u - v, 2 * v - u, -u - v, 3 * w)
    common = math.gcd(*four) or 1
    a, b, c, d = (x // common for x in four)
    return a, b, c, d


def three_index_direction(uvtw: Sequence[int]) -> tuple[int, int, int]:
    """Return the smallest whole [u, v, w] along [uvtw]."""
    u, v, t, w = (int(x) for x in uvtw)
    if u + v + t:
        raise PhaseError(f"the first three of four indices add up to 0, got {tuple(uvtw)}; check the third")
    three = (2 * u + v, 2 * v + u, w)
    common = math.gcd(*three) or 1
    a, b, c = (x // common for x in three)
    return a, b, c


def parse_indices(text: str, *, what: str = "indices") -> tuple[int, ...]:
    """Read three or four whole indices: "1,-1,0", "1 -1 0", "[1-10]", "(0002)", with a minus or an overbar.

    Raises
    ------
    PhaseError
        If they are not three or four whole numbers, or all zero.
    """
    plain = text.strip().strip("[](){}<>").replace("\u2212", "-").replace(",", " ")
    parts = plain.split()
    if len(parts) == 1:
        # side by side: every digit is an index, with a minus before it or a bar over it
        parts = re.findall(rf"-?\d{_OVERBAR}?|.", plain)
    parts = ["-" + part.replace(_OVERBAR, "") if _OVERBAR in part else part for part in parts]
    try:
        numbers = tuple(int(part) for part in parts)
    except ValueError:
        numbers = ()
    if len(numbers) not in (3, 4) or not any(numbers):
        raise PhaseError(f"{what} must be three or four whole numbers, not all 0, such as 1,-1,0; got {text!r}")
    return numbers
