"""The conditions of a check: without them a pixel size cannot be used for another picture."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields

from fringespan.exceptions import SettingsError

__all__ = ["Conditions"]

_LONGEST_TEXT = 2000


@dataclass(frozen=True, slots=True, kw_only=True)
class Conditions:
    """What a picture was taken with, as far as it is known.

    Parameters
    ----------
    instrument : str, optional
    voltage_kv : float, optional
    mode : str, optional
        Such as "TEM" or "STEM".
    indicated_magnification : float, optional
        What the microscope displays.
    camera_length_mm : float, optional
    camera : str, optional
    binning : int, optional
    specimen : str, optional
    remark : str, optional
        Of the one who made the check.

    Raises
    ------
    SettingsError
        If a number is not above 0, or a text too long.
    """

    instrument: str = ""
    voltage_kv: float | None = None
    mode: str = ""
    indicated_magnification: float | None = None
    camera_length_mm: float | None = None
    camera: str = ""
    binning: int | None = None
    specimen: str = ""
    remark: str = ""

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, str):
                if len(value) > _LONGEST_TEXT:
                    raise SettingsError(f"{field.name} must have at most {_LONGEST_TEXT} letters, got {len(value)}")
            elif value is not None and not (math.isfinite(value) and value > 0):
                raise SettingsError(f"{field.name} must be greater than 0, got {value!r}; leave it out if not known")
