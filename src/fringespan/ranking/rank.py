"""Rank phases: which crystal, in which orientation, explains the peaks of a region, and how sure that is."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.phase import Phase
from fringespan.exceptions import PhaseError, SettingsError
from fringespan.measurement import Measurement
from fringespan.ranking.comparison import Comparison, compare
from fringespan.ranking.description import described, normalised
from fringespan.ranking.hypotheses import Hypothesis, Ranking, RankingSettings
from fringespan.ranking.observation import Observation, observation_of
from fringespan.ranking.ruled_out import reasons_against
from fringespan.ranking.single_spacing import candidates_by_spacing
from fringespan.ranking.verdict import cautions_of, ruled_out_text, sentence_of, verdict_of
from fringespan.ranking.zone_tables import LARGEST_ZONE_INDEX, MOST_ZONES

__all__ = ["Shared", "prepare_ranking", "rank_phases", "rank_regions"]

Shared = Literal["phase", "scale"]
"""What several regions have in common: the crystal's phase and with it the scale, or the scale of the picture alone."""

_CREDIBLE = 0.95
_SECOND_CRYSTAL_PRIOR = 0.05
_SECOND_CRYSTAL_ODDS = 20.0
_SECOND_SCALE = 1e-4
_GRID = 2001
_NOT_AT_ALL = -80.0


def rank_phases(
    measurement: Measurement | Observation, phases: Sequence[Phase], *, settings: RankingSettings | None = None
) -> Ranking:
    """Rank all hypotheses for the peaks of a region: phase, zone axis, indices, in-plane rotation and scale.

    Every zone of every phase that has pairs of reflections like pairs of peaks is fitted by weighted least squares
    with a common scale within the pixel size's uncertainty and a small distortion. Its probability weighs the fit,
    the reflections that were seen against those that should be, the peaks it leaves over, and how common the zone is;
    the possibility of a phase that is not in the list is weighed with them. Sums and harmonics of other peaks are
    indexed, but are no evidence of their own.

    Parameters
    ----------
    measurement : Measurement or Observation
    phases : sequence of Phase
        All are taken as equally probable.
    settings : RankingSettings, optional

    Returns
    -------
    Ranking

    Raises
    ------
    PhaseError
        If there are no phases.
    CalibrationError
        If the picture has no pixel size.
    """
    return rank_regions([measurement], phases, settings=settings)[0]


def rank_regions(
    regions: Sequence[Measurement | Observation],
    phases: Sequence[Phase],
    *,
    shared: Shared = "scale",
    settings: RankingSettings | None = None,
) -> tuple[Ranking, ...]:
    """Rank phases for several regions of one picture together.

    Parameters
    ----------
    regions : sequence of Measurement or Observation
    phases : sequence of Phase
    shared : {"scale", "phase"}, optional
        "scale": crystals of any phases in one picture, whose pixel size is the same. "phase": regions of one crystal,
        or of crystals known to be of one phase.
    settings : RankingSettings, optional

    Returns
    -------
    tuple of Ranking
        One for each region.

    Raises
    ------
    PhaseError
        If there are no phases.
    SettingsError
        If `shared` is neither.
    CalibrationError
        If a picture has no pixel size.
    """
    settings = settings or RankingSettings()
    if shared not in ("phase", "scale"):
        raise SettingsError(f"shared must be 'phase' or 'scale', got {shared!r}")
    if not phases:
        raise PhaseError("there are no phases to compare with; give at least one")
    observations = [r if isinstance(r, Observation) else observation_of(r) for r in regions]
    comparisons = [compare(o, phases, settings) if o.directions_known else None for o in observations]
    spanned = [c for c in comparisons if c is not None]
    if len(spanned) > 1:
        together = iter(_with_common_phase(spanned, settings) if shared == "phase" else _with_common_scale(spanned))
        comparisons = [None if c is None else next(together) for c in comparisons]
    return tuple(
        _by_spacing(o, phases, settings) if c is None else _ranking(o, c, phases, settings)
        for o, c in zip(observations, comparisons, strict=True)
    )


def prepare_ranking(phases: Sequence[Phase]) -> None:
    """Build or load the tables of these phases and compile the loops, so that the first ranking is as quick as the next.

    The tables take about a second once for a set of phases, compiling about ten once for an installation. To be called
    in a worker while the user is looking at the picture.

    Raises
    ------
    PhaseError
        If there are no phases.
    """
    from fringespan.ranking.typed_values import observation_from_text

    rank_phases(observation_from_text("0.2355(4) 0.2039(5) @54.7(3) 0.2355(4) @109.5(3)"), phases)


