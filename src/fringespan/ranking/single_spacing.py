"""Candidates for one set of fringes, or for spacings without angles: a list with pulls, never an identification."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import expected_reflections
from fringespan.ranking.hypotheses import Hypothesis, RankingSettings
from fringespan.ranking.observation import Observation

__all__ = ["candidates_by_spacing"]

_GATE = 4.0
_EXPONENT = 0.5
_FLOOR = 0.004
_D_MIN_NM = 0.08
_UNLISTED_LOG_DENSITY = math.log(0.5)
"""Of the spacings of any crystal on a logarithmic scale: most lie within a factor of e squared."""


def candidates_by_spacing(
    observation: Observation, phases: Sequence[Phase], settings: RankingSettings
) -> tuple[tuple[Hypothesis, ...], float]:
    """Return the phases that have a reflection at every observed spacing, and the probability of a phase not listed.

    Each phase is given the share of the probability that its reflections nearest to the spacings deserve: how far off
    they are, within the uncertainty of the spacings and of the scale common to them, and how strong. A phase not in
    the list may have a spacing anywhere, alike on a logarithmic scale.
    """
    stated = observation.pixel_size_relative_uncertainty
    scale = settings.scale_when_unstated if stated is None else float(np.max(stated))
    own = [i for i, r in enumerate(observation.reflections) if r.role == "reflection"] or list(
        range(len(observation.reflections))
    )
    length = np.abs(observation.vectors())
    covariance = observation.covariances()
    sigma = np.sqrt((covariance[:, 0] + covariance[:, 2]) / 2) / length
    found = []
    for phase in phases:
        common = math.hypot(scale, phase.cell_relative_uncertainty)
        best = _best_reflections(phase, length[own], sigma[own], common)
        if best is not None:
            found.append((phase, common, *best))
    if not found:
        return (), 1.0
    listed = math.log((1 - settings.unlisted_probability) / len(phases))
    unlisted = math.log(settings.unlisted_probability) + len(own) * _UNLISTED_LOG_DENSITY
    evidence = np.array([listed + log_evidence for _, _, log_evidence, _, _ in found] + [unlisted])
    share = np.exp(evidence - evidence.max())
    share /= share.sum()
    result = []
    for index in np.argsort(-share[:-1], kind="stable")[: settings.most_matches]:
        phase, common, _, families, offset = found[index]
        hkl: list[tuple[int, int, int] | None] = [None] * len(length)
        pulls: list[float | None] = [None] * len(length)
        spacings: list[float | None] = [None] * len(length)
        forbidden = [False] * len(length)
        chi_squared = (offset / common) ** 2
        for place, family in zip(own, families, strict=True):
            pull = (math.log(length[place] * family.d_nm) - offset) / sigma[place]
            chi_squared += pull**2
            hkl[place], pulls[place], spacings[place] = family.hkl, float(pull), family.d_nm
            forbidden[place] = bool(family.forbidden)
        result.append(
            Hypothesis(
                phase=phase.id,
                structure=phase,
                zone=None,
                probability=float(share[index]),
                hkl=tuple(hkl),
                rotation_deg=None,
                scale=math.exp(offset),
                scale_uncertainty=float(1 / math.sqrt(common**-2 + float(np.sum(sigma[own] ** -2.0)))),
                fits=chi_squared < _GATE**2 + len(own),
                pulls=tuple(pulls),
                expected_d_nm=tuple(spacings),
                chi_squared=float(chi_squared),
                degrees_of_freedom=len(own),
                forbidden=tuple(forbidden),
            )
        )
    return tuple(result), float(share[-1])


def _best_reflections(
    phase: Phase, length: NDArray[np.float64], sigma: NDArray[np.float64], common: float
) -> tuple[float, list, float] | None:  # type: ignore[type-arg]
    families = [
        f
        for f in expected_reflections(phase, _D_MIN_NM)
        if f.forbidden in (False, "absence, reachable by double scattering")
    ]
    if not families:
        return None
    log_d = np.log([family.d_nm for family in families])
    weight = np.array(
        [(f.relative_intensity or 0.0 if phase.has_known_atoms else 1.0) ** _EXPONENT + _FLOOR for f in families]
    )
    weight *= [family.multiplicity for family in families]
    off = np.log(length)[:, None] + log_d[None, :]
    spread = np.hypot(sigma, common)
    if np.any(np.min(np.abs(off), axis=1) > _GATE * spread):
        return None
    # the common scale that the nearest reflections suggest, then the reflections it suggests
    offset = 0.0
    chosen = np.zeros(len(length), dtype=np.int64)
    for _ in range(3):
        merit = np.log(weight)[None, :] - 0.5 * ((off - offset) / np.where(offset == 0.0, spread, sigma)[:, None]) ** 2
        chosen = merit.argmax(axis=1)
        residual = off[np.arange(len(length)), chosen]
        offset = float(np.sum(residual / sigma**2) / (np.sum(sigma**-2.0) + common**-2))
    residual = off[np.arange(len(length)), chosen] - offset
    log_evidence = -0.5 * float(np.sum((residual / sigma) ** 2)) - 0.5 * (offset / common) ** 2
    # the integral over the common scale, so that tight agreement counts against a spacing anywhere
    log_evidence -= float(np.sum(np.log(sigma))) + 0.5 * len(sigma) * math.log(2 * math.pi)
    log_evidence -= 0.5 * math.log(1 + common**2 * float(np.sum(sigma**-2.0)))
    log_evidence += float(np.sum(np.log(weight[chosen] / weight.sum())))
    return log_evidence, [families[i] for i in chosen], offset
