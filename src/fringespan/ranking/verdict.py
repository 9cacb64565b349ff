"""What may be said of a ranking: the verdict, what would decide an open case, and the cautions that go with a name."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from fringespan.cautions import Caution, gravest_first
from fringespan.crystal.notation import direction_text, plane_text
from fringespan.crystal.phase import Phase
from fringespan.ranking.comparison import Comparison
from fringespan.ranking.hypotheses import Hypothesis, RankingSettings, Verdict

__all__ = ["NAMED_WITH_CARE", "cautions_of", "ruled_out_text", "sentence_of", "verdict_of"]

_SCALE_PULL = 2.5
_UNLISTED_ABOVE = 0.95

NAMED_WITH_CARE = Caution(
    "evidence-not-certificate",
    "note",
    "A match of spacings and angles is evidence for a phase, not a certificate.",
    "Where health or safety hangs on it, the accredited method, local rules and licensed laboratories decide.",
)


def verdict_of(
    matches: Sequence[Hypothesis],
    probability_of_phase: dict[str, float],
    unlisted: float,
    is_mixed: bool,
    settings: RankingSettings,
) -> Verdict:
    """Return the verdict on hypotheses sorted best first; `is_mixed`: there are signs of another crystal."""
    if is_mixed:
        return "more than one crystal"
    if not matches or not any(match.fits for match in matches) or unlisted > _UNLISTED_ABOVE:
        return "unidentified"
    best, probability = next(iter(probability_of_phase.items()))
    if probability > settings.identified_above and matches[0].phase == best and matches[0].fits:
        return "identified"
    return "ambiguous"


def name_of(match: Hypothesis) -> str:
    """Return a hypothesis as words: "Gold, seen along [110]"."""
    hexagonal = match.structure.has_hexagonal_axes
    seen = f", seen along {direction_text(match.zone, hexagonal=hexagonal)}" if match.zone else ""
    return f"{match.structure.name}{seen}"


def sentence_of(
    verdict: Verdict,
    matches: Sequence[Hypothesis],
    credible: Sequence[str],
    unlisted: float,
    second: Hypothesis | None,
    comparison: Comparison | None,
) -> str:
    """Return the verdict as a sentence, with what would decide an open case."""
    if verdict == "too few reflections":
        listed = _listing(list(dict.fromkeys(match.structure.name for match in matches)), "phase fits", "phases fit")
        return (
            f"Too few reflections to name a phase: {listed}. Two sets of fringes and the angle between them are the "
            "least."
        )
    if verdict == "more than one crystal" and not matches:
        return "More than one crystal in the region, and none of the phases compared. Draw a region inside one grain."
    if verdict == "unidentified":
        if not matches:
            return "None of the phases compared has reflections like these. Compare with more phases."
        return (
            f"Unidentified: {name_of(matches[0])} comes nearest, but "
            + (
                "the peaks do not agree with it. "
                if not matches[0].fits
                else "a phase not in the list is far more likely. "
            )
            + "Compare with more phases, and check the pixel size."
        )
    best = matches[0]
    explained = sum(hkl is not None for hkl in best.hkl)
    if verdict == "more than one crystal" and second is None:
        return (
            f"More than one crystal in the region: the largest may be {name_of(best)}, {explained} of {len(best.hkl)} "
            "peaks explained. Draw a region inside one grain."
        )
    if verdict == "more than one crystal" and second is not None:
        return (
            f"More than one crystal in the region: {name_of(best)} explains {explained} of {len(best.hkl)} peaks, and "
            f"the rest look like {name_of(second)}. Draw a region inside one grain."
        )
    if verdict == "identified":
        return f"{name_of(best)}: {explained} of {len(best.hkl)} peaks explained."
    names = {match.phase: match.structure.name for match in reversed(matches)}
    several = [names[phase] for phase in credible if phase in names]
    possible = "a phase not in the list is possible too" if unlisted > 0.05 else ""
    if len(several) == 1:
        return (
            f"{name_of(best)} is the only listed phase that fits, but {possible or 'not certainly'}. " + _advice_scale()
        )
    advice = _advice(matches, comparison) if comparison is not None else ""
    return f"Ambiguous between {_joined(several)}" + (f"; {possible}" if possible else "") + ". " + advice


def ruled_out_text(reasons: dict[str, str]) -> str:
    """Return what speaks against phases, by name, as the end of a verdict's sentence; empty if there is nothing."""
    return "".join(f" {name} is ruled out: {reason}." for name, reason in reasons.items())


def _advice_scale() -> str:
    return "More reflections or a pixel size known better would tell."


