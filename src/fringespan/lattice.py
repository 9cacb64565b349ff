"""The two-dimensional lattice that the peaks of a region have in common."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

__all__ = [
    "LatticeFit",
    "PlaneLattice",
    "combinations",
    "find_lattice",
    "lattice_points",
    "plane_lattice",
    "unseen_lattice_points",
]

_STRONGEST = 8
_HIGHEST_INDEX = 12
_HUBER = 2.0
_LEAST_EVIDENCE = 6.0
"""Natural logarithm of the odds, against chance, that the peaks beyond the first two must bring for a lattice."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class PlaneLattice:
    """A two-dimensional lattice in reciprocal and real space, reduced, with uncertainties.

    Vectors are (row, column); rows of the arrays are the two basis vectors. Fields in nm are None without a pixel size.

    Attributes
    ----------
    reciprocal_per_px, reciprocal_per_nm : ndarray, shape (2, 2)
    reciprocal_uncertainty_per_px, reciprocal_uncertainty_per_nm : ndarray, shape (2, 2)
        Standard uncertainty of each component, fit and crystal parts.
    real_px, real_nm : ndarray, shape (2, 2)
        Real-space basis a_i with a_i . b_j = 1 if i = j else 0.
    lengths_nm, length_uncertainties_nm : (float, float) or None
        Lengths of the real-space vectors, fit and crystal parts.
    angle_deg, angle_uncertainty_deg : float
        Angle between the real-space vectors.
    residual_rms : float
        Root mean square of the normalised residuals of the peaks that lie on it.
    members : tuple of int
        Positions of the peaks that lie on it.
    """

    reciprocal_per_px: NDArray[np.float64]
    reciprocal_uncertainty_per_px: NDArray[np.float64]
    reciprocal_per_nm: NDArray[np.float64] | None
    reciprocal_uncertainty_per_nm: NDArray[np.float64] | None
    real_px: NDArray[np.float64]
    real_nm: NDArray[np.float64] | None
    lengths_nm: tuple[float, float] | None
    length_uncertainties_nm: tuple[float, float] | None
    angle_deg: float
    angle_uncertainty_deg: float
    residual_rms: float
    members: tuple[int, ...]


@dataclass(frozen=True, eq=False, slots=True)
class LatticeFit:
    """A reciprocal lattice fitted to peaks.

    Attributes
    ----------
    basis : ndarray, shape (2, 2)
        Rows are the reduced basis vectors, in the unit of the peaks.
    covariance : ndarray, shape (4, 4)
        Of the basis, flattened, scaled up where the peaks scatter more than their uncertainties say.
    index : ndarray of int, shape (n, 2)
        Nearest lattice point of each peak.
    member : ndarray of bool, shape (n,)
        Which peaks lie on the lattice.
    along : ndarray, shape (n,)
        Residual of each peak along its own vector.
    scatter : float
        Root mean square normalised residual of the members, at least 1.
    """

    basis: NDArray[np.float64]
    covariance: NDArray[np.float64]
    index: NDArray[np.int64]
    member: NDArray[np.bool_]
    along: NDArray[np.float64]
    scatter: float


def find_lattice(
    g: NDArray[np.float64],
    sigma_along: NDArray[np.float64],
    sigma_across: NDArray[np.float64],
    strength: NDArray[np.float64],
) -> LatticeFit | None:
    """Find the lattice that explains the peaks best, and fit it to them.

    Every pair of strong peaks, or of their sums and differences, is tried as a basis. A lattice gains the more from a
    peak the larger its cell is against the peak's uncertainty, so that a fine lattice, which explains anything, gains
    little.

    Parameters
    ----------
    g : ndarray, shape (n, 2)
        Peaks in any unit.
    sigma_along, sigma_across : ndarray, shape (n,)
        Their standard uncertainties along and across their own vector.
    strength : ndarray, shape (n,)
        Signal to noise.

    Returns
    -------
    LatticeFit or None
        None if fewer than three peaks lie on one lattice, or if that may well be chance.
    """
    if len(g) < 3:
        return None
    index, member, along = np.empty((len(g), 2), np.int64), np.empty(len(g), np.bool_), np.empty(len(g))
    order = np.argsort(-strength)[:_STRONGEST]
    is_found, basis, covariance, scatter = _find(g, sigma_along, sigma_across, order, index, member, along)
    return LatticeFit(basis, covariance, index, member, along, scatter) if is_found else None


