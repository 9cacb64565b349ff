"""Which reflection of the reference each set of fringes is, with the magnification off by up to a tenth.

Several reflections of one crystal are compared as a pattern, by the search that ranks phases; single spacings of many
grains by the ladder of spacings that the phase has.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import cast

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import expected_reflections
from fringespan.exceptions import CalibrationError
from fringespan.magnification.reference import ReferenceSpacing
from fringespan.measurement import Measurement
from fringespan.ranking.comparison import Comparison, compare
from fringespan.ranking.hypotheses import RankingSettings
from fringespan.ranking.observation import Observation, observation_of

__all__ = ["Assigned", "Grain", "ObservedPeak", "assign_indices", "observed_peaks"]

LARGEST_ERROR = 0.1
"""How far the magnification may be off."""

_SCALE_SIGMA = 0.06
_DISTORTION = 0.007
"""Rows and columns may differ by twice this (k = 1), and a shear be as large: 5 % is still found, but seldom happens. A wider
prior lets distorted patterns of other zones in, and more checks end undecided."""

_KNOWN_SCALE_SIGMA = 0.006
_SAME_SCALE = 0.01
_DECISIVE = 0.95
_LEAST_SHARE = 0.6
"""Of a region's strong peaks, for them to count as one crystal's."""

_NEAR = 0.02
"""A peak within 2 % of a reflection is shown with it, even where it lies too far off to be used."""

_LADDER_D_MIN_NM = 0.1
_LADDER_EXPONENT = 0.4
_FALSE_SHARE = 0.05
_ALLOWED = 0


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class ObservedPeak:
    """One set of fringes, in 1/nm by the nominal pixel size.

    Attributes
    ----------
    g_per_nm : ndarray, shape (2,)
        (row, column).
    fit_covariance, crystal_covariance : ndarray, shape (2, 2)
    withheld : str or None
    signal_to_noise : float
    """

    g_per_nm: NDArray[np.float64]
    fit_covariance: NDArray[np.float64]
    crystal_covariance: NDArray[np.float64]
    withheld: str | None
    signal_to_noise: float


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Assigned:
    """A peak with its reflection.

    Attributes
    ----------
    peak : int
        Position in the measurement.
    hkl : (int, int, int) or None
        None for a reference of one spacing.
    vector_per_nm : ndarray, shape (2,)
        The reflection of the reference, (row, column), in the grain's own orientation.
    """

    peak: int
    hkl: tuple[int, int, int] | None
    vector_per_nm: NDArray[np.float64]


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Grain:
    """One crystal of the reference: peaks that turn together.

    Attributes
    ----------
    region : int
        Position among the measurements.
    zone : (int, int, int) or None
        None where only lengths are compared.
    peaks : tuple of Assigned
    unassigned : dict of int to str
        Peaks that take no part, with the reason.
    scale : float
        First estimate of true / nominal pixel size.
    rotation_rad : float
        First estimate of the turn from `vector_per_nm` to the picture, counter-clockwise.
    """

    region: int
    zone: tuple[int, int, int] | None
    peaks: tuple[Assigned, ...]
    unassigned: dict[int, str]
    scale: float
    rotation_rad: float


def observed_peaks(measurement: Measurement) -> tuple[ObservedPeak, ...]:
    """Return the peaks of a measurement with the parts of their covariance apart.

    Raises
    ------
    CalibrationError
        If the picture has no pixel size.
    """
    observation = _observation(measurement)
    peaks = []
    for peak, reflection in zip(measurement.peaks, observation.reflections, strict=True):
        fit = np.asarray(peak.g_covariance_per_nm2, dtype=np.float64)
        peaks.append(
            ObservedPeak(
                g_per_nm=np.asarray(peak.g_per_nm, dtype=np.float64),
                fit_covariance=fit,
                crystal_covariance=_not_negative(np.asarray(reflection.covariance_per_nm2) - fit),
                withheld=peak.withheld,
                signal_to_noise=float(peak.signal_to_noise),
            )
        )
    return tuple(peaks)


def _not_negative(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return a covariance without the negative variances that rounding leaves of a difference."""
    values, vectors = np.linalg.eigh((matrix + matrix.T) / 2)
    return np.asarray((vectors * np.maximum(values, 0.0)) @ vectors.T, dtype=np.float64)


def _observation(measurement: Measurement) -> Observation:
    if measurement.micrograph.pixel_size_nm is None:
        raise CalibrationError(
            f"{measurement.micrograph.name}: a magnification check compares the nominal pixel size with the true one, and "
            "the picture has none; give the nominal one (--pixel-size NM)"
        )
    observation = observation_of(measurement)
    # on the reference, a sum or harmonic is where a reflection is, and its place is measured as well as any
    reflections = tuple(
        replace(r, role="reflection") if r.role == "combination" else r for r in observation.reflections
    )
    return replace(observation, reflections=reflections, pixel_size_relative_uncertainty=_SCALE_SIGMA)


