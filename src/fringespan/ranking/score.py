"""How well a hypothesis explains the peaks of a region: fit, and logarithm of its evidence.

A hypothesis is a zone of a phase in one orientation. The peaks q are its reflections p, turned, scaled and distorted,

    q = p + e0 p + e1 conj(p) + i e2 conj(p) + i t p,    p = g exp(i rotation)

with the scale e0 and the distortions e1, e2 near 0 within their stated uncertainties and the rotation t free, so that
least squares gives the fit and, the model being linear, the exact integral over all four. What counts beside the fit:

- which reflections were picked: drawn one after the other without replacement with the weights of the zone's table, so
  that a dense net, which has a reflection everywhere, pays for it, and so does a pattern whose strong reflections are
  missing;
- weak peaks are more often false, and more often reflections without kinematic intensity, than strong ones;
- peaks left unexplained: each costs its `false_share` / area of the spectrum;
- peaks marked as sums, differences or harmonics of others: they follow from those and say nothing about the lattice;
  being a reflection too counts a little in favour.
"""

from __future__ import annotations

import math
from typing import Any

import numba as nb
import numpy as np
from numpy.typing import NDArray

__all__ = ["COMBINATION_SHARE", "evaluate", "merge_orientations", "solve", "weight_totals"]

_FIT_GATE = 20.0
"""Squared standard deviations within which a peak is tried as a reflection."""

COMBINATION_SHARE = 0.05
"""How likely one given sum, difference or harmonic of the picked peaks is to be seen, reflection or not."""

_LEAST_TOTAL = 0.3
"""Weight that the reflections of a zone have at least together: one that is not weak."""

_LOG_2PI = math.log(2 * math.pi)


@nb.njit(cache=True)
def solve(matrix: NDArray[np.float64], right: NDArray[np.float64], solution: NDArray[np.float64]) -> float:
    """Solve a symmetric positive system in place by Cholesky's method; return ln of the determinant."""
    n = len(right)
    log_det = 0.0
    for i in range(n):
        for j in range(i + 1):
            total = matrix[i, j]
            for k in range(j):
                total -= matrix[i, k] * matrix[j, k]
            if i == j:
                matrix[i, i] = math.sqrt(max(total, 1e-300))
                log_det += 2 * math.log(matrix[i, i])
            else:
                matrix[i, j] = total / matrix[j, j]
    for i in range(n):
        total = right[i]
        for k in range(i):
            total -= matrix[i, k] * solution[k]
        solution[i] = total / matrix[i, i]
    for i in range(n - 1, -1, -1):
        total = solution[i]
        for k in range(i + 1, n):
            total -= matrix[k, i] * solution[k]
        solution[i] = total / matrix[i, i]
    return log_det


@nb.njit(cache=True)
def _variance_of(factor: NDArray[np.float64], column: NDArray[np.float64]) -> float:
    """Return c^T A^-1 c for a matrix given by its Cholesky factor."""
    n = len(column)
    total = 0.0
    solved = np.empty(n)
    for i in range(n):
        value = column[i]
        for k in range(i):
            value -= factor[i, k] * solved[k]
        solved[i] = value / factor[i, i]
        total += solved[i] ** 2
    return total


@nb.njit(cache=True)
def _fit(
    q: NDArray[np.complex128],
    inverse: NDArray[np.float64],
    node: NDArray[np.int64],
    is_used: NDArray[np.bool_],
    g: NDArray[np.complex128],
    turn: complex,
    prior: NDArray[np.float64],
    matrix: NDArray[np.float64],
    x: NDArray[np.float64],
) -> Any:
    """One linear fit of (e0, e1, e2, t); leaves the Cholesky factor in `matrix`, returns chi2 with prior, ln det."""
    right = np.zeros(4)
    matrix[:, :] = 0.0
    matrix[:3, :3] = prior
    square = 0.0
    for i in range(len(q)):
        if not is_used[i]:
            continue
        p = g[node[i]] * turn
        px, py = p.real, p.imag
        rx, ry = q[i].real - px, q[i].imag - py
        xx, xy, yy = inverse[i, 0], inverse[i, 1], inverse[i, 2]
        square += xx * rx * rx + 2 * xy * rx * ry + yy * ry * ry
        jx = (px, px, py, -py)
        jy = (py, -py, px, px)
        for a in range(4):
            wx = xx * jx[a] + xy * jy[a]
            wy = xy * jx[a] + yy * jy[a]
            right[a] += wx * rx + wy * ry
            for b in range(a + 1):
                matrix[a, b] += wx * jx[b] + wy * jy[b]
    log_det = solve(matrix, right, x)
    for a in range(4):
        square -= right[a] * x[a]
    return square, log_det