@numba.njit(cache=True, nogil=True)
def _find(g, sigma_along, sigma_across, order, index, member, along):  # type: ignore[no-untyped-def]
    """Fill in the nearest points, who lies on the lattice, and residuals; return success, basis, covariance, scatter."""
    unit = np.empty_like(g)
    for k in range(g.shape[0]):
        unit[k] = g[k] / np.sqrt(g[k, 0] ** 2 + g[k, 1] ** 2)
    vectors = _with_differences(g[order], min(5, order.size))
    evidence, basis = _best_basis(vectors, g, unit, sigma_along, sigma_across)
    if evidence < _LEAST_EVIDENCE:
        return False, basis, np.zeros((4, 4)), 1.0
    basis = _reduced(basis)
    _score(basis, g, unit, sigma_along, sigma_across, index, member)
    if member.sum() < 3 or not _spans_plane(index, member):
        return False, basis, np.zeros((4, 4)), 1.0
    basis, normal, scatter = _weighted_fit(g, unit, sigma_along, sigma_across, index, member)
    for k in range(g.shape[0]):
        along[k] = 0.0
        for a in range(2):
            along[k] += (g[k, a] - index[k, 0] * basis[0, a] - index[k, 1] * basis[1, a]) * unit[k, a]
    return True, basis, np.linalg.inv(normal) * scatter**2, scatter


@numba.njit(cache=True, nogil=True)
def _with_differences(g, count):  # type: ignore[no-untyped-def]
    """Return the vectors, and the sums and differences of the first few."""
    n = g.shape[0]
    out = np.empty((n + count * (count - 1), 2))
    out[:n] = g
    k = n
    for i in range(count):
        for j in range(i):
            out[k] = g[i] + g[j]
            out[k + 1] = g[i] - g[j]
            k += 2
    return out


@numba.njit(cache=True, nogil=True)
def _best_basis(vectors, g, unit, sigma_along, sigma_across):  # type: ignore[no-untyped-def]
    """Return the evidence for the best basis among all pairs of vectors, and that basis, fitted to its members."""
    kept = 8
    best = np.full(kept, -1.0)
    bases = np.zeros((kept, 2, 2))
    index = np.empty((g.shape[0], 2), np.int64)
    member = np.empty(g.shape[0], np.bool_)
    basis = np.empty((2, 2))
    for i in range(vectors.shape[0]):
        for j in range(i):
            basis[0] = vectors[i]
            basis[1] = vectors[j]
            area = abs(basis[0, 0] * basis[1, 1] - basis[0, 1] * basis[1, 0])
            if area**2 <= 0.0225 * (basis[0] ** 2).sum() * (basis[1] ** 2).sum():
                continue
            reduced = _reduced(basis)
            seen = False
            near = 0.005 * (abs(reduced[0, 0]) + abs(reduced[0, 1]))
            for k in range(kept):
                if (
                    best[k] >= 0
                    and abs(bases[k, 0, 0] - reduced[0, 0]) < near
                    and abs(bases[k, 0, 1] - reduced[0, 1]) < near
                    and abs(bases[k, 1, 0] - reduced[1, 0]) < near
                    and abs(bases[k, 1, 1] - reduced[1, 1]) < near
                ):
                    seen = True
            if seen:
                continue
            value = _score(reduced, g, unit, sigma_along, sigma_across, index, member)
            lowest = np.argmin(best)
            if value > best[lowest]:
                best[lowest] = value
                bases[lowest] = reduced
    winner = -1.0
    result = np.zeros((2, 2))
    for k in range(kept):
        if best[k] < 0:
            continue
        basis = bases[k].copy()
        for _ in range(3):
            _score(basis, g, unit, sigma_along, sigma_across, index, member)
            if not _spans_plane(index, member):
                break
            basis = _weighted_fit(g, unit, sigma_along, sigma_across, index, member)[0]
        value = _score(basis, g, unit, sigma_along, sigma_across, index, member)
        if value > winner:
            winner = value
            result = basis
    return winner, result


@numba.njit(cache=True, nogil=True)
def _spans_plane(index, member):  # type: ignore[no-untyped-def]
    """Say whether the members' indices are not all on one line through the origin."""
    for i in range(member.size):
        for j in range(i):
            if member[i] and member[j] and index[i, 0] * index[j, 1] != index[i, 1] * index[j, 0]:
                return True
    return False


