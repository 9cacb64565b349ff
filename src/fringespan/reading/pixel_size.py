"""What a file says about its pixel size, and how far that can be believed."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from fringespan.cautions import Caution
from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import PIXEL_SIZE_LIMITS_NM
from fringespan.reading.length_units import is_inch, is_no_unit, is_reciprocal_or_angle, nm_per_unit

__all__ = ["BelievedPixelSize", "StatedPixelSize", "believe"]

_AGREEMENT = 0.005
_REMEDY = "Give the pixel size in nm, from the microscope's log or a magnification check."


@dataclass(frozen=True, slots=True)
class StatedPixelSize:
    """One place in a file that states a pixel size.

    Parameters
    ----------
    row, column : float
        Length of a pixel along the rows' axis (down) and the columns' axis (right), in `unit`.
    unit : str or None
        As written in the file.
    source : str
        Where it is written, in words.
    """

    row: float
    column: float
    unit: str | None
    source: str


@dataclass(frozen=True, slots=True)
class BelievedPixelSize:
    """The pixel size to measure with.

    Parameters
    ----------
    nm : (float, float) or None
        Along (row, column); None if nothing believable was found.
    source : str
        Where it came from; empty if nowhere.
    cautions : tuple of Caution
        What a user should know about it.
    """

    nm: tuple[float, float] | None
    source: str
    cautions: tuple[Caution, ...]


def believe(stated: Sequence[StatedPixelSize], path: Path) -> BelievedPixelSize:
    """Choose the first believable pixel size.

    Parameters
    ----------
    stated : sequence of StatedPixelSize
        The most trustworthy first.
    path : Path
        The file, for messages.

    Raises
    ------
    UnreadablePictureError
        If the unit is 1/length or an angle: the file is a diffraction pattern.
    """
    believed: list[tuple[tuple[float, float], StatedPixelSize]] = []
    doubts: list[str] = []
    for statement in stated:
        if statement.unit is not None and is_reciprocal_or_angle(statement.unit):
            raise UnreadablePictureError(
                f"{path}: calibrated in {statement.unit} ({statement.source}), so it is a diffraction pattern or a "
                "transform and not a picture; measure the picture itself"
            )
        size_nm = _size_nm(statement)
        if isinstance(size_nm, str):
            doubts.append(f"{statement.source}: {size_nm}")
        else:
            believed.append((size_nm, statement))
    if not believed:
        return BelievedPixelSize(None, "", (_not_known(doubts),))
    size, statement = believed[0]
    others = [
        f"{other.source}: {o[0]:.5g} x {o[1]:.5g} nm"
        for o, other in believed[1:]
        if any(abs(a / b - 1) > _AGREEMENT for a, b in zip(o, size, strict=True))
    ]
    cautions: tuple[Caution, ...] = ()
    if others:
        cautions = (
            Caution(
                "pixel-size-contradicted",
                "warning",
                f"The file states two pixel sizes: {statement.source}: {size[0]:.5g} x {size[1]:.5g} nm, which was "
                f"used, and {'; '.join(others)}.",
                "Find out which one is right, and give it.",
            ),
        )
    return BelievedPixelSize(size, statement.source, cautions)


def _size_nm(statement: StatedPixelSize) -> tuple[float, float] | str:
    """Return the pixel size, or why it is not believed."""
    found = f"{statement.row:.6g} x {statement.column:.6g}"
    if not all(math.isfinite(v) and v > 0 for v in (statement.row, statement.column)):
        return f"{found} {statement.unit or 'without a unit'}, which is not a size"
    unit = statement.unit
    if unit is None or is_no_unit(unit):
        return f"{found} without a unit of length"
    if is_inch(unit):
        return f"{1 / statement.column:.4g} dots per inch, a screen or print setting"
    factor = nm_per_unit(unit)
    if factor is None:
        return f"{found} {unit[:20]!r}, which is no unit of length"
    size = (statement.row * factor, statement.column * factor)
    low, high = PIXEL_SIZE_LIMITS_NM
    # the limits belong to the believable sizes, and must not be lost in the rounding of a unit's factor
    if not all(low * (1 - 1e-9) <= v <= high * (1 + 1e-9) for v in size):
        return f"{size[0]:.4g} x {size[1]:.4g} nm, beyond {low:g} to {high:g} nm of any lattice picture"
    return min(max(size[0], low), high), min(max(size[1], low), high)


def _not_known(doubts: Sequence[str]) -> Caution:
    if not doubts:
        return Caution(
            "pixel-size-not-stated",
            "warning",
            "The file states no pixel size; everything is measured in pixels.",
            _REMEDY,
        )
    return Caution(
        "pixel-size-not-believed",
        "warning",
        f"The file states no usable pixel size ({'; '.join(doubts)}); everything is measured in pixels.",
        _REMEDY,
    )
