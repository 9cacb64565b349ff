"""The zones of a set of phases as flat arrays, so that a region can be compared with all of them at once.

A table is built once per set of phases and kept on disk under a name made from their content.
"""

from __future__ import annotations

import hashlib
import io
import math
import os
import zipfile
from collections.abc import Iterator, Sequence
from contextlib import suppress
from dataclasses import dataclass, fields, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import PARTNER_D_MIN_NM, ReflectionArrays, reflection_arrays
from fringespan.exceptions import FringespanError, PhaseError

__all__ = [
    "CACHE_FOLDER_VARIABLE",
    "LARGEST_ZONE_INDEX",
    "MOST_ZONES",
    "TABLE_D_MIN_NM",
    "ZoneTables",
    "cache_folder",
    "zone_tables",
]

CACHE_FOLDER_VARIABLE = "FRINGESPAN_CACHE"
"""Environment variable that names another folder for tables kept on disk."""

TABLE_D_MIN_NM = 0.07
"""Finest spacing in the tables; finer peaks take no part in a ranking."""

LARGEST_ZONE_INDEX = 4
MOST_ZONES = 24
"""Zones with indices up to 4, of these the 24 with the shortest lattice vector along the beam."""

PAIR_D_MIN_NM = 0.085
_PAIR_ANGLE = np.radians(7.0)
_MOST_PAIR_RATIO = 5.5
_LEAST_PAIR_INTENSITY = 1e-5

WEIGHT_EXPONENT = 0.4
WEIGHT_FLOOR = 0.004
WEIGHT_REACHABLE = 0.06
WEIGHT_CENTRING = 0.01
"""How likely a reflection is to be among the peaks picked: |F|^2 to the power 0.4 plus a floor; set by hand.
Reflections without kinematic intensity come with double scattering, those extinguished by the centring in crystals of a
few layers."""

_FORMAT = 1


@dataclass(frozen=True, eq=False, slots=True)
class ZoneTables:
    """Zones, their reflections and their pairs of reflections. Lengths in 1/nm, x to the right and y upwards.

    Attributes
    ----------
    phase_of_zone : ndarray of int, shape (z,)
    zone : ndarray of int, shape (z, 3)
        [uvw]; both senses are listed where the pattern has no mirror line.
    log_prior : ndarray, shape (z,)
        Natural logarithm of the probability of the zone, given the phase.
    turns : ndarray of int, shape (z,)
        Order of the rotation that the pattern repeats itself by: 2, 4 or 6.
    has_mirror, opposite_alike : ndarray of bool, shape (z,)
        The pattern has a mirror line, so that the opposite zone shows the same; the opposite zone is then not an
        equivalent one of the crystal either, but another view.
    basis, inverse_basis : ndarray, shape (z, 2, 2)
        Rows: shortest two vectors (x, y) of the net, and its inverse.
    first : ndarray of int, shape (z + 1,)
        Where the zone's nodes begin.
    g : ndarray of complex, shape (n,)
        Nodes of the net, coarsest first within a zone, g and -g both.
    length, weight : ndarray, shape (n,)
    half_weight_up_to : ndarray, shape (n,)
        Sum of the weights of half the nodes (of g and -g one) from the zone's first node up to this one.
    hkl : ndarray of int, shape (n, 3)
    kind : ndarray of int, shape (n,)
        0 allowed, 1 reachable by double scattering, 2 extinguished by the centring, 3 absent.
    grid_first, grid_reach : ndarray of int, shape (z,), (z, 2)
        Where the zone's grid begins and how far it reaches: node of (m, n) at
        grid[grid_first + (m + reach0) (2 reach1 + 1) + n + reach1].
    grid : ndarray of int
        Node numbers, -1 where there is none.
    pair_log_ratio, pair_angle, pair_log_length, pair_log_weight : ndarray, shape (p,)
        ln(|b|/|a|), angle from a to b counter-clockwise, ln |a|, ln of the product of the weights; sorted by ratio.
    pair_zone, pair_a, pair_b : ndarray of int, shape (p,)
    cell_uncertainty : ndarray, shape (phases,)
    """

    phase_of_zone: NDArray[np.int32]
    zone: NDArray[np.int32]
    log_prior: NDArray[np.float64]
    turns: NDArray[np.int32]
    has_mirror: NDArray[np.bool_]
    opposite_alike: NDArray[np.bool_]
    basis: NDArray[np.float64]
    inverse_basis: NDArray[np.float64]
    first: NDArray[np.int32]
    g: NDArray[np.complex128]
    length: NDArray[np.float64]
    weight: NDArray[np.float64]
    half_weight_up_to: NDArray[np.float64]
    hkl: NDArray[np.int32]
    kind: NDArray[np.int8]
    grid_first: NDArray[np.int32]
    grid_reach: NDArray[np.int32]
    grid: NDArray[np.int32]
    pair_log_ratio: NDArray[np.float32]
    pair_angle: NDArray[np.float32]
    pair_log_length: NDArray[np.float32]
    pair_log_weight: NDArray[np.float32]
    pair_zone: NDArray[np.int32]
    pair_a: NDArray[np.int32]
    pair_b: NDArray[np.int32]
    cell_uncertainty: NDArray[np.float64]


