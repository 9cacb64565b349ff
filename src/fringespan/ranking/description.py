"""From the arrays of a comparison to hypotheses that can be read: indices, pulls, what is missing, what looks alike."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any

import numba as nb
import numpy as np
from numpy.typing import NDArray

from fringespan.ranking.comparison import Comparison
from fringespan.ranking.hypotheses import Hypothesis

__all__ = ["described", "fit_limit", "normalised"]

_STRONG = 0.5
"""Weight (about the square root of the relative intensity) from which on a reflection is missed if it is not seen."""

_MOST_MISSING = 3
_ALIKE_CHI_SQUARED = 6.0
_MOST_COMPARED = 12
_LIKELY = 1e-3


@lru_cache(maxsize=256)
def fit_limit(degrees_of_freedom: int) -> float:
    """Return the chi-squared that a true hypothesis exceeds in one case of a hundred."""
    from scipy.special import chdtri

    return float(chdtri(degrees_of_freedom, 0.01))


def normalised(comparison: Comparison) -> tuple[NDArray[np.float64], float]:
    """Return the probability of each hypothesis, shape (h,), and that of a phase not in the list."""
    every = np.append(comparison.log_evidence, comparison.unlisted_log_evidence)
    share = np.exp(every - every.max())
    share /= share.sum()
    return share[:-1], float(share[-1])


def described(comparison: Comparison, number_of_peaks: int, most: int) -> tuple[Hypothesis, ...]:
    """Return the hypotheses of a comparison, one for each phase and zone, best first.

    Parameters
    ----------
    number_of_peaks : int
        How many the observation has; those that were not compared are left unexplained.
    most : int
        Most hypotheses returned.
    """
    probability, _ = normalised(comparison)
    zones, first, inverse = np.unique(comparison.zone, return_index=True, return_inverse=True)
    summed = np.bincount(inverse, weights=probability, minlength=len(zones))
    order = np.argsort(-summed, kind="stable")[:most]
    chosen = first[order]
    tables = comparison.tables
    facts = _facts(
        comparison.zone[chosen],
        comparison.turn[chosen],
        comparison.distortion[chosen],
        comparison.node[chosen],
        comparison.q,
        comparison.covariance,
        comparison.longest_per_nm,
        tables.first,
        tables.g,
        tables.length,
        tables.weight,
        tables.kind,
    )
    pull, d_nm, missing, forbidden, rotation = facts
    compared = min(_MOST_COMPARED, int(np.count_nonzero(summed[order] > _LIKELY * summed.max(initial=0.0))))
    tolerance = 2 * math.sqrt(float(np.median((comparison.covariance[:, 0] + comparison.covariance[:, 2]) / 2)))
    alike = _alike(
        comparison.zone[chosen[:compared]],
        comparison.turn[chosen[:compared]],
        comparison.distortion[chosen[:compared]],
        comparison.longest_per_nm,
        tolerance,
        tables.first,
        tables.g,
        tables.length,
        tables.weight,
        tables.inverse_basis,
        tables.grid,
        tables.grid_first,
        tables.grid_reach,
    )
    members = (comparison.node[chosen] >= 0) & comparison.is_independent
    dof = np.maximum(2 * members.sum(axis=1) - 1, 1)
    independent = int(comparison.is_independent.sum())
    names = [
        (comparison.phases[int(tables.phase_of_zone[z])].id, _three(tables.zone[z])) for z in comparison.zone[chosen]
    ]
    chi_squared = comparison.chi_squared[chosen]
    places = comparison.peaks.tolist()
    result = []
    for k, index in enumerate(chosen):
        zone = int(comparison.zone[index])
        node = comparison.node[index].tolist()
        hkl: list[tuple[int, int, int] | None] = [None] * number_of_peaks
        pulls: list[float | None] = [None] * number_of_peaks
        spacings: list[float | None] = [None] * number_of_peaks
        has_none = [False] * number_of_peaks
        indices = tables.hkl[comparison.node[index]].tolist()
        for i, place in enumerate(places):
            if node[i] >= 0:
                a, b, c = indices[i]
                hkl[place] = (a, b, c)
                pulls[place], spacings[place] = float(pull[k, i]), float(d_nm[k, i])
                has_none[place] = bool(forbidden[k, i])
        look_alikes = [
            names[m]
            for m in range(compared)
            if k < compared and m != k and alike[k, m] and abs(chi_squared[k] - chi_squared[m]) < _ALIKE_CHI_SQUARED
        ]
        if tables.opposite_alike[zone]:
            u, v, w = names[k][1]
            look_alikes.append((names[k][0], (-u, -v, -w)))
        explained = int(members[k].sum())
        result.append(
            Hypothesis(
                phase=names[k][0],
                structure=comparison.phases[int(tables.phase_of_zone[zone])],
                zone=names[k][1],
                probability=float(summed[order[k]]),
                hkl=tuple(hkl),
                rotation_deg=float(rotation[k]),
                scale=1 + float(comparison.distortion[index, 0]),
                scale_uncertainty=float(comparison.scale_sigma[index]),
                fits=bool(chi_squared[k] < fit_limit(int(dof[k])) and 2 * explained >= independent),
                pulls=tuple(pulls),
                expected_d_nm=tuple(spacings),
                chi_squared=float(chi_squared[k]),
                degrees_of_freedom=int(dof[k]),
                missing=tuple(_three(tables.hkl[m]) for m in missing[k] if m >= 0),
                forbidden=tuple(has_none),
                indistinguishable_from=tuple(look_alikes),
            )
        )
    return tuple(result)


def _three(row: NDArray[np.int32]) -> tuple[int, int, int]:
    a, b, c = row.tolist()
    return a, b, c


@nb.njit(cache=True)
def _facts(
    zone: NDArray[np.int64],
    turn: NDArray[np.complex128],
    distortion: NDArray[np.float64],
    node: NDArray[np.int64],
    q: NDArray[np.complex128],
    covariance: NDArray[np.float64],
    longest: float,
    first: NDArray[np.int32],
    g: NDArray[np.complex128],
    length: NDArray[np.float64],
    weight: NDArray[np.float64],
    kind: NDArray[np.int8],
) -> Any:
    """Return pulls, spacings, strong reflections not seen, whether forbidden, and the rotation in degrees."""
    count, n = node.shape
    pull = np.zeros((count, n))
    d_nm = np.zeros((count, n))
    forbidden = np.zeros((count, n), dtype=np.bool_)
    missing = np.full((count, _MOST_MISSING), -1, dtype=np.int64)
    rotation = np.zeros(count)
    for k in range(count):
        e0, e1, e2 = distortion[k]
        for i in range(n):
            if node[k, i] < 0:
                continue
            p = g[node[k, i]] * turn[k]
            r = complex(p.real * (1 + e0 + e1) + p.imag * e2, p.imag * (1 + e0 - e1) + p.real * e2)
            size = abs(q[i])
            nx, ny = q[i].real / size, q[i].imag / size
            variance = nx * nx * covariance[i, 0] + 2 * nx * ny * covariance[i, 1] + ny * ny * covariance[i, 2]
            pull[k, i] = (size - abs(r)) / math.sqrt(variance)
            d_nm[k, i] = 1 / length[node[k, i]]
            forbidden[k, i] = kind[node[k, i]] != 0
        found_axis = False
        for place in range(first[zone[k]], first[zone[k] + 1]):
            if kind[place] == 0 and not found_axis:
                axis = g[place] * turn[k]
                rotation[k] = math.degrees(math.atan2(axis.imag, axis.real)) % 360
                found_axis = True
            if length[place] * (1 + e0) > longest:
                break
            if kind[place] != 0 or weight[place] < _STRONG:
                continue
            is_known = False
            for i in range(n):
                if node[k, i] >= 0 and (node[k, i] == place or abs(g[node[k, i]] + g[place]) < 1e-9):
                    is_known = True
            for m in range(_MOST_MISSING):
                if missing[k, m] >= 0 and abs(g[missing[k, m]] + g[place]) < 1e-9:
                    is_known = True
            if is_known:
                continue
            candidate = place
            for m in range(_MOST_MISSING):
                if missing[k, m] < 0 or weight[candidate] > weight[missing[k, m]] + 1e-9:
                    candidate, missing[k, m] = missing[k, m], candidate
                    if candidate < 0:
                        break
    return pull, d_nm, missing, forbidden, rotation


@nb.njit(cache=True)
def _alike(
    zone: NDArray[np.int64],
    turn: NDArray[np.complex128],
    distortion: NDArray[np.float64],
    longest: float,
    tolerance: float,
    first: NDArray[np.int32],
    g: NDArray[np.complex128],
    length: NDArray[np.float64],
    weight: NDArray[np.float64],
    inverse_basis: NDArray[np.float64],
    grid: NDArray[np.int32],
    grid_first: NDArray[np.int32],
    grid_reach: NDArray[np.int32],
) -> NDArray[np.bool_]:
    """Return whether the visible reflections of two hypotheses, as fitted, fall on each other, shape (h, h)."""
    count = len(zone)
    covered = np.ones((count, count), dtype=np.bool_)
    for a in range(count):
        e0, e1, e2 = distortion[a]
        for b in range(count):
            if a == b:
                continue
            f0, f1, f2 = distortion[b]
            m00, m01, m11 = 1 + f0 + f1, f2, 1 + f0 - f1
            det = m00 * m11 - m01 * m01
            reach0, reach1 = grid_reach[zone[b], 0], grid_reach[zone[b], 1]
            for place in range(first[zone[a]], first[zone[a] + 1]):
                if length[place] * (1 + e0) > longest:
                    break
                if weight[place] < 0.15:
                    continue
                p = g[place] * turn[a]
                x, y = p.real * (1 + e0 + e1) + p.imag * e2, p.imag * (1 + e0 - e1) + p.real * e2
                back = complex((m11 * x - m01 * y) / det, (m00 * y - m01 * x) / det) * np.conj(turn[b])
                m = round(back.real * inverse_basis[zone[b], 0, 0] + back.imag * inverse_basis[zone[b], 1, 0])
                n = round(back.real * inverse_basis[zone[b], 0, 1] + back.imag * inverse_basis[zone[b], 1, 1])
                other = -1
                if abs(m) <= reach0 and abs(n) <= reach1:
                    other = grid[grid_first[zone[b]] + (m + reach0) * (2 * reach1 + 1) + n + reach1]
                if other < 0 or weight[other] < 0.03 or abs(back - g[other]) > 0.006 * abs(back) + tolerance:
                    covered[a, b] = False
                    break
    return covered & covered.T
