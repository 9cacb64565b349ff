"""What to say about single peaks: each rule with its own text and remedy."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fringespan.beam import point_resolution_nm
from fringespan.cautions import Caution, gravest_first
from fringespan.crystal_fringes import CrystalFringes
from fringespan.judgement.lens_effects import LensEffects
from fringespan.judgement.off_lattice import off_lattice_cautions
from fringespan.judgement.spectrum_signs import SpectrumSigns
from fringespan.peaks.misfit import MISFIT_LIMIT

__all__ = [
    "BENT_FRINGES",
    "BROKEN_FRINGES",
    "COARSE_SAMPLING",
    "COMBINATION",
    "FEW_FRINGES",
    "NEAR_TRANSFER_ZERO",
    "ON_BLOCK_GRID",
    "ON_SPECTRUM_CROSS",
    "beyond_point_resolution",
    "few_fringes",
    "fringe_counts",
    "is_on_block_grid",
    "peak_cautions",
]

BROKEN_FRINGES = Caution(
    "broken-fringes",
    "warning",
    "The fringes are broken across the crystal, where their contrast reverses or they bend; no spacing is given.",
    "Draw the region around a part where they run straight, or take the picture at another defocus.",
)

ON_BLOCK_GRID = Caution(
    "jpeg-blocks",
    "grave",
    "The peak lies at multiples of 1/8 per pixel, where the blocks of JPEG compression show.",
    "Measure the picture as the microscope saved it, without JPEG.",
)

BENT_FRINGES = Caution(
    "bent-fringes",
    "warning",
    "The fringes bend, fade or shift far more over the crystal than those of a flat one; the uncertainty is widened for it.",
    "Draw the region around a part where they run straight and even, or take the picture at another defocus.",
)

COARSE_SAMPLING = Caution(
    "coarse-sampling",
    "warning",
    "A fringe is finer than 3 pixels: the detector weakens it, and it may be the false, folded picture of one finer than "
    "2 pixels.",
    "Take the picture at a higher magnification: a folded spacing changes, a true one stays.",
)

NEAR_TRANSFER_ZERO = Caution(
    "near-transfer-zero",
    "warning",
    "The lens hardly transfers this spacing at the stated defocus: its contrast comes from elsewhere or may be reversed.",
    "Take the picture at another defocus, or a focal series.",
)

COMBINATION = Caution(
    "combination",
    "note",
    "The peak is a sum, difference or harmonic of stronger ones: it may come from double diffraction or from the "
    "non-linear picture, and is no independent evidence.",
    "Count it as evidence only if it stays when the crystal is tilted or the defocus changed.",
)

ON_SPECTRUM_CROSS = Caution(
    "on-spectrum-cross",
    "warning",
    "The peak lies on a bright line through the centre of the spectrum, where scan lines, the detector's rows and "
    "columns, and edges leave false ones.",
    "Turn the scan or the specimen: a true peak turns with the crystal.",
)

FEW_FRINGES = 8.0
"""Under so many fringes a spacing is easily deceived (common practice, no source)."""

_SMALLEST_PERIOD_PX = 3.0
_LEAST_TRANSFER = 0.2
_CROSS_BINS = 1.5
_BLOCK_PX = 8
_GRID_BINS, _GRID_BINS_OF_JPEG = 0.1, 0.5
_BENT_CYCLES = 0.2
"""Uncertainty of g times the crystal's width, in cycles, beyond that of most reflections of particles (RMS 0.12)."""


def few_fringes(count: float) -> Caution:
    """Return the caution about a crystal with so few fringes.

    Parameters
    ----------
    count : float
        Width of the crystal along the normal of its fringes, in fringes.
    """
    return Caution(
        "few-fringes",
        "warning",
        f"Only {count:.0f} fringes lie across the crystal or the region: spacings closer than about {100 / count:.0f} % "
        "(d over their number) are not told apart, and shape and tilt easily deceive.",
        "Draw the region larger if the crystal goes on, or measure a larger crystal.",
    )


def beyond_point_resolution(resolution_nm: float) -> Caution:
    """Return the caution about spacings finer than the point resolution."""
    return Caution(
        "beyond-point-resolution",
        "warning",
        f"The spacing is finer than the lens's point resolution ({resolution_nm:.3f} nm): its contrast may be reversed, or "
        "come from the interference of stronger beams.",
        "Compare with a focal series or with a simulated picture before you name it.",
    )