def cache_folder() -> Path:
    """Return the folder that tables are kept in; FRINGESPAN_CACHE overrides the platform's place for caches."""
    chosen = os.environ.get(CACHE_FOLDER_VARIABLE)
    if chosen:
        return Path(chosen).expanduser()
    import platformdirs

    return Path(platformdirs.user_cache_dir("fringespan", appauthor=False))


_IN_MEMORY: dict[tuple[int, ...], tuple[tuple[Phase, ...], ZoneTables]] = {}
_MOST_IN_MEMORY = 24


def zone_tables(phases: Sequence[Phase]) -> ZoneTables:
    """Return the tables of a set of phases: from memory, from disk, or built now.

    The tables on disk are named by the content of the phases, so that a changed structure never meets an old table,
    and written beside their place and renamed, so that any number of programs may do so at once.
    """
    # the identity of immutable values: comparing 68 structures by content would cost more than the ranking itself
    key = tuple(map(id, phases))
    held = _IN_MEMORY.get(key)
    if held is not None:
        _IN_MEMORY[key] = _IN_MEMORY.pop(key)  # used last, dropped last
        return held[1]
    path = cache_folder() / f"zones-{_content_name(phases)}.npz"
    tables = _read(path)
    if tables is None:
        tables = build_zone_tables(phases)
        _write(path, tables)
    while len(_IN_MEMORY) >= _MOST_IN_MEMORY:
        _IN_MEMORY.pop(next(iter(_IN_MEMORY)), None)
    _IN_MEMORY[key] = (tuple(phases), tables)
    return tables


def _content_name(phases: Sequence[Phase]) -> str:
    settings = (
        _FORMAT,
        TABLE_D_MIN_NM,
        PAIR_D_MIN_NM,
        LARGEST_ZONE_INDEX,
        MOST_ZONES,
        WEIGHT_EXPONENT,
        WEIGHT_FLOOR,
        WEIGHT_REACHABLE,
        WEIGHT_CENTRING,
        _MOST_PAIR_RATIO,
        _LEAST_PAIR_INTENSITY,
    )
    text = repr(settings) + "".join(phase.fingerprint for phase in phases)
    return hashlib.sha256(text.encode()).hexdigest()[:32]


def _read(path: Path) -> ZoneTables | None:
    try:
        with path.open("rb") as file, np.load(file, allow_pickle=False) as stored:
            return ZoneTables(**{field.name: stored[field.name] for field in fields(ZoneTables)})
    except (OSError, KeyError, ValueError, EOFError, zipfile.BadZipFile):
        return None  # missing or damaged: it is built anew


def _write(path: Path, tables: ZoneTables) -> None:
    from fringespan.output_file import write_whole_file

    content = io.BytesIO()
    np.savez(content, **{field.name: getattr(tables, field.name) for field in fields(ZoneTables)})
    # a cache that cannot be written costs time, not results
    with suppress(OSError, FringespanError):
        path.parent.mkdir(parents=True, exist_ok=True)
        write_whole_file(path, content.getvalue())


