"""The measurement of one region: its values. (The chain that makes them follows.)"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution

Vector = NDArray[np.float64]
Origin = Literal["found", "lattice point", "added by hand"]


@dataclass(frozen=True, eq=False, kw_only=True)
class Peak:
    """One set of fringes: the position of its peak in the spectrum and what follows from it."""

    g_per_px: Vector
    g_covariance_per_px2: Vector
    g_per_nm: Vector | None
    g_covariance_per_nm2: Vector | None
    period_px: float
    d_nm: float | None
    d_fit_uncertainty_nm: float | None
    d_crystal_uncertainty_nm: float | None
    d_uncertainty_nm: float | None
    d_lattice_nm: float | None
    d_lattice_uncertainty_nm: float | None
    direction_deg: float
    direction_uncertainty_deg: float | None
    signal_to_noise: float
    visibility: float | None
    two_theta_mrad: float | None
    lattice_index: tuple[int, int] | None
    combination_of: tuple[int, ...] | None
    origin: Origin
    withheld: str | None
    cautions: tuple[Caution, ...]
