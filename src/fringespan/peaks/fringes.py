"""Find and fit all fringes of a region: candidates, joint fit, and a second wave where one does not do."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.noise import RingBackground
from fringespan.peaks.demodulation import demodulate
from fringespan.peaks.detection import Candidates, density_at, detection_threshold, find_candidates, waves_removed
from fringespan.peaks.joint_fit import JointFit, fit_jointly, solve_waves
from fringespan.peaks.misfit import MISFIT_LIMIT, CellResiduals, cell_residuals, split_wave
from fringespan.region import Footprint
from fringespan.spectrum import PowerSpectrum, RegionPixels

__all__ = ["Fringes", "close_pairs", "find_fringes"]

_PIECE_BINS = 5.0
_PIECE_RATIO = 0.2
"""A peak nearer than this to another, and weaker than this share of it, is a piece of it: the skirt of its envelope."""

_LEFT_OF_PAIR = 0.03
"""Share of the power that near waves may leave over: pairs leave 0.003 at most, parts of a bent fringe 0.05 at least."""

_CHANCE = 3.0
"""Misfit of near waves that may be chance: it must not make one wave of a pair. Of 12 000 waves in noise 2 exceed it."""

_STRONG = 4.0
"""A fringe this many times above the detection threshold is fitted before weaker ones are looked for."""


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
    search = partial(
        find_candidates, background=background, footprint=footprint, smallest_distance_bins=smallest_distance_bins
    )
    # strong fringes first: their side lobes would hide weak ones, and pass for some
    strong = _supported(search(spectrum, threshold=_STRONG * threshold), threshold)
    fit, kept = fit_jointly(pixels, demodulate(pixels, strong.frequency), strong.density, strong.limit)
    density, limit = strong.density[kept], strong.limit[kept]
    fit, density, limit = _without_pieces(pixels, fit, density, limit)
    with waves_removed(spectrum, footprint, fit.frequency, fit.amplitude) as rest:
        if len(density):
            density, samples = density_at(rest, background, fit.frequency)
            limit = _limit(threshold, samples)
        weak = _supported(search(rest, threshold=threshold), threshold)
    apart = ~_near_stronger(footprint, weak.frequency, fit.frequency)
    if apart.any():
        start = fit.demodulation.joined(demodulate(pixels, weak.frequency[apart]))
        density, limit = np.append(density, weak.density[apart]), np.append(limit, weak.limit[apart])
    else:
        start = fit.demodulation
    fit, kept = fit_jointly(pixels, start, density, limit)
    fit, density, limit = _without_pieces(pixels, fit, density[kept], limit[kept])
    residuals = cell_residuals(footprint, fit, density)
    if (residuals.misfit > MISFIT_LIMIT).any():
        fit, density, limit, residuals = _with_splits(pixels, fit, density, limit, residuals)
        fit, density, limit, residuals = _merged(pixels, fit, density, limit, residuals)
    # a fit of what is no plane wave may leave the spectrum; real fringes do so by a fraction of a bin at most
    inside = np.asarray((np.abs(fit.frequency) <= 0.5 + 0.5 / np.array(footprint.shape)).all(axis=1))
    if not inside.all():
        fit, kept = fit_jointly(pixels, fit.demodulation.part(inside), density[inside], limit[inside])
        density, limit = density[inside][kept], limit[inside][kept]
        residuals = cell_residuals(footprint, fit, density)
    return Fringes(fit, density, limit, residuals)


@dataclass(frozen=True, eq=False, slots=True)
class _Supported:
    frequency: NDArray[np.float64]
    density: NDArray[np.float64]
    limit: NDArray[np.float64]


def _supported(candidates: Candidates, threshold: float) -> _Supported:
    """Return the candidates whose matched filter lets hope that the fit will pass, with the limit it has to pass."""
    limit = _limit(threshold, candidates.samples)
    # the untapered fit sees the leakage of edges and scan lines, the tapered filter does not: it has to agree
    hopeful = ((np.sqrt(candidates.ratio) + 0.35) / 0.93) ** 2 >= limit
    return _Supported(candidates.frequency[hopeful], candidates.density[hopeful], limit[hopeful])


def _limit(threshold: float, samples: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the power ratio to be reached: the noise is itself estimated from samples, so F law, not exponential."""
    return np.asarray(samples * np.expm1(threshold / samples))


