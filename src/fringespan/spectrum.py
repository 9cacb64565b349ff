"""The power spectrum of a region."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["PowerSpectrum"]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class PowerSpectrum:
    """Power density of a region on its frequency grid.

    Attributes
    ----------
    power : ndarray of float32, shape (rows, columns // 2 + 1)
        Power density, scaled so that white noise of variance s^2 has density s^2; row 0, column 0 is the origin, the
        second half of the rows holds the negative row frequencies (the order of a real FFT).
    shape : (int, int)
        Rows and columns of the transform, so that bin (i, j) lies at (i / rows, j / columns) cycles per pixel.
    """

    power: NDArray[np.float32]
    shape: tuple[int, int]
