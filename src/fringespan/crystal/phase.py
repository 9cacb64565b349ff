"""The phase: one crystal structure, where its figures come from, and how far they were checked."""

from __future__ import annotations

import hashlib
import math
from collections import Counter
from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.crystal.symmetry import CrystalSystem, Symmetry
from fringespan.exceptions import PhaseError

__all__ = ["CalibrationRole", "Phase", "ReferenceRole", "Site", "SourceStatus"]

SourceStatus = Literal["read", "packaged data", "from memory"]
"""How far a structure was checked: in its source, against an open data package, or not at all."""

ReferenceRole = Literal["certified", "unit constant", "conventional"]

_STATUSES = ("read", "packaged data", "from memory")
_LENGTH_LIMITS_ANGSTROM = (0.5, 1000.0)
_MERGE_ANGSTROM = 0.1
"""Copies of a site that symmetry brings this close are one atom on a special position given with few digits."""

_ANGSTROM_PER_NM = 10.0
_G_CM3_PER_DALTON_ANGSTROM3 = 1.66053906660  # CODATA 2018 atomic mass constant


@dataclass(frozen=True, slots=True, kw_only=True)
class Site:
    """One atom site of the asymmetric unit.

    Parameters
    ----------
    label : str
    element : str
        Chemical symbol; "X" where it is not known.
    position : (float, float, float)
        Fractions of the cell edges.
    occupancy : float, optional
        Share of the site that this atom fills, above 0 up to 1.
    b_iso_angstrom2 : float, optional
        Debye-Waller factor B in square angstrom.
    """

    label: str
    element: str
    position: tuple[float, float, float]
    occupancy: float = 1.0
    b_iso_angstrom2: float = 0.5

    def __post_init__(self) -> None:
        numbers = (*self.position, self.occupancy, self.b_iso_angstrom2)
        if len(self.position) != 3 or not all(math.isfinite(v) for v in numbers):
            raise PhaseError(f"site {self.label}: position, occupancy and B must be finite numbers, got {numbers}")
        if not 0 < self.occupancy <= 1.001:
            raise PhaseError(
                f"site {self.label}: occupancy must lie above 0 and not above 1, got {self.occupancy:g}; "
                "atoms that share a site have occupancies that add up to at most 1"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class CalibrationRole:
    """What a phase is worth as a reference material.

    Parameters
    ----------
    role : {"certified", "unit constant", "conventional"}
        With a certificate; a constant of nature known far better than any picture; used by custom.
    relative_uncertainty : float
        Relative standard uncertainty of the lattice parameter when a specimen of it serves as the reference.
    note : str, optional
    """

    role: ReferenceRole
    relative_uncertainty: float
    note: str = ""


@dataclass(frozen=True, kw_only=True)
class Phase:
    """One crystal structure.

    Parameters
    ----------
    id : str
        Short identifier, as used in records.
    name, formula : str
    cell_angstrom_deg : tuple of 6 floats
        a, b, c in angstrom; alpha, beta, gamma in degrees.
    operations : tuple of str
        Symmetry operations as coordinate triplets, the centring ones included.
    sites : tuple of Site
        Asymmetric unit.
    space_group : str, optional
        Hermann-Mauguin symbol with its setting, for display.
    aliases : tuple of str, optional
        Other names, among them minerals.
    source, source_status : str, optional
        Where the figures were published; how far that was checked.
    confirmations, contradictions : tuple of str, optional
        What agrees and what disagrees with them.
    cell_relative_uncertainty : float, optional
        Relative standard uncertainty of the scale of the cell, including how much specimens differ.
    calibration : CalibrationRole, optional
        Set for reference materials.
    hazard : str, optional
        Set where the substance is fibrous, toxic or reactive.
    note : str, optional
    cautions : tuple of Caution, optional
        What reading it from a file brought to light.

    Raises
    ------
    PhaseError
        If the cell is no cell, the symmetry is no group that fits the cell, or a site is impossible.
    """

    id: str
    name: str
    formula: str
    cell_angstrom_deg: tuple[float, float, float, float, float, float]
    operations: tuple[str, ...]
    sites: tuple[Site, ...]
    space_group: str = ""
    aliases: tuple[str, ...] = ()
    source: str = ""
    source_status: SourceStatus = "from memory"
    confirmations: tuple[str, ...] = ()
    contradictions: tuple[str, ...] = ()
    cell_relative_uncertainty: float = 0.001
    calibration: CalibrationRole | None = None
    hazard: str = ""
    note: str = ""
    cautions: tuple[Caution, ...] = field(default=())

    def __post_init__(self) -> None:
        cell = self.cell_angstrom_deg
        if len(cell) != 6 or not all(math.isfinite(v) for v in cell):
            raise PhaseError(f"{self.id}: a cell needs three edges and three angles, all finite, got {cell}")
        low, high = _LENGTH_LIMITS_ANGSTROM
        if not all(low <= v <= high for v in cell[:3]):
            raise PhaseError(f"{self.id}: cell edges must lie between {low:g} and {high:g} angstrom, got {cell[:3]}")
        if not all(0 < v < 180 for v in cell[3:]) or _volume(cell) <= 1e-3 * math.prod(cell[:3]):
            raise PhaseError(f"{self.id}: the angles {cell[3:]} span no cell; check alpha, beta, gamma in degrees")
        if self.source_status not in _STATUSES:
            raise PhaseError(f"{self.id}: source_status must be one of {_STATUSES}, got {self.source_status!r}")
        if not 0 <= self.cell_relative_uncertainty < 0.2:
            raise PhaseError(
                f"{self.id}: cell_relative_uncertainty must be a fraction from 0 up to 0.2, got "
                f"{self.cell_relative_uncertainty!r}"
            )
        self.symmetry.check_cell(self.id, self.direct_metric)

    @cached_property
    def symmetry(self) -> Symmetry:
        """The symmetry operations as arrays."""
        return Symmetry.from_triplets(self.operations)

    @property
    def lengths_nm(self) -> tuple[float, float, float]:
        """Cell edges a, b, c in nm."""
        a, b, c = (v / _ANGSTROM_PER_NM for v in self.cell_angstrom_deg[:3])
        return a, b, c

    @property
    def angles_deg(self) -> tuple[float, float, float]:
        """Cell angles alpha, beta, gamma."""
        return self.cell_angstrom_deg[3:]

    @property
    def volume_nm3(self) -> float:
        """Volume of the cell."""
        return _volume(self.cell_angstrom_deg) / _ANGSTROM_PER_NM**3

    @cached_property
    def direct_basis(self) -> NDArray[np.float64]:
        """Cartesian cell edges in angstrom as rows, shape (3, 3); a along x, b in the xy plane."""
        a, b, c = self.cell_angstrom_deg[:3]
        # exact values for right and hexagonal angles keep cubic cells cubic to the last bit
        ca, cb, cg = (_cosine(v) for v in self.cell_angstrom_deg[3:])
        sg = math.sqrt(1 - cg * cg)
        cx, cy = c * cb, c * (ca - cb * cg) / sg
        return np.array([[a, 0, 0], [b * cg, b * sg, 0], [cx, cy, math.sqrt(c * c - cx * cx - cy * cy)]])

    @cached_property
    def direct_metric(self) -> NDArray[np.float64]:
        """Metric tensor of the cell in square angstrom, shape (3, 3)."""
        return self.direct_basis @ self.direct_basis.T

    @cached_property
    def reciprocal_basis(self) -> NDArray[np.float64]:
        """Cartesian a*, b*, c* in 1/angstrom as rows, shape (3, 3), without 2 pi; g = hkl @ reciprocal_basis."""
        return np.asarray(np.linalg.inv(self.direct_basis).T, dtype=np.float64)

    @property
    def crystal_system(self) -> CrystalSystem:
        """The crystal system, from the symmetry."""
        return self.symmetry.crystal_system

    @property
    def has_hexagonal_axes(self) -> bool:
        """Whether the cell is the one that four indices are made for: a = b, angles 90, 90, 120 degrees."""
        a, b = self.cell_angstrom_deg[:2]
        angles_fit = all(abs(v - w) < 0.01 for v, w in zip(self.angles_deg, (90, 90, 120), strict=True))
        return angles_fit and abs(a - b) < 1e-4 * a and self.crystal_system in ("hexagonal", "trigonal")

    @property
    def elements(self) -> frozenset[str]:
        """Chemical symbols of the atoms."""
        return frozenset(site.element for site in self.sites)

    @property
    def has_known_atoms(self) -> bool:
        """Whether intensities can be computed: there are atoms, and the element of each is known."""
        return bool(self.sites) and "X" not in self.elements

    @cached_property
    def cell_atoms(self) -> tuple[tuple[Site, NDArray[np.float64]], ...]:
        """Every site with the positions of all its copies in the cell, shape (n, 3), in fractions within [0, 1)."""
        return tuple((site, self._copies(site)) for site in self.sites)

    def _copies(self, site: Site) -> NDArray[np.float64]:
        images = self.symmetry.rotations @ np.array(site.position) + self.symmetry.translations
        kept: list[NDArray[np.float64]] = []
        remaining = images
        while len(remaining):
            offset = remaining - remaining[0]
            offset -= np.round(offset)
            near = np.einsum("ni,ij,nj->n", offset, self.direct_metric, offset) < _MERGE_ANGSTROM**2
            # the mean of the copies that fall together lies on the special position exactly
            kept.append(remaining[0] + offset[near].mean(axis=0))
            remaining = remaining[~near]
        return np.asarray(np.mod(np.array(kept) + 1e-12, 1.0) - 1e-12, dtype=np.float64)

    @cached_property
    def composition(self) -> dict[str, float]:
        """Number of atoms of each element in the cell."""
        count: Counter[str] = Counter()
        for site, copies in self.cell_atoms:
            count[site.element] += site.occupancy * len(copies)  # type: ignore[assignment]
        return dict(count)

    @property
    def density_g_cm3(self) -> float | None:
        """Density; None where an element is not known."""
        if not self.has_known_atoms:
            return None
        import gemmi

        mass = sum(gemmi.Element(element).weight * number for element, number in self.composition.items())
        return float(mass * _G_CM3_PER_DALTON_ANGSTROM3 / _volume(self.cell_angstrom_deg))

    @cached_property
    def fingerprint(self) -> str:
        """SHA-256 of everything that decides the reflections: cell, symmetry, atoms, uncertainty of the cell."""
        facts = (self.cell_angstrom_deg, self.operations, self.cell_relative_uncertainty)
        sites = [(s.element, s.position, s.occupancy, s.b_iso_angstrom2) for s in self.sites]
        return hashlib.sha256(repr((facts, sites)).encode()).hexdigest()


def _cosine(angle_deg: float) -> float:
    exact = {90.0: 0.0, 120.0: -0.5, 60.0: 0.5}
    return exact.get(angle_deg, math.cos(math.radians(angle_deg)))


def _volume(cell: tuple[float, ...]) -> float:
    a, b, c, *angles = cell
    ca, cb, cg = (_cosine(v) for v in angles)
    return a * b * c * math.sqrt(max(0.0, 1 - ca * ca - cb * cb - cg * cg + 2 * ca * cb * cg))
