"""The uncertainty budget of a result, line by line, and the verdict against a tolerance.

The rules are those of the GUM (JCGM 100:2008, Guide to the expression of uncertainty in measurement) and, for the
guard band, of JCGM 106:2012.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from fringespan.exceptions import SettingsError

__all__ = [
    "Acceptance",
    "Budget",
    "BudgetLine",
    "Coverage",
    "ToleranceVerdict",
    "combined_standard_uncertainty",
    "coverage_factor",
    "effective_degrees_of_freedom",
    "excess_variance",
    "judge",
]

Coverage = Literal["k = 2", "from t"]
"""Coverage factor 2, or the one of Student's t for the effective degrees of freedom at 95.45 %."""

Acceptance = Literal["simple", "guarded"]
"""Whether a value alone must lie within the tolerance, or the value with its expanded uncertainty."""

ToleranceVerdict = Literal["within tolerance", "outside tolerance", "not decided", "no tolerance stated"]

COVERAGE_PROBABILITY = 0.9545
"""That of k = 2 for a normal law; GUM, table G.2."""


@dataclass(frozen=True, slots=True, kw_only=True)
class BudgetLine:
    """One source of uncertainty of a result.

    Parameters
    ----------
    source : str
        What is uncertain.
    standard_uncertainty : float
        Of the input quantity, in its own unit.
    sensitivity : float
        By how much the result changes for a unit of that quantity.
    degrees_of_freedom : float, optional
        Infinite where the uncertainty is taken as known.
    note : str, optional
        Where the figure comes from, in words.
    remedy : str, optional
        What would reduce it.

    Raises
    ------
    SettingsError
        If a number is not finite, an uncertainty negative, or the degrees of freedom not above 0.
    """

    source: str
    standard_uncertainty: float
    sensitivity: float = 1.0
    degrees_of_freedom: float = math.inf
    note: str = ""
    remedy: str = ""

    def __post_init__(self) -> None:
        if not (math.isfinite(self.standard_uncertainty) and self.standard_uncertainty >= 0):
            raise SettingsError(
                f"{self.source}: a standard uncertainty must be finite and at least 0, got {self.standard_uncertainty!r}"
            )
        if not math.isfinite(self.sensitivity):
            raise SettingsError(f"{self.source}: the sensitivity must be finite, got {self.sensitivity!r}")
        if not self.degrees_of_freedom > 0:
            raise SettingsError(
                f"{self.source}: degrees of freedom must be above 0 (infinite: known), got {self.degrees_of_freedom!r}"
            )

    @property
    def contribution(self) -> float:
        """Part of the result's standard uncertainty, |sensitivity| times standard uncertainty."""
        return abs(self.sensitivity) * self.standard_uncertainty


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """The uncertainty of one result from independent sources.

    Parameters
    ----------
    quantity : str
        What the result is.
    lines : tuple of BudgetLine
        At least one.
    """

    quantity: str
    lines: tuple[BudgetLine, ...]

    def __post_init__(self) -> None:
        if not self.lines:
            raise SettingsError(f"the budget of {self.quantity} needs at least one line")

    @property
    def standard_uncertainty(self) -> float:
        """Combined standard uncertainty (GUM 5.1.2)."""
        return math.sqrt(sum(line.contribution**2 for line in self.lines))

    @property
    def degrees_of_freedom(self) -> float:
        """Effective degrees of freedom (Welch-Satterthwaite)."""
        return effective_degrees_of_freedom(
            [line.contribution for line in self.lines], [line.degrees_of_freedom for line in self.lines]
        )

    @property
    def largest(self) -> BudgetLine:
        """The line that contributes most."""
        return max(self.lines, key=lambda line: line.contribution)

    def expanded_uncertainty(self, coverage: Coverage = "k = 2") -> float:
        """Return coverage factor times combined standard uncertainty."""
        return coverage_factor(self.degrees_of_freedom, coverage) * self.standard_uncertainty


def effective_degrees_of_freedom(contributions: Sequence[float], degrees_of_freedom: Sequence[float]) -> float:
    """Return u_c^4 / sum(u_i^4 / nu_i), the Welch-Satterthwaite formula.

    Parameters
    ----------
    contributions : sequence of float
        Each source's part of the result's standard uncertainty.
    degrees_of_freedom : sequence of float
        Infinite where a part is taken as known.

    Returns
    -------
    float
        Infinite if all parts with finite ones are 0.

    References
    ----------
    GUM, G.4.1, equation (G.2b).
    """
    total = sum(u**2 for u in contributions) ** 2
    loss = sum(u**4 / nu for u, nu in zip(contributions, degrees_of_freedom, strict=True))
    return total / loss if loss > 0 else math.inf


