"""How a value is written with its standard uncertainty, 0.2355(4), and what the pixel size adds to that."""

from __future__ import annotations

import math

from fringespan.exceptions import SettingsError

__all__ = ["NOT_GIVEN", "relative_length_uncertainty", "value_text"]

NOT_GIVEN = "-"
"""What stands in a table where there is no value."""

# outside this range a row of zeros is harder to read than a power of ten
_PLAIN_RANGE = (1e-4, 1e7)


def value_text(value: float | None, standard_uncertainty: float | None, *, digits: int = 4) -> str:
    """Write a value with its standard uncertainty in parentheses, in units of the last digit shown.

    The uncertainty is rounded to one digit, or to two where it begins with a 1, and the value to the same place.

    Parameters
    ----------
    value : float or None
        None gives a dash.
    standard_uncertainty : float or None
        At least 0. None: not known, and the value stands alone.
    digits : int, optional
        Significant digits of a value that has no uncertainty to round it by.

    Returns
    -------
    str

    Raises
    ------
    SettingsError
        If a number is not finite or the uncertainty is negative.

    Examples
    --------
    >>> value_text(0.23548, 0.00042)
    '0.2355(4)'
    >>> value_text(0.23548, 0.00014)
    '0.23548(14)'
    >>> value_text(54.72, 1.23)
    '54.7(1.2)'
    >>> value_text(0.23548, None)
    '0.2355'
    """
    if value is None:
        return NOT_GIVEN
    if not math.isfinite(value):
        raise SettingsError(f"a value to be written must be finite, got {value!r}")
    if standard_uncertainty is None:
        return f"{value:.{digits}g}"
    if not (math.isfinite(standard_uncertainty) and standard_uncertainty >= 0):
        raise SettingsError(f"a standard uncertainty must be finite and at least 0, got {standard_uncertainty!r}")
    if standard_uncertainty == 0:
        return f"{value:.{digits}g}(0)"
    from uncertainties import ufloat

    # 0.00096 is written as 0.0010, with the two digits of an uncertainty that begins with a 1
    rounded = float(f"{standard_uncertainty:.0e}")
    shown = rounded if f"{rounded:.0e}".startswith("1") and rounded > standard_uncertainty else standard_uncertainty
    begins_with_one = f"{shown:.1e}".startswith("1")
    low, high = _PLAIN_RANGE
    plain = low <= max(abs(value), standard_uncertainty) < high
    return f"{ufloat(value, shown):.{2 if begins_with_one else 1}u{'f' if plain else ''}S}"


def relative_length_uncertainty(
    pixel_size_relative_uncertainty: float | tuple[float, float], y: float, x: float
) -> float:
    """Return the relative standard uncertainty of a length in the picture by that of the pixel size.

    Parameters
    ----------
    pixel_size_relative_uncertainty : float or (float, float)
        A fraction: shared by rows and columns, or independent ones of (row, column).
    y, x : float
        Direction of the length in the specimen; need not be of unit length.

    Returns
    -------
    float
        Of L = hypot(y, x): dL/L = (y^2 dy/y + x^2 dx/x) / L^2.
    """
    if isinstance(pixel_size_relative_uncertainty, tuple):
        row, column = pixel_size_relative_uncertainty
        return math.hypot(y**2 * row, x**2 * column) / (y**2 + x**2)
    return pixel_size_relative_uncertainty