@nb.njit(cache=True)
def _assign(
    q: NDArray[np.complex128],
    covariance: NDArray[np.float64],
    node: NDArray[np.int64],
    zone: int,
    turn: complex,
    x: NDArray[np.float64],
    factor: NDArray[np.float64],
    g: NDArray[np.complex128],
    inverse_basis: NDArray[np.float64],
    grid: NDArray[np.int32],
    grid_first: NDArray[np.int32],
    grid_reach: NDArray[np.int32],
) -> None:
    """Give every peak the nearest reflection within reach; one reflection has one peak."""
    m00, m01 = 1 + x[0] + x[1], x[2] - x[3]
    m10, m11 = x[2] + x[3], 1 + x[0] - x[1]
    det = m00 * m11 - m01 * m10
    reach0, reach1 = grid_reach[zone, 0], grid_reach[zone, 1]
    distance = np.empty(len(q))
    column = np.empty(4)
    for i in range(len(q)):
        node[i] = -1
        ux, uy = q[i].real, q[i].imag
        p = complex((m11 * ux - m01 * uy) / det, (m00 * uy - m10 * ux) / det) * np.conj(turn)
        m = round(p.real * inverse_basis[zone, 0, 0] + p.imag * inverse_basis[zone, 1, 0])
        n = round(p.real * inverse_basis[zone, 0, 1] + p.imag * inverse_basis[zone, 1, 1])
        if abs(m) > reach0 or abs(n) > reach1:
            continue
        place = grid[grid_first[zone] + (m + reach0) * (2 * reach1 + 1) + n + reach1]
        if place < 0:
            continue
        turned = g[place] * turn
        px, py = turned.real, turned.imag
        rx = ux - (m00 * px + m01 * py)
        ry = uy - (m10 * px + m11 * py)
        # covariance of the prediction along the residual's own direction is enough to judge it by
        length = math.sqrt(rx * rx + ry * ry) + 1e-300
        nx, ny = rx / length, ry / length
        column[0] = nx * px + ny * py
        column[1] = nx * px - ny * py
        column[2] = nx * py + ny * px
        column[3] = -nx * py + ny * px
        variance = nx * nx * covariance[i, 0] + 2 * nx * ny * covariance[i, 1] + ny * ny * covariance[i, 2]
        variance += _variance_of(factor, column)
        distance[i] = length * length / variance
        if distance[i] > _FIT_GATE:
            continue
        node[i] = place
        for k in range(i):
            if node[k] >= 0 and (node[k] == place or abs(g[node[k]] + g[place]) < 1e-9):
                if distance[k] <= distance[i]:
                    node[i] = -1
                else:
                    node[k] = -1
                break


