"""Spacings and angles as typed: "0.2355(4) 0.2039(5) @54.7(3)"."""

from __future__ import annotations

import math
import re

from fringespan.exceptions import SettingsError
from fringespan.ranking.observation import Observation, ObservedReflection

__all__ = [
    "ANGLE_WHEN_UNSTATED_DEG",
    "SPACING_WHEN_UNSTATED",
    "observation_from_text",
    "observations_from_text",
    "read_value",
]

SPACING_WHEN_UNSTATED = 0.005
"""Relative standard uncertainty of a spacing typed without one."""

ANGLE_WHEN_UNSTATED_DEG = 0.5

_VALUE = re.compile(r"(\d+(?:\.(\d*))?|\.(\d+))(?:\((\d+)(?:\.(\d+))?\))?")
_SPACING_LIMITS_NM = (0.02, 20.0)


def read_value(text: str) -> tuple[float, float | None]:
    """Read a number with its standard uncertainty in parentheses, in units of the last digit.

    With a decimal point in the parentheses the uncertainty is meant in full: 54.7(1.2).

    Raises
    ------
    SettingsError
        If it is no such number.

    Examples
    --------
    >>> read_value("0.2355(4)")
    (0.2355, 0.0004)
    >>> read_value("54.7(1.2)")
    (54.7, 1.2)
    """
    found = _VALUE.fullmatch(text.strip())
    if not found:
        raise SettingsError(f"{text!r} is not a value; write it as 0.2355, or with its uncertainty as 0.2355(4)")
    number, decimals, only_decimals, digits, part = found.groups()
    value = float(number)
    if digits is None:
        return value, None
    if part is not None:
        return value, float(f"{digits}.{part}")
    places = len(decimals if decimals is not None else only_decimals or "")
    return value, round(int(digits) * 10.0**-places, places)


def observation_from_text(
    text: str, *, pixel_size_relative_uncertainty: float | tuple[float, float] | None = None, name: str = "typed values"
) -> Observation:
    """Return an observation from spacings in nm and angles in degrees.

    Spacings are separated by spaces. An angle, marked by @, follows its spacing and is counted from the first spacing's
    direction, counter-clockwise as on the screen: "0.2355(4) 0.2039(5) @54.7(3) 0.2355(4) @109.5(3)". Without angles
    only lengths are compared. The spacings of one region stand together; regions are separated by semicolons and read
    one by one with `observations_from_text`.

    Parameters
    ----------
    text : str
    pixel_size_relative_uncertainty : float or (float, float), optional
        Of the scale common to all spacings, as a fraction; None: not stated.
    name : str, optional

    Returns
    -------
    Observation

    Raises
    ------
    SettingsError
        If a value cannot be read, is out of range, or an angle has no spacing.
    """
    spacings: list[tuple[float, float | None]] = []
    angles: list[tuple[float, float | None] | None] = []
    for word in re.sub(r"@\s+", "@", text.replace(",", " ")).split():
        for part in re.findall(r"@?[^@]+|@", word):
            if not part.startswith("@"):
                spacings.append(read_value(part))
                angles.append(None)
                continue
            if len(spacings) < 2:
                raise SettingsError(
                    f"{part!r}: an angle follows the second or a later spacing, and is counted from the first"
                )
            if angles[-1] is not None:
                raise SettingsError(f"{part!r}: the spacing before it has an angle already")
            angles[-1] = read_value(part[1:])
    if not spacings:
        raise SettingsError("there are no spacings; write them as in '0.2355(4) 0.2039(5) @54.7(3)'")
    low, high = _SPACING_LIMITS_NM
    for d, _ in spacings:
        if not low <= d <= high:
            raise SettingsError(f"spacings must lie between {low:g} and {high:g} nm, got {d:g}; give them in nm")
    given = [angle is not None for angle in angles[1:]]
    if any(given) and not all(given):
        raise SettingsError(
            f"{given.count(False)} of {len(given)} later spacings have no angle; give all of them an angle from "
            "the first, or none"
        )
    reflections = []
    for (d, d_uncertainty), angle in zip(spacings, angles, strict=True):
        degrees, uncertainty = angle or (0.0, None)
        if not 0 <= degrees <= 180:
            raise SettingsError(f"angles must lie between 0 and 180 degrees, got {degrees:g}")
        direction = math.radians(degrees)
        # the direction of the first is where the others are counted from, so the angle's uncertainty is theirs
        across = (
            math.radians(0.0 if angle is None else ANGLE_WHEN_UNSTATED_DEG if uncertainty is None else uncertainty) / d
        )
        along = (SPACING_WHEN_UNSTATED * d if d_uncertainty is None else d_uncertainty) / d**2
        if angle is None:
            across = 1e-4 / d
        n, t = (-math.sin(direction), math.cos(direction)), (math.cos(direction), math.sin(direction))
        matrix = [[along**2 * n[i] * n[j] + across**2 * t[i] * t[j] for j in range(2)] for i in range(2)]
        reflections.append(
            ObservedReflection(
                g_per_nm=(n[0] / d, n[1] / d),
                covariance_per_nm2=((matrix[0][0], matrix[0][1]), (matrix[0][1], matrix[1][1])),
            )
        )
    return Observation(
        reflections=tuple(reflections),
        pixel_size_relative_uncertainty=pixel_size_relative_uncertainty,
        directions_known=bool(given) and all(given),
        name=name,
    )


def observations_from_text(
    text: str, *, pixel_size_relative_uncertainty: float | tuple[float, float] | None = None
) -> tuple[Observation, ...]:
    """Return one observation for each part of the text between semicolons, as `observation_from_text` reads it."""
    parts = [part for part in text.split(";") if part.strip()] or [text]
    return tuple(
        observation_from_text(
            part, pixel_size_relative_uncertainty=pixel_size_relative_uncertainty, name=f"typed values {i + 1}"
        )
        for i, part in enumerate(parts)
    )
