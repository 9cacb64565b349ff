"""Lattice parameters of a phase from spacings with indices."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.phase import Phase
from fringespan.exceptions import SettingsError
from fringespan.measurement import Measurement
from fringespan.ranking.hypotheses import Hypothesis

__all__ = ["IndexedSpacing", "LatticeParameters", "indexed_spacings", "lattice_parameters"]

_SAME = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class IndexedSpacing:
    """One spacing with its indices.

    Parameters
    ----------
    hkl : (int, int, int)
    d_nm, d_uncertainty_nm : float
        The uncertainty without the pixel size's part.
    """

    hkl: tuple[int, int, int]
    d_nm: float
    d_uncertainty_nm: float

    def __post_init__(self) -> None:
        if not (math.isfinite(self.d_nm) and self.d_nm > 0):
            raise SettingsError(f"d_nm must be greater than 0, got {self.d_nm!r}")
        if not (math.isfinite(self.d_uncertainty_nm) and self.d_uncertainty_nm > 0):
            raise SettingsError(f"d_uncertainty_nm must be greater than 0, got {self.d_uncertainty_nm!r}")
        if not any(self.hkl):
            raise SettingsError("hkl must not be all 0")


@dataclass(frozen=True, slots=True, kw_only=True)
class LatticeParameters:
    """The cell that indexed spacings give.

    Attributes
    ----------
    lengths_nm, length_uncertainties_nm : tuple of 3 floats or None
        a, b, c with the combined standard uncertainty; None where the spacings say nothing about an edge, the
        uncertainty None also where the pixel size's is not stated.
    fit_uncertainties_nm : tuple of 3 floats or None
        Without the pixel size's part.
    angles_deg, angle_uncertainties_deg : tuple of 3 floats
        Uncertainty 0 where symmetry fixes the angle.
    chi_squared, degrees_of_freedom : float, int
        Of the spacings against the cell. Where they disagree beyond their uncertainties, those of the result are
        widened by the square root of their quotient.
    held : str
        What was taken from the phase because the spacings do not decide it; empty if nothing was.
    """

    lengths_nm: tuple[float | None, float | None, float | None]
    length_uncertainties_nm: tuple[float | None, float | None, float | None]
    fit_uncertainties_nm: tuple[float | None, float | None, float | None]
    angles_deg: tuple[float, float, float]
    angle_uncertainties_deg: tuple[float, float, float]
    chi_squared: float
    degrees_of_freedom: int
    held: str


def indexed_spacings(measurement: Measurement, hypothesis: Hypothesis) -> tuple[IndexedSpacing, ...]:
    """Return the spacings of a measurement with the indices of a hypothesis.

    Sums and harmonics of other peaks, and spacings that are withheld, are left out.
    """
    spacings = []
    for peak, hkl in zip(measurement.peaks, hypothesis.hkl, strict=True):
        if hkl is None or peak.d_nm is None or peak.combination_of is not None or peak.d_fit_uncertainty_nm is None:
            continue
        own = math.hypot(peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm or 0.0)
        spacings.append(IndexedSpacing(hkl=hkl, d_nm=peak.d_nm, d_uncertainty_nm=own))
    return tuple(spacings)


def lattice_parameters(
    phase: Phase, spacings: Sequence[IndexedSpacing], *, scale_relative_uncertainty: float | None = None
) -> LatticeParameters:
    """Fit the cell of a phase to indexed spacings.

    1/d^2 is linear in the reciprocal metric tensor, of which the symmetry of the phase leaves 1 to 6 numbers free:
    weighted least squares. Numbers that no spacing depends on are left out; if the spacings do not decide between the
    rest, the shape of the cell is held and its size alone is fitted.

    Parameters
    ----------
    phase : Phase
    spacings : sequence of IndexedSpacing
    scale_relative_uncertainty : float, optional
        Relative standard uncertainty of the pixel size, common to all spacings; None: not stated.

    Returns
    -------
    LatticeParameters

    Raises
    ------
    SettingsError
        If there is no spacing.

    Examples
    --------
    >>> from fringespan.crystal.library import load_phase
    >>> seen = [IndexedSpacing(hkl=(1, 1, 1), d_nm=0.2355, d_uncertainty_nm=0.0002),
    ...         IndexedSpacing(hkl=(2, 0, 0), d_nm=0.2040, d_uncertainty_nm=0.0002)]
    >>> cell = lattice_parameters(load_phase("gold"), seen, scale_relative_uncertainty=0.001)
    >>> round(cell.lengths_nm[0], 4), round(cell.length_uncertainties_nm[0], 4)
    (0.4079, 0.0005)
    """
    if not spacings:
        raise SettingsError("a lattice parameter needs at least one spacing with indices; index a peak first")
    hkl = np.array([s.hkl for s in spacings], dtype=np.float64)
    inverse_square = np.array([s.d_nm**-2 for s in spacings])
    sigma = np.array([2 * s.d_uncertainty_nm / s.d_nm**3 for s in spacings])
    start = _metric_vector(phase)
    free = _free_metric(phase)
    design = _design(hkl) @ free
    size = np.abs(design).max(axis=0)
    is_seen = size > _SAME * size.max()
    held = ""
    if np.linalg.matrix_rank(design[:, is_seen] / size[is_seen]) < is_seen.sum() or not _shape_decided(
        phase, design, is_seen
    ):
        # one unknown: the scale of the known metric
        design, is_seen, free = (_design(hkl) @ start)[:, None], np.array([True]), start[:, None]
        held = "shape of the cell" if phase.crystal_system != "cubic" else ""
    weighted = design[:, is_seen] / sigma[:, None]
    covariance = np.linalg.inv(weighted.T @ weighted)
    solution = covariance @ weighted.T @ (inverse_square / sigma)
    chi_squared = float(np.sum((weighted @ solution - inverse_square / sigma) ** 2))
    freedom = len(spacings) - int(is_seen.sum())
    if freedom > 0 and chi_squared > freedom:
        covariance = covariance * chi_squared / freedom
    basis = free[:, is_seen]
    rest = np.asarray(np.linalg.lstsq(free, start, rcond=None)[0], dtype=np.float64)
    rest[is_seen] = 0.0

    def cell(values: NDArray[np.float64]) -> NDArray[np.float64]:
        return _cell(basis @ values + free @ rest)

    values = cell(solution)
    steps = np.sqrt(np.diag(covariance)) * 1e-3
    slope = np.array(
        [(cell(solution + d) - cell(solution - d)) / (2 * s) for d, s in zip(np.diag(steps), steps, strict=True)]
    )
    spread = np.sqrt(np.maximum(np.einsum("ka,kl,la->a", slope, covariance, slope), 0.0))
    known = _known_edges(solution, free, rest, is_seen)
    lengths = tuple(float(v) if k else None for v, k in zip(values[:3], known, strict=True))
    fit = tuple(float(v) if k else None for v, k in zip(spread[:3], known, strict=True))
    total = tuple(
        None
        if v is None or f is None or scale_relative_uncertainty is None
        else math.hypot(f, scale_relative_uncertainty * v)
        for v, f in zip(lengths, fit, strict=True)
    )
    return LatticeParameters(
        lengths_nm=_triple(lengths),
        length_uncertainties_nm=_triple(total),
        fit_uncertainties_nm=_triple(fit),
        angles_deg=(float(values[3]), float(values[4]), float(values[5])),
        angle_uncertainties_deg=(float(spread[3]), float(spread[4]), float(spread[5])),
        chi_squared=chi_squared,
        degrees_of_freedom=freedom,
        held=held,
    )


def _triple(values: tuple[float | None, ...]) -> tuple[float | None, float | None, float | None]:
    a, b, c = values
    return a, b, c


def _design(hkl: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the factors of G*11, G*22, G*33, G*23, G*13, G*12 in 1/d^2, shape (n, 6)."""
    h, k, m = hkl.T
    return np.stack([h * h, k * k, m * m, 2 * k * m, 2 * h * m, 2 * h * k], axis=1)


