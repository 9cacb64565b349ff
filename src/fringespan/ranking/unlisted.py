"""The hypothesis that the phase is not in the list: any crystal whose net the peaks lie on."""

from __future__ import annotations

import math

import numba as nb
import numpy as np
from numpy.typing import NDArray

from fringespan.ranking.score import COMBINATION_SHARE, solve

__all__ = ["unlisted_evidence"]

_PICKABLE = 0.7
_FEWEST = 8.0
"""A sum or harmonic of other peaks is one of this part of the nodes as well, of which there are at least so many."""

_LOG_2PI = math.log(2 * math.pi)


@nb.njit(cache=True)
def unlisted_evidence(
    seeds: NDArray[np.int64],
    density: NDArray[np.float64],
    q: NDArray[np.complex128],
    covariance: NDArray[np.float64],
    is_independent: NDArray[np.bool_],
    area: float,
    false_share: NDArray[np.float64],
    even_share: NDArray[np.float64],
    sharpness: float,
    decay: float,
) -> NDArray[np.float64]:
    """Return for each seed the log evidence that the peaks lie on a net of a crystal that is not in the list.

    Two peaks span the net, with the density that such a pair has among crystals of any size; the others are drawn
    from its nodes, at places that a free fit of the net predicts, or are unexplained.

    Parameters
    ----------
    density : ndarray, shape (s,)
        As `find_candidates` gives it, with a floor.
    false_share, even_share, sharpness
        As for `evaluate`.
    decay : float
        Nodes are drawn with weights exp(-decay (g / longest)^2), as reflections fade outwards in any crystal.
    """
    n = len(q)
    result = np.empty(len(seeds))
    longest_squared = 2 * area / math.pi
    alpha = np.empty(n)
    beta = np.empty(n)
    is_member = np.zeros(n, dtype=np.bool_)
    for s in range(len(seeds)):
        i, j = seeds[s]
        cell = q[i].real * q[j].imag - q[i].imag * q[j].real
        for k in range(n):
            alpha[k] = (q[k].real * q[j].imag - q[k].imag * q[j].real) / cell
            beta[k] = (q[i].real * q[k].imag - q[i].imag * q[k].real) / cell
        jacobian = abs(q[i]) ** 2 * abs(q[j]) ** 2
        best = -np.inf
        for divisor in range(1, 5):
            matrix = np.zeros((4, 4))
            right = np.zeros(4)
            square = 0.0
            value = math.log(max(density[s], 1e-12) / jacobian) - _LOG_2PI + 2 * _LOG_2PI
            minors = divisor * divisor
            is_member[:] = False
            for k in range(n):
                if not is_independent[k]:
                    continue
                u, v = round(alpha[k] * divisor), round(beta[k] * divisor)
                wa, wb = u / divisor, v / divisor
                d = q[k] - (wa * q[i] + wb * q[j])
                spread = covariance[k, 0] + covariance[k, 2]
                spread += wa * wa * (covariance[i, 0] + covariance[i, 2]) + wb * wb * (
                    covariance[j, 0] + covariance[j, 2]
                )
                is_pair = k in (i, j)
                if not is_pair and (abs(d) ** 2 / spread > 10 or (u == 0 and v == 0)):
                    value += math.log(false_share[k] / area)
                    continue
                xx, xy, yy = covariance[k, 0], covariance[k, 1], covariance[k, 2]
                det = xx * yy - xy * xy
                ixx, ixy, iyy = yy / det, -xy / det, xx / det
                value += math.log(1 - false_share[k])
                is_member[k] = True
                value += -_LOG_2PI - 0.5 * math.log(det)
                square += ixx * d.real**2 + 2 * ixy * d.real * d.imag + iyy * d.imag**2
                w = (wa, wb)
                for a in range(2):
                    right[2 * a] += w[a] * (ixx * d.real + ixy * d.imag)
                    right[2 * a + 1] += w[a] * (ixy * d.real + iyy * d.imag)
                    for b in range(2):
                        matrix[2 * a, 2 * b] += w[a] * w[b] * ixx
                        matrix[2 * a, 2 * b + 1] += w[a] * w[b] * ixy
                        matrix[2 * a + 1, 2 * b] += w[a] * w[b] * ixy
                        matrix[2 * a + 1, 2 * b + 1] += w[a] * w[b] * iyy
                if not is_pair:
                    minors = math.gcd(minors, divisor * u)
                    minors = math.gcd(minors, divisor * v)
                    for other in range(k):
                        if is_member[other]:
                            u2, v2 = round(alpha[other] * divisor), round(beta[other] * divisor)
                            minors = math.gcd(minors, u * v2 - v * u2)
            solution = np.empty(4)
            log_det = solve(matrix, right, solution)
            for a in range(4):
                square -= right[a] * solution[a]
            value += -0.5 * square - 0.5 * log_det
            nodes = area * divisor * divisor / (abs(cell) * max(abs(minors), 1))
            left = nodes * (1 - math.exp(-decay)) / decay
            least = 0.25 * left  # a smoothed sum, of which the last reflections picked leave no certainty
            left -= math.exp(-decay * abs(q[i]) ** 2 / longest_squared) + math.exp(
                -decay * abs(q[j]) ** 2 / longest_squared
            )
            for k in range(n):
                if is_member[k] and k != i and k != j:
                    fading = math.exp(-decay * abs(q[k]) ** 2 / longest_squared)
                    chance = (1 - even_share[k]) * fading / max(left, fading, least) + even_share[k] / max(nodes, 1.0)
                    value += sharpness * math.log(chance)
                    left -= fading
            for k in range(n):
                if not is_independent[k]:
                    value += math.log(COMBINATION_SHARE + 1 / max(_PICKABLE * nodes, _FEWEST))
            best = max(best, value)
        result[s] = best
    return result
