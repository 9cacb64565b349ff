"""The two-dimensional lattice that the peaks of a region have in common."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["LatticeFit", "PlaneLattice", "combinations", "find_lattice", "lattice_points", "plane_lattice"]

_STRONGEST = 10
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
    order = np.argsort(-strength)[:_STRONGEST]
    vectors = [g[k] for k in order]
    vectors += [a + s * b for a, b in itertools.combinations(vectors[:6], 2) for s in (1, -1)]
    candidates = np.array(vectors)
    first, second = (np.array(v) for v in zip(*itertools.combinations(range(len(candidates)), 2), strict=True))
    bases = np.stack([candidates[first], candidates[second]], axis=1)
    lengths = np.hypot(*bases.transpose(2, 0, 1))
    area = np.abs(bases[:, 0, 0] * bases[:, 1, 1] - bases[:, 0, 1] * bases[:, 1, 0])
    bases = bases[area > 0.15 * lengths.prod(axis=1)]
    if not len(bases):
        return None
    unit = g / np.hypot(*g.T)[:, None]
    score = np.array([_score(basis, g, unit, sigma_along, sigma_across)[0] for basis in _distinct(bases)])
    best: tuple[float, NDArray[np.float64]] | None = None
    for k in np.argsort(-score)[:8]:
        basis = _distinct(bases)[k]
        for _ in range(3):
            _, index, member = _score(basis, g, unit, sigma_along, sigma_across)
            if np.linalg.matrix_rank(index[member]) < 2:
                break
            basis = _weighted_fit(g, unit, sigma_along, sigma_across, index, member)[0]
        value = _score(basis, g, unit, sigma_along, sigma_across)[0]
        if best is None or value > best[0]:
            best = value, basis
    assert best is not None
    basis = _reduced(best[1])
    _, index, member = _score(basis, g, unit, sigma_along, sigma_across)
    if member.sum() < 3 or np.linalg.matrix_rank(index[member]) < 2 or best[0] < _LEAST_EVIDENCE:
        return None
    basis, covariance, scatter = _weighted_fit(g, unit, sigma_along, sigma_across, index, member)
    residual = g - index @ basis
    return LatticeFit(basis, covariance, index, member, (residual * unit).sum(axis=1), scatter)


def _distinct(bases: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the bases reduced, without repetitions."""
    reduced = np.array([_reduced(b) for b in bases])
    scale = np.abs(reduced).max()
    return reduced[np.unique((reduced / scale * 200).round().reshape(len(reduced), 4), axis=0, return_index=True)[1]]


def _score(
    basis: NDArray[np.float64],
    g: NDArray[np.float64],
    unit: NDArray[np.float64],
    sigma_along: NDArray[np.float64],
    sigma_across: NDArray[np.float64],
) -> tuple[float, NDArray[np.int64], NDArray[np.bool_]]:
    """Return the evidence for a basis beyond its two free vectors, the nearest points, and who lies on it."""
    index = np.rint(g @ np.linalg.inv(basis)).astype(np.int64)
    residual = g - index @ basis
    along = (residual * unit).sum(axis=1)
    across = residual[:, 0] * unit[:, 1] - residual[:, 1] * unit[:, 0]
    # the basis comes from peaks as uncertain as these: their error grows with the index
    grown = 1 + 0.3 * np.abs(index).sum(axis=1)
    chi2 = (along / (sigma_along * grown)) ** 2 + (across / (sigma_across * grown)) ** 2
    cell = abs(np.linalg.det(basis))
    gain = np.log(cell / (2 * np.pi * sigma_along * sigma_across * grown**2)) - chi2 / 2
    member = (chi2 < 12) & (np.abs(index).max(axis=1) <= _HIGHEST_INDEX) & (np.abs(index).max(axis=1) > 0)
    gains = np.sort(np.where(member, np.maximum(gain, 0), 0))[::-1]
    return float(gains[2:].sum()), index, member


def _weighted_fit(
    g: NDArray[np.float64],
    unit: NDArray[np.float64],
    sigma_along: NDArray[np.float64],
    sigma_across: NDArray[np.float64],
    index: NDArray[np.int64],
    member: NDArray[np.bool_],
) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
    """Fit the basis by Huber-weighted least squares; return it, its covariance, and the scatter (at least 1)."""
    m = index[member].astype(float)
    n = unit[member]
    across = np.stack([n[:, 1], -n[:, 0]], axis=1)
    # unknowns b0y b0x b1y b1x; each peak gives one equation along and one across its vector
    rows = np.concatenate(
        [
            np.concatenate([m[:, :1] * n, m[:, 1:] * n], axis=1) / sigma_along[member][:, None],
            np.concatenate([m[:, :1] * across, m[:, 1:] * across], axis=1) / sigma_across[member][:, None],
        ]
    )
    right = np.concatenate(
        [(g[member] * n).sum(axis=1) / sigma_along[member], (g[member] * across).sum(axis=1) / sigma_across[member]]
    )
    weight = np.ones(len(right))
    for _ in range(8):
        root = np.sqrt(weight)
        solution = np.linalg.lstsq(rows * root[:, None], right * root, rcond=None)[0]
        residual = right - rows @ solution
        weight = np.minimum(1, _HUBER / np.maximum(np.abs(residual), 1e-12))
    normal = (rows * weight[:, None]).T @ rows
    count = int(member.sum())
    along = residual[:count]
    scatter = np.sqrt(np.sum(np.minimum(along**2, 9)) / max(count - 2, 1))
    scatter = max(1.0, float(scatter))
    return solution.reshape(2, 2), np.linalg.inv(normal) * scatter**2, scatter


