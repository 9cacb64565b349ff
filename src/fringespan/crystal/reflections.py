"""The reflections that a phase would show: spacing, multiplicity, kinematic intensity, and why some are missing."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.notation import four_index_plane
from fringespan.crystal.phase import Phase
from fringespan.exceptions import PhaseError, SettingsError

__all__ = [
    "Forbidden",
    "Reflection",
    "ReflectionArrays",
    "angle_between_deg",
    "checked_d_min",
    "expected_reflections",
    "hkl_within",
    "reflection_arrays",
    "structure_factors",
]

Forbidden = Literal[False, "centring", "absence, reachable by double scattering", "absence"]
"""Why a reflection has no kinematic intensity, or False if it has."""

PARTNER_D_MIN_NM = 0.12
"""Double scattering is looked for among pairs of reflections no finer than this; finer ones are too weak to matter."""

_ZERO_INTENSITY = 1e-9
"""Relative to the strongest; rounding leaves about 1e-20, the weakest real reflections are above 1e-8."""

_D_MIN_LIMITS_NM = (0.03, 10.0)
_STRONGEST_D_MIN_NM = 0.1
_MOST_REFLECTIONS = 400_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Reflection:
    """One family of equivalent reflections.

    Attributes
    ----------
    hkl : (int, int, int)
        The member that is written for the family.
    hkil : (int, int, int, int) or None
        The same in four indices; None if the cell has no hexagonal axes.
    d_nm : float
    multiplicity : int
        Number of members.
    relative_intensity : float or None
        Kinematic |F|^2 of one member over that of the strongest reflection; None where an element is not known.
    forbidden : False or str
    two_theta_mrad : float or None
        Scattering angle; None without a voltage.
    """

    hkl: tuple[int, int, int]
    hkil: tuple[int, int, int, int] | None
    d_nm: float
    multiplicity: int
    relative_intensity: float | None
    forbidden: Forbidden
    two_theta_mrad: float | None


@dataclass(frozen=True, eq=False, slots=True)
class ReflectionArrays:
    """All reflections of a phase down to a spacing, g and -g both, as arrays; coarsest first.

    Attributes
    ----------
    hkl : ndarray of int, shape (n, 3)
    g_per_angstrom : ndarray, shape (n, 3)
        Cartesian, without 2 pi.
    length_per_angstrom : ndarray, shape (n,)
        |g| = 1/d.
    relative_intensity : ndarray, shape (n,)
        |F|^2 over that of the strongest; 1 everywhere allowed if an element is not known.
    is_centring_absent, is_absent : ndarray of bool, shape (n,)
        Extinguished by the centring; without intensity for any reason.
    """

    hkl: NDArray[np.int64]
    g_per_angstrom: NDArray[np.float64]
    length_per_angstrom: NDArray[np.float64]
    relative_intensity: NDArray[np.float64]
    is_centring_absent: NDArray[np.bool_]
    is_absent: NDArray[np.bool_]


def hkl_within(phase: Phase, d_min_nm: float) -> NDArray[np.int64]:
    """Return all indices with d >= d_min_nm except 000, shape (n, 3), coarsest first.

    Raises
    ------
    SettingsError
        If d_min_nm is out of range or asks for too many.
    """
    d_min_nm = checked_d_min(d_min_nm)
    # |h| = |a . g| <= a / d holds for every lattice
    box = [math.floor(length / d_min_nm * (1 + 1e-12)) for length in phase.lengths_nm]
    if math.prod(2 * n + 1 for n in box) > 8 * _MOST_REFLECTIONS:
        raise SettingsError(
            f"{phase.id}: more than {_MOST_REFLECTIONS} reflections down to {d_min_nm:g} nm; choose a larger d_min_nm"
        )
    grid = np.stack(np.meshgrid(*(np.arange(-n, n + 1) for n in box), indexing="ij"), axis=-1).reshape(-1, 3)
    length = np.linalg.norm(grid @ phase.reciprocal_basis, axis=1)
    # in the file's unit, with room for rounding, so that d_min equal to a spacing includes it
    chosen = (length > 0) & (length * d_min_nm * 10 <= 1 + 1e-9)
    order = np.lexsort((-grid[chosen, 2], -grid[chosen, 1], -grid[chosen, 0], np.round(length[chosen], 9)))
    return np.asarray(grid[chosen][order])


def checked_d_min(d_min_nm: float) -> float:
    """Return a smallest spacing as it was given, refusing one that is out of range."""
    low, high = _D_MIN_LIMITS_NM
    if not low <= d_min_nm <= high:
        raise SettingsError(f"d_min_nm must lie between {low:g} and {high:g} nm, got {d_min_nm!r}")
    return float(d_min_nm)


def structure_factors(phase: Phase, hkl: NDArray[np.int64]) -> NDArray[np.complex128]:
    """Return the kinematic electron structure factors F(hkl) in angstrom, shape (n,).

    F(h) = sum occ f(s) exp(-B s^2) exp(2 pi i h.x) over the atoms of the cell, s = |g|/2, with the electron scattering
    factors of neutral atoms as sums of five Gaussians [1]_, which hold down to d = 0.025 nm. The relativistic factor,
    common to all reflections, is left out. Good for "strong" and "weak", not for quantitative intensities: a real
    crystal scatters dynamically.

    Raises
    ------
    PhaseError
        If an element is not known or has no scattering factor.

    References
    ----------
    .. [1] International Tables for Crystallography, Volume C, table 4.3.2.2 (table number from memory).
    """
    s_squared = np.sum((hkl @ phase.reciprocal_basis) ** 2, axis=1) / 4
    total = np.zeros(len(hkl), dtype=np.complex128)
    for site, copies in phase.cell_atoms:
        amplitude = site.occupancy * _scattering_factor(phase.id, site.element, s_squared)
        amplitude = amplitude * np.exp(-site.b_iso_angstrom2 * s_squared)
        turns = hkl @ copies.T
        total += amplitude * np.exp(2j * np.pi * (turns - np.round(turns))).sum(axis=1)
    return total


def _scattering_factor(phase_id: str, element: str, s_squared: NDArray[np.float64]) -> NDArray[np.float64]:
    import gemmi

    gaussians = gemmi.Element(element).c4322
    if element == "X" or gaussians is None:
        raise PhaseError(f"{phase_id}: there is no electron scattering factor for {element!r}; check the atom types")
    a, b = np.array(gaussians.a), np.array(gaussians.b)
    return np.asarray(np.exp(-np.outer(s_squared, b)) @ a)


@lru_cache(maxsize=256)
def reflection_arrays(phase: Phase, d_min_nm: float) -> ReflectionArrays:
    """Return all reflections of a phase down to d_min_nm as arrays (not to be written to)."""
    widest = hkl_within(phase, min(d_min_nm, _STRONGEST_D_MIN_NM))
    g = widest @ phase.reciprocal_basis
    length = np.linalg.norm(g, axis=1)
    centring = phase.symmetry.is_centring_absent(widest)
    if phase.has_known_atoms:
        intensity = np.zeros(len(widest))
        intensity[~centring] = np.abs(structure_factors(phase, widest[~centring])) ** 2
        strongest = intensity.max(initial=0.0)
        if strongest > 0:
            intensity /= strongest
        intensity[intensity < _ZERO_INTENSITY] = 0.0
        absent = intensity == 0
    else:
        absent = phase.symmetry.is_systematically_absent(widest)
        intensity = np.where(absent, 0.0, 1.0)
    inside = length * d_min_nm * 10 <= 1 + 1e-9
    return ReflectionArrays(
        widest[inside], g[inside], length[inside], intensity[inside], centring[inside], absent[inside]
    )


def angle_between_deg(phase: Phase, hkl1: tuple[int, int, int], hkl2: tuple[int, int, int]) -> float:
    """Return the angle between two plane normals in degrees, 0 to 180."""
    g1, g2 = (np.array(hkl) @ phase.reciprocal_basis for hkl in (hkl1, hkl2))
    if not (np.any(g1) and np.any(g2)):
        raise PhaseError(f"a plane needs indices that are not all 0, got {hkl1} and {hkl2}")
    return math.degrees(math.atan2(float(np.linalg.norm(np.cross(g1, g2))), float(g1 @ g2)))


def expected_reflections(
    phase: Phase, d_min_nm: float = 0.1, *, voltage_kv: float | None = None
) -> tuple[Reflection, ...]:
    """Return the families of reflections that a phase has down to a spacing, coarsest first.

    Families are the orbits of the Laue group, so that two families of equal d, such as cubic 333 and 511, stay apart.
    Those without kinematic intensity are listed too, with the reason; whether double scattering brings one back
    depends on the zone, and it is called reachable here if any zone does it.

    Parameters
    ----------
    phase : Phase
    d_min_nm : float, optional
        Smallest spacing listed.
    voltage_kv : float, optional
        Beam voltage, for the scattering angles.

    Returns
    -------
    tuple of Reflection

    Raises
    ------
    SettingsError
        If d_min_nm is out of range or asks for too many reflections.
    CalibrationError
        If the voltage is out of range.

    Examples
    --------
    >>> from fringespan.crystal.library import load_phase
    >>> [(r.hkl, round(r.d_nm, 4)) for r in expected_reflections(load_phase("gold"), 0.2) if not r.forbidden]
    [((1, 1, 1), 0.2355), ((2, 0, 0), 0.2039)]
    """
    return _families(phase, checked_d_min(d_min_nm), voltage_kv)


@lru_cache(maxsize=512)
def _families(phase: Phase, d_min_nm: float, voltage_kv: float | None) -> tuple[Reflection, ...]:
    arrays = reflection_arrays(phase, d_min_nm)
    if voltage_kv is None:
        angles: list[float | None] = [None] * len(arrays.hkl)
    else:
        from fringespan.beam import scattering_angle_mrad

        angles = [float(v) for v in scattering_angle_mrad(0.1 / arrays.length_per_angstrom, voltage_kv)]
    lookup = _AllowedLookup(phase)
    seen: set[tuple[int, ...]] = set()
    families = []
    for index, row in enumerate(arrays.hkl):
        hkl = (int(row[0]), int(row[1]), int(row[2]))
        if hkl in seen:
            continue
        orbit = [tuple(int(v) for v in member) for member in phase.symmetry.orbit(hkl)]
        seen.update(orbit)
        name = max(orbit, key=_tidiness)
        length = float(arrays.length_per_angstrom[index]) * 10
        forbidden: Forbidden = False
        if arrays.is_centring_absent[index]:
            forbidden = "centring"
        elif arrays.is_absent[index]:
            forbidden = lookup.reason(np.array(name))
        written = (name[0], name[1], name[2])
        families.append(
            Reflection(
                hkl=written,
                hkil=four_index_plane(written) if phase.has_hexagonal_axes else None,
                d_nm=1 / length,
                multiplicity=len(orbit),
                relative_intensity=float(arrays.relative_intensity[index]) if phase.has_known_atoms else None,
                forbidden=forbidden,
                two_theta_mrad=angles[index],
            )
        )
    return tuple(sorted(families, key=lambda r: (-round(r.d_nm, 12), -(r.relative_intensity or 0), r.hkl)))


def _tidiness(hkl: tuple[int, ...]) -> tuple[int, ...]:
    # few minus signs, then large indices first: 111 and 311, not -111 and 113
    return (-sum(i < 0 for i in hkl), *hkl)


class _AllowedLookup:
    """Answers whether two allowed reflections of a phase add up to a given one."""

    def __init__(self, phase: Phase) -> None:
        arrays = reflection_arrays(phase, PARTNER_D_MIN_NM)
        self.allowed = arrays.hkl[~arrays.is_absent]
        reach = np.abs(self.allowed).max(axis=0, initial=0)
        self.reach = reach
        self.grid = np.zeros(2 * reach + 1, dtype=bool)
        self.grid[tuple((self.allowed + reach).T)] = True

    def reason(self, hkl: NDArray[np.int64]) -> Forbidden:
        partner = hkl - self.allowed
        inside = np.all(np.abs(partner) <= self.reach, axis=1)
        found = bool(np.any(self.grid[tuple((partner[inside] + self.reach).T)]))
        return "absence, reachable by double scattering" if found else "absence"
