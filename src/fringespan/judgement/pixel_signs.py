"""Signs in the pixels of a region that the picture is not as the detector gave it: labels, enlargement, stretched grey."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.region import Footprint

__all__ = [
    "DEFECTIVE_PIXELS",
    "GREY_LEVELS_MISSING",
    "LABEL_IN_REGION",
    "PIXELS_REPEATED",
    "pixel_cautions",
    "replaced_pixel_cautions",
]

LABEL_IN_REGION = Caution(
    "label-in-region",
    "grave",
    "A patch of the region has exactly one value, like a label, a scale bar or an empty border; its edges make false "
    "peaks.",
    "Draw the region beside it.",
)

PIXELS_REPEATED = Caution(
    "pixels-repeated",
    "grave",
    "Pixels repeat their neighbours: the picture was enlarged or is a screenshot, so that its pixel size may be another "
    "one than stated.",
    "Measure the picture as the microscope saved it.",
)

GREY_LEVELS_MISSING = Caution(
    "grey-levels-missing",
    "note",
    "Some of the 256 grey levels never occur: contrast or gamma was changed after the picture was taken, which falsifies "
    "visibilities and may add harmonics.",
    "Measure the picture as the microscope saved it, with its full depth.",
)

DEFECTIVE_PIXELS = "defective-pixels"

_GRID = (64, 48)
_CHANCE = 1e-3
_LEAST_RUN = 4
_ROWS, _ROW_PIXELS = 8, 256
_MOST_REPEATED = 0.12
_FAR = 5
_MOST_GAPS = 0.08
_SAMPLES_A_LEVEL = 12


def pixel_cautions(values: NDArray[np.generic], footprint: Footprint) -> tuple[Caution, ...]:
    """Return what a sample of a region's pixels tells about its past.

    Parameters
    ----------
    values : ndarray, shape (rows, columns)
        Pixels of the region's rectangle as they were read.
    footprint : Footprint
        Which of them belong to the region.

    Returns
    -------
    tuple of Caution
    """
    step = max(1, values.shape[0] // _GRID[0]), max(1, values.shape[1] // _GRID[1])
    sample = np.ascontiguousarray(values[:: step[0], :: step[1]])
    found: tuple[Caution, ...] = ()
    if _has_flat_patch(sample, None if footprint.mask is None else footprint.mask[:: step[0], :: step[1]]):
        found += (LABEL_IN_REGION,)
    if _pixels_repeat(values):
        found += (PIXELS_REPEATED,)
    if values.dtype == np.uint8 and _grey_levels_are_missing(sample):
        found += (GREY_LEVELS_MISSING,)
    return found


def _has_flat_patch(sample: NDArray[np.generic], mask: NDArray[np.bool_] | None) -> bool:
    """Say whether the sample holds a run of its highest or lowest value that chance does not make."""
    for extreme in (sample.max(), sample.min()):
        equal = sample == extreme
        if mask is not None:
            equal &= mask
        share = np.count_nonzero(equal) / equal.size
        if share * equal.size < _LEAST_RUN or share == 1:
            continue
        # dark pixels of a picture of few electrons are all 0, but not side by side more often than chance has it
        run = max(_LEAST_RUN, math.ceil(math.log(_CHANCE / equal.size) / math.log(share)))
        rows = np.zeros((equal.shape[0], equal.shape[1] + 1), np.uint8)
        rows[:, :-1] = equal
        if b"\1" * run in rows.tobytes():
            return True
    return False


def _pixels_repeat(values: NDArray[np.generic]) -> bool:
    """Say whether pixels equal their neighbours in the row far more often than others further off."""
    rows = values[:: max(1, values.shape[0] // _ROWS), :_ROW_PIXELS]
    count = rows[:, _FAR:].size
    near = np.count_nonzero(rows[:, _FAR:] == rows[:, _FAR - 1 : -1])
    if near < _MOST_REPEATED * count:
        return False
    far = np.count_nonzero(rows[:, _FAR:] == rows[:, :-_FAR])
    return bool(near > 3 * far)


def _grey_levels_are_missing(sample: NDArray[np.generic]) -> bool:
    """Say whether levels in the thick of the histogram of 8-bit pixels are empty."""
    counts = np.bincount(sample.ravel())
    total = np.cumsum(counts)
    low, high = np.searchsorted(total, (0.1 * total[-1], 0.9 * total[-1]))
    levels = counts[low : high + 1]
    # few samples a level may miss one by chance
    return bool(
        levels.sum() > _SAMPLES_A_LEVEL * levels.size and np.count_nonzero(levels == 0) > _MOST_GAPS * levels.size
    )


def replaced_pixel_cautions(defect_count: int, saturated_count: int, pixel_count: int) -> tuple[Caution, ...]:
    """Return what to say about pixels that were left out of a region.

    Parameters
    ----------
    defect_count, saturated_count, pixel_count : int
        Dead, hot or missing pixels; pixels at the end of the range; all.

    Returns
    -------
    tuple of Caution
    """
    found: tuple[Caution, ...] = ()
    if saturated_count:
        found += (
            Caution(
                "saturated-pixels",
                "warning",
                f"{_pixels(saturated_count, pixel_count)} at the end of the detector's range and left out; what lies "
                "beside them may be distorted, and fringes cut off at the top show harmonics.",
                "Take the picture with fewer electrons, or draw the region beside the bright part.",
            ),
        )
    if defect_count:
        found += (
            Caution(
                DEFECTIVE_PIXELS,
                "note",
                f"{_pixels(defect_count, pixel_count)} dead, hot or without a value, and left out.",
                "Have the detector's list of bad pixels renewed if there are many.",
            ),
        )
    return found


def _pixels(count: int, of: int) -> str:
    share = f" ({100 * count / of:.2g} %)" if count > 1e-3 * of else ""
    return f"{count} pixels{share} are" if count > 1 else "One pixel is"