def _reduced(basis: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the Gauss-reduced basis: shortest vectors, at 60 to 90 degrees, the first pointing right."""
    a, b = basis[0].copy(), basis[1].copy()
    if a @ a > b @ b:
        a, b = b, a
    while True:
        b = b - np.rint(a @ b / (a @ a)) * a
        if b @ b >= a @ a * (1 - 1e-12):
            break
        a, b = b, a
    if a[1] < 0 or (a[1] == 0 and a[0] > 0):
        a = -a
    if a @ b < 0:
        b = -b
    return np.array([a, b])


def lattice_points(basis: NDArray[np.float64], longest: float) -> NDArray[np.int64]:
    """Return the indices of one of each pair of opposite lattice points up to a length, shape (n, 2)."""
    shortest = np.sqrt(np.linalg.eigvalsh(basis @ basis.T)[0])
    most = min(int(longest / shortest) + 1, 60)
    m, n = (v.ravel() for v in np.meshgrid(np.arange(-most, most + 1), np.arange(-most, most + 1), indexing="ij"))
    index = np.stack([m, n], axis=1)
    g = index @ basis
    half = (g[:, 1] > 0) | ((g[:, 1] == 0) & (g[:, 0] < 0))
    return index[half & (np.hypot(*g.T) <= longest)]


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
    for k in np.flatnonzero(member):
        stronger = [j for j in np.flatnonzero(member & (strength > strength[k])) if j != k]
        target = index[k]
        for a, b in itertools.combinations_with_replacement(stronger, 2):
            if any((sa * index[a] + sb * index[b] == target).all() for sa in (1, -1) for sb in (1, -1)):
                result[k] = (int(a), int(b))
                break
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
    def derived(flat: NDArray[np.float64]) -> NDArray[np.float64]:
        a = np.linalg.inv(flat.reshape(2, 2)).T
        lengths = np.hypot(*a.T)
        cross = a[0, 0] * a[1, 1] - a[0, 1] * a[1, 0]
        return np.array([*lengths, np.degrees(np.arctan2(abs(cross), a[0] @ a[1]))])

    def uncertainties(flat: NDArray[np.float64], covariance: NDArray[np.float64]) -> NDArray[np.float64]:
        step = 1e-6 * np.abs(flat).max()
        slope = np.array([(derived(flat + d) - derived(flat - d)) / (2 * step) for d in step * np.eye(4)])
        return np.sqrt(np.einsum("ia,ij,ja->a", slope, covariance, slope))

    px = fit.basis
    sigma_px = np.hypot(np.sqrt(np.diag(fit.covariance)).reshape(2, 2), crystal_relative * np.abs(px))
    if geometry is None:
        nm, sigma_nm, real_nm, lengths, length_sigma = None, None, None, None, None
        flat, covariance = px.ravel(), fit.covariance
    else:
        transform = np.linalg.inv(geometry)
        both = np.kron(np.eye(2), transform.T)
        nm = px @ transform
        flat, covariance = nm.ravel(), both @ fit.covariance @ both.T
        sigma_nm = np.hypot(np.sqrt(np.diag(covariance)).reshape(2, 2), crystal_relative * np.abs(nm))
        real_nm = np.linalg.inv(nm).T
    values, sigma = derived(flat), uncertainties(flat, covariance)
    if geometry is not None:
        lengths = float(values[0]), float(values[1])
        length_sigma = float(np.hypot(sigma[0], crystal_relative * values[0])), float(
            np.hypot(sigma[1], crystal_relative * values[1])
        )
    return PlaneLattice(
        reciprocal_per_px=px,
        reciprocal_uncertainty_per_px=sigma_px,
        reciprocal_per_nm=nm,
        reciprocal_uncertainty_per_nm=sigma_nm,
        real_px=np.linalg.inv(px).T,
        real_nm=real_nm,
        lengths_nm=lengths,
        length_uncertainties_nm=length_sigma,
        angle_deg=float(values[2]),
        angle_uncertainty_deg=float(sigma[2]),
        residual_rms=fit.scatter,
        members=tuple(int(k) for k in np.flatnonzero(fit.member)),
    )
