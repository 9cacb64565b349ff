"""A ranking in words and tables."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from fringespan.cautions import Caution
from fringespan.crystal.notation import direction_text, indices_text
from fringespan.export.plain_text import Column, Line, aligned_table, paragraph
from fringespan.export.table import Table
from fringespan.ranking.hypotheses import Hypothesis, Ranking
from fringespan.uncertainty import NOT_GIVEN, value_text

__all__ = ["ranking_document", "ranking_lines", "ranking_table"]

_MOST_SHOWN = 12
_LEAST_SHOWN = 0.002


def ranking_lines(ranking: Ranking, width: int, *, most: int = _MOST_SHOWN) -> list[Line]:
    """Return the verdict, the hypotheses worth a line, and the cautions."""
    lines = paragraph(ranking.sentence, width, emphasis="heading")
    shown = [m for m in ranking.matches[:most] if m.probability >= _LEAST_SHOWN] or list(ranking.matches[:1])
    if shown:
        table, _ = aligned_table(_columns(shown), width, indent="  ")
        lines += table
        rest = len(ranking.matches) - len(shown)
        words = [f"{rest} less probable ones are left out"] if rest else []
        if ranking.unlisted_probability > 0:
            words.append(f"a phase not in the list: {ranking.unlisted_probability:.3f}")
        if words:
            lines += paragraph("; ".join(words) + ".", width, first="  ", emphasis="quiet")
    lines += paragraph(ranking.assumptions, width, first="  ", emphasis="quiet")
    for caution in ranking.cautions:
        lines += _caution(caution, width)
    return lines


def _columns(matches: Sequence[Hypothesis]) -> list[Column]:
    spacings = [i for i in range(len(matches[0].hkl)) if any(m.hkl[i] is not None for m in matches)][:4]
    return [
        Column("phase", "", [m.phase for m in matches], "left"),
        Column("zone", "", [_zone(m) for m in matches], "left"),
        Column("probability", "", [f"{m.probability:.3f}" for m in matches]),
        Column("fits", "", ["yes" if m.fits else "no" for m in matches], "left"),
        Column(
            "scale",
            "",
            [NOT_GIVEN if m.scale is None else value_text(m.scale, m.scale_uncertainty) for m in matches],
            rank=2,
        ),
        *(Column(f"peak {i + 1}", "", [_plane(m, i) for m in matches], "left", rank=1) for i in spacings),
        Column("name", "", [m.structure.name for m in matches], "left", rank=3),
    ]


def _zone(match: Hypothesis) -> str:
    return NOT_GIVEN if match.zone is None else direction_text(match.zone, hexagonal=match.structure.has_hexagonal_axes)


def _plane(match: Hypothesis, index: int) -> str:
    hkl = match.hkl[index]
    return NOT_GIVEN if hkl is None else indices_text(hkl)


def _caution(caution: Caution, width: int) -> list[Line]:
    return paragraph(f"{caution.text} {caution.remedy}", width, first="  ! ", emphasis=caution.gravity)


def ranking_table(ranking: Ranking) -> Table:
    """Return every hypothesis with every digit, one row each; indices as three numbers with spaces, a cell a peak."""
    number = len(ranking.matches[0].hkl) if ranking.matches else 0
    names = (
        "phase",
        "zone",
        "probability",
        "fits",
        "chi_squared",
        "degrees_of_freedom",
        "rotation_deg",
        "scale",
        "scale_uncertainty",
        *(f"hkl_{i + 1}" for i in range(number)),
        *(f"pull_{i + 1}" for i in range(number)),
    )
    rows = tuple(
        (
            m.phase,
            None if m.zone is None else " ".join(map(str, m.zone)),
            m.probability,
            str(m.fits).lower(),
            m.chi_squared,
            m.degrees_of_freedom,
            m.rotation_deg,
            m.scale,
            m.scale_uncertainty,
            *(None if hkl is None else " ".join(map(str, hkl)) for hkl in m.hkl),
            *m.pulls,
        )
        for m in ranking.matches
    )
    return Table(names, rows)


def ranking_document(ranking: Ranking) -> dict[str, Any]:
    """Return a ranking as JSON has it: matches and verdict in the form of a record, and the rest beside them."""
    return {
        "verdict": ranking.verdict,
        "sentence": ranking.sentence,
        "matches": [match_document(match) for match in ranking.matches],
        "probability_of_phase": ranking.probability_of_phase,
        "unlisted_probability": ranking.unlisted_probability,
        "credible_phases": list(ranking.credible_phases),
        "second_crystal": None if ranking.second_crystal is None else match_document(ranking.second_crystal),
        "ruled_out": ranking.ruled_out,
        "assumptions": ranking.assumptions,
        "cautions": [
            {"code": c.code, "gravity": c.gravity, "text": c.text, "remedy": c.remedy} for c in ranking.cautions
        ],
    }


def match_document(match: Hypothesis) -> dict[str, Any]:
    """Return a hypothesis in the form of a record's match."""
    return {
        "phase": match.phase,
        "zone": None if match.zone is None else list(match.zone),
        "probability": match.probability,
        "hkl": [None if hkl is None else list(hkl) for hkl in match.hkl],
        "rotation_deg": match.rotation_deg,
        "scale": match.scale,
        "scale_uncertainty": match.scale_uncertainty,
        "fits": match.fits,
        "pulls": list(match.pulls),
        "indistinguishable_from": [[phase, list(zone)] for phase, zone in match.indistinguishable_from],
    }
