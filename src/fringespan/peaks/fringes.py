"""Find and fit all fringes of a region: candidates, joint fit, and a second wave where one does not do."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.noise import RingBackground
from fringespan.peaks.detection import detection_threshold, find_candidates
from fringespan.peaks.joint_fit import JointFit, fit_jointly
from fringespan.peaks.misfit import MISFIT_LIMIT, CellResiduals, cell_residuals, split_wave
from fringespan.spectrum import PowerSpectrum, RegionPixels

__all__ = ["Fringes", "find_fringes"]


@dataclass(frozen=True, eq=False, slots=True)
class Fringes:
    """The plane waves found in a region.

    Attributes
    ----------
    fit : JointFit
    density : ndarray, shape (n,)
        Noise power density at each.
    limit : ndarray, shape (n,)
        Power ratio that each had to reach.
    residuals : CellResiduals
    """

    fit: JointFit
    density: NDArray[np.float64]
    limit: NDArray[np.float64]
    residuals: CellResiduals


def find_fringes(
    pixels: RegionPixels,
    spectrum: PowerSpectrum,
    background: RingBackground,
    *,
    false_peaks_per_region: float,
    smallest_distance_bins: float,
) -> Fringes:
    """Find and fit all fringes of a region.

    Parameters
    ----------
    pixels : RegionPixels
    spectrum : PowerSpectrum
        Of these pixels.
    background : RingBackground
    false_peaks_per_region, smallest_distance_bins : float
        As in `fringespan.MeasurementSettings`.

    Returns
    -------
    Fringes
        In no particular order.
    """
    footprint = pixels.footprint
    threshold = detection_threshold(footprint.count, false_peaks_per_region)
    candidates = find_candidates(
        spectrum, background, footprint, threshold=threshold, smallest_distance_bins=smallest_distance_bins
    )
    # the density is itself an estimate from m samples: the law is F, not exponential
    limit = candidates.samples * np.expm1(threshold / candidates.samples)
    # the untapered fit sees the leakage of edges and scan lines, the tapered filter does not: it has to agree
    supported = ((np.sqrt(candidates.ratio) + 0.35) / 0.93) ** 2 >= limit
    frequency, density, limit = candidates.frequency[supported], candidates.density[supported], limit[supported]
    fit, kept = fit_jointly(pixels, frequency, density, limit)
    density, limit = density[kept], limit[kept]
    residuals = cell_residuals(footprint, fit, density)
    if (residuals.misfit > MISFIT_LIMIT).any():
        fit, density, limit, residuals = _with_splits(pixels, fit, density, limit, residuals)
    return Fringes(fit, density, limit, residuals)


def _with_splits(
    pixels: RegionPixels,
    fit: JointFit,
    density: NDArray[np.float64],
    limit: NDArray[np.float64],
    residuals: CellResiduals,
) -> tuple[JointFit, NDArray[np.float64], NDArray[np.float64], CellResiduals]:
    """Put two waves in place of each that misfits, where that leaves noise only."""
    footprint = pixels.footprint
    # from the last to the first: the two new waves go to the end, so that earlier positions stay
    for k in np.flatnonzero(residuals.misfit > MISFIT_LIMIT)[::-1]:
        shifts = split_wave(footprint, residuals, int(k), complex(fit.amplitude[k]), float(density[k]))
        if shifts is None:
            continue
        others = np.arange(len(density)) != k
        frequency = np.concatenate([fit.frequency[others], fit.frequency[k] + shifts])
        trial_density = np.concatenate([density[others], density[[k, k]]])
        trial_limit = np.concatenate([limit[others], limit[[k, k]]])
        trial, kept = fit_jointly(pixels, frequency, trial_density, trial_limit)
        if len(kept) < len(frequency):
            continue
        trial_residuals = cell_residuals(footprint, trial, trial_density)
        if (trial_residuals.misfit[-2:] > MISFIT_LIMIT).any():
            continue
        fit, density, limit, residuals = trial, trial_density, trial_limit, trial_residuals
    return fit, density, limit, residuals