@nb.njit(cache=True)
def evaluate(
    candidates: NDArray[np.int64],
    q: NDArray[np.complex128],
    covariance: NDArray[np.float64],
    is_independent: NDArray[np.bool_],
    prior: NDArray[np.float64],
    log_prior_det: NDArray[np.float64],
    area: float,
    longest: float,
    false_share: NDArray[np.float64],
    even_share: NDArray[np.float64],
    sharpness: float,
    log_zone: NDArray[np.float64],
    phase_of_zone: NDArray[np.int32],
    first: NDArray[np.int32],
    g: NDArray[np.complex128],
    length: NDArray[np.float64],
    weight: NDArray[np.float64],
    half_weight_up_to: NDArray[np.float64],
    inverse_basis: NDArray[np.float64],
    grid: NDArray[np.int32],
    grid_first: NDArray[np.int32],
    grid_reach: NDArray[np.int32],
    pair_zone: NDArray[np.int32],
    pair_a: NDArray[np.int32],
    pair_b: NDArray[np.int32],
) -> Any:
    """Fit every candidate and return the logarithm of its evidence.

    Parameters
    ----------
    candidates : ndarray of int, shape (c, 3)
        Row of the pair table, peak that is a, peak that is b.
    q : ndarray of complex, shape (n,)
        Peaks in 1/nm, strongest first.
    covariance : ndarray, shape (n, 3)
        xx, xy, yy of each.
    is_independent : ndarray of bool, shape (n,)
        Whether a peak is evidence of its own.
    prior : ndarray, shape (phases, 3, 3)
        Inverse covariance of (e0, e1, e2).
    log_prior_det : ndarray, shape (phases,)
        ln of the determinant of their covariance.
    area, longest : float
        Half the spectrum's area in which peaks were looked for, and its radius.
    false_share, even_share : ndarray, shape (n,)
        Probability that a peak belongs to nothing, and that it was picked regardless of intensity.
    sharpness : float
        Power that the probabilities of picking are raised to after the second peak.
    log_zone : ndarray, shape (z,)
        Log prior of phase and zone, with the number of equivalent orientations.

    Returns
    -------
    log_evidence, chi2, turn, fitted, sigma, node
        Shapes (c,), (c,), (c,) complex, (c, 4), (c,), (c, n); chi2 with the prior's part; sigma that of e0; node -1
        where the peak is unexplained.
    """
    count, n = len(candidates), len(q)
    log_evidence = np.empty(count)
    chi2 = np.empty(count)
    turns = np.empty(count, dtype=np.complex128)
    fitted = np.empty((count, 4))
    sigma = np.empty(count)
    nodes = np.empty((count, n), dtype=np.int64)
    inverse = np.empty((n, 3))
    log_norm = np.empty(n)
    for i in range(n):
        xx, xy, yy = covariance[i, 0], covariance[i, 1], covariance[i, 2]
        det = xx * yy - xy * xy
        inverse[i, 0], inverse[i, 1], inverse[i, 2] = yy / det, -xy / det, xx / det
        log_norm[i] = -_LOG_2PI - 0.5 * math.log(det)
    matrix = np.empty((4, 4))
    x = np.empty(4)
    used = np.empty(n, dtype=np.bool_)
    unit = np.zeros(4)
    unit[0] = 1.0
    for c in range(count):
        row, low, high = candidates[c]
        zone = pair_zone[row]
        phase = phase_of_zone[zone]
        node = nodes[c]
        node[:] = -1
        used[:] = False
        a, b = g[pair_a[row]], g[pair_b[row]]
        turn = q[low] / a
        turn /= abs(turn)
        node[low] = pair_a[row]
        # the peak may be the negative of b: find it as the opposite node
        second = q[high] / b
        if (second * np.conj(turn)).real < 0:
            b = -b
        half_turn = q[high] / b
        turn += half_turn / abs(half_turn)
        turn /= abs(turn)
        right = np.empty(2, dtype=np.complex128)
        right[0], right[1] = q[low], q[high]
        ends = np.empty(2, dtype=np.complex128)
        ends[0], ends[1] = a, b
        pair_inverse = np.empty((2, 3))
        pair_inverse[0], pair_inverse[1] = inverse[low], inverse[high]
        both = np.ones(2, dtype=np.bool_)
        own = np.arange(2)
        for _ in range(2):
            # twice: the rotation is not linear, and peaks may be known better than its square
            _fit(right, pair_inverse, own, both, ends, turn, prior[phase], matrix, x)
            turn *= complex(math.cos(x[3]), math.sin(x[3]))
            x[3] = 0.0
        _assign(q, covariance, node, zone, turn, x, matrix, g, inverse_basis, grid, grid_first, grid_reach)
        square = 0.0
        log_det = 0.0
        for _ in range(2):
            for i in range(n):
                used[i] = node[i] >= 0 and is_independent[i]
            square, log_det = _fit(q, inverse, node, used, g, turn, prior[phase], matrix, x)
            turn *= complex(math.cos(x[3]), math.sin(x[3]))
            x[3] = 0.0
            _assign(q, covariance, node, zone, turn, x, matrix, g, inverse_basis, grid, grid_first, grid_reach)
        for attempt in range(2):
            members = 0
            for i in range(n):
                used[i] = node[i] >= 0 and is_independent[i]
                members += used[i]
            if members < 2:
                break
            square, log_det = _fit(q, inverse, node, used, g, turn, prior[phase], matrix, x)
            turn *= complex(math.cos(x[3]), math.sin(x[3]))
            # sum of the weights that a pick is made among: the nodes within the part of the spectrum looked at
            reach = longest / (1 + x[0])
            stop = first[zone] + np.searchsorted(length[first[zone] : first[zone + 1]], reach)
            total = half_weight_up_to[stop - 1] if stop > first[zone] else 1e-9
            available = max(0.5 * (stop - first[zone]), 1.0)
            value = 0.0
            left = total
            picked = 0
            dropped = False
            for i in range(n):
                if not is_independent[i]:
                    continue
                if node[i] < 0:
                    value += math.log(false_share[i] / area)
                    continue
                w = weight[node[i]]
                power = 1.0 if picked < 2 else sharpness
                picked += 1
                chance = (1 - even_share[i]) * w / max(left, w) + even_share[i] / available
                pick = math.log(1 - false_share[i]) + power * math.log(chance)
                left = max(left - w, 0.0)
                p = g[node[i]] * turn
                rx = q[i].real - (p.real * (1 + x[0] + x[1]) + p.imag * x[2])
                ry = q[i].imag - (p.imag * (1 + x[0] - x[1]) + p.real * x[2])
                own_square = inverse[i, 0] * rx * rx + 2 * inverse[i, 1] * rx * ry + inverse[i, 2] * ry * ry
                if attempt == 0 and pick + log_norm[i] - 0.5 * own_square < math.log(false_share[i] / area):
                    node[i] = -1
                    dropped = True
                value += pick + log_norm[i]
            if not dropped:
                break
        if members < 2:
            log_evidence[c] = -np.inf
            chi2[c] = np.inf
            turns[c] = turn
            fitted[c] = 0.0
            sigma[c] = np.inf
            continue
        for i in range(n):
            if is_independent[i]:
                continue
            share = COMBINATION_SHARE
            if node[i] >= 0:
                w = weight[node[i]]
                share += w / max(left, w)
                left = max(left - w, 0.0)
            value += math.log(share)
        value += -0.5 * square + 2 * _LOG_2PI - 0.5 * log_det - 0.5 * (3 * _LOG_2PI + log_prior_det[phase])
        log_evidence[c] = value + log_zone[zone] - _LOG_2PI
        chi2[c] = square
        turns[c] = turn
        x[3] = 0.0
        fitted[c] = x
        sigma[c] = math.sqrt(_variance_of(matrix, unit))
    return log_evidence, chi2, turns, fitted, sigma, nodes