def assign_indices(
    measurements: Sequence[Measurement], reference: Phase | ReferenceSpacing, expanded: Phase | ReferenceSpacing
) -> tuple[Grain, ...]:
    """Find the reflection of the reference that each peak is.

    Parameters
    ----------
    measurements : sequence of Measurement
    reference : Phase or ReferenceSpacing
        As published: what the search compares with, so that its tables serve at every temperature.
    expanded : Phase or ReferenceSpacing
        The same at the specimen's temperature: what the vectors are taken from.

    Returns
    -------
    tuple of Grain
        At least one for each region; several where every peak stands alone.

    Raises
    ------
    CalibrationError
        If the indices cannot be told with the magnification unknown by a tenth; the text says what would decide.
    """
    if isinstance(reference, ReferenceSpacing) or isinstance(expanded, ReferenceSpacing):
        return _grains_of_spacing(measurements, cast("ReferenceSpacing", expanded))
    observations = [_observation(m) for m in measurements]
    patterns = [_pattern(o, reference, None) for o in observations]
    decisive = [p for p in patterns if p is not None and p.certainty >= _DECISIVE]
    usable = [p for p in patterns if p is not None and p.certainty > 0]
    if decisive:
        scale = _consensus(decisive)
    elif usable:
        scale = _scale_by_patterns(usable)
    else:
        scale = _scale_by_ladder(observations, expanded)
    grains: list[Grain] = []
    for number, observation in enumerate(observations):
        pattern = _pattern(observation, reference, scale)
        if pattern is None or not len(pattern.comparison.zone):
            grains += _single_grains(number, observation, expanded, scale)
        else:
            grains.append(_grain_of_pattern(number, observation, pattern, expanded))
    return tuple(grains)


# --- patterns -------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False, slots=True)
class _Pattern:
    comparison: Comparison
    scale: float
    certainty: float


def _pattern(observation: Observation, phase: Phase, scale: float | None) -> _Pattern | None:
    settings = RankingSettings(distortion=_DISTORTION)
    known = None if scale is None else (scale - 1, _KNOWN_SCALE_SIGMA)
    comparison = compare(observation, (phase,), settings, scale=known)
    if comparison is None or not len(comparison.zone):
        return None
    weight = np.exp(comparison.log_evidence - comparison.log_evidence[0])
    scales = 1 + comparison.distortion[:, 0]
    within = np.abs(scales - 1) <= LARGEST_ERROR * 1.1
    weight = np.where(within, weight, 0.0)
    if not weight.any():
        return None
    best = int(np.argmax(weight))
    alike = np.abs(scales / scales[best] - 1) < _SAME_SCALE
    certainty = float(weight[alike].sum() / weight.sum())
    number = int((comparison.node[best] >= 0).sum())
    if number < _LEAST_SHARE * len(comparison.peaks):
        return None  # several grains in one region: compared by their lengths
    # two vectors always fit some pair of reflections: three check each other
    return _Pattern(comparison, float(scales[best]), certainty if number >= 3 else 0.0)


def _consensus(patterns: Sequence[_Pattern]) -> float:
    """Return the scale that most peaks speak for."""
    scales = np.array([p.scale for p in patterns])
    votes = np.array([float((p.comparison.node[0] >= 0).sum()) * p.certainty for p in patterns])
    support = [(votes * (np.abs(scales / s - 1) < _SAME_SCALE)).sum() for s in scales]
    chosen = np.abs(scales / scales[int(np.argmax(support))] - 1) < _SAME_SCALE
    return float((scales * votes)[chosen].sum() / votes[chosen].sum())


def _scale_by_patterns(patterns: Sequence[_Pattern]) -> float:
    """Return the scale that all regions together decide for, where none alone does."""
    grid = np.linspace(1 - LARGEST_ERROR, 1 + LARGEST_ERROR, 2001)
    total = np.zeros(len(grid))
    for pattern in patterns:
        c = pattern.comparison
        sigma = np.hypot(c.scale_sigma, 0.002)
        curve = c.log_evidence[:, None] - 0.5 * ((grid - 1 - c.distortion[:, :1]) / sigma[:, None]) ** 2
        curve -= np.log(sigma)[:, None]
        total += np.logaddexp(np.logaddexp.reduce(curve, axis=0), curve.max() - 12)
    return _decided(grid, total, "patterns")


