"""The two-dimensional lattice that the peaks of a region have in common."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["PlaneLattice"]


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
        Lengths of the real-space vectors.
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
