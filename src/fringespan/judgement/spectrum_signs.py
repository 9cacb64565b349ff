"""Signs in a power spectrum that the picture is not as the detector gave it: a missing end, a cross, lopsided rings."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.spectrum import PowerSpectrum

__all__ = [
    "FINE_DETAIL_MISSING",
    "LOPSIDED_RINGS",
    "SCAN_LINES",
    "SpectrumSigns",
    "is_lopsided",
    "lopsidedness",
    "spectrum_signs",
]

FINE_DETAIL_MISSING = Caution(
    "fine-detail-missing",
    "warning",
    "The finest detail of the picture holds next to no noise: it was enlarged, smoothed or filtered after it was taken, "
    "so that its pixel size may be another one and a filter may have drawn fringes.",
    "Measure the picture as the microscope saved it.",
)

SCAN_LINES = Caution(
    "scan-lines",
    "note",
    "A bright line runs through the centre of the spectrum: scan lines, rows or columns of the detector, or an edge.",
    "Distrust fringes that run exactly along rows or columns; keep edges out of the region.",
)

LOPSIDED_RINGS = Caution(
    "lopsided-rings",
    "warning",
    "The rings of the film in the spectrum are lopsided: the picture was taken with astigmatism or drift.",
    "Correct the astigmatism, let the stage come to rest, and take the picture again.",
)

_LEAST_FINE_SHARE = 3e-4
"""Noise at the end of the spectrum over that in its middle. Detectors and thick films leave at least 1e-3."""

_BRIGHT_LINE = 8.0
"""A line through the centre over its neighbours; crystals alone reach 3."""

_SAMPLES = 96
_LARGEST_SAMPLE = 40_000
_LOPSIDED = 1.7
"""Limit of `lopsidedness`; simulated films without astigmatism or drift, 96 to 1024 px wide, stay below 1.2."""


@dataclass(frozen=True, slots=True)
class SpectrumSigns:
    """What the noise of a spectrum tells apart from its peaks.

    Attributes
    ----------
    fine_share : float
        Noise at the end of the spectrum over that in its middle.
    row_line, column_line : float
        Noise on the line of column frequency 0, where row differs from row, over that beside it; the same of the line of
        row frequency 0.
    """

    fine_share: float
    row_line: float
    column_line: float

    @property
    def is_fine_detail_missing(self) -> bool:
        """Whether the picture was enlarged, smoothed or filtered."""
        return self.fine_share < _LEAST_FINE_SHARE

    @property
    def rows_differ(self) -> bool:
        """Whether there are scan lines or detector rows."""
        return self.row_line > _BRIGHT_LINE

    @property
    def columns_differ(self) -> bool:
        """Whether there are detector columns."""
        return self.column_line > _BRIGHT_LINE


@lru_cache(maxsize=32)
def _places(shape: tuple[int, int]) -> NDArray[np.int32]:
    """Return bins of a spectrum in six groups: end, middle, two lines through the centre and what is beside each."""
    ny, nx = shape
    columns = nx // 2 + 1
    random = np.random.default_rng(ny * 65537 + nx)
    row = np.fft.fftfreq(ny)[:, None]
    column = np.arange(columns)[None] / nx
    radius = np.hypot(row, column)
    off_axes = (np.abs(row) * ny > 3.5) & (column * nx > 3.5)
    middle = (radius > 0.08) & (radius < 0.2)
    # the spectrum of the smallest regions has no bin there that is off the axes
    middle = middle & off_axes if (middle & off_axes).any() else middle
    groups = [np.flatnonzero(((np.abs(row) > 0.43) & (column > 0.43)).ravel()), np.flatnonzero(middle.ravel())]
    beside = 12
    along_rows = np.arange(8, ny - 7)
    along_columns = np.arange(8, columns - 1)
    groups += [along_rows * columns, along_rows * columns + min(beside, columns - 1)]
    groups += [along_columns, (beside % ny) * columns + along_columns]
    # a spectrum too small to have a group at all shows nothing there: any bin does, the same for both
    groups = [g if len(g) else np.array([ny // 3 * columns + columns // 2]) for g in groups]
    return np.stack([np.sort(random.choice(g, _SAMPLES, replace=len(g) < _SAMPLES)) for g in groups]).astype(np.int32)


@numba.njit(cache=True, nogil=True)
def _mean_logs(power, places, out):  # type: ignore[no-untyped-def]
    """Fill out with the mean natural logarithm of each group: a few peaks in it hardly count."""
    flat = power.ravel()
    for k in range(places.shape[0]):
        total = 0.0
        for i in range(places.shape[1]):
            total += np.log(max(flat[places[k, i]], np.float32(1e-30)))
        out[k] = total / places.shape[1]


def spectrum_signs(spectrum: PowerSpectrum) -> SpectrumSigns:
    """Look at the end of a spectrum and at the lines through its centre.

    Parameters
    ----------
    spectrum : PowerSpectrum

    Returns
    -------
    SpectrumSigns
    """
    logs = np.empty(6)
    _mean_logs(spectrum.power, _places(spectrum.shape), logs)
    end, middle, rows, beside_rows, columns, beside_columns = np.exp(logs - logs[1]).tolist()
    return SpectrumSigns(end / middle, rows / beside_rows, columns / beside_columns)


@lru_cache(maxsize=8)
def _rings(shape: tuple[int, int]) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """Return bins between the coarsest and 0.3 cycles per pixel, the narrow ring of each, and twice its angle."""
    ny, nx = shape
    row = np.fft.fftfreq(ny)[:, None]
    column = np.arange(nx // 2 + 1)[None] / nx
    radius = np.hypot(row, column)
    shortest = min(ny, nx)
    used = (np.abs(row) * ny > 2.5) & (column * nx > 2.5) & (radius > max(0.03, 6 / shortest)) & (radius < 0.3)
    place = np.flatnonzero(used.ravel())
    if len(place) > _LARGEST_SAMPLE:
        place = np.sort(np.random.default_rng(ny * 65537 + nx).choice(place, _LARGEST_SAMPLE, replace=False))
    width = 2.0 / shortest
    ring = np.unique((radius.ravel()[place] / width).astype(int), return_inverse=True)[1]
    twice = 2 * np.arctan2(np.broadcast_to(-row, radius.shape), np.broadcast_to(column, radius.shape)).ravel()[place]
    return place, ring, twice


def lopsidedness(spectrum: PowerSpectrum) -> float:
    """Return how much narrow rings of a spectrum vary with twice the angle, 0.5 to 1 if not at all.

    Meant for bare film: where there are fringes, the shape of the crystal makes rings uneven too.

    Parameters
    ----------
    spectrum : PowerSpectrum

    Notes
    -----
    The logarithm of an exponentially distributed power has the variance pi^2 / 6; of n independent samples on a ring, the
    squared twofold Fourier coefficient has the mean 2 pi^2 / (3 n).
    """
    place, ring, twice = _rings(spectrum.shape)
    count = np.bincount(ring)
    logs = np.log(np.maximum(spectrum.power.ravel()[place], np.float32(1e-30)))
    rest = np.clip(logs - (np.bincount(ring, logs) / count)[ring], -3, 2)
    cosine, sine = np.bincount(ring, rest * np.cos(twice)), np.bincount(ring, rest * np.sin(twice))
    wide = count > 20
    squares = 4 * (cosine**2 + sine**2)[wide] / count[wide]
    # neighbouring bins share what the window spreads, so that there are fewer independent ones in a full ring
    alike = 2.0 if len(place) < _LARGEST_SAMPLE else 1.3
    return float(squares.mean() / (2 * np.pi**2 / 3) / alike) if wide.any() else 1.0


def is_lopsided(spectrum: PowerSpectrum) -> bool:
    """Say whether the rings of bare film in a spectrum are lopsided."""
    return lopsidedness(spectrum) > _LOPSIDED