def _decided(grid: NDArray[np.float64], log_density: NDArray[np.float64], what: str) -> float:
    density = np.exp(log_density - log_density.max())
    best = float(grid[int(np.argmax(density))])
    near = np.abs(grid / best - 1) < _SAME_SCALE
    certainty = float(density[near].sum() / density.sum())
    if certainty < _DECISIVE:
        rest = np.where(near, 0.0, density)
        other = float(grid[int(np.argmax(rest))])
        raise CalibrationError(
            f"the {what} fit the reference with the pixel size {100 * (best - 1):+.1f} % off and also with it "
            f"{100 * (other - 1):+.1f} % off; measure at least three reflections in different directions, or state the "
            "spacing of the fringes instead of the phase (--reference NM)"
        )
    return best


def _grain_of_pattern(number: int, observation: Observation, pattern: _Pattern, phase: Phase) -> Grain:
    """Give each peak of a region, strong or weak, its reflection in the best zone."""
    c = pattern.comparison
    zone = int(c.zone[0])
    tables = c.tables
    nodes = slice(int(tables.first[zone]), int(tables.first[zone + 1]))
    e0, e1, e2 = c.distortion[0]
    q = observation.vectors()
    distortion = np.array([[1 + e0 + e1, e2], [e2, 1 + e0 - e1]])
    undone = np.linalg.solve(distortion, np.stack([q.real, q.imag]))
    p = (undone[0] + 1j * undone[1]) * np.conj(c.turn[0])
    g = tables.g[nodes]
    axes = _zone_axes(phase, tables.zone[zone], tables.hkl[nodes][0])
    given: dict[int, int] = {}
    reasons: dict[int, str] = {}
    distance = np.abs(p[:, None] - g[None])
    order = np.argsort([-r.signal_to_noise for r in observation.reflections], kind="stable")
    for i in (int(k) for k in order):
        nearest = int(np.argmin(distance[i]))
        hkl = _hkl(tables.hkl[nodes][nearest])
        if observation.reflections[i].role == "uncertain":
            reasons[i] = "its spacing is withheld in the measurement"
        elif distance[i, nearest] > _NEAR * abs(g[nearest]):
            reasons[i] = "on no reflection of the reference"
        elif tables.kind[nodes][nearest] != _ALLOWED:
            reasons[i] = f"{_indices(hkl)} has no intensity of its own in the reference"
        elif any(abs(g[nearest] - g[k]) < 1e-9 or abs(g[nearest] + g[k]) < 1e-9 for k in given.values()):
            reasons[i] = f"a stronger peak is {_indices(hkl)} already"
        else:
            given[i] = nearest
    peaks = tuple(
        Assigned(
            peak=i,
            hkl=_hkl(tables.hkl[nodes][k]),
            vector_per_nm=_in_plane(tables.hkl[nodes][k], phase, axes),
        )
        for i, k in sorted(given.items())
    )
    u, v, w = (int(n) for n in tables.zone[zone])
    return Grain(
        region=number,
        zone=(u, v, w),
        peaks=peaks,
        unassigned=reasons,
        scale=pattern.scale,
        rotation_rad=float(np.angle(c.turn[0])),
    )