@numba.njit(cache=True, nogil=True)
def _score(basis, g, unit, sigma_along, sigma_across, index, member):  # type: ignore[no-untyped-def]
    """Return the evidence for a basis beyond its two free vectors; fill in the nearest points and who lies on it."""
    n = g.shape[0]
    cell = basis[0, 0] * basis[1, 1] - basis[0, 1] * basis[1, 0]
    first, second, total = 0.0, 0.0, 0.0
    for k in range(n):
        member[k] = False
        if cell == 0:
            continue
        a = np.rint((g[k, 0] * basis[1, 1] - g[k, 1] * basis[1, 0]) / cell)
        b = np.rint((g[k, 1] * basis[0, 0] - g[k, 0] * basis[0, 1]) / cell)
        dy = g[k, 0] - a * basis[0, 0] - b * basis[1, 0]
        dx = g[k, 1] - a * basis[0, 1] - b * basis[1, 1]
        # the basis comes from peaks as uncertain as these: their error grows with the index
        grown = 1 + 0.3 * (abs(a) + abs(b))
        along = (dy * unit[k, 0] + dx * unit[k, 1]) / (sigma_along[k] * grown)
        across = (dy * unit[k, 1] - dx * unit[k, 0]) / (sigma_across[k] * grown)
        chi2 = along * along + across * across
        index[k, 0], index[k, 1] = int(a), int(b)
        highest = max(abs(a), abs(b))
        if chi2 < 12 and 0 < highest <= _HIGHEST_INDEX:
            member[k] = True
            gain = np.log(abs(cell) / (2 * np.pi * sigma_along[k] * sigma_across[k] * grown**2)) - chi2 / 2
            if gain > 0:
                total += gain
                # two peaks always fit a basis made for them: the two that gain most do not count
                if gain > first:
                    first, second = gain, first
                elif gain > second:
                    second = gain
    return total - first - second


@numba.njit(cache=True, nogil=True)
def _weighted_fit(g, unit, sigma_along, sigma_across, index, member):  # type: ignore[no-untyped-def]
    """Fit the basis by Huber-weighted least squares; return it, the normal matrix, and the scatter (at least 1)."""
    count = 0
    for k in range(member.size):
        count += member[k]
    # unknowns b0y b0x b1y b1x; each peak gives one equation along and one across its vector
    rows = np.empty((2 * count, 4))
    right = np.empty(2 * count)
    m = 0
    for k in range(member.size):
        if not member[k]:
            continue
        for side in range(2):
            vy = unit[k, 0] if side == 0 else unit[k, 1]
            vx = unit[k, 1] if side == 0 else -unit[k, 0]
            sigma = sigma_along[k] if side == 0 else sigma_across[k]
            rows[m, 0], rows[m, 1] = index[k, 0] * vy / sigma, index[k, 0] * vx / sigma
            rows[m, 2], rows[m, 3] = index[k, 1] * vy / sigma, index[k, 1] * vx / sigma
            right[m] = (g[k, 0] * vy + g[k, 1] * vx) / sigma
            m += 1
    weight = np.ones(2 * count)
    solution = np.zeros(4)
    normal = np.eye(4)
    residual = right.copy()
    for _ in range(8):
        weighted = rows * weight.reshape(-1, 1)
        normal = weighted.T @ rows
        solution = np.linalg.solve(normal, weighted.T @ right)
        residual = right - rows @ solution
        weight = np.minimum(1.0, _HUBER / np.maximum(np.abs(residual), 1e-12))
    squares = 0.0
    for k in range(count):
        squares += min(residual[2 * k] ** 2, 9.0)
    scatter = max(1.0, np.sqrt(squares / max(count - 2, 1)))
    return solution.reshape(2, 2).copy(), normal, scatter


@numba.njit(cache=True, nogil=True)
def _reduced(basis):  # type: ignore[no-untyped-def]
    """Return the Gauss-reduced basis: shortest vectors, at 60 to 90 degrees, the first pointing right."""
    ay, ax, by, bx = basis[0, 0], basis[0, 1], basis[1, 0], basis[1, 1]
    if ay * ay + ax * ax > by * by + bx * bx:
        ay, ax, by, bx = by, bx, ay, ax
    for _ in range(100):
        squared = ay * ay + ax * ax
        times = np.rint((ay * by + ax * bx) / squared)
        by -= times * ay
        bx -= times * ax
        if by * by + bx * bx >= squared * (1 - 1e-12):
            break
        ay, ax, by, bx = by, bx, ay, ax
    if ax < 0 or (ax == 0 and ay > 0):
        ay, ax = -ay, -ax
    if ay * by + ax * bx < 0:
        by, bx = -by, -bx
    out = np.empty((2, 2))
    out[0, 0], out[0, 1], out[1, 0], out[1, 1] = ay, ax, by, bx
    return out


