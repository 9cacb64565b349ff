"""One region against all zones of a set of phases: the arrays between the peaks and the hypotheses."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.library import built_in_phases
from fringespan.crystal.phase import Phase
from fringespan.ranking.hypotheses import RankingSettings
from fringespan.ranking.observation import Observation
from fringespan.ranking.score import evaluate, merge_orientations, weight_totals
from fringespan.ranking.search import find_candidates, seed_pairs
from fringespan.ranking.unlisted import unlisted_evidence
from fringespan.ranking.zone_tables import TABLE_D_MIN_NM, ZoneTables, zone_tables

__all__ = ["Comparison", "compare", "evidence_peaks"]

SHARPNESS = 0.8
"""Power that the probabilities of picking reflections are raised to: below 1, as intensities in pictures are no better
known than that. Set by hand, so that the probabilities given come true in simulated trials."""

_DECAY = 1.5
_DENSITY_FLOOR = 0.01
_MOST_SEEDS = 10
_LEAST_QUOTA = 40
_ALL_QUOTA = 300
_MARGIN = 14.0
"""Hypotheses less probable than the best by more than this (natural logarithm) are dropped."""

MOST_EVIDENCE = 12
LEAST_STRENGTH = 0.06
"""Evidence are the 12 strongest peaks, as far as they reach 6 % of the strongest: beyond, side lobes and noise of a
picture outnumber reflections. The others are given indices, but don't count."""

_FALSE_GROWTH = 0.6
_MOST_FALSE = 0.35
_EVEN_SHARES = (0.15, 0.5)
_EVEN_STRENGTHS = (0.5, 0.1)
"""Of peaks half as strong as the strongest 15 % were picked regardless of intensity (beyond what the weights say), of
those a tenth as strong one half."""

_POPULATION = 30
"""With fewer phases in the list, the built-in ones stand for what crystals may look like."""

_BAND_EDGE = 1.02


@dataclass(frozen=True, eq=False, slots=True)
class Comparison:
    """Hypotheses for the peaks of one region, best first, as arrays.

    Attributes
    ----------
    phases : tuple of Phase
    tables : ZoneTables
    peaks : ndarray of int, shape (n,)
        The observation's reflections that were compared, strongest first.
    q, covariance, is_independent, strength : ndarray, shape (n,), (n, 3), (n,), (n,)
        Strength relative to the strongest.
    zone : ndarray of int, shape (h,)
    log_evidence, chi_squared : ndarray, shape (h,)
        Prior included.
    turn : ndarray of complex, shape (h,)
    distortion : ndarray, shape (h, 3)
        e0, e1, e2 of `score`.
    scale_sigma : ndarray, shape (h,)
    node : ndarray of int, shape (h, n)
    unlisted_log_evidence : float
    prior_scale_sigma : ndarray, shape (phases,)
        Of the scale, by pixel size and cell.
    picture_scale_sigma : float
        By pixel size alone.
    longest_per_nm : float
        Radius of the spectrum that was looked at.
    """

    phases: tuple[Phase, ...]
    tables: ZoneTables
    peaks: NDArray[np.int64]
    q: NDArray[np.complex128]
    covariance: NDArray[np.float64]
    is_independent: NDArray[np.bool_]
    strength: NDArray[np.float64]
    zone: NDArray[np.int64]
    log_evidence: NDArray[np.float64]
    chi_squared: NDArray[np.float64]
    turn: NDArray[np.complex128]
    distortion: NDArray[np.float64]
    scale_sigma: NDArray[np.float64]
    node: NDArray[np.int64]
    unlisted_log_evidence: float
    prior_scale_sigma: NDArray[np.float64]
    picture_scale_sigma: float
    longest_per_nm: float

    @property
    def phase(self) -> NDArray[np.int64]:
        """Position of each hypothesis' phase, shape (h,)."""
        return self.tables.phase_of_zone[self.zone].astype(np.int64)

    def with_evidence(self, log_evidence: NDArray[np.float64], unlisted: float) -> Comparison:
        """Return the same hypotheses with other evidence, sorted anew."""
        order = np.argsort(-log_evidence, kind="stable")
        return replace(
            self,
            zone=self.zone[order],
            log_evidence=log_evidence[order],
            chi_squared=self.chi_squared[order],
            turn=self.turn[order],
            distortion=self.distortion[order],
            scale_sigma=self.scale_sigma[order],
            node=self.node[order],
            unlisted_log_evidence=unlisted,
        )


