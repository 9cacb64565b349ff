"""The caution: something a careful person would say about a result, with its remedy.

Each room of the package adds its own cautions where the fact is known; this module holds the value, its order, and
nothing else.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

__all__ = ["Caution", "Gravity", "gravest_first"]

Gravity = Literal["grave", "warning", "note"]

_ORDER: dict[Gravity, int] = {"grave": 0, "warning": 1, "note": 2}


@dataclass(frozen=True, slots=True)
class Caution:
    """One caution about a picture, a region, or a peak.

    Parameters
    ----------
    code : str
        Short, stable identifier in words joined by hyphens, for records and scripts.
    gravity : {"grave", "warning", "note"}
        "grave": the number may be wrong in its meaning; "warning": its uncertainty may be; "note": worth knowing.
    text : str
        One sentence of the trade that says what is the matter.
    remedy : str
        What the user can do about it.
    """

    code: str
    gravity: Gravity
    text: str
    remedy: str

    def __post_init__(self) -> None:
        if self.gravity not in _ORDER:
            raise ValueError(f"gravity must be one of {', '.join(_ORDER)}, got {self.gravity!r}")


def gravest_first(cautions: Iterable[Caution]) -> tuple[Caution, ...]:
    """Return the cautions sorted by gravity, each text only once, otherwise in the order given."""
    unique = list(dict.fromkeys(cautions))
    return tuple(sorted(unique, key=lambda caution: _ORDER[caution.gravity]))