def fringe_counts(outline: NDArray[np.float64], frequency: NDArray[np.float64]) -> list[float]:
    """Return how many fringes of each peak lie across an outline.

    Parameters
    ----------
    outline : ndarray, shape (m, 2)
        Corners (row, column) in pixels.
    frequency : ndarray, shape (n, 2)
        Cycles per pixel.
    """
    phase = outline @ frequency.T
    counts: list[float] = (phase.max(axis=0) - phase.min(axis=0)).tolist()
    return counts


def is_on_block_grid(frequency: float, tolerance: float) -> bool:
    """Say whether a frequency in cycles per pixel is a multiple of 1/8 within a tolerance."""
    return abs(frequency - round(_BLOCK_PX * frequency) / _BLOCK_PX) < tolerance


def peak_cautions(
    found: CrystalFringes,
    combined: Sequence[tuple[int, ...] | None],
    *,
    d_nm: Sequence[float] | None,
    shape: tuple[int, int],
    signs: SpectrumSigns,
    is_jpeg: bool,
    voltage_kv: float | None,
    cs_mm: float | None,
    effects: LensEffects | None,
) -> list[tuple[Caution, ...]]:
    """Return what to say about each peak, gravest first.

    Parameters
    ----------
    found : CrystalFringes
        At least one set of fringes.
    combined : sequence of tuple of int, or None
        Of what each peak is a combination.
    d_nm : sequence of float, or None
        Spacings; None without a pixel size.
    shape : (int, int)
        Rows and columns of the region.
    signs : SpectrumSigns
        Of the region's spectrum.
    is_jpeg : bool
        Whether the picture is known to have been compressed by JPEG.
    voltage_kv, cs_mm : float or None
        Beam voltage and spherical aberration.
    effects : LensEffects, or None
        While the lens or its defocus is not known.
    """
    frequency = found.frequency.tolist()
    sigma = np.sqrt(found.covariance.diagonal()).reshape(-1, 2).tolist()
    misfit, along = found.misfit.tolist(), found.crystal_along.tolist()
    counts = fringe_counts(found.outline, found.frequency) if found.outline is not None else [math.inf] * len(misfit)
    off: dict[int, Caution] = {}
    if found.lattice is not None and not found.lattice.member.all():
        off = off_lattice_cautions(found.frequency, found.lattice, found.second_lattice, shape)
    resolution = point_resolution_nm(voltage_kv, cs_mm) if d_nm is not None and voltage_kv and cs_mm else 0.0
    grid_bins = _GRID_BINS_OF_JPEG if is_jpeg else _GRID_BINS
    result = []
    for k, (row, column) in enumerate(frequency):
        said: list[Caution] = []
        if found.withheld[k] is not None:
            said.append(BROKEN_FRINGES)
        elif misfit[k] > MISFIT_LIMIT and along[k] * counts[k] > _BENT_CYCLES * math.hypot(row, column):
            said.append(BENT_FRINGES)
        if counts[k] < FEW_FRINGES:
            said.append(few_fringes(counts[k]))
        if combined[k] is None and row * row + column * column > 1 / _SMALLEST_PERIOD_PX**2:
            said.append(COARSE_SAMPLING)
        if is_on_block_grid(row, max(3 * sigma[k][0], grid_bins / shape[0])) and is_on_block_grid(
            column, max(3 * sigma[k][1], grid_bins / shape[1])
        ):
            said.append(ON_BLOCK_GRID)
        if k in off:
            said.append(off[k])
        if (signs.rows_differ and abs(column) * shape[1] < _CROSS_BINS) or (
            signs.columns_differ and abs(row) * shape[0] < _CROSS_BINS
        ):
            said.append(ON_SPECTRUM_CROSS)
        if d_nm is not None and d_nm[k] < resolution:
            said.append(beyond_point_resolution(resolution))
        if effects is not None and combined[k] is None and abs(effects.transfer[k]) < _LEAST_TRANSFER:
            said.append(NEAR_TRANSFER_ZERO)
        if combined[k] is not None:
            said.append(COMBINATION)
        result.append(gravest_first(said) if len(said) > 1 else tuple(said))
    return result
