"""Why a phase that was asked about is not the one: the reason for each candidate that is ruled out."""

from __future__ import annotations

from collections.abc import Sequence

from fringespan.crystal.notation import direction_text, plane_text
from fringespan.crystal.phase import Phase
from fringespan.ranking.comparison import Comparison, compare
from fringespan.ranking.description import described, fit_limit
from fringespan.ranking.hypotheses import Hypothesis, RankingSettings
from fringespan.ranking.observation import Observation

__all__ = ["MOST_EXPLAINED", "reasons_against"]

MOST_EXPLAINED = 8
"""Of a longer list of phases nobody asks why each one is not it."""

_RULED_OUT_BELOW = 0.01
_WIDE_SCALE = 0.05
_SCALE_PULL = 2.5


def reasons_against(
    observation: Observation,
    comparison: Comparison,
    matches: Sequence[Hypothesis],
    probability_of_phase: dict[str, float],
    phases: Sequence[Phase],
    settings: RankingSettings,
) -> dict[str, str]:
    """Return for each phase whose probability is below 1 % what speaks against it; empty for a long list of phases."""
    if len(phases) > MOST_EXPLAINED:
        return {}
    reasons = {}
    for index, phase in enumerate(phases):
        if probability_of_phase.get(phase.id, 0.0) >= _RULED_OUT_BELOW:
            continue
        best = next((match for match in matches if match.phase == phase.id), None)
        if best is None:
            alone = compare(observation, [phase], settings, scale=(0.0, _WIDE_SCALE))
            found = described(alone, observation, 1) if alone is not None and len(alone.zone) else ()
            best = found[0] if found else None
        reasons[phase.id] = _reason(best, matches, float(comparison.prior_scale_sigma[index]))
    return reasons


def _reason(best: Hypothesis | None, matches: Sequence[Hypothesis], scale_sigma: float) -> str:
    if best is None or best.zone is None or best.scale is None:
        return "no zone of it has such spacings at such angles"
    zone = direction_text(best.zone, hexagonal=best.structure.has_hexagonal_axes)
    explained, rival = (sum(hkl is not None for hkl in match.hkl) for match in (best, matches[0]))
    if abs(best.scale - 1) > _SCALE_PULL * scale_sigma:
        return f"its nearest zone, {zone}, needs a pixel size {100 * (best.scale - 1):+.1f} % off"
    if best.chi_squared > fit_limit(best.degrees_of_freedom):
        return f"spacings and angles miss even its nearest zone, {zone}, by far more than their uncertainties"
    if explained < rival:
        return f"its nearest zone, {zone}, explains {explained} peaks where {rival} can be explained"
    if best.missing:
        plane = plane_text(best.missing[0], hexagonal=best.structure.has_hexagonal_axes)
        return f"seen along {zone}, its strong {plane} would have to show"
    return f"its nearest zone, {zone}, is an uncommon one or shows these reflections only weakly"