def _zone_axes(
    phase: Phase, zone: NDArray[np.int32], first_hkl: NDArray[np.int32]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return unit vectors right and up, seen against the zone axis, the coarsest reflection to the right."""
    axis = zone @ phase.direct_basis
    axis = axis / np.linalg.norm(axis)
    x = first_hkl @ phase.reciprocal_basis
    x = x / np.linalg.norm(x)
    return x, np.cross(axis, x)


def _in_plane(
    hkl: NDArray[np.int32], phase: Phase, axes: tuple[NDArray[np.float64], NDArray[np.float64]]
) -> NDArray[np.float64]:
    g = hkl @ phase.reciprocal_basis * 10
    return np.array([-(g @ axes[1]), g @ axes[0]])


def _hkl(row: NDArray[np.int32]) -> tuple[int, int, int]:
    h, k, m = (int(v) for v in row)
    return h, k, m


def _indices(hkl: tuple[int, int, int]) -> str:
    return "({} {} {})".format(*hkl)


# --- single spacings ------------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False, slots=True)
class _Ladder:
    """The spacings of a phase, coarsest first."""

    hkl: tuple[tuple[int, int, int], ...]
    length_per_nm: NDArray[np.float64]
    weight: NDArray[np.float64]


def _ladder(phase: Phase) -> _Ladder:
    families = [r for r in expected_reflections(phase, _LADDER_D_MIN_NM) if not r.forbidden]
    if not families:
        raise CalibrationError(
            f"{phase.name} has no reflection down to {_LADDER_D_MIN_NM} nm; choose another reference"
        )
    strength = np.array([(r.relative_intensity or 0.0) if r.relative_intensity is not None else 1.0 for r in families])
    weight = strength**_LADDER_EXPONENT * np.array([r.multiplicity for r in families])
    return _Ladder(tuple(r.hkl for r in families), np.array([1 / r.d_nm for r in families]), weight / weight.sum())


def _scale_by_ladder(observations: Sequence[Observation], phase: Phase) -> float:
    """Return the scale that brings all lengths onto spacings of the phase, whatever the grains' orientation."""
    ladder = _ladder(phase)
    lengths = [
        (abs(v), r)
        for o in observations
        for v, r in zip(o.vectors(), o.reflections, strict=True)
        if r.role == "reflection"
    ]
    if not lengths:
        raise CalibrationError(
            "no fringe that can be used was found in the regions; draw them on the reference material, inside a grain"
        )
    grid = np.linspace(1 - LARGEST_ERROR, 1 + LARGEST_ERROR, 4001)
    total = -0.5 * ((grid - 1) / _SCALE_SIGMA) ** 2
    for length, reflection in lengths:
        own = math.sqrt(np.trace(np.asarray(reflection.covariance_per_nm2))) / length
        sigma = math.hypot(own, 0.004)
        offset = np.log(length / (grid[:, None] * ladder.length_per_nm[None])) / sigma
        density = (ladder.weight * np.exp(-0.5 * offset**2)).sum(axis=1) / sigma
        total += np.log((1 - _FALSE_SHARE) * density + _FALSE_SHARE)
    return _decided(grid, total, "spacings" if len(lengths) > 1 else "one spacing")


def _single_grains(number: int, observation: Observation, phase: Phase, scale: float) -> list[Grain]:
    """Treat each peak of a region as a grain of its own, compared by its length alone."""
    ladder = _ladder(phase)
    grains: list[Grain] = []
    reasons: dict[int, str] = {}
    for i, (q, reflection) in enumerate(zip(observation.vectors(), observation.reflections, strict=True)):
        off = np.abs(abs(q) / (scale * ladder.length_per_nm) - 1)
        near = np.flatnonzero(off < _NEAR)
        if reflection.role == "uncertain":
            reasons[i] = "its spacing is withheld in the measurement"
        elif not len(near):
            reasons[i] = "on no reflection of the reference"
        else:
            k = int(near[np.argmin(off[near])])
            rivals = [j for j in near if j != k and off[j] < 2 * off[k] + 0.004]
            if any(abs(ladder.length_per_nm[j] / ladder.length_per_nm[k] - 1) > 1e-6 for j in rivals):
                reasons[i] = "its spacing fits more than one reflection"
                continue
            grains.append(_lone(number, i, ladder.hkl[k], float(ladder.length_per_nm[k]), q, scale))
    if reasons:
        grains.append(Grain(region=number, zone=None, peaks=(), unassigned=reasons, scale=scale, rotation_rad=0.0))
    return grains


def _lone(number: int, peak: int, hkl: tuple[int, int, int] | None, length: float, q: complex, scale: float) -> Grain:
    assigned = Assigned(peak=peak, hkl=hkl, vector_per_nm=np.array([0.0, length]))
    return Grain(
        region=number, zone=None, peaks=(assigned,), unassigned={}, scale=scale, rotation_rad=float(np.angle(q))
    )


def _grains_of_spacing(measurements: Sequence[Measurement], reference: ReferenceSpacing) -> tuple[Grain, ...]:
    """Take the peaks near the stated spacing, each as a grain of its own."""
    observations = [_observation(m) for m in measurements]
    ratios: list[tuple[float, float]] = []
    for observation in observations:
        for q, reflection in zip(observation.vectors(), observation.reflections, strict=True):
            ratio = abs(q) * reference.d_nm
            if reflection.role == "reflection" and abs(ratio - 1) <= LARGEST_ERROR:
                ratios.append((ratio, reflection.signal_to_noise))
    if not ratios:
        seen = sorted({f"{1 / abs(q):.4f}" for o in observations for q in o.vectors()}, reverse=True)[:6]
        raise CalibrationError(
            f"no fringes within {100 * LARGEST_ERROR:g} % of the reference spacing {reference.d_nm:g} nm were found (found, "
            f"by the nominal pixel size: {', '.join(seen) or 'none'}); check the spacing and the nominal pixel size"
        )
    # of several sets near it, those that agree with the strongest within what rows and columns may differ by
    scale = max(ratios, key=lambda pair: pair[1])[0]
    grains: list[Grain] = []
    for number, observation in enumerate(observations):
        reasons: dict[int, str] = {}
        for i, (q, reflection) in enumerate(zip(observation.vectors(), observation.reflections, strict=True)):
            if reflection.role == "uncertain":
                reasons[i] = "its spacing is withheld in the measurement"
            elif abs(abs(q) * reference.d_nm / scale - 1) > 2 * _NEAR:
                reasons[i] = "not the reference spacing"
            else:
                grains.append(_lone(number, i, None, 1 / reference.d_nm, q, scale))
        if reasons:
            grains.append(Grain(region=number, zone=None, peaks=(), unassigned=reasons, scale=scale, rotation_rad=0.0))
    return tuple(grains)
