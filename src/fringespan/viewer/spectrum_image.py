"""The power spectrum as a picture with the origin in its middle."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.spectrum import PowerSpectrum

__all__ = ["SpectrumImage", "spectrum_image"]

_MOST_BINS = 512
_LEVELS_PER_CENT = (30.0, 99.9)


@dataclass(frozen=True, eq=False, slots=True)
class SpectrumImage:
    """Logarithm of the power around the origin.

    Attributes
    ----------
    values : ndarray of float32, shape (rows, columns)
        Natural logarithm; both halves of the plane.
    middle : (float, float)
        (row, column) of the origin in it.
    step : (float, float)
        Cycles per pixel from one of its rows, columns to the next.
    levels : (float, float)
        Values to be shown black and white at first.
    """

    values: NDArray[np.float32]
    middle: tuple[float, float]
    step: tuple[float, float]
    levels: tuple[float, float]

    def shades(self, low: float, high: float) -> NDArray[np.uint8]:
        """Return shades of grey from 0 to 255 for contrast limits given as shares of the `levels` (0 and 1)."""
        black, white = self.levels
        first = black + low * (white - black)
        span = max((high - low) * (white - black), 1e-6)
        return np.asarray(np.clip((self.values - first) * (255 / span), 0, 255), dtype=np.uint8)


def spectrum_image(spectrum: PowerSpectrum) -> SpectrumImage:
    """Return a spectrum as a picture; of more than 512 bins along a side, the brightest of each block is kept."""
    rows, columns = spectrum.shape
    half_rows, half_columns = (rows - 1) // 2, (columns - 1) // 2
    right = spectrum.power[np.arange(-half_rows, half_rows + 1), : half_columns + 1]
    block = math.ceil(max(2 * half_rows + 1, 2 * half_columns + 1) / _MOST_BINS)
    # the half that a real transform leaves out is its mirror image
    power = np.concatenate([right[::-1, :0:-1], right], axis=1)
    if block > 1:
        power = np.maximum.reduceat(power, np.arange(0, power.shape[0], block), axis=0)
        power = np.maximum.reduceat(power, np.arange(0, power.shape[1], block), axis=1)
    positive = power > 0
    smallest = float(power[positive].min()) if positive.any() else 1.0
    values = np.log(np.maximum(power, smallest)).astype(np.float32)
    low, high = np.percentile(values[::2, ::2], _LEVELS_PER_CENT)
    return SpectrumImage(
        values,
        # the middle of the first block lies (block - 1) / 2 bins from its first bin
        ((half_rows - (block - 1) / 2) / block, (half_columns - (block - 1) / 2) / block),
        (block / rows, block / columns),
        (float(low), max(float(high), float(low) + 1e-3)),
    )