def _by_spacing(observation: Observation, phases: Sequence[Phase], settings: RankingSettings) -> Ranking:
    matches, unlisted = candidates_by_spacing(observation, phases, settings) if observation.reflections else ((), 1.0)
    probability = {match.phase: match.probability for match in matches}
    credible = _credible(probability)
    stated = observation.pixel_size_relative_uncertainty is not None
    return Ranking(
        matches=matches,
        verdict="too few reflections",
        sentence=sentence_of("too few reflections", matches, credible, unlisted, None, None),
        probability_of_phase=probability,
        unlisted_probability=unlisted,
        credible_phases=credible,
        cautions=cautions_of(matches, (), "too few reflections", None, stated),
        assumptions=(
            f"{len(phases)} phases compared by spacing alone, all equally probable, and a phase not in the list with "
            f"{settings.unlisted_probability:g}, before looking."
        ),
    )


def _ranking(
    observation: Observation, comparison: Comparison, phases: Sequence[Phase], settings: RankingSettings
) -> Ranking:
    probability, unlisted = normalised(comparison)
    of_phase = np.bincount(comparison.phase, weights=probability, minlength=len(phases))
    order = np.argsort(-of_phase, kind="stable")
    named = {phases[i].id: float(of_phase[i]) for i in order if of_phase[i] > 0}
    matches = described(comparison, observation, settings.most_matches)
    second = _second_crystal(observation, comparison, matches, phases, settings)
    is_mixed = observation.holds_other_crystal or (second is not None and bool(matches))
    verdict = verdict_of(matches, named, unlisted, is_mixed, settings)
    credible = _credible(named)
    stated = observation.pixel_size_relative_uncertainty is not None
    against = reasons_against(observation, comparison, matches, named, phases, settings) if matches else {}
    sentence = sentence_of(verdict, matches, credible, unlisted, second, comparison)
    return Ranking(
        matches=matches,
        verdict=verdict,
        sentence=sentence + ruled_out_text({p.name: against[p.id] for p in phases if p.id in against}),
        probability_of_phase=named,
        unlisted_probability=unlisted,
        credible_phases=credible,
        cautions=cautions_of(matches, credible, verdict, comparison, stated),
        second_crystal=second,
        ruled_out=against,
        assumptions=(
            f"{len(phases)} phases compared, zones with indices up to {LARGEST_ZONE_INDEX} and at most {MOST_ZONES} a "
            f"phase, all equally probable, and a phase not in the list with {settings.unlisted_probability:g}, before "
            f"looking; scale known to {100 * comparison.picture_scale_sigma:.2g} %, distortion to "
            f"{100 * settings.distortion:.2g} %."
        ),
    )


def _credible(probability: dict[str, float]) -> tuple[str, ...]:
    names, total, sum_of_all = [], 0.0, sum(probability.values())
    for name, value in probability.items():
        names.append(name)
        total += value
        if total >= _CREDIBLE * sum_of_all:
            break
    return tuple(names)


def _second_crystal(
    observation: Observation,
    comparison: Comparison,
    matches: Sequence[Hypothesis],
    phases: Sequence[Phase],
    settings: RankingSettings,
) -> Hypothesis | None:
    """Look for another crystal among the independent peaks that the best hypothesis leaves over."""
    if not matches:
        return None
    left = (comparison.node[0] < 0) & comparison.is_independent
    number = int(left.sum())
    if number < 2:
        return None
    rest = compare(observation, phases, settings, only=comparison.peaks[left], scale=_scale_by_all(comparison))
    if rest is None or not len(rest.zone):
        return None
    # as noise, each peak left over costs what the evidence of any hypothesis charges for it
    area = math.pi * rest.longest_per_nm**2 / 2
    as_noise = number * math.log(settings.false_share / area)
    as_crystal = math.log(_SECOND_CRYSTAL_PRIOR) + float(np.logaddexp.reduce(rest.log_evidence))
    found = described(rest, observation, 1)[0]
    if as_crystal - as_noise < math.log(_SECOND_CRYSTAL_ODDS) or not found.fits:
        return None
    if number == 2:
        # any two peaks are like some pair of reflections: believed only for the phase already found, or strong peaks
        strength = np.array([observation.reflections[i].signal_to_noise for i in comparison.peaks])
        is_strong = strength[left].max() > 0.5 * strength.max() and rest.log_evidence[0] > rest.unlisted_log_evidence
        if found.phase != matches[0].phase and not is_strong:
            return None
    return found


