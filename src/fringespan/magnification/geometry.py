"""The picture's geometry from reflections of known length and, within a crystal, known angles.

A picture whose true pixels are F times the nominal ones, (y, x) true = F (y, x) nominal with F = [[row, 0], [shear, column]],
shows a reflection g of the reference at F^T R g by the nominal pixel size, R the crystal's unknown turn. The turn of the
whole cannot be seen, so F has three numbers.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.magnification.indexing import Grain, ObservedPeak

__all__ = ["FittedReflection", "GeometryFit", "fit_geometry"]

_OUTLIER_SQUARE = 16.0
"""A reflection this far off the fit of the others (chi square, two directions; p = 3e-4) is shown, but not used."""

_MOST_OUTLIERS = 0.25
"""Of the reflections; more than that are not outliers, but show how uncertain all are."""

_INCONSISTENT = 0.05
"""Probability below which the scatter about the fit is taken as a sign of understated uncertainties."""

_LOOSEST = 0.02
"""A geometry less certain than this has not been determined."""


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class FittedReflection:
    """One reflection and how far it lies from the fit.

    Attributes
    ----------
    grain : int
        Position in the list of grains.
    peak : int
        Position in the measurement.
    residual_per_nm : ndarray, shape (2,)
        Measured less fitted g, (row, column).
    relative_residual : float
        Of the spacing: measured by the fitted geometry, less expected, over expected.
    pull : float
        The residual along g in its own standard uncertainties.
    used : bool
    """

    grain: int
    peak: int
    residual_per_nm: NDArray[np.float64]
    relative_residual: float
    pull: float
    used: bool


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class GeometryFit:
    """True over nominal geometry from some grains.

    Attributes
    ----------
    values : ndarray, shape (3,) or (1,)
        Scale along rows, along columns, shear; or the one factor.
    fit_covariance, crystal_covariance : ndarray, shape (3, 3) or (1, 1)
        What the pictures show; what one picture cannot show of a crystal.
    degrees_of_freedom : float
        Of the fit part: infinite unless it was raised to what the reflections scatter by.
    raised_by : float
        Factor by which that scatter raised the standard uncertainty; 1: not at all.
    rotations_rad : dict of int to float
        Turn of each grain.
    reflections : tuple of FittedReflection
    """

    values: NDArray[np.float64]
    fit_covariance: NDArray[np.float64]
    crystal_covariance: NDArray[np.float64]
    degrees_of_freedom: float
    raised_by: float
    rotations_rad: dict[int, float]
    reflections: tuple[FittedReflection, ...]

    @property
    def covariance(self) -> NDArray[np.float64]:
        """Both parts together."""
        return self.fit_covariance + self.crystal_covariance

    @property
    def matrix(self) -> NDArray[np.float64]:
        """F, shape (2, 2)."""
        return geometry_matrix(self.values)


def geometry_matrix(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return F = [[row, 0], [shear, column]] from its three numbers, or from one."""
    row, column, shear = (values[0], values[0], 0.0) if len(values) == 1 else values
    return np.array([[row, 0.0], [shear, column]])


@dataclass(frozen=True, eq=False, slots=True)
class _Row:
    """One reflection on its way into the fit."""

    grain: int
    peak: int
    g: NDArray[np.float64]
    p: NDArray[np.float64]
    fit: NDArray[np.float64]
    crystal: NDArray[np.float64]


@dataclass(frozen=True, eq=False, slots=True)
class _Solution:
    values: NDArray[np.float64]
    turns: dict[int, float]
    inverse: NDArray[np.float64]
    gain: NDArray[np.float64]
    residual: NDArray[np.float64]
    chi_squared: float


