"""The symmetry operations of a space group as arrays."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import PhaseError

__all__ = ["CrystalSystem", "Symmetry", "group_triplets"]

CrystalSystem = Literal["triclinic", "monoclinic", "orthorhombic", "tetragonal", "trigonal", "hexagonal", "cubic"]

_METRIC_TOLERANCE = 2e-3
"""How far a cell may miss the shape that its symmetry asks for (relative; files round angles and edges)."""


@dataclass(frozen=True, eq=False, slots=True)
class Symmetry:
    """The operations x -> R x + t of a space group, in fractions of the cell.

    Attributes
    ----------
    rotations : ndarray of int, shape (n, 3, 3)
    translations : ndarray, shape (n, 3)
    laue_rotations : ndarray of int, shape (m, 3, 3)
        The different rotations, with the inversion added.
    centring : ndarray, shape (c, 3)
        Translations of the centring, (0, 0, 0) first.
    crystal_system : str
    """

    rotations: NDArray[np.int64]
    translations: NDArray[np.float64]
    laue_rotations: NDArray[np.int64]
    centring: NDArray[np.float64]
    crystal_system: CrystalSystem

    @staticmethod
    def from_triplets(triplets: tuple[str, ...]) -> Symmetry:
        """Return the symmetry given by coordinate triplets such as "-x,y+1/2,-z".

        Raises
        ------
        PhaseError
            If a triplet cannot be read or the operations form no group.
        """
        return _symmetry(triplets)

    def check_cell(self, name: str, metric: NDArray[np.float64]) -> None:
        """Refuse a cell whose shape the operations do not allow."""
        rotated = np.einsum("nki,kl,nlj->nij", self.rotations, metric, self.rotations)
        scale = np.sqrt(np.outer(np.diag(metric), np.diag(metric)))
        miss = float(np.max(np.abs(rotated - metric) / scale))
        if miss > _METRIC_TOLERANCE:
            raise PhaseError(
                f"{name}: the cell does not have the shape that its {self.crystal_system} symmetry asks for "
                f"(off by {100 * miss:.2g} %); check the cell, its setting, and the space group"
            )

    def orbit(self, hkl: tuple[int, int, int]) -> NDArray[np.int64]:
        """Return all indices equivalent to hkl under the Laue group, shape (n, 3), without repeats."""
        return np.unique(np.array(hkl) @ self.laue_rotations, axis=0)

    def is_centring_absent(self, hkl: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Return for indices of shape (n, 3) whether the centring extinguishes them."""
        phase = hkl @ self.centring.T
        return np.asarray(np.any(np.abs(phase - np.round(phase)) > 1e-6, axis=1))

    def is_systematically_absent(self, hkl: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Return for indices of shape (n, 3) whether centring, glide or screw extinguishes them."""
        rotated = np.einsum("ni,mij->mnj", hkl, self.rotations)
        unmoved = np.all(rotated == hkl, axis=2)
        phase = np.einsum("ni,mi->mn", hkl, self.translations)
        return np.asarray(np.any(unmoved & (np.abs(phase - np.round(phase)) > 1e-6), axis=0))


@lru_cache(maxsize=512)
def group_triplets(space_group: str) -> tuple[str, ...]:
    """Return the operations of a space group named by its Hermann-Mauguin symbol with setting, as triplets.

    Raises
    ------
    PhaseError
        If there is no such symbol.
    """
    import gemmi

    group = gemmi.find_spacegroup_by_name(space_group)
    if group is None:
        raise PhaseError(f"space group {space_group!r} is not known; write it as in 'F m -3 m' or 'F d -3 m:1'")
    return tuple(op.triplet() for op in group.operations())


@lru_cache(maxsize=512)
def _symmetry(triplets: tuple[str, ...]) -> Symmetry:
    import gemmi

    if not triplets:
        raise PhaseError("a structure needs at least the identity 'x,y,z' among its symmetry operations")
    try:
        operations = [gemmi.Op(text) for text in triplets]
    except (RuntimeError, ValueError) as problem:
        raise PhaseError(f"a symmetry operation cannot be read: {problem}; write it like '-x,y+1/2,-z'") from None
    rotations = np.array([op.rot for op in operations], dtype=np.int64) // gemmi.Op.DEN
    translations = np.array([op.tran for op in operations], dtype=np.int64)
    _check_group(rotations, translations % gemmi.Op.DEN, gemmi.Op.DEN)
    laue = np.unique(np.concatenate([rotations, -rotations]), axis=0)
    is_pure_shift = np.all(rotations == np.eye(3, dtype=np.int64), axis=(1, 2))
    centring = np.unique(translations[is_pure_shift] % gemmi.Op.DEN, axis=0) / gemmi.Op.DEN
    return Symmetry(rotations, translations / gemmi.Op.DEN, laue, centring, _crystal_system(laue))


def _check_group(rotations: NDArray[np.int64], translations: NDArray[np.int64], denominator: int) -> None:
    def keys(rots: NDArray[np.int64], shifts: NDArray[np.int64]) -> set[bytes]:
        rows = np.concatenate([rots.reshape(-1, 9), shifts.reshape(-1, 3) % denominator], axis=1)
        return {row.tobytes() for row in np.ascontiguousarray(rows)}

    own = keys(rotations, translations)
    if len(own) != len(rotations):
        raise PhaseError("a symmetry operation is listed twice; list each once")
    product = np.einsum("aij,bjk->abik", rotations, rotations)
    shift = np.einsum("aij,bj->abi", rotations, translations) + translations[:, None, :]
    if not keys(product, shift) <= own:
        raise PhaseError(
            f"the {len(rotations)} symmetry operations form no group; list all of them, the centring ones included, or "
            "give the space group's name"
        )


def _crystal_system(laue: NDArray[np.int64]) -> CrystalSystem:
    proper = laue[np.round(np.linalg.det(laue)) == 1]
    # the trace of a rotation tells its order: 1 + 2 cos(2 pi / n)
    orders: Iterable[int] = [{3: 1, -1: 2, 0: 3, 1: 4, 2: 6}[int(t)] for t in np.trace(proper, axis1=1, axis2=2)]
    count = {n: list(orders).count(n) for n in (2, 3, 4, 6)}
    if count[3] >= 8:
        return "cubic"
    if count[6]:
        return "hexagonal"
    if count[3]:
        return "trigonal"
    if count[4]:
        return "tetragonal"
    return {0: "triclinic", 1: "monoclinic"}.get(count[2], "orthorhombic")  # type: ignore[return-value]