def lattice_points(basis: NDArray[np.float64], longest: float) -> NDArray[np.int64]:
    """Return the indices of one of each pair of opposite lattice points up to a length, shape (n, 2)."""
    return np.asarray(_points(basis, longest))


@numba.njit(cache=True, nogil=True)
def _points(basis, longest):  # type: ignore[no-untyped-def]
    # the smallest singular value of the basis bounds the length of a lattice vector from below
    p = (basis[0] ** 2).sum()
    q = (basis[1] ** 2).sum()
    r = (basis[0] * basis[1]).sum()
    shortest = np.sqrt(max((p + q) / 2 - np.sqrt(((p - q) / 2) ** 2 + r * r), 1e-300))
    most = min(int(longest / shortest) + 1, 60)
    out = np.empty(((2 * most + 1) ** 2, 2), np.int64)
    found = 0
    for m in range(-most, most + 1):
        for n in range(-most, most + 1):
            y = m * basis[0, 0] + n * basis[1, 0]
            x = m * basis[0, 1] + n * basis[1, 1]
            if (x > 0 or (x == 0 and y < 0)) and y * y + x * x <= longest * longest:
                out[found, 0] = m
                out[found, 1] = n
                found += 1
    return out[:found]


def unseen_lattice_points(
    basis: NDArray[np.float64], longest: float, seen: NDArray[np.float64], bins: NDArray[np.float64], nearest: float
) -> NDArray[np.float64]:
    """Return the lattice points up to a length that may hold a peak that was not seen yet, shape (n, 2).

    Parameters
    ----------
    basis : ndarray, shape (2, 2)
        Cycles per pixel.
    longest : float
        Cycles per pixel; points beyond 0.48 along an axis are left out.
    seen : ndarray, shape (m, 2)
        Peaks; points less than four bins from one or its opposite are left out.
    bins : ndarray, shape (2,)
        Bins per cycle per pixel along (row, column).
    nearest : float
        Points nearer to the origin, in bins, are left out.
    """
    return np.asarray(_unseen(basis, longest, seen, bins, nearest))


@numba.njit(cache=True, nogil=True)
def _unseen(basis, longest, seen, bins, nearest):  # type: ignore[no-untyped-def]
    points = _points(basis, longest)
    out = np.empty((points.shape[0], 2))
    found = 0
    for k in range(points.shape[0]):
        y = points[k, 0] * basis[0, 0] + points[k, 1] * basis[1, 0]
        x = points[k, 0] * basis[0, 1] + points[k, 1] * basis[1, 1]
        apart = abs(y) < 0.48 and abs(x) < 0.48 and np.hypot(y * bins[0], x * bins[1]) > nearest
        for m in range(seen.shape[0]):
            for sign in (-1, 1):
                if np.hypot((y + sign * seen[m, 0]) * bins[0], (x + sign * seen[m, 1]) * bins[1]) <= 4:
                    apart = False
        if apart:
            out[found, 0], out[found, 1] = y, x
            found += 1
    return out[:found]


def combinations(
    index: NDArray[np.int64], member: NDArray[np.bool_], strength: NDArray[np.float64]
) -> list[tuple[int, ...] | None]:
    """Say of each peak whether it is the harmonic, sum or difference of stronger ones.

    Parameters
    ----------
    index : ndarray of int, shape (n, 2)
        Lattice indices.
    member : ndarray of bool, shape (n,)
        Who lies on the lattice.
    strength : ndarray, shape (n,)

    Returns
    -------
    list of tuple of int, or None
        Positions of the peaks it is made of; (k, k) for the second harmonic of k.
    """
    result: list[tuple[int, ...] | None] = [None] * len(index)
    order = [int(k) for k in np.argsort(-strength, kind="stable") if member[k]]
    points = [tuple(point) for point in index.tolist()]
    stronger: dict[tuple[int, int], int] = {}
    for k in order:
        m, n = points[k]
        for a, position in stronger.items():
            other = stronger.get((m - a[0], n - a[1]))
            if other is not None:
                result[k] = (min(position, other), max(position, other))
                break
        # either of two opposite points stands for the same peak
        stronger.setdefault((m, n), k)
        stronger.setdefault((-m, -n), k)
    return result