def _advice(matches: Sequence[Hypothesis], comparison: Comparison) -> str:
    best = matches[0]
    other = next((match for match in matches if match.phase != best.phase), None)
    if other is None or best.scale is None or other.scale is None:
        return ""
    alike = other.zone is not None and (other.phase, other.zone) in best.indistinguishable_from
    apart = abs(best.scale / other.scale - 1)
    pair = f"{best.structure.name} and {other.structure.name}"
    if alike and apart > 2e-4:
        return (
            f"{pair} show the same pattern, {100 * apart:.2g} % apart in size: a pixel size known to "
            f"{100 * apart / 4:.1g} % would tell them apart."
        )
    if alike:
        return (
            f"{pair} show the same pattern in the same size: only another zone or their composition tells them apart."
        )
    for first, second in ((best, other), (other, best)):
        if first.missing:
            hkl = plane_text(first.missing[0], hexagonal=first.structure.has_hexagonal_axes)
            d = 1 / float(np.linalg.norm(np.array(first.missing[0]) @ first.structure.reciprocal_basis)) / 10
            return (
                f"Look for {hkl} of {first.structure.name} at {d:.4f} nm, which is strong there: whether it is seen "
                f"speaks for it or for {second.structure.name}."
            )
    if apart > 1e-3 and comparison.picture_scale_sigma > apart / 4:
        return f"They need pixel sizes {100 * apart:.2g} % apart: one known to {100 * apart / 4:.1g} % would tell."
    return "More reflections would tell."


def _listing(names: Sequence[str], one: str, many: str) -> str:
    if not names:
        return "no phase compared has such a spacing"
    return f"{len(names)} {one if len(names) == 1 else many} ({_joined(names)})"


def _joined(names: Sequence[str]) -> str:
    shown = list(names[:5])
    if len(names) > 5:
        return ", ".join(shown) + f" and {len(names) - 5} more"
    return " and ".join([", ".join(shown[:-1]), shown[-1]]) if len(shown) > 1 else "".join(shown)


def cautions_of(
    matches: Sequence[Hypothesis],
    credible: Sequence[str],
    verdict: Verdict,
    comparison: Comparison | None,
    is_scale_stated: bool,
) -> tuple[Caution, ...]:
    """Return the cautions that naming these phases calls for."""
    if not matches:
        return ()
    found = [NAMED_WITH_CARE]
    named: dict[str, Phase] = {match.phase: match.structure for match in matches}
    for phase in [named[p] for p in credible if p in named][:3]:
        if phase.hazard:
            found.append(
                Caution(
                    f"hazard-{phase.id}",
                    "warning",
                    f"{phase.name}: {phase.hazard}",
                    "Follow local rules, and leave work and disposal to those licensed for it.",
                )
            )
        if phase.source_status == "from memory":
            found.append(
                Caution(
                    f"structure-from-memory-{phase.id}",
                    "warning",
                    f"The structure of {phase.name} was not checked against its source.",
                    "Load it from a CIF file that you trust before you publish.",
                )
            )
        found.extend(phase.cautions)
    if not is_scale_stated:
        found.append(
            Caution(
                "ranking-pixel-size",
                "warning",
                "The pixel size's uncertainty is not stated; 5 % was assumed, so only ratios and angles decide.",
                "State it, or check the magnification on a reference material.",
            )
        )
    best = matches[0]
    if comparison is not None and best.scale is not None and verdict != "too few reflections":
        sigma = float(comparison.prior_scale_sigma[int(comparison.phase[0])])
        pull = (best.scale - 1) / sigma
        if abs(pull) > _SCALE_PULL:
            found.append(
                Caution(
                    "ranking-scale",
                    "warning",
                    f"{best.structure.name} would need a pixel size {100 * (best.scale - 1):+.2g} % off, "
                    f"{abs(pull):.1f} times its stated uncertainty.",
                    "Check the magnification, and compare with more phases.",
                )
            )
        kinds = comparison.tables.kind[comparison.node[0][comparison.node[0] >= 0]]
        if np.any(kinds == 2):
            found.append(
                Caution(
                    "ranking-thin-crystal",
                    "note",
                    f"Some peaks are reflections that {best.structure.name}'s centring forbids; crystals of a few "
                    "layers show them.",
                    "Check the thickness; in a thick crystal they speak against the phase.",
                )
            )
        elif np.any(kinds == 1):
            found.append(
                Caution(
                    "ranking-forbidden",
                    "note",
                    f"Some peaks are reflections without intensity in {best.structure.name}, brought back by double "
                    "scattering.",
                    "Tilting the crystal makes them fade if they come from double scattering.",
                )
            )
    return gravest_first(found)
