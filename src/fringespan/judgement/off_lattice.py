"""What the peaks off the common lattice may be: a superlattice, a folded spacing, moire fringes, another crystal."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.lattice import LatticeFit

__all__ = ["BESIDE_LATTICE", "FOLDED_FRINGES", "MOIRE", "OFF_LATTICE", "SUPERLATTICE", "off_lattice_cautions"]

SUPERLATTICE = Caution(
    "superlattice",
    "note",
    "The peak lies at a half or a third of the way between lattice points of the others: a superlattice, a larger cell, or "
    "a reflection that its own cell forbids, as in double diffraction and crystals of a few layers.",
    "Take the larger cell into account, and see whether the peak stays in a thicker part.",
)

FOLDED_FRINGES = Caution(
    "folded-fringes",
    "grave",
    "The peak lies where a lattice spacing finer than 2 pixels would fold to: its spacing is false.",
    "Take the picture at a higher magnification.",
)

MOIRE = Caution(
    "moire",
    "warning",
    "The peak is the difference of peaks of two overlapping crystals: moire fringes, which are no spacing of either.",
    "Draw the region where the crystals do not overlap.",
)

OFF_LATTICE = Caution(
    "off-lattice",
    "warning",
    "The peak lies off the lattice of the others: another crystal, a moire, or an artefact, and no spacing of this crystal.",
    "Look where its fringes are, and draw a region there.",
)

BESIDE_LATTICE = Caution(
    "beside-lattice",
    "warning",
    "The peak lies beside a lattice point of the others, not on it: its fringes bend, or a second crystal of nearly the same "
    "lattice is there.",
    "Draw the region inside one grain, around a part where the fringes run straight.",
)

_BESIDE_BINS = 1.6
_SUPERLATTICE_BINS = 1.3
_MOIRE_BINS = 1.0
_FOLDED_BINS = 0.5
"""How near to its explanation a peak must lie: the nearer, the more explanations of the kind there are by chance."""

_COARSE = 0.7
"""Moire fringes are coarser than those that make them: at most this share of the shortest lattice vector."""

_SHIFTS = np.array([(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1) if (i, j) != (0, 0)], float)


def off_lattice_cautions(
    frequency: NDArray[np.float64], first: LatticeFit, second: LatticeFit | None, shape: tuple[int, int]
) -> dict[int, Caution]:
    """Return for each peak off a lattice what it may be.

    Parameters
    ----------
    frequency : ndarray, shape (n, 2)
        Cycles per pixel.
    first : LatticeFit
        The common lattice.
    second : LatticeFit, or None
        Another one that peaks off the first share.
    shape : (int, int)
        Rows and columns of the region, which say how near is near.
    """
    bins = np.array(shape)
    inverse = np.asarray(np.linalg.inv(first.basis), np.float64)
    coarse = _COARSE * float(np.hypot(*first.basis.T).min())
    one = frequency[first.member]
    other = frequency[second.member & ~first.member] if second is not None else np.empty((0, 2))
    between = np.concatenate([(one[:, None] - s * other[None]).reshape(-1, 2) for s in (1, -1)])
    result: dict[int, Caution] = {}
    for k in np.flatnonzero(~first.member).tolist():
        peak = frequency[k]
        away = [float(_bins_off(peak * m, first.basis, inverse, bins)[0]) / m for m in (1, 2, 3)]
        if away[0] < _BESIDE_BINS:
            result[k] = BESIDE_LATTICE
        elif min(away[1:]) < _SUPERLATTICE_BINS:
            result[k] = SUPERLATTICE
        elif _bins_off(peak + _SHIFTS, first.basis, inverse, bins).min() < _FOLDED_BINS:
            result[k] = FOLDED_FRINGES
        elif len(between) and np.hypot(*peak) < coarse and _is_one_of(peak, between, bins):
            result[k] = MOIRE
        else:
            result[k] = OFF_LATTICE
    return result


def _bins_off(
    vectors: NDArray[np.float64], basis: NDArray[np.float64], inverse: NDArray[np.float64], bins: NDArray[np.int64]
) -> NDArray[np.float64]:
    """Return how far vectors lie from the nearest lattice point, in bins."""
    vectors = np.atleast_2d(vectors)
    return np.asarray(np.hypot(*((vectors - np.rint(vectors @ inverse) @ basis) * bins).T))


def _is_one_of(peak: NDArray[np.float64], vectors: NDArray[np.float64], bins: NDArray[np.int64]) -> bool:
    distance = np.minimum(np.hypot(*((vectors - peak) * bins).T), np.hypot(*((vectors + peak) * bins).T))
    return bool(distance.min() < _MOIRE_BINS)