def coverage_factor(
    degrees_of_freedom: float, coverage: Coverage = "k = 2", *, probability: float = COVERAGE_PROBABILITY
) -> float:
    """Return the factor between standard and expanded uncertainty.

    Parameters
    ----------
    degrees_of_freedom : float
        Rounded down to a whole number, at least 1, for Student's t (GUM G.4.1).
    coverage : {"k = 2", "from t"}, optional
    probability : float, optional
        For "from t".

    Raises
    ------
    SettingsError
        If `coverage` is neither, or the probability is none.
    """
    if coverage == "k = 2":
        return 2.0
    if coverage != "from t":
        raise SettingsError(f"coverage must be 'k = 2' or 'from t', got {coverage!r}")
    if not 0 < probability < 1:
        raise SettingsError(f"probability must lie between 0 and 1, got {probability!r}")
    from scipy import stats

    tail = (1 + probability) / 2
    if math.isinf(degrees_of_freedom):
        return float(stats.norm.ppf(tail))
    return float(stats.t.ppf(tail, max(1, math.floor(degrees_of_freedom + 1e-9))))


def combined_standard_uncertainty(
    sensitivities: ArrayLike, standard_uncertainties: ArrayLike, correlation: ArrayLike | None = None
) -> float:
    """Return the combined standard uncertainty of a result from inputs that may be correlated.

    Parameters
    ----------
    sensitivities, standard_uncertainties : array_like, shape (n,)
    correlation : array_like, shape (n, n), optional
        Correlation coefficients; default: none.

    References
    ----------
    GUM 5.2.2, equation (16).
    """
    parts = np.asarray(sensitivities, dtype=np.float64) * np.asarray(standard_uncertainties, dtype=np.float64)
    matrix = np.eye(len(parts)) if correlation is None else np.asarray(correlation, dtype=np.float64)
    return math.sqrt(max(0.0, float(parts @ matrix @ parts)))


def excess_variance(values: Sequence[ArrayLike], variances: Sequence[ArrayLike]) -> tuple[float, float]:
    """Return by how much values scatter beyond their own variances, and the degrees of freedom of that.

    Parameters
    ----------
    values, variances : sequence of array_like
        Groups of values with the variance of each; every group has a mean of its own, and all the same excess.

    Returns
    -------
    variance : float
        Of the excess; 0 where the values scatter no more than they should.
    degrees_of_freedom : float
        Number of values less the number of groups; 0 if no group has two.

    Notes
    -----
    Method of moments: with weights 1/v_i, Q = sum w_i (x_i - mean)^2 has expectation (n - 1) + excess (sum w - sum w^2 /
    sum w). With equal variances it is the estimate of an analysis of variance (GUM H.5).

    References
    ----------
    R. DerSimonian, N. Laird, Controlled Clinical Trials 7 (1986) 177 (from memory).
    """
    scatter, slope, degrees = 0.0, 0.0, 0
    for group, own in zip(values, variances, strict=True):
        x, v = np.asarray(group, dtype=np.float64), np.asarray(own, dtype=np.float64)
        if len(x) < 2:
            continue
        w = 1 / v
        mean = (w * x).sum() / w.sum()
        scatter += float((w * (x - mean) ** 2).sum())
        slope += float(w.sum() - (w**2).sum() / w.sum())
        degrees += len(x) - 1
    if degrees == 0:
        return 0.0, 0.0
    return max(0.0, (scatter - degrees) / slope), float(degrees)


def judge(
    deviations: Sequence[float],
    expanded_uncertainties: Sequence[float],
    tolerance: float | None,
    acceptance: Acceptance = "simple",
) -> ToleranceVerdict:
    """Return whether deviations lie within a tolerance.

    Parameters
    ----------
    deviations, expanded_uncertainties : sequence of float
    tolerance : float or None
        Largest deviation allowed, in the same unit. None: nothing is judged.
    acceptance : {"simple", "guarded"}, optional
        "simple": the deviations alone decide. "guarded": accepted only within the tolerance less the expanded uncertainty,
        rejected only beyond the tolerance plus it, and not decided in between.

    Raises
    ------
    SettingsError
        If the tolerance is not above 0, or `acceptance` is neither.

    References
    ----------
    JCGM 106:2012, sections 8.2 (simple acceptance) and 8.3 (guard bands; here as wide as the expanded uncertainty).
    """
    if acceptance not in ("simple", "guarded"):
        raise SettingsError(f"acceptance must be 'simple' or 'guarded', got {acceptance!r}")
    if tolerance is None:
        return "no tolerance stated"
    if not (math.isfinite(tolerance) and tolerance > 0):
        raise SettingsError(f"tolerance must be a fraction above 0 (0.01 is 1 per cent), got {tolerance!r}")
    pairs = [
        (abs(d), u if acceptance == "guarded" else 0.0) for d, u in zip(deviations, expanded_uncertainties, strict=True)
    ]
    if any(d - u > tolerance for d, u in pairs):
        return "outside tolerance"
    return "within tolerance" if all(d + u <= tolerance for d, u in pairs) else "not decided"
