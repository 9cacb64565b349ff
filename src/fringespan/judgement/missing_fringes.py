"""What it means that no fringe was found: which ones were looked for, and how strong they would have had to be."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.noise import ring_background, rings_at
from fringespan.peaks.detection import detection_threshold
from fringespan.region import Footprint
from fringespan.settings import MeasurementSettings
from fringespan.spectrum import PowerSpectrum

__all__ = ["NeededFringes", "arc_or_streak", "needed_fringes", "no_fringe_caution", "strongest_arc"]

_ARC_POWER = 40.0
"""Power over the rings that no noise reaches: what is as strong and yet no peak is an arc or a streak."""

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


def strongest_arc(spectrum: PowerSpectrum, footprint: Footprint, aspect: float) -> NDArray[np.float64] | None:
    """Return where an arc or a streak is strongest in a spectrum without peaks, in cycles per pixel; None if there is none.

    Parameters
    ----------
    spectrum : PowerSpectrum
    footprint : Footprint
    aspect : float
        Column pixel size over row pixel size.

    Returns
    -------
    ndarray, shape (2,), or None
    """
    power = spectrum.power
    ny = spectrum.shape[0]
    rows = np.where(np.arange(ny) <= ny // 2, np.arange(ny), np.arange(ny) - ny)
    place = np.stack(np.broadcast_arrays(rows[:, None], np.arange(power.shape[1])[None]), axis=-1).reshape(-1, 2)
    share = power.ravel() / rings_at(ring_background(spectrum, aspect), place)
    bins = place * np.array(footprint.shape) / spectrum.shape
    # near the origin, and along both axes, uneven thickness and the edges of the picture are as strong
    share[(np.hypot(bins[:, 0], bins[:, 1]) < 8) | (np.abs(bins).min(axis=1) < 3)] = 0
    best = int(share.argmax())
    if share[best] < _ARC_POWER:
        return None
    return np.asarray(place[best] / np.array(spectrum.shape), dtype=float)


def arc_or_streak(place: NDArray[np.float64], geometry: NDArray[np.float64] | None) -> Caution:
    """Say that fringes are there, but nowhere near one plane wave over the region.

    Parameters
    ----------
    place : ndarray, shape (2,)
        Strongest place of the arc in cycles per pixel.
    geometry : ndarray, shape (2, 2), or None
        nm per pixel.
    """
    if geometry is None:
        about = f"{1 / math.hypot(*place.tolist()):.1f} px"
    else:
        about = f"{1 / math.hypot(*(place @ np.linalg.inv(geometry)).tolist()):.2f} nm"
    return Caution(
        "fringes-bend-all-over",
        "warning",
        f"Strong fringes of about {about} are there, but as an arc or streak of the spectrum, no peak: they bend, or fill "
        "a small or thin part of the region, so that it has no one spacing and direction.",
        "Draw a smaller region around a part where they run straight, or use the profile across them.",
    )
