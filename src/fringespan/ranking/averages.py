"""One value from several: weighted mean with a test of whether they agree."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fringespan.exceptions import SettingsError

__all__ = ["WeightedMean", "weighted_mean"]

_LEAST_PROBABILITY = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class WeightedMean:
    """A weighted mean.

    Attributes
    ----------
    mean, uncertainty : float
        With the standard uncertainty: the larger of what the single uncertainties and what the scatter give, and the
        common part.
    chi_squared, degrees_of_freedom : float, int
    probability : float
        That values with these uncertainties scatter as much or more.
    is_consistent : bool
        Whether that is at least 5 %.
    """

    mean: float
    uncertainty: float
    chi_squared: float
    degrees_of_freedom: int
    probability: float
    is_consistent: bool


def weighted_mean(
    values: Sequence[float], uncertainties: Sequence[float], *, common_relative_uncertainty: float = 0.0
) -> WeightedMean:
    """Return the mean of values weighted by their inverse variances, and whether they agree.

    Where they scatter more than their uncertainties allow, that of the mean is widened by the ratio of the two [1]_.

    Parameters
    ----------
    values, uncertainties : sequence of float
        Independent, with standard uncertainties greater than 0.
    common_relative_uncertainty : float, optional
        A relative standard uncertainty that all share, such as the pixel size's; it doesn't average out.

    Raises
    ------
    SettingsError
        If there are no values, not as many uncertainties, or one is not positive.

    References
    ----------
    .. [1] R. T. Birge, Phys. Rev. 40 (1932) 207, doi:10.1103/PhysRev.40.207 (from memory).

    Examples
    --------
    >>> result = weighted_mean([0.4079, 0.4081], [0.0001, 0.0001])
    >>> round(result.mean, 4), round(result.uncertainty, 5), result.is_consistent
    (0.408, 0.0001, True)
    """
    from scipy.special import chdtrc

    x, u = np.asarray(values, dtype=np.float64), np.asarray(uncertainties, dtype=np.float64)
    if x.ndim != 1 or x.shape != u.shape or not len(x):
        raise SettingsError(
            f"a mean needs as many uncertainties as values and at least one, got {x.shape} and {u.shape}"
        )
    if not (np.all(np.isfinite(x)) and np.all(np.isfinite(u)) and np.all(u > 0)):
        raise SettingsError("values must be finite and their uncertainties greater than 0")
    weight = u**-2.0
    mean = float(np.sum(weight * x) / np.sum(weight))
    internal = 1 / math.sqrt(float(np.sum(weight)))
    chi_squared = float(np.sum(weight * (x - mean) ** 2))
    freedom = len(x) - 1
    widened = internal * math.sqrt(max(1.0, chi_squared / freedom)) if freedom else internal
    probability = float(chdtrc(freedom, chi_squared)) if freedom else 1.0
    return WeightedMean(
        mean=mean,
        uncertainty=math.hypot(widened, common_relative_uncertainty * mean),
        chi_squared=chi_squared,
        degrees_of_freedom=freedom,
        probability=probability,
        is_consistent=probability >= _LEAST_PROBABILITY,
    )