def evidence_peaks(observation: Observation) -> NDArray[np.int64]:
    """Return the positions of the reflections that are evidence in a comparison, strongest first."""
    strength = np.array([r.signal_to_noise for r in observation.reflections])
    is_trusted = np.array([r.role != "uncertain" for r in observation.reflections], dtype=bool)
    is_trusted &= np.abs(observation.vectors()) * TABLE_D_MIN_NM <= 1.0
    order = np.argsort(-strength, kind="stable")
    order = order[is_trusted[order]]
    if not len(order):
        return np.zeros(0, dtype=np.int64)
    is_strong = strength[order] >= LEAST_STRENGTH * strength[order[0]]
    return np.asarray(order[is_strong][:MOST_EVIDENCE], dtype=np.int64)


def _shares(
    strength: NDArray[np.float64], settings: RankingSettings
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return for strengths relative to the strongest how likely a peak is false, and picked regardless of intensity."""
    weakness = np.log(np.maximum(strength, 1e-3))
    false_share = np.minimum(settings.false_share * np.exp(-_FALSE_GROWTH * np.minimum(weakness, 0.0)), _MOST_FALSE)
    false_share = np.maximum(false_share, min(settings.false_share, 0.99))
    strong, weak = np.log(_EVEN_STRENGTHS)
    low, high = _EVEN_SHARES
    even_share = low + (high - low) * np.clip((weakness - strong) / (weak - strong), 0.0, 1.0)
    return false_share, even_share


def compare(
    observation: Observation,
    phases: Sequence[Phase],
    settings: RankingSettings,
    *,
    only: NDArray[np.int64] | None = None,
    scale: tuple[float, float] | None = None,
) -> Comparison | None:
    """Compare the reflections of a region with every zone of the phases.

    Parameters
    ----------
    only : ndarray of int, optional
        Positions of the reflections to compare; default: all that the tables reach.
    scale : (float, float), optional
        e0 and its standard deviation as known from elsewhere; default: 0 and what is stated of the pixel size.

    Returns
    -------
    Comparison or None
        None if no two independent reflections span a plane.
    """
    phases = tuple(phases)
    tables = zone_tables(phases)
    peaks = evidence_peaks(observation) if only is None else only
    q, covariance = observation.vectors()[peaks], observation.covariances()[peaks]
    if len(peaks) < 2:
        return None
    is_independent = np.array([observation.reflections[i].role == "reflection" for i in peaks], dtype=bool)
    strength = np.array([observation.reflections[i].signal_to_noise for i in peaks])
    strength = strength / strength.max() if strength.max() > 0 else np.ones(len(peaks))
    false_share, even_share = _shares(strength, settings)
    offset, prior_covariance, stated = _scale_prior(observation, settings, scale)
    if offset:
        q, covariance = q / (1 + offset), covariance / (1 + offset) ** 2
    relative_variance = (covariance[:, 0] + covariance[:, 2]) / 2 / np.maximum(np.abs(q) ** 2, 1e-12)
    own = np.flatnonzero(is_independent)
    seeds = own[seed_pairs(q[own], np.sqrt(relative_variance[own]), _MOST_SEEDS)]
    if not len(seeds):
        return None
    longest = float(np.abs(q).max()) * _BAND_EDGE
    if observation.band_limit_per_nm is not None:
        longest = min(max(longest, observation.band_limit_per_nm), 1 / TABLE_D_MIN_NM)
    area = math.pi * longest**2 / 2
    sigma = np.hypot(stated, tables.cell_uncertainty)
    log_zone = tables.log_prior + np.log(tables.turns) + math.log((1 - settings.unlisted_probability) / len(phases))
    totals = weight_totals(tables.first, tables.length, tables.half_weight_up_to, longest)
    shape_sigma = 2 * math.sqrt(max(prior_covariance[1, 1], prior_covariance[2, 2]))
    candidates, density = _candidates(
        tables,
        seeds,
        q,
        relative_variance,
        shape_sigma,
        sigma,
        settings,
        log_zone - 2 * np.log(totals),
        max(_LEAST_QUOTA, _ALL_QUOTA // len(seeds)),
    )
    density /= 1 - settings.unlisted_probability
    if len(phases) < _POPULATION:
        density = np.maximum(density, _population_density(seeds, q, relative_variance, shape_sigma, settings, longest))
    prior, log_prior_det = _prior_of_phases(prior_covariance, tables.cell_uncertainty)
    log_evidence, chi_squared, turn, fitted, scale_sigma, node = evaluate(
        candidates,
        q,
        covariance,
        is_independent,
        prior,
        log_prior_det,
        area,
        longest,
        false_share,
        even_share,
        SHARPNESS,
        log_zone,
        tables.phase_of_zone,
        tables.first,
        tables.g,
        tables.length,
        tables.weight,
        tables.half_weight_up_to,
        tables.inverse_basis,
        tables.grid,
        tables.grid_first,
        tables.grid_reach,
        tables.pair_zone,
        tables.pair_a,
        tables.pair_b,
    )
    kept = merge_orientations(candidates, log_evidence, turn, tables.pair_zone, tables.turns, _MARGIN)
    kept = kept[np.isfinite(log_evidence[kept])]
    unlisted = unlisted_evidence(
        seeds, density + _DENSITY_FLOOR, q, covariance, is_independent, area, false_share, even_share, SHARPNESS, _DECAY
    )
    fitted = fitted[kept]
    fitted[:, 0] += offset
    return Comparison(
        phases=phases,
        tables=tables,
        peaks=peaks,
        q=observation.vectors()[peaks],
        covariance=observation.covariances()[peaks],
        is_independent=is_independent,
        strength=strength,
        zone=tables.pair_zone[candidates[kept, 0]].astype(np.int64),
        log_evidence=log_evidence[kept],
        chi_squared=chi_squared[kept],
        turn=turn[kept],
        distortion=fitted[:, :3],
        scale_sigma=scale_sigma[kept],
        node=node[kept],
        unlisted_log_evidence=float(unlisted.max()) + math.log(settings.unlisted_probability),
        prior_scale_sigma=sigma,
        picture_scale_sigma=float(stated),
        longest_per_nm=longest,
    )


def _candidates(
    tables: ZoneTables,
    seeds: NDArray[np.int64],
    q: NDArray[np.complex128],
    relative_variance: NDArray[np.float64],
    shape_sigma: float,
    scale_sigma: NDArray[np.float64],
    settings: RankingSettings,
    log_zone: NDArray[np.float64],
    quota: int,
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    candidates, density = find_candidates(
        seeds,
        q,
        relative_variance,
        shape_sigma,
        scale_sigma,
        settings.unlisted_spread,
        log_zone,
        tables.phase_of_zone,
        tables.pair_log_ratio,
        tables.pair_angle,
        tables.pair_log_length,
        tables.pair_log_weight,
        tables.pair_zone,
        quota,
    )
    return candidates, density


def _population_density(
    seeds: NDArray[np.int64],
    q: NDArray[np.complex128],
    relative_variance: NDArray[np.float64],
    shape_sigma: float,
    settings: RankingSettings,
    longest: float,
) -> NDArray[np.float64]:
    population = built_in_phases()
    tables = zone_tables(population)
    totals = weight_totals(tables.first, tables.length, tables.half_weight_up_to, longest)
    log_zone = tables.log_prior + np.log(tables.turns) - math.log(len(population)) - 2 * np.log(totals)
    nowhere = np.full(len(population), 1e-9)
    return _candidates(tables, seeds, q, relative_variance, shape_sigma, nowhere, settings, log_zone, 1)[1]


def _scale_prior(
    observation: Observation, settings: RankingSettings, scale: tuple[float, float] | None
) -> tuple[float, NDArray[np.float64], float]:
    """Return e0's offset, the covariance of (e0, e1, e2) without the cell's part, and the deviation of e0."""
    stated = observation.pixel_size_relative_uncertainty
    if stated is None:
        stated = settings.scale_when_unstated
    covariance = np.diag([0.0, settings.distortion**2, settings.distortion**2])
    if isinstance(stated, tuple):
        row, column = stated
        # independent errors of rows and columns are a common scale and a stretch, which are then correlated
        covariance[0, 0] += (row**2 + column**2) / 4
        covariance[1, 1] += (row**2 + column**2) / 4
        covariance[0, 1] = covariance[1, 0] = (column**2 - row**2) / 4
    else:
        covariance[0, 0] = float(stated) ** 2
    offset = 0.0
    if scale is not None:
        offset, sigma = scale
        covariance[0, :] = covariance[:, 0] = 0.0
        covariance[0, 0] = sigma**2
    return offset, covariance, math.sqrt(covariance[0, 0])


def _prior_of_phases(
    covariance: NDArray[np.float64], cell_uncertainty: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    each = np.broadcast_to(covariance, (len(cell_uncertainty), 3, 3)).copy()
    each[:, 0, 0] += np.maximum(cell_uncertainty, 1e-6) ** 2
    return np.asarray(np.linalg.inv(each), dtype=np.float64), np.asarray(np.linalg.slogdet(each)[1])