def build_zone_tables(phases: Sequence[Phase]) -> ZoneTables:
    """Build the tables of a set of phases."""
    parts = [zone for index, phase in enumerate(phases) for zone in _zones_of(index, phase)]
    if not parts:
        raise PhaseError("none of the phases has a zone with two directions of reflections; choose others")
    nets = [zone.net for zone in parts]
    node_first = np.concatenate([[0], np.cumsum([len(net.g) for net in nets])])
    grid_first = np.concatenate([[0], np.cumsum([net.grid.size for net in nets])])[:-1]
    pair_zone = np.repeat(np.arange(len(parts)), [len(zone.pair_a) for zone in parts])
    shift = node_first[pair_zone]
    pair_a = np.concatenate([zone.pair_a for zone in parts]) + shift
    pair_b = np.concatenate([zone.pair_b for zone in parts]) + shift
    g, weight = np.concatenate([net.g for net in nets]), np.concatenate([net.weight for net in nets])
    a, b = g[pair_a], g[pair_b]
    log_ratio = np.log(np.abs(b) / np.abs(a))
    order = np.argsort(log_ratio, kind="stable")
    grids = [
        np.where(net.grid.ravel() >= 0, net.grid.ravel() + start, -1)
        for net, start in zip(nets, node_first, strict=False)
    ]
    basis = np.array([net.basis for net in nets])
    return ZoneTables(
        phase_of_zone=np.array([zone.phase for zone in parts], dtype=np.int32),
        zone=np.array([zone.zone for zone in parts], dtype=np.int32),
        log_prior=np.array([zone.log_prior for zone in parts]),
        turns=np.array([zone.turns for zone in parts], dtype=np.int32),
        has_mirror=np.array([zone.has_mirror for zone in parts]),
        opposite_alike=np.array([zone.opposite_alike for zone in parts]),
        basis=basis,
        inverse_basis=np.linalg.inv(basis),
        first=node_first.astype(np.int32),
        g=g,
        length=np.abs(g),
        weight=weight,
        half_weight_up_to=np.concatenate([net.half_weight_up_to for net in nets]),
        hkl=np.concatenate([net.hkl for net in nets]).astype(np.int32),
        kind=np.concatenate([net.kind for net in nets]),
        grid_first=grid_first.astype(np.int32),
        grid_reach=np.array([net.reach for net in nets], dtype=np.int32),
        grid=np.concatenate(grids).astype(np.int32),
        pair_log_ratio=log_ratio[order].astype(np.float32),
        pair_angle=np.mod(np.angle(b / a), 2 * np.pi)[order].astype(np.float32),
        pair_log_length=np.log(np.abs(a))[order].astype(np.float32),
        pair_log_weight=np.log(weight[pair_a] * weight[pair_b])[order].astype(np.float32),
        pair_zone=pair_zone[order].astype(np.int32),
        pair_a=pair_a[order].astype(np.int32),
        pair_b=pair_b[order].astype(np.int32),
        cell_uncertainty=np.array([phase.cell_relative_uncertainty for phase in phases]),
    )


@dataclass(frozen=True, eq=False, slots=True)
class _Net:
    basis: NDArray[np.float64]
    g: NDArray[np.complex128]
    weight: NDArray[np.float64]
    half_weight_up_to: NDArray[np.float64]
    hkl: NDArray[np.int64]
    kind: NDArray[np.int8]
    intensity: NDArray[np.float64]
    reach: tuple[int, int]
    grid: NDArray[np.int64]


@dataclass(frozen=True, eq=False, slots=True)
class _Zone:
    phase: int
    zone: tuple[int, int, int]
    log_prior: float
    turns: int
    has_mirror: bool
    opposite_alike: bool
    net: _Net
    pair_a: NDArray[np.int64]
    pair_b: NDArray[np.int64]


def _zones_of(index: int, phase: Phase) -> Iterator[_Zone]:
    every = reflection_arrays(phase, TABLE_D_MIN_NM)
    found = []
    for zone, length in _unique_zones(phase):
        part = _net(phase, every, zone)
        if part is not None:
            found.append((zone, length, part))
        if len(found) == MOST_ZONES:
            break
    total = sum(length**-2 for _, length, _ in found)
    for zone, length, net in found:
        prior = length**-2 / total
        turns, has_mirror, opposite_alike = _pattern_symmetry(phase, zone)
        flipped = replace(net, basis=net.basis * [1, -1], g=net.g.conj())
        opposite = (-zone[0], -zone[1], -zone[2])
        senses = [(zone, net)] if has_mirror else [(zone, net), (opposite, flipped)]
        for sense, seen in senses:
            log_prior = math.log(prior / len(senses))
            yield _Zone(index, sense, log_prior, turns, has_mirror, opposite_alike, seen, *_pairs(seen, turns))