def _scale_by_all(comparison: Comparison) -> tuple[float, float]:
    """Return what all hypotheses together say about the scale: e0 and its standard deviation."""
    share = np.exp(comparison.log_evidence - comparison.log_evidence.max())
    share /= share.sum()
    offset = comparison.distortion[:, 0]
    mean = float(share @ offset)
    return mean, math.sqrt(float(share @ ((offset - mean) ** 2 + comparison.scale_sigma**2)) + _SECOND_SCALE**2)


def _scale_likelihood(comparison: Comparison, own_part: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
    """Return for each hypothesis ln K, place and variance of its likelihood K N(s; place, variance) of the scale s.

    `own_part` is the variance that the hypothesis' own cell adds between s and the scale that was fitted.
    """
    prior = comparison.prior_scale_sigma[comparison.phase] ** 2
    posterior = np.minimum(comparison.scale_sigma**2, prior * (1 - 1e-9))
    variance = 1 / (1 / posterior - 1 / prior)
    place = variance * comparison.distortion[:, 0] / posterior
    log_factor = comparison.log_evidence - _log_normal(place, prior + variance)
    return log_factor, place, variance + own_part


def _log_normal(offset: NDArray[np.float64], variance: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(-0.5 * offset**2 / variance - 0.5 * np.log(2 * np.pi * variance))


def _with_common_scale(comparisons: Sequence[Comparison]) -> list[Comparison]:
    """Weigh every hypothesis by what the other regions say about the picture's scale."""
    sigma = comparisons[0].picture_scale_sigma
    grid = np.linspace(-5, 5, _GRID) * max(sigma, 1e-5)
    prior = _log_normal(grid, np.full(_GRID, max(sigma, 1e-5) ** 2))
    curves, unlisted = [], []
    for comparison in comparisons:
        cell = comparison.prior_scale_sigma[comparison.phase] ** 2 - comparison.picture_scale_sigma**2
        log_factor, place, variance = _scale_likelihood(comparison, np.maximum(cell, 0.0))
        curves.append(log_factor[:, None] + _log_normal(grid[None, :] - place[:, None], variance[:, None]))
        # an unlisted crystal says nothing about the scale
        unlisted.append(comparison.unlisted_log_evidence)
    totals = [
        np.logaddexp(np.logaddexp.reduce(c, axis=0) if len(c) else np.full(_GRID, -np.inf), u)
        for c, u in zip(curves, unlisted, strict=True)
    ]
    result = []
    for index, comparison in enumerate(comparisons):
        others = prior + sum(total for other, total in enumerate(totals) if other != index)
        others = others - np.logaddexp.reduce(others)
        result.append(
            comparison.with_evidence(
                np.logaddexp.reduce(curves[index] + others, axis=1),
                unlisted[index],
            )
        )
    return result


def _with_common_phase(comparisons: Sequence[Comparison], settings: RankingSettings) -> list[Comparison]:
    """Weigh every hypothesis by what the other regions say about its phase and the scale that goes with it."""
    phases = range(len(comparisons[0].phases))
    parts = [_scale_likelihood(comparison, np.zeros(len(comparison.zone))) for comparison in comparisons]
    evidence = [np.full(len(comparison.zone), -np.inf) for comparison in comparisons]
    log_prior = math.log((1 - settings.unlisted_probability) / len(comparisons[0].phases))
    for phase in phases:
        sigma = float(comparisons[0].prior_scale_sigma[phase])
        grid = np.linspace(-5, 5, _GRID) * sigma
        prior = _log_normal(grid, np.full(_GRID, sigma**2))
        curves = []
        for comparison, (log_factor, place, variance) in zip(comparisons, parts, strict=True):
            own = np.flatnonzero(comparison.phase == phase)
            curve = log_factor[own, None] + _log_normal(grid[None, :] - place[own, None], variance[own, None])
            curves.append((own, curve))
        totals = [
            np.logaddexp.reduce(curve, axis=0) if len(curve) else np.full(_GRID, _NOT_AT_ALL) for _, curve in curves
        ]
        step = math.log(grid[1] - grid[0])
        for index, (own, curve) in enumerate(curves):
            if not len(own):
                continue
            # each region's evidence holds the prior of the phase: counted once
            others = prior + step + sum(t - log_prior for other, t in enumerate(totals) if other != index)
            evidence[index][own] = np.logaddexp.reduce(curve + others, axis=1)
    log_unlisted = math.log(settings.unlisted_probability)
    unlisted = log_unlisted + sum(c.unlisted_log_evidence - log_unlisted for c in comparisons)
    result = []
    for comparison, values in zip(comparisons, evidence, strict=True):
        result.append(comparison.with_evidence(values, float(unlisted)))
    return result
