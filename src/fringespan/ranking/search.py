"""Candidates for the peaks of a region: pairs of reflections of any zone that are like a pair of measured peaks.

Ratio of lengths and angle don't depend on the scale and are compared tightly, the length itself within the scale's
uncertainty. The same pass gives the density of such pairs among crystals of any size, for the hypothesis that the phase
is not in the list.
"""

from __future__ import annotations

import math
from typing import Any

import numba as nb
import numpy as np
from numpy.typing import NDArray

__all__ = ["find_candidates", "seed_pairs"]

_GATE = 3.5
"""Standard deviations out to which a pair counts as like another."""


def seed_pairs(q: NDArray[np.complex128], relative_sigma: NDArray[np.float64], most: int) -> NDArray[np.int64]:
    """Return up to `most` pairs of peaks to start from, shape (n, 2): well conditioned, strong, and varied.

    A false peak spoils every pair that it is in, so pairs that share few peaks come first.

    Parameters
    ----------
    q : ndarray of complex, shape (n,)
        Independent peaks, strongest first.
    relative_sigma : ndarray, shape (n,)
        Standard uncertainty over length of each.
    most : int
    """
    n = len(q)
    if n < 2:
        return np.zeros((0, 2), dtype=np.int64)
    first, second = np.triu_indices(n, 1)
    angle = np.abs(np.sin(np.angle(q[first] * np.conj(q[second]))))
    ratio = np.abs(np.log(np.abs(q[first]) / np.abs(q[second])))
    merit = np.log(np.maximum(angle, 1e-9)) - 0.5 * ratio - 0.05 * (first + second)
    merit -= np.log(0.003 + relative_sigma[first] + relative_sigma[second])
    merit[(angle < 0.12) | (ratio > 1.7)] = -np.inf
    chosen: list[int] = []
    used = np.zeros(n)
    while len(chosen) < min(most, len(merit)):
        current = merit - 0.7 * (used[first] + used[second])
        best = int(np.argmax(current))
        if not np.isfinite(current[best]):
            break
        chosen.append(best)
        merit[best] = -np.inf
        used[first[best]] += 1
        used[second[best]] += 1
    return np.stack([first[chosen], second[chosen]], axis=1)


@nb.njit(cache=True)
def find_candidates(
    seeds: NDArray[np.int64],
    q: NDArray[np.complex128],
    relative_variance: NDArray[np.float64],
    shape_sigma: float,
    scale_sigma: NDArray[np.float64],
    unlisted_spread: float,
    log_zone: NDArray[np.float64],
    phase_of_zone: NDArray[np.int32],
    pair_log_ratio: NDArray[np.float32],
    pair_angle: NDArray[np.float32],
    pair_log_length: NDArray[np.float32],
    pair_log_weight: NDArray[np.float32],
    pair_zone: NDArray[np.int32],
    quota: int,
) -> Any:
    """Return candidates as (pair, first peak, second peak) rows, and each seed's density of like pairs of any size.

    Parameters
    ----------
    seeds : ndarray of int, shape (s, 2)
    q : ndarray of complex, shape (n,)
        Measured peaks in 1/nm.
    relative_variance : ndarray, shape (n,)
        Variance of q over |q|^2.
    shape_sigma : float
        Standard deviation of ln(ratio) and angle that the distortion of the picture causes.
    scale_sigma : ndarray, shape (phases,)
        Of the logarithm of the scale.
    unlisted_spread : float
        Standard deviation of the logarithm of an unlisted crystal's size against that of a listed one of its shape.
    log_zone : ndarray, shape (z,)
        Log prior of phase and zone, of the number of equivalent orientations, and of picking two of its reflections.
    quota : int
        Most candidates kept for a seed.

    Returns
    -------
    candidates : ndarray of int, shape (c, 3)
    density : ndarray, shape (s,)
        Of pairs in ln(length), ln(ratio) and angle.
    """
    kept_pair = np.empty(quota * len(seeds), dtype=np.int64)
    kept_low = np.empty(quota * len(seeds), dtype=np.int64)
    kept_high = np.empty(quota * len(seeds), dtype=np.int64)
    density = np.zeros(len(seeds))
    number = 0
    size = 4096
    found_pair = np.empty(size, dtype=np.int64)
    found_order = np.empty(size, dtype=np.int8)
    found_merit = np.empty(size)
    for s in range(len(seeds)):
        found = 0
        variance = relative_variance[seeds[s, 0]] + relative_variance[seeds[s, 1]] + shape_sigma**2
        sigma = math.sqrt(variance)
        norm = 1.0 / (2 * math.pi * variance) / (math.sqrt(2 * math.pi) * unlisted_spread)
        for order in range(2):
            low, high = seeds[s, order], seeds[s, 1 - order]
            log_ratio = math.log(abs(q[high]) / abs(q[low]))
            if log_ratio < -_GATE * sigma:
                continue
            turn = q[high] * np.conj(q[low])
            angle = math.atan2(turn.imag, turn.real) % math.pi
            log_length = math.log(abs(q[low]))
            start = np.searchsorted(pair_log_ratio, np.float32(log_ratio - _GATE * sigma))
            stop = np.searchsorted(pair_log_ratio, np.float32(log_ratio + _GATE * sigma))
            for row in range(start, stop):
                off_angle = (angle - pair_angle[row]) / sigma
                if abs(off_angle) > _GATE:
                    continue
                off_ratio = (log_ratio - pair_log_ratio[row]) / sigma
                off_scale = log_length - pair_log_length[row]
                zone = pair_zone[row]
                merit = log_zone[zone] + pair_log_weight[row] - 0.5 * (off_angle**2 + off_ratio**2)
                density[s] += norm * math.exp(merit - 0.5 * (off_scale / unlisted_spread) ** 2)
                scale = math.sqrt(scale_sigma[phase_of_zone[zone]] ** 2 + variance)
                off_scale /= scale
                if abs(off_scale) > 1.2 * _GATE:
                    continue
                if found == size:
                    found_pair = np.concatenate((found_pair, np.empty(size, dtype=np.int64)))
                    found_order = np.concatenate((found_order, np.empty(size, dtype=np.int8)))
                    found_merit = np.concatenate((found_merit, np.empty(size)))
                    size *= 2
                found_pair[found] = row
                found_order[found] = order
                found_merit[found] = merit - 0.5 * off_scale**2
                found += 1
        best = np.argsort(-found_merit[:found])[:quota]
        for index in best:
            kept_pair[number] = found_pair[index]
            kept_low[number] = seeds[s, found_order[index]]
            kept_high[number] = seeds[s, 1 - found_order[index]]
            number += 1
    candidates = np.empty((number, 3), dtype=np.int64)
    candidates[:, 0] = kept_pair[:number]
    candidates[:, 1] = kept_low[:number]
    candidates[:, 2] = kept_high[:number]
    return candidates, density