def _unique_zones(phase: Phase) -> list[tuple[tuple[int, int, int], float]]:
    """Return the zones that symmetry leaves different, with the shortest lattice vector along each, shortest first."""
    n = LARGEST_ZONE_INDEX
    grid = np.stack(np.meshgrid(*[np.arange(-n, n + 1)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    grid = grid[np.gcd.reduce(grid, axis=1) == 1]
    images = np.einsum("mij,nj->nmi", phase.symmetry.laue_rotations, grid)
    code = ((images + 64) * [16384, 128, 1]).sum(axis=2)
    # of each orbit the member that one would write: small indices, few minus signs, the largest index first
    effort = np.abs(images).sum(axis=2) + (images < 0).sum(axis=2)
    tidy = code - 10_000_000 * (4 * effort + (images < 0).sum(axis=2))
    best = tidy.argmax(axis=1)
    _, chosen = np.unique(code[np.arange(len(grid)), best], return_index=True)
    zones = images[chosen, best[chosen]]
    length = np.sqrt(np.einsum("ni,ij,nj->n", zones, phase.direct_metric, zones))
    for divisor in (2, 3):
        part = zones[:, None, :] / divisor - phase.symmetry.centring
        on_lattice = np.any(np.all(np.abs(part - np.round(part)) < 1e-6, axis=2), axis=1)
        length = np.where(on_lattice, length / divisor, length)
    order = np.lexsort((-zones[:, 2], -zones[:, 1], -zones[:, 0], np.round(length, 6)))
    return [((int(u), int(v), int(w)), float(length[i])) for i in order for u, v, w in [zones[i]]]


def _pattern_symmetry(phase: Phase, zone: tuple[int, int, int]) -> tuple[int, bool, bool]:
    laue = phase.symmetry.laue_rotations
    axis = np.array(zone)
    keeps = np.all(laue @ axis == axis, axis=1)
    proper = np.round(np.linalg.det(laue)) == 1
    order = int(np.count_nonzero(keeps & proper))
    has_mirror = bool(np.any(keeps & ~proper))
    reversed_by_own = bool(np.any(np.all(phase.symmetry.rotations @ axis == -axis, axis=1)))
    return int(np.lcm(order, 2)), has_mirror, has_mirror and not reversed_by_own


def _net(phase: Phase, every: ReflectionArrays, zone: tuple[int, int, int]) -> _Net | None:
    chosen = np.flatnonzero(every.hkl @ np.array(zone) == 0)
    if len(chosen) < 4:
        return None
    g3 = every.g_per_angstrom[chosen] * 10
    axis = np.array(zone) @ phase.direct_basis
    axis = axis / np.linalg.norm(axis)
    x = g3[0] / np.linalg.norm(g3[0])
    g = g3 @ x + 1j * (g3 @ np.cross(axis, x))
    off_row = np.abs((g * np.conj(g[0])).imag) > 1e-6 * np.abs(g) * np.abs(g[0])
    if not off_row.any() or not (~every.is_absent[chosen]).any():
        return None
    b1, b2 = g[0], g[np.argmax(off_row)]
    basis = np.array([[b1.real, b1.imag], [b2.real, b2.imag]])
    coordinates = np.round(np.stack([g.real, g.imag], axis=1) @ np.linalg.inv(basis)).astype(np.int64)
    reach = np.abs(coordinates).max(axis=0)
    grid = np.full(2 * reach + 1, -1, dtype=np.int64)
    places = tuple((coordinates + reach).T)
    grid[places] = np.arange(len(chosen))
    absent, centring = every.is_absent[chosen], every.is_centring_absent[chosen]
    intensity = every.relative_intensity[chosen]
    reachable = absent & ~centring
    if reachable.any():
        partners = ~absent & (np.abs(g) * PARTNER_D_MIN_NM <= 1 + 1e-9)
        reachable &= _sums_of_two(partners, coordinates, reach)[places]
    kind = np.where(centring, 2, np.where(reachable, 1, np.where(absent, 3, 0))).astype(np.int8)
    weight = intensity**WEIGHT_EXPONENT + WEIGHT_FLOOR
    weight[kind == 1] = WEIGHT_REACHABLE
    weight[kind == 2] = WEIGHT_CENTRING
    return _Net(
        basis,
        g,
        weight,
        np.cumsum(weight) / 2,
        every.hkl[chosen],
        kind,
        intensity,
        (int(reach[0]), int(reach[1])),
        grid,
    )


def _sums_of_two(
    partners: NDArray[np.bool_], coordinates: NDArray[np.int64], reach: NDArray[np.int64]
) -> NDArray[np.bool_]:
    shape = tuple(int(s) for s in 4 * reach + 1)
    present = np.zeros(shape)
    present[tuple((coordinates[partners] + reach).T)] = 1.0
    number = np.fft.irfft2(np.fft.rfft2(present) ** 2, s=shape)
    # sums of places counted from -reach lie at -2 reach; the pattern's own part of them starts reach further
    return np.asarray(number[reach[0] : 3 * reach[0] + 1, reach[1] : 3 * reach[1] + 1] > 0.5)


def _pairs(net: _Net, turns: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    length = np.abs(net.g)
    usable = (length * PAIR_D_MIN_NM <= 1 + 1e-9) & (
        ((net.kind == 0) & (net.intensity >= _LEAST_PAIR_INTENSITY)) | (net.kind == 1)
    )
    b = np.flatnonzero(usable)
    # a little below 0, as rounding may turn the angle 0 into 2 pi and lose the reflection
    in_sector = np.mod(np.angle(net.g[b]) + 1e-6, 2 * np.pi) < 2 * np.pi / turns
    a = b[in_sector]
    angle = np.mod(np.angle(net.g[b][None, :] / net.g[a][:, None]), 2 * np.pi)
    ratio = length[b][None, :] / length[a][:, None]
    good = (angle > _PAIR_ANGLE) & (angle < np.pi - _PAIR_ANGLE) & (ratio > 1 - 1e-9) & (ratio < _MOST_PAIR_RATIO)
    first, second = np.nonzero(good)
    return a[first], b[second]
