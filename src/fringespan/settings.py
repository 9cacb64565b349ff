"""What a user may choose about a measurement."""

from __future__ import annotations

from dataclasses import dataclass

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
        if not 1e-6 <= self.false_peaks_per_region <= 1:
            raise SettingsError(
                f"false_peaks_per_region must lie between 1e-6 and 1, got {self.false_peaks_per_region!r}"
            )
        if not 2 <= self.smallest_distance_bins <= 100:
            raise SettingsError(
                f"smallest_distance_bins must lie between 2 and 100, got {self.smallest_distance_bins!r}"
            )
