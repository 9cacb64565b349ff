"""Units as they are found in picture files: lengths in nm, and what tells a diffraction pattern."""

from __future__ import annotations

import math
import re
import unicodedata
from functools import lru_cache
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pint import UnitRegistry

__all__ = ["is_inch", "is_no_unit", "is_reciprocal_or_angle", "nm_per_unit"]

# upper and lower case tell a metre from a mega, so short symbols are compared as they stand
_SYMBOLS_NM = {
    "A": 0.1,
    "Å": 0.1,
    "fm": 1e-6,
    "pm": 1e-3,
    "nm": 1.0,
    "um": 1e3,
    "μm": 1e3,
    "mm": 1e6,
    "cm": 1e7,
    "m": 1e9,
}
_NAMES_NM = {
    "ang": 0.1,
    "angstrom": 0.1,
    "angstroem": 0.1,
    "ångström": 0.1,
    "ångstrom": 0.1,
    "micron": 1e3,
    "femtometer": 1e-6,
    "picometer": 1e-3,
    "nanometer": 1.0,
    "micrometer": 1e3,
    "millimeter": 1e6,
    "centimeter": 1e7,
    "meter": 1e9,
}
_INCHES = {"in", "inch", "inches", '"', "dpi"}
_NOTHING = {"", "pixel", "pixels", "px", "pix", "none", "null", "unknown", "undefined", "reference frame", "a.u.", "au"}
_ANGLES = {"rad", "mrad", "urad", "μrad", "radian", "milliradian", "microradian", "deg", "degree", "degrees", "°"}

_PER_PIXEL = re.compile(r"\s*(?:/|\bper\b)\s*(?:px|pix|pixels?)\s*$", re.IGNORECASE)
_RECIPROCAL = re.compile(r"^(?:1\s*/|/|per\b|reciprocal\b|inverse\b)\s*(?P<unit>.+)$", re.IGNORECASE)
_TO_THE_MINUS_ONE = re.compile(r"^(?P<unit>.*?[^\s^*(])\s*(?:\^|\*\*)?\s*\(?-1\)?$")
_ESCAPED = re.compile(r"\\u([0-9a-fA-F]{4})")
_PLAIN_WORD = re.compile(r"^[^\W\d_]{1,24}$")


def _tidy(unit: str) -> str:
    """Return the unit with one spelling for each character, and without 'per pixel'."""
    text = _ESCAPED.sub(lambda found: chr(int(found[1], 16)), unit)
    # NFKC: micro sign to mu, angstrom sign to A with ring, superscript digits to digits
    text = unicodedata.normalize("NFKC", text).replace("−", "-").strip().strip("\0'[]() ")
    return _PER_PIXEL.sub("", text)


def nm_per_unit(unit: str) -> float | None:
    """Return how many nm a unit of length is.

    Parameters
    ----------
    unit : str
        Symbol or name as found in a file, such as "nm", "µm", "A", "micrometre".

    Returns
    -------
    float or None
        None if it is not a unit of length.
    """
    text = _tidy(unit)
    if text in _SYMBOLS_NM:
        return _SYMBOLS_NM[text]
    name = text.lower().replace("metre", "meter")
    if name.endswith("s") and name != "s":
        name = name[:-1]
    return _NAMES_NM.get(name) or _by_registry(text)


def is_no_unit(unit: str | None) -> bool:
    """Say whether the text names no unit at all, or the pixel itself."""
    return unit is None or _tidy(unit).lower() in _NOTHING


def is_inch(unit: str) -> bool:
    """Say whether it is the unit of screens and printers."""
    return _tidy(unit).lower() in _INCHES


def is_reciprocal_or_angle(unit: str) -> bool:
    """Say whether it is a unit of diffraction patterns: 1/length, or an angle."""
    text = _tidy(unit)
    if text.lower() in _ANGLES:
        return True
    found = _RECIPROCAL.match(text) or _TO_THE_MINUS_ONE.match(text)
    return found is not None and nm_per_unit(found["unit"]) is not None


@lru_cache(maxsize=1)
def _registry() -> UnitRegistry[float]:
    # slow to import, and needed for rare units only
    import pint

    return pint.UnitRegistry()


@lru_cache(maxsize=64)
def _by_registry(text: str) -> float | None:
    """Look a rare unit up; a single word only, because anything more would be evaluated as an expression."""
    if not _PLAIN_WORD.match(text):
        return None
    import pint

    try:
        factor = float(_registry().Quantity(1.0, text).to("nm").magnitude)
    except (pint.PintError, ValueError):  # ValueError: a word that means a number, such as NaN
        return None
    return factor if math.isfinite(factor) and factor > 0 else None
