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
from fringespan.ranking.observation import Observation

__all__ = ["described", "fit_limit", "normalised"]

_STRONG = 0.5
"""Weight (about the square root of the relative intensity) from which on a reflection is missed if it is not seen."""

_MOST_MISSING = 3
_ALIKE_CHI_SQUARED = 6.0
_MOST_COMPARED = 12
_LIKELY = 1e-3
_ENOUGH = 0.9999
_EXPLAINED = 0.5
"""Share of the peaks' power that a hypothesis must explain to fit."""

_OPEN_GATE = 10.0


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


def described(comparison: Comparison, observation: Observation, most: int) -> tuple[Hypothesis, ...]:
    """Return the hypotheses of a comparison, one for each phase and zone, best first.

    Parameters
    ----------
    observation : Observation
        Its reflections that were no evidence are given indices too.
    most : int
        Most hypotheses returned.
    """
    probability, _ = normalised(comparison)
    zones, first, inverse = np.unique(comparison.zone, return_index=True, return_inverse=True)
    summed = np.bincount(inverse, weights=probability, minlength=len(zones))
    order = np.argsort(-summed, kind="stable")
    enough = int(np.searchsorted(np.cumsum(summed[order]), _ENOUGH * summed.sum())) + 1
    order = order[: min(most, enough)]
    chosen = first[order]
    tables = comparison.tables
    q, covariance = observation.vectors(), observation.covariances()
    node = np.full((len(chosen), len(q)), -1, dtype=np.int64)
    node[:, comparison.peaks] = comparison.node[chosen]
    is_open = np.ones(len(q), dtype=bool)
    is_open[comparison.peaks] = False
    zone_of, turn, distortion = comparison.zone[chosen], comparison.turn[chosen], comparison.distortion[chosen]
    nets = tables.inverse_basis, tables.grid, tables.grid_first, tables.grid_reach
    reflections = tables.first, tables.g, tables.length, tables.weight
    longest = comparison.longest_per_nm
    pull, missing, rotation = _facts(
        zone_of, turn, distortion, node, is_open, q, covariance, longest, *reflections, tables.kind, *nets
    )
    compared = min(_MOST_COMPARED, int(np.count_nonzero(summed[order] > _LIKELY * summed.max(initial=0.0))))
    tolerance = 2 * math.sqrt(float(np.median((comparison.covariance[:, 0] + comparison.covariance[:, 2]) / 2)))
    alike = _alike(zone_of[:compared], turn[:compared], distortion[:compared], longest, tolerance, *reflections, *nets)
    members = (comparison.node[chosen] >= 0) & comparison.is_independent
    dof = np.maximum(2 * members.sum(axis=1) - 1, 1)
    power = np.where(comparison.is_independent, comparison.strength**2, 0.0)
    explained = (members * power).sum(axis=1) / max(power.sum(), 1e-300)
    names = [
        (comparison.phases[int(tables.phase_of_zone[z])].id, _three(tables.zone[z])) for z in comparison.zone[chosen]
    ]
    chi_squared = comparison.chi_squared[chosen]
    is_explained = node >= 0
    indices = tables.hkl[node].tolist()
    spacings = (1 / tables.length[node]).tolist()
    is_forbidden = ((tables.kind[node] != 0) & is_explained).tolist()
    known = is_explained.tolist()
    result = []
    for k, index in enumerate(chosen):
        zone = int(comparison.zone[index])
        look_alikes = [
            names[m]
            for m in range(compared)
            if k < compared and m != k and alike[k, m] and abs(chi_squared[k] - chi_squared[m]) < _ALIKE_CHI_SQUARED
        ]
        if tables.opposite_alike[zone]:
            u, v, w = names[k][1]
            look_alikes.append((names[k][0], (-u, -v, -w)))
        result.append(
            Hypothesis(
                phase=names[k][0],
                structure=comparison.phases[int(tables.phase_of_zone[zone])],
                zone=names[k][1],
                probability=float(summed[order[k]]),
                hkl=tuple((h[0], h[1], h[2]) if yes else None for h, yes in zip(indices[k], known[k], strict=True)),
                rotation_deg=float(rotation[k]),
                scale=1 + float(comparison.distortion[index, 0]),
                scale_uncertainty=float(comparison.scale_sigma[index]),
                fits=bool(chi_squared[k] < fit_limit(int(dof[k])) and explained[k] >= _EXPLAINED),
                pulls=tuple(v if yes else None for v, yes in zip(pull[k].tolist(), known[k], strict=True)),
                expected_d_nm=tuple(v if yes else None for v, yes in zip(spacings[k], known[k], strict=True)),
                chi_squared=float(chi_squared[k]),
                degrees_of_freedom=int(dof[k]),
                missing=tuple(_three(tables.hkl[m]) for m in missing[k] if m >= 0),
                forbidden=tuple(is_forbidden[k]),
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
    is_open: NDArray[np.bool_],
    q: NDArray[np.complex128],
    covariance: NDArray[np.float64],
    longest: float,
    first: NDArray[np.int32],
    g: NDArray[np.complex128],
    length: NDArray[np.float64],
    weight: NDArray[np.float64],
    kind: NDArray[np.int8],
    inverse_basis: NDArray[np.float64],
    grid: NDArray[np.int32],
    grid_first: NDArray[np.int32],
    grid_reach: NDArray[np.int32],
) -> Any:
    """Give the open peaks their reflections; return pulls, strong reflections not seen, and the rotation in degrees."""
    count, n = node.shape
    pull = np.zeros((count, n))
    missing = np.full((count, _MOST_MISSING), -1, dtype=np.int64)
    rotation = np.zeros(count)
    for k in range(count):
        e0, e1, e2 = distortion[k]
        for i in range(n):
            if is_open[i]:
                near = _nearest(q[i], zone[k], turn[k], e0, e1, e2, inverse_basis, grid, grid_first, grid_reach)
                if near >= 0:
                    off = abs(q[i] - _placed(g[near] * turn[k], e0, e1, e2)) ** 2
                    if off < _OPEN_GATE * (covariance[i, 0] + covariance[i, 2]) + (0.003 * abs(q[i])) ** 2:
                        node[k, i] = near
            if node[k, i] < 0:
                continue
            size = abs(q[i])
            nx, ny = q[i].real / size, q[i].imag / size
            variance = nx * nx * covariance[i, 0] + 2 * nx * ny * covariance[i, 1] + ny * ny * covariance[i, 2]
            pull[k, i] = (size - abs(_placed(g[node[k, i]] * turn[k], e0, e1, e2))) / math.sqrt(variance)
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
    return pull, missing, rotation


@nb.njit(cache=True)
def _placed(p: complex, e0: float, e1: float, e2: float) -> complex:
    return complex(p.real * (1 + e0 + e1) + p.imag * e2, p.imag * (1 + e0 - e1) + p.real * e2)


@nb.njit(cache=True)
def _nearest(
    q: complex,
    zone: int,
    turn: complex,
    e0: float,
    e1: float,
    e2: float,
    inverse_basis: NDArray[np.float64],
    grid: NDArray[np.int32],
    grid_first: NDArray[np.int32],
    grid_reach: NDArray[np.int32],
) -> int:
    """Return the node of a zone nearest to a place of the picture, -1 where the table ends."""
    m00, m01, m11 = 1 + e0 + e1, e2, 1 + e0 - e1
    det = m00 * m11 - m01 * m01
    back = complex((m11 * q.real - m01 * q.imag) / det, (m00 * q.imag - m01 * q.real) / det) * np.conj(turn)
    m = round(back.real * inverse_basis[zone, 0, 0] + back.imag * inverse_basis[zone, 1, 0])
    n = round(back.real * inverse_basis[zone, 0, 1] + back.imag * inverse_basis[zone, 1, 1])
    reach0, reach1 = grid_reach[zone, 0], grid_reach[zone, 1]
    if abs(m) > reach0 or abs(n) > reach1:
        return -1
    return int(grid[grid_first[zone] + (m + reach0) * (2 * reach1 + 1) + n + reach1])


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
            for place in range(first[zone[a]], first[zone[a] + 1]):
                if length[place] * (1 + e0) > longest:
                    break
                if weight[place] < 0.15:
                    continue
                seen = _placed(g[place] * turn[a], e0, e1, e2)
                f0, f1, f2 = distortion[b]
                near = _nearest(seen, zone[b], turn[b], f0, f1, f2, inverse_basis, grid, grid_first, grid_reach)
                if near < 0 or weight[near] < 0.03:
                    covered[a, b] = False
                    break
                if abs(seen - _placed(g[near] * turn[b], f0, f1, f2)) > 0.006 * abs(seen) + tolerance:
                    covered[a, b] = False
                    break
    return covered & covered.T