@nb.njit(cache=True)
def weight_totals(
    first: NDArray[np.int32], length: NDArray[np.float64], half_weight_up_to: NDArray[np.float64], longest: float
) -> NDArray[np.float64]:
    """Return for each zone the sum of the weights of its reflections (of g and -g one) no longer than `longest`."""
    total = np.full(len(first) - 1, _LEAST_TOTAL)
    for zone in range(len(total)):
        number = np.searchsorted(length[first[zone] : first[zone + 1]], longest)
        if number:
            total[zone] = max(half_weight_up_to[first[zone] + number - 1], _LEAST_TOTAL)
    return total


@nb.njit(cache=True)
def merge_orientations(
    candidates: NDArray[np.int64],
    log_evidence: NDArray[np.float64],
    turn: NDArray[np.complex128],
    pair_zone: NDArray[np.int32],
    turns: NDArray[np.int32],
    margin: float,
) -> NDArray[np.int64]:
    """Return the candidates to keep, best first: one per orientation, as several pairs lead to the same one.

    Those whose evidence lies more than `margin` below the best are left out.
    """
    order = np.argsort(-log_evidence)
    kept = np.empty(len(order), dtype=np.int64)
    number = 0
    for index in order:
        if log_evidence[index] < log_evidence[order[0]] - margin:
            break
        zone = pair_zone[candidates[index, 0]]
        is_new = True
        for k in range(number):
            other = kept[k]
            if pair_zone[candidates[other, 0]] != zone:
                continue
            off = (turn[index] * np.conj(turn[other])) ** turns[zone]
            if off.real > 0 and abs(off.imag) < 0.026 * turns[zone]:
                is_new = False
                break
        if is_new:
            kept[number] = index
            number += 1
    return kept[:number]
