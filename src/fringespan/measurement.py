"""The measurement of one region: the whole chain once, from pixels to spacings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.lattice import PlaneLattice
from fringespan.micrograph import Micrograph
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak
from fringespan.spectrum import PowerSpectrum

__all__ = ["Measurement", "measure"]


@dataclass(frozen=True, eq=False, kw_only=True)
class Measurement:
    """What was measured in one region of a picture.

    Attributes
    ----------
    micrograph : Micrograph
    region : Region
    settings : MeasurementSettings
    peaks : tuple of Peak
        Strongest first.
    angles : tuple of PairAngle
        One for every pair of peaks.
    lattice : PlaneLattice or None
        Two-dimensional lattice fitted to the peaks.
    crystal_outline_px : ndarray, shape (n, 2), or None
        Corners (row, column) in the picture of the part of the region that shows the fringes.
    crystal_extent_nm : (float, float) or None
        Its greatest and smallest width.
    spectrum : PowerSpectrum
        Power spectrum that the peaks were found in.
    cautions : tuple of Caution
        About the region as a whole, gravest first.
    """

    micrograph: Micrograph
    region: Region
    settings: MeasurementSettings
    peaks: tuple[Peak, ...]
    angles: tuple[PairAngle, ...]
    lattice: PlaneLattice | None
    crystal_outline_px: NDArray[np.float64] | None
    crystal_extent_nm: tuple[float, float] | None
    spectrum: PowerSpectrum
    cautions: tuple[Caution, ...]


def measure(
    micrograph: Micrograph, region: Region | None = None, *, settings: MeasurementSettings | None = None
) -> Measurement:
    """Measure the lattice fringes in a region of a picture."""
    raise NotImplementedError