_PLACES = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))


def _metric_vector(phase: Phase) -> NDArray[np.float64]:
    reciprocal = phase.reciprocal_basis * 10
    metric = reciprocal @ reciprocal.T
    return np.array([metric[i, j] for i, j in _PLACES])


def _free_metric(phase: Phase) -> NDArray[np.float64]:
    """Return the metric tensors that the symmetry allows, one a column, shape (6, free)."""
    columns = []
    for i, j in _PLACES:
        one = np.zeros((3, 3))
        one[i, j] = one[j, i] = 1.0
        # hkl transform by the rotations from the right, so their metric by them from the left
        turned = np.einsum("nij,jk,nlk->il", phase.symmetry.laue_rotations, one, phase.symmetry.laue_rotations)
        columns.append([turned[a, b] for a, b in _PLACES])
    every = np.array(columns).T
    chosen: list[NDArray[np.float64]] = []
    for column in every.T:
        if np.linalg.norm(column) > _SAME and np.linalg.matrix_rank(np.array([*chosen, column])) > len(chosen):
            chosen.append(column / np.abs(column).max())
    return np.array(chosen).T


def _shape_decided(phase: Phase, design: NDArray[np.float64], is_seen: NDArray[np.bool_]) -> bool:
    """Whether what is left out are whole edges, which can then be called unknown."""
    return bool(np.all(is_seen)) or phase.crystal_system in ("tetragonal", "hexagonal", "trigonal", "orthorhombic")


def _known_edges(
    solution: NDArray[np.float64], free: NDArray[np.float64], rest: NDArray[np.float64], is_seen: NDArray[np.bool_]
) -> list[bool]:
    """Return for a, b, c whether they follow from the numbers that were fitted."""
    if np.all(is_seen):
        return [True, True, True]
    full = rest.copy()
    full[is_seen] = solution
    other = full.copy()
    other[~is_seen] *= 1.01
    return [bool(abs(v - w) < 1e-6 * v) for v, w in zip(_cell(free @ full)[:3], _cell(free @ other)[:3], strict=True)]


def _cell(metric: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return a, b, c and alpha, beta, gamma of a reciprocal metric tensor."""
    tensor = np.zeros((3, 3))
    for value, (i, j) in zip(metric, _PLACES, strict=True):
        tensor[i, j] = tensor[j, i] = value
    direct = np.linalg.inv(tensor)
    lengths = np.sqrt(np.maximum(np.diag(direct), 1e-30))
    cosines = [
        direct[1, 2] / lengths[1] / lengths[2],
        direct[0, 2] / lengths[0] / lengths[2],
        direct[0, 1] / lengths[0] / lengths[1],
    ]
    return np.array([*lengths, *np.degrees(np.arccos(np.clip(cosines, -1, 1)))])
