"""The measurement of one region: the whole chain once, from pixels to spacings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution, gravest_first
from fringespan.exceptions import RegionError
from fringespan.lattice import PlaneLattice
from fringespan.micrograph import Micrograph
from fringespan.noise import ring_background
from fringespan.peaks.fringes import find_fringes
from fringespan.region import Region, place_region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak, pair_angles, peaks_from_waves
from fringespan.spectrum import PowerSpectrum, power_spectrum, prepare_pixels

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


_DEFAULT = MeasurementSettings()


def measure(
    micrograph: Micrograph, region: Region | None = None, *, settings: MeasurementSettings | None = None
) -> Measurement:
    """Measure the lattice fringes in a region of a picture.

    Parameters
    ----------
    micrograph : Micrograph
    region : Region, optional
        Default: the whole picture.
    settings : MeasurementSettings, optional

    Returns
    -------
    Measurement

    Raises
    ------
    RegionError
        If the region lies outside the picture, is too small, or all its pixels are equal.
    """
    settings = settings or _DEFAULT
    region = region or Region.whole(micrograph.shape)
    placed = place_region(region, micrograph.shape)
    pixels = prepare_pixels(micrograph.crop(placed.rows, placed.columns), placed.footprint)
    spectrum, pixels = power_spectrum(pixels)
    if pixels.sigma == 0:
        raise RegionError(f"region {region.name!r}: all its pixels are equal; draw it where the picture shows something")
    size = micrograph.pixel_size_nm
    background = ring_background(spectrum, 1.0 if size is None else round(size[1] / size[0], 3))
    fringes = find_fringes(
        pixels,
        spectrum,
        background,
        false_peaks_per_region=settings.false_peaks_per_region,
        smallest_distance_bins=settings.smallest_distance_bins,
    )
    peaks = peaks_from_waves(micrograph, placed, fringes.fit)
    cautions: list[Caution] = [*micrograph.cautions, *placed.cautions]
    return Measurement(
        micrograph=micrograph,
        region=region,
        settings=settings,
        peaks=peaks,
        angles=pair_angles(micrograph, peaks),
        lattice=None,
        crystal_outline_px=None,
        crystal_extent_nm=None,
        spectrum=spectrum,
        cautions=gravest_first(cautions),
    )
