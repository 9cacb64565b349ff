"""What a user may choose about a measurement."""

from __future__ import annotations

from dataclasses import dataclass
from numbers import Real

from fringespan.exceptions import SettingsError

__all__ = ["MeasurementSettings"]


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasurementSettings:
    """Choices for `fringespan.measure`.

    Parameters
    ----------
    false_peaks_per_region : float, optional
        How many peaks a region of pure noise may show on average, between 1e-6 and 1.
    smallest_distance_bins : float, optional
        How many spectrum bins a peak must be away from the origin, at least 2: nearer, uneven thickness
        and illumination look like fringes.

    Raises
    ------
    SettingsError
        If a value is outside its range.
    """

    false_peaks_per_region: float = 0.01
    smallest_distance_bins: float = 4.0

    def __post_init__(self) -> None:
        _check("false_peaks_per_region", self.false_peaks_per_region, "1e-6", 1)
        _check("smallest_distance_bins", self.smallest_distance_bins, 2, 100)


def _check(name: str, value: object, lowest: float | str, highest: float) -> None:
    if not (isinstance(value, Real) and float(lowest) <= float(value) <= highest):
        raise SettingsError(f"{name} must lie between {lowest} and {highest}, got {value!r}")
