"""What it means that no fringe was found: which ones were looked for, and how strong they would have had to be."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from fringespan.cautions import Caution
from fringespan.noise import ring_background
from fringespan.peaks.detection import detection_threshold
from fringespan.region import Footprint
from fringespan.settings import MeasurementSettings
from fringespan.spectrum import PowerSpectrum

__all__ = ["NeededFringes", "needed_fringes", "no_fringe_caution"]

_NINE_IN_TEN = 0.9
"""By how much the matched filter's amplitude, in units of the noise's, must exceed its limit to pass nine times in ten:
1.28 standard deviations of 1 / sqrt(2)."""


@dataclass(frozen=True, slots=True)
class NeededFringes:
    """The weakest fringes over a whole region that would have been found nine times in ten.

    Attributes
    ----------
    finest_px, coarsest_px : float
        Between which periods was searched.
    least_amplitude, greatest_amplitude : float
        Needed where there is least noise and where there is most, in pixel values.
    """

    finest_px: float
    coarsest_px: float
    least_amplitude: float
    greatest_amplitude: float


def needed_fringes(
    spectrum: PowerSpectrum, footprint: Footprint, settings: MeasurementSettings, aspect: float = 1.0
) -> NeededFringes:
    """Return how strong fringes would have to be to be found.

    Parameters
    ----------
    spectrum : PowerSpectrum
    footprint : Footprint
    settings : MeasurementSettings
    aspect : float, optional
        Column pixel size over row pixel size.

    Notes
    -----
    A wave of amplitude A over n pixels in noise of power density S has the power ratio T = A^2 n / (4 S).
    """
    background = ring_background(spectrum, aspect)
    unit = 1 / max(1 / spectrum.shape[0], 1 / (spectrum.shape[1] * aspect))
    radius = np.arange(background.density.size) / 4 / unit
    shortest = min(footprint.shape[0], footprint.shape[1] * aspect)
    lowest = settings.smallest_distance_bins / shortest
    used = background.density[(radius >= lowest) & (radius <= 0.5)]
    if not used.size:
        # the smallest of regions: hardly a ring lies between the nearest distance and the end of the spectrum
        used = background.density[-1:]
    root = math.sqrt(detection_threshold(footprint.count, settings.false_peaks_per_region)) + _NINE_IN_TEN
    # the lowest few rings are low by chance only
    densities = np.percentile(used, 10), used.max()
    least, greatest = (2 * root * math.sqrt(float(s) / footprint.count) for s in densities)
    return NeededFringes(2.0, 1 / lowest, least, greatest)


def no_fringe_caution(
    needed: NeededFringes, pixel_size_nm: tuple[float, float] | None, mean: float, dark_level: float | None
) -> Caution:
    """Say what was looked for in vain, and how strong it would have had to be.

    Parameters
    ----------
    needed : NeededFringes
    pixel_size_nm : (float, float), or None
    mean : float
        Mean pixel value of the region.
    dark_level : float, or None
    """
    size, unit = (math.sqrt(pixel_size_nm[0] * pixel_size_nm[1]), "nm") if pixel_size_nm is not None else (1.0, "px")
    level = mean - (dark_level or 0.0)
    low, high = needed.least_amplitude, needed.greatest_amplitude
    if level > 0:
        low, high = 100 * low / level, 100 * high / level
        of = "% of the mean" if dark_level is None else "% of the mean above the dark level"
    else:
        of = "pixel values"
    strength = f"{low:.2g}" if f"{low:.2g}" == f"{high:.2g}" else f"{low:.2g} to {high:.2g}"
    return Caution(
        "no-fringe-found",
        "note",
        f"No fringe stands out of the noise. Spacings from {size * needed.finest_px:.2g} to {size * needed.coarsest_px:.2g} "
        f"{unit} were looked for; fringes all over the region would have been found with an amplitude of {strength} {of}, "
        "nine times in ten.",
        "Draw the region where you see fringes and as large as they reach, or take the picture with more electrons.",
    )