def fit_geometry(
    grains: dict[int, Grain], peaks: Sequence[Sequence[ObservedPeak]], *, isotropic: bool = False
) -> GeometryFit | None:
    """Fit the geometry that grains have in common, by weighted least squares.

    Parameters
    ----------
    grains : dict of int to Grain
        By their position in the list of all grains.
    peaks : sequence of sequence of ObservedPeak
        Of each measurement.
    isotropic : bool, optional
        One factor instead of three numbers.

    Returns
    -------
    GeometryFit or None
        None if the reflections do not determine it.

    Notes
    -----
    Reflections that lie off the fit of the others are left out of it one by one, the worst first, and returned as not
    used; where more than a quarter do, all stay. If those used scatter more than chi square allows at 5 %, the
    uncertainty is raised by the root of chi square over the degrees of freedom (R. T. Birge, Phys. Rev. 40 (1932) 207, from
    memory).
    """
    rows = [
        _Row(
            number,
            a.peak,
            peaks[grain.region][a.peak].g_per_nm,
            a.vector_per_nm,
            peaks[grain.region][a.peak].fit_covariance,
            peaks[grain.region][a.peak].crystal_covariance,
        )
        for number, grain in grains.items()
        for a in grain.peaks
    ]
    everything = list(range(len(rows)))
    used = everything
    solution = first = _solve(rows, grains, isotropic)
    while solution is not None:
        worst = _worst(solution, [rows[i] for i in used])
        if worst is None:
            break
        fewer = [i for position, i in enumerate(used) if position != worst]
        without = _solve([rows[i] for i in fewer], grains, isotropic)
        judged = without is not None and 2 * len(fewer) - len(without.inverse) >= 1
        if not judged or len(rows) - len(fewer) > max(1, _MOST_OUTLIERS * len(rows)):
            # too few to judge by, or too many for outliers: all stay, and their scatter raises the uncertainty
            used, solution = everything, first
            break
        used, solution = fewer, without
    if solution is None:
        return None
    return _described(solution, rows, used, grains)


def _turned(p: NDArray[np.float64], turn: float) -> NDArray[np.float64]:
    """Return a (row, column) vector turned counter-clockwise on the screen."""
    c, s = math.cos(turn), math.sin(turn)
    return np.array([c * p[0] - s * p[1], s * p[0] + c * p[1]])


def _solve(rows: Sequence[_Row], grains: dict[int, Grain], isotropic: bool) -> _Solution | None:
    members = sorted({row.grain for row in rows})
    n_values = 1 if isotropic else 3
    n = n_values + len(members)
    if 2 * len(rows) < n:
        return None
    start = float(np.mean([grains[m].scale for m in members]))
    values = np.array([start] if isotropic else [start, start, 0.0])
    turns = {m: grains[m].rotation_rad for m in members}
    place = {m: n_values + k for k, m in enumerate(members)}
    # each grain's sign: g and -g are the same peak
    weights = [np.linalg.inv(row.fit + row.crystal) for row in rows]
    targets = [
        row.g if row.g @ (geometry_matrix(values).T @ _turned(row.p, turns[row.grain])) > 0 else -row.g for row in rows
    ]
    jacobian = np.zeros((2 * len(rows), n))
    residual = np.zeros(2 * len(rows))
    weight = np.zeros((2 * len(rows), 2 * len(rows)))
    for k, w in enumerate(weights):
        weight[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] = w
    inverse = np.zeros((n, n))
    for _ in range(12):
        matrix = geometry_matrix(values).T
        for k, row in enumerate(rows):
            v = _turned(row.p, turns[row.grain])
            at = slice(2 * k, 2 * k + 2)
            residual[at] = targets[k] - matrix @ v
            jacobian[at] = 0.0
            if isotropic:
                jacobian[at, 0] = v
            else:
                jacobian[2 * k, 0], jacobian[2 * k + 1, 1], jacobian[2 * k, 2] = v[0], v[1], v[1]
            jacobian[at, place[row.grain]] = matrix @ np.array([-v[1], v[0]])
        normal = jacobian.T @ weight @ jacobian
        size = np.sqrt(np.diag(normal))
        if not np.all(size > 0) or np.linalg.cond(normal / np.outer(size, size)) > 1e12:
            return None
        inverse = np.linalg.inv(normal / np.outer(size, size)) / np.outer(size, size)
        step = inverse @ (jacobian.T @ weight @ residual)
        values = values + step[:n_values]
        for m in members:
            turns[m] += float(step[place[m]])
        if np.all(np.abs(step) <= 1e-3 * np.sqrt(np.diag(inverse)) + 1e-12):
            break
    if np.sqrt(np.diag(inverse)[:n_values]).max() > _LOOSEST or not 0.5 < values[0] < 2:
        return None
    final = residual - jacobian @ step
    return _Solution(values, turns, inverse, inverse @ jacobian.T @ weight, final, float(final @ weight @ final))