def plane_lattice(
    fit: LatticeFit,
    crystal_relative: float,
    geometry: NDArray[np.float64] | None,
) -> PlaneLattice:
    """Return the lattice in reciprocal and real space with its uncertainties.

    Parameters
    ----------
    fit : LatticeFit
        In cycles per pixel.
    crystal_relative : float
        Relative standard uncertainty of its lengths from what one picture cannot show of an uneven crystal.
    geometry : ndarray, shape (2, 2), or None
        nm per pixel, as `Micrograph.geometry_nm_per_px`.
    """
    px, relative = fit.basis, crystal_relative
    sigma_px = _widened(px, fit.covariance, relative)
    if geometry is None:
        nm, sigma_nm, real_nm, lengths, length_sigma = None, None, None, None, None
        flat, covariance = px.ravel(), fit.covariance
    else:
        transform = _inverse(geometry)
        nm = px @ transform
        flat = nm.ravel()
        # each basis vector is turned alike: the blocks of the covariance are
        blocks = fit.covariance.reshape(2, 2, 2, 2)
        covariance = np.einsum("ak,iajb,bl->ikjl", transform, blocks, transform).reshape(4, 4)
        sigma_nm = _widened(nm, covariance, relative)
        real_nm = _inverse(nm).T
    values, sigma = _real_space(flat, covariance)
    if geometry is not None:
        lengths = float(values[0]), float(values[1])
        length_sigma = (
            math.hypot(sigma[0], relative * values[0]),
            math.hypot(sigma[1], relative * values[1]),
        )
    return PlaneLattice(
        reciprocal_per_px=px,
        reciprocal_uncertainty_per_px=sigma_px,
        reciprocal_per_nm=nm,
        reciprocal_uncertainty_per_nm=sigma_nm,
        real_px=_inverse(px).T,
        real_nm=real_nm,
        lengths_nm=lengths,
        length_uncertainties_nm=length_sigma,
        angle_deg=float(values[2]),
        angle_uncertainty_deg=float(sigma[2]),
        residual_rms=fit.scatter,
        members=tuple(int(k) for k in np.flatnonzero(fit.member)),
    )


def _widened(basis: NDArray[np.float64], covariance: NDArray[np.float64], relative: float) -> NDArray[np.float64]:
    """Return the standard uncertainty of each component, with a relative part."""
    return np.asarray(np.sqrt(covariance.diagonal().reshape(2, 2) + (relative * basis) ** 2))


def _inverse(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the inverse of a 2 x 2 matrix."""
    (a, b), (c, d) = matrix.tolist()
    return np.asarray(np.array([[d, -b], [-c, a]]) / (a * d - b * c), dtype=float)


@numba.njit(cache=True, nogil=True)
def _real_space(flat, covariance):  # type: ignore[no-untyped-def]
    """Return both lengths and the angle of the real-space basis, and their standard uncertainties by differences."""
    step = 1e-6 * np.abs(flat).max()
    values = np.empty(3)
    slope = np.empty((3, 4))
    beside = np.empty((2, 3))
    for k in range(4):
        for side in range(2):
            b = flat.copy()
            b[k] += step if side == 0 else -step
            _lengths_and_angle(b, beside[side])
        slope[:, k] = (beside[0] - beside[1]) / (2 * step)
    _lengths_and_angle(flat, values)
    sigma = np.zeros(3)
    for i in range(3):
        for k in range(4):
            for m in range(4):
                sigma[i] += slope[i, k] * covariance[k, m] * slope[i, m]
        sigma[i] = np.sqrt(max(sigma[i], 0.0))
    return values, sigma


@numba.njit(cache=True, nogil=True)
def _lengths_and_angle(b, out):  # type: ignore[no-untyped-def]
    determinant = abs(b[0] * b[3] - b[1] * b[2])
    # a1 is perpendicular to b2, so |a1| = |b2| / |det|; the angle between a1 and a2 is the supplement of that of b1, b2
    out[0] = np.sqrt(b[2] ** 2 + b[3] ** 2) / determinant
    out[1] = np.sqrt(b[0] ** 2 + b[1] ** 2) / determinant
    out[2] = np.degrees(np.arctan2(determinant, -(b[0] * b[2] + b[1] * b[3])))
