"""The zone-axis pattern: the reflections of one zone as they lie in the spectrum of a picture."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.notation import four_index_plane, three_index_direction
from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import (
    PARTNER_D_MIN_NM,
    Forbidden,
    ReflectionArrays,
    checked_d_min,
    reflection_arrays,
)
from fringespan.exceptions import PhaseError

__all__ = ["ZoneArrays", "ZonePattern", "ZoneSpot", "zone_arrays", "zone_axis", "zone_pattern"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ZoneSpot:
    """One reflection of a zone.

    Attributes
    ----------
    hkl : (int, int, int)
    hkil : (int, int, int, int) or None
        The same in four indices on hexagonal axes.
    g_per_nm : (float, float)
        (row, column) as on the screen, the viewer looking against [uvw], the coarsest allowed reflection pointing to
        the right.
    d_nm : float
    direction_deg : float
        Counter-clockwise from the right, 0 up to 360.
    relative_intensity : float or None
        Kinematic |F|^2 over that of the strongest reflection of the phase.
    forbidden : False or str
        In this zone.
    excitation_error_per_nm : float or None
        Distance from the Ewald sphere with the beam along the zone axis, negative: outside the sphere.
    two_theta_mrad : float or None
    """

    hkl: tuple[int, int, int]
    hkil: tuple[int, int, int, int] | None
    g_per_nm: tuple[float, float]
    d_nm: float
    direction_deg: float
    relative_intensity: float | None
    forbidden: Forbidden
    excitation_error_per_nm: float | None
    two_theta_mrad: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ZonePattern:
    """The reflections of one zone, coarsest first, g and -g both."""

    phase: Phase
    zone: tuple[int, int, int]
    spots: tuple[ZoneSpot, ...]
    voltage_kv: float | None


@dataclass(frozen=True, eq=False, slots=True)
class ZoneArrays:
    """The reflections of one zone as arrays, coarsest first, g and -g both.

    Attributes
    ----------
    hkl : ndarray of int, shape (n, 3)
    g_per_angstrom : ndarray of complex, shape (n,)
        x + i y with x to the right and y upwards, the viewer looking against [uvw].
    relative_intensity : ndarray, shape (n,)
    is_centring_absent, is_absent, is_reachable : ndarray of bool, shape (n,)
        Extinguished by the centring; without intensity for any reason; without intensity, but the sum of two allowed
        reflections of this zone.
    """

    hkl: NDArray[np.int64]
    g_per_angstrom: NDArray[np.complex128]
    relative_intensity: NDArray[np.float64]
    is_centring_absent: NDArray[np.bool_]
    is_absent: NDArray[np.bool_]
    is_reachable: NDArray[np.bool_]


def zone_axis(indices: Sequence[int]) -> tuple[int, int, int]:
    """Return a zone axis without common factor, from three indices or four.

    Raises
    ------
    PhaseError
        If there are not three or four, all are 0, or the first three of four do not add up to 0.
    """
    if len(indices) == 4:
        return three_index_direction(indices)
    if len(indices) != 3 or not any(indices):
        raise PhaseError(f"a zone axis needs three indices (or four), not all 0, got {tuple(indices)}")
    common = math.gcd(*(int(i) for i in indices))
    u, v, w = (int(i) // common for i in indices)
    return u, v, w


def zone_arrays(phase: Phase, zone: tuple[int, int, int], d_min_nm: float) -> ZoneArrays:
    """Return the reflections of a zone down to d_min_nm as arrays.

    References
    ----------
    The zone law hu + kv + lw = 0 (Weiss). Reflections without kinematic intensity come back by double scattering
    where they are the sum of two allowed ones of the same zone; the difference of two is such a sum too.
    """
    every = reflection_arrays(phase, min(d_min_nm, PARTNER_D_MIN_NM))
    return _zone_of(every, phase, zone, d_min_nm)


def _zone_of(every: ReflectionArrays, phase: Phase, zone: tuple[int, int, int], d_min_nm: float) -> ZoneArrays:
    chosen = every.hkl @ np.array(zone) == 0
    hkl, g3 = every.hkl[chosen], every.g_per_angstrom[chosen]
    length = every.length_per_angstrom[chosen]
    absent, centring = every.is_absent[chosen], every.is_centring_absent[chosen]
    plane = _plane_axes(phase, zone, g3, absent)
    g = g3 @ plane[0] + 1j * (g3 @ plane[1])
    reachable = np.zeros(len(hkl), dtype=bool)
    partners = hkl[~absent & (length * PARTNER_D_MIN_NM * 10 <= 1 + 1e-9)]
    if len(partners):
        reach = np.abs(partners).max(axis=0)
        grid = np.zeros(2 * reach + 1, dtype=bool)
        grid[tuple((partners + reach).T)] = True
        for index in np.flatnonzero(absent & ~centring):
            other = hkl[index] - partners
            inside = np.all(np.abs(other) <= reach, axis=1)
            reachable[index] = np.any(grid[tuple((other[inside] + reach).T)])
    inside = length * d_min_nm * 10 <= 1 + 1e-9
    return ZoneArrays(
        hkl[inside],
        g[inside],
        every.relative_intensity[chosen][inside],
        centring[inside],
        absent[inside],
        reachable[inside],
    )


def _plane_axes(
    phase: Phase, zone: tuple[int, int, int], g3: NDArray[np.float64], absent: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    axis = np.array(zone) @ phase.direct_basis
    axis = axis / np.linalg.norm(axis)
    seen = np.flatnonzero(~absent)
    if len(seen):
        x = g3[seen[0]]
    elif len(g3):
        x = g3[0]
    else:
        x = np.cross(axis, np.eye(3)[np.argmin(np.abs(axis))])
    x = x - (x @ axis) * axis
    x = x / np.linalg.norm(x)
    return x, np.cross(axis, x)


def zone_pattern(
    phase: Phase, zone: Sequence[int], *, d_min_nm: float = 0.1, voltage_kv: float | None = None
) -> ZonePattern:
    """Return the zone-axis pattern of a phase.

    Parameters
    ----------
    phase : Phase
    zone : sequence of 3 or 4 ints
        [uvw] or [uvtw], pointing from the specimen to the viewer.
    d_min_nm : float, optional
        Smallest spacing listed.
    voltage_kv : float, optional
        For scattering angles and excitation errors.

    Returns
    -------
    ZonePattern

    Raises
    ------
    PhaseError
        If the zone axis is none.
    SettingsError
        If d_min_nm is out of range.
    CalibrationError
        If the voltage is out of range.
    """
    axis = zone_axis(zone)
    arrays = zone_arrays(phase, axis, checked_d_min(d_min_nm))
    lengths = np.abs(arrays.g_per_angstrom) * 10
    none: list[float | None] = [None] * len(lengths)
    angles = errors = none
    if voltage_kv is not None:
        from fringespan.beam import excitation_error_per_nm, scattering_angle_mrad

        angles = [float(v) for v in scattering_angle_mrad(1 / lengths, voltage_kv)]
        errors = [float(v) for v in excitation_error_per_nm(lengths, voltage_kv)]
    spots = []
    for index, row in enumerate(arrays.hkl):
        hkl = (int(row[0]), int(row[1]), int(row[2]))
        g = complex(arrays.g_per_angstrom[index]) * 10
        forbidden: Forbidden = False
        if arrays.is_centring_absent[index]:
            forbidden = "centring"
        elif arrays.is_reachable[index]:
            forbidden = "absence, reachable by double scattering"
        elif arrays.is_absent[index]:
            forbidden = "absence"
        spots.append(
            ZoneSpot(
                hkl=hkl,
                hkil=four_index_plane(hkl) if phase.has_hexagonal_axes else None,
                g_per_nm=(-g.imag, g.real),
                d_nm=1 / abs(g),
                direction_deg=round(math.degrees(math.atan2(g.imag, g.real)), 9) % 360,
                relative_intensity=float(arrays.relative_intensity[index]) if phase.has_known_atoms else None,
                forbidden=forbidden,
                excitation_error_per_nm=errors[index],
                two_theta_mrad=angles[index],
            )
        )
    return ZonePattern(phase=phase, zone=axis, spots=tuple(spots), voltage_kv=voltage_kv)