def _worst(solution: _Solution, rows: Sequence[_Row]) -> int | None:
    """Return the reflection that lies farthest off what the others give, if it lies too far."""
    squares = []
    for k, row in enumerate(rows):
        at = slice(2 * k, 2 * k + 2)
        own = row.fit + row.crystal
        # what is left of the residual's variance after the fit: C - J (J^T W J)^-1 J^T; C W^-1 gives J from the gain
        j = own @ solution.gain[:, at].T @ np.linalg.inv(solution.inverse)
        left = own - j @ solution.inverse @ j.T
        # a direction that the fit takes up whole says nothing: the pseudo-inverse leaves it out
        r = solution.residual[at]
        squares.append(float(r @ np.linalg.pinv(left, rcond=1e-6, hermitian=True) @ r))
    worst = int(np.argmax(squares))
    return worst if squares[worst] > _OUTLIER_SQUARE else None


def _described(solution: _Solution, rows: Sequence[_Row], used: Sequence[int], grains: dict[int, Grain]) -> GeometryFit:
    from scipy import stats

    n_values = len(solution.values)
    fit, crystal = np.zeros((n_values, n_values)), np.zeros((n_values, n_values))
    for k, i in enumerate(used):
        part = solution.gain[:n_values, 2 * k : 2 * k + 2]
        fit += part @ rows[i].fit @ part.T
        crystal += part @ rows[i].crystal @ part.T
    degrees = 2 * len(used) - len(solution.inverse)
    raised, freedom = 1.0, math.inf
    if degrees > 0 and stats.chi2.sf(solution.chi_squared, degrees) < _INCONSISTENT:
        raised, freedom = math.sqrt(max(1.0, solution.chi_squared / degrees)), float(degrees)
        fit = fit + (raised**2 - 1) * (fit + crystal)
    matrix = geometry_matrix(solution.values).T
    described = []
    for i, row in enumerate(rows):
        turn = solution.turns.get(row.grain)
        if turn is None:
            turn = _turn_to(row, matrix)
        fitted = matrix @ _turned(row.p, turn)
        g = row.g if row.g @ fitted > 0 else -row.g
        residual = g - fitted
        unit = fitted / math.hypot(*fitted)
        sigma = math.sqrt(float(unit @ (row.fit + row.crystal) @ unit))
        described.append(
            FittedReflection(
                grain=row.grain,
                peak=row.peak,
                residual_per_nm=residual,
                relative_residual=-float(unit @ residual) / math.hypot(*fitted),
                pull=float(unit @ residual) / sigma,
                used=i in used,
            )
        )
    return GeometryFit(
        values=solution.values,
        fit_covariance=fit,
        crystal_covariance=crystal,
        degrees_of_freedom=freedom,
        raised_by=raised,
        rotations_rad=solution.turns,
        reflections=tuple(described),
    )


def _turn_to(row: _Row, matrix: NDArray[np.float64]) -> float:
    """Return the turn that brings a lone reflection under its peak."""
    undone = np.linalg.solve(matrix, row.g)
    return math.atan2(-undone[0], undone[1]) - math.atan2(-row.p[0], row.p[1])