def _distances(
    footprint: Footprint, frequency: NDArray[np.float64], others: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the distance in bins of each frequency from each other one or its opposite, shape (n, m)."""
    out = np.empty((len(frequency), len(others)))
    _fill_distances(*footprint.shape, frequency, others, out)
    return out


@numba.njit(cache=True, nogil=True)
def _fill_distances(ny, nx, frequency, others, out):  # type: ignore[no-untyped-def]
    for j in range(frequency.shape[0]):
        for k in range(others.shape[0]):
            difference = np.hypot((frequency[j, 0] - others[k, 0]) * ny, (frequency[j, 1] - others[k, 1]) * nx)
            total = np.hypot((frequency[j, 0] + others[k, 0]) * ny, (frequency[j, 1] + others[k, 1]) * nx)
            out[j, k] = min(difference, total)


def close_pairs(footprint: Footprint, fringes: Fringes) -> NDArray[np.bool_]:
    """Say which waves are one of several close ones that together leave next to nothing over.

    Each shows a beat in the field of the other, which is no sign of a bent or uneven crystal.

    Parameters
    ----------
    footprint : Footprint
        Of the region.
    fringes : Fringes

    Returns
    -------
    ndarray of bool, shape (n,)
    """
    frequency = fringes.fit.frequency
    near = _distances(footprint, frequency, frequency) < _PIECE_BINS
    np.fill_diagonal(near, False)
    return np.asarray(near.any(axis=1) & _leave_noise(fringes.residuals.misfit, fringes.fit.power_ratio))


def _leave_noise(misfit: NDArray[np.float64], power_ratio: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Say which waves leave noise only, or next to nothing of their power: the misfit is the mean of twelve projections."""
    return np.asarray((misfit < _CHANCE) | (12 * (misfit - 1) < _LEFT_OF_PAIR * power_ratio))


def _near_stronger(
    footprint: Footprint, frequency: NDArray[np.float64], stronger: NDArray[np.float64]
) -> NDArray[np.bool_]:
    """Say which frequencies lie so near to a stronger peak that they are its skirts."""
    if not len(stronger) or not len(frequency):
        return np.zeros(len(frequency), bool)
    return np.asarray(_distances(footprint, frequency, stronger).min(axis=1) < _PIECE_BINS)


def _without_pieces(
    pixels: RegionPixels, fit: JointFit, density: NDArray[np.float64], limit: NDArray[np.float64]
) -> tuple[JointFit, NDArray[np.float64], NDArray[np.float64]]:
    """Leave out the pieces of broad peaks: near one that is much stronger, they are the skirts of its envelope."""
    if len(density) < 2:
        return fit, density, limit
    distance = _distances(pixels.footprint, fit.frequency, fit.frequency)
    # not by their ratio to the noise, which a near peak seems to raise
    power = np.abs(fit.amplitude) ** 2
    weaker = power[:, None] < _PIECE_RATIO * power[None]
    pieces = np.asarray(((distance < _PIECE_BINS) & weaker).any(axis=1))
    if not pieces.any():
        return fit, density, limit
    fit, kept = fit_jointly(pixels, fit.demodulation.part(~pieces), density[~pieces], limit[~pieces])
    return fit, density[~pieces][kept], limit[~pieces][kept]


def _merged(
    pixels: RegionPixels,
    fit: JointFit,
    density: NDArray[np.float64],
    limit: NDArray[np.float64],
    residuals: CellResiduals,
) -> tuple[JointFit, NDArray[np.float64], NDArray[np.float64], CellResiduals]:
    """Make one peak of each group of near ones that even together are no plane waves: one broken or bent fringe.

    It is put in the middle of the group, weighted by power, and stays there: a plane-wave fit would run to one side.
    """
    n = len(density)
    near = _distances(pixels.footprint, fit.frequency, fit.frequency) < _PIECE_BINS
    group = np.arange(n)
    for j in range(n):
        for k in range(j):
            if near[j, k]:
                group[group == group[j]] = group[k]
    stays, frequency = np.ones(n, bool), fit.frequency.copy()
    for label in np.unique(group):
        members = np.flatnonzero(group == label)
        if len(members) == 1 or _leave_noise(residuals.misfit[members].max(), fit.power_ratio[members].max()):
            continue
        strongest = members[fit.power_ratio[members].argmax()]
        stays[members] = False
        stays[strongest] = True
        # opposite vectors are one and the same peak
        sign = np.where(
            np.hypot(*(frequency[members] - frequency[strongest]).T)
            <= np.hypot(*(frequency[members] + frequency[strongest]).T),
            1,
            -1,
        )
        weight = fit.power_ratio[members] * sign
        frequency[strongest] = weight @ fit.frequency[members] / np.abs(weight).sum()
    if stays.all():
        return fit, density, limit, residuals
    frequency, density, limit = frequency[stays], density[stays], limit[stays]
    demodulation = demodulate(pixels, frequency)
    amplitude, _, covariance = solve_waves(pixels.footprint, demodulation, density)
    power_ratio = np.abs(amplitude) ** 2 * pixels.footprint.count / density
    merged = JointFit(frequency, amplitude, covariance, power_ratio, demodulation)
    return merged, density, limit, cell_residuals(pixels.footprint, merged, density)


def _with_splits(
    pixels: RegionPixels,
    fit: JointFit,
    density: NDArray[np.float64],
    limit: NDArray[np.float64],
    residuals: CellResiduals,
) -> tuple[JointFit, NDArray[np.float64], NDArray[np.float64], CellResiduals]:
    """Put two waves in place of each that misfits, where that leaves noise only."""
    footprint = pixels.footprint
    # which waves the first ones have become: others may go with one that is split
    origin = np.arange(len(density))
    for wave in np.flatnonzero(residuals.misfit > MISFIT_LIMIT)[::-1]:
        if wave not in origin:
            continue
        k = np.flatnonzero(origin == wave)[0]
        shifts = split_wave(footprint, residuals, int(k), complex(fit.amplitude[k]), float(density[k]))
        if shifts is None:
            continue
        others = np.arange(len(density)) != k
        frequency = np.concatenate([fit.frequency[others], fit.frequency[k] + shifts])
        trial_density = np.concatenate([density[others], density[[k, k]]])
        trial_limit = np.concatenate([limit[others], limit[[k, k]]])
        trial, kept = fit_jointly(pixels, demodulate(pixels, frequency), trial_density, trial_limit)
        # what the wrong wave had left over may have passed for others, which are gone now
        if not np.isin([len(frequency) - 2, len(frequency) - 1], kept).all():
            continue
        trial_density, trial_limit = trial_density[kept], trial_limit[kept]
        trial_origin = np.append(origin[others], [-1, -1])[kept]
        trial_residuals = cell_residuals(footprint, trial, trial_density)
        if (trial_residuals.misfit[-2:] > MISFIT_LIMIT).any():
            continue
        fit, density, limit, residuals, origin = trial, trial_density, trial_limit, trial_residuals, trial_origin
    return fit, density, limit, residuals
