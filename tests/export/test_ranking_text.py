"""Rankings in words and tables."""

from __future__ import annotations

import json
import unicodedata

import pytest

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.export.ranking_text import match_document, ranking_document, ranking_lines, ranking_table
from fringespan.ranking.hypotheses import Ranking
from fringespan.ranking.rank import rank_phases
from fringespan.ranking.typed_values import observation_from_text


@pytest.fixture(scope="module")
def ranking() -> Ranking:
    typed = observation_from_text("0.2355(4) 0.2039(5) @54.7(3)", pixel_size_relative_uncertainty=0.01)
    return rank_phases(typed, built_in_phases())


def test_the_verdict_comes_first_and_the_usual_care_last(ranking: Ranking) -> None:
    lines = ranking_lines(ranking, 80)
    assert lines[0].text.startswith("Ambiguous between")
    assert "not a certificate" in " ".join(line.text for line in lines[-4:])
    assert max(sum(not unicodedata.combining(c) for c in line.text) for line in lines) <= 80


def test_the_best_hypotheses_are_listed_with_their_probability(ranking: Ranking) -> None:
    text = "\n".join(line.text for line in ranking_lines(ranking, 100))
    assert "[110]" in text
    assert f"{ranking.matches[0].probability:.3f}" in text
    assert "a phase not in the list" in text


def test_the_table_has_a_row_a_hypothesis_and_a_cell_a_peak(ranking: Ranking) -> None:
    table = ranking_table(ranking)
    assert len(table.rows) == len(ranking.matches)
    assert {"hkl_1", "hkl_2", "pull_1", "pull_2"} <= set(table.columns)


def test_the_document_has_the_form_of_a_record_s_matches(ranking: Ranking) -> None:
    document = json.loads(json.dumps(ranking_document(ranking)))
    assert document["verdict"] == "ambiguous"
    match = document["matches"][0]
    assert set(match) == {"phase", "zone", "probability", "hkl", "rotation_deg", "scale", "scale_uncertainty", "fits",
                          "pulls", "indistinguishable_from"}  # fmt: skip
    assert len(match["hkl"]) == 2


def test_one_spacing_has_no_zone() -> None:
    single = rank_phases(observation_from_text("0.2355(4)"), [load_phase("au")])
    assert match_document(single.matches[0])["zone"] is None
    assert single.unlisted_probability > 0.1
    assert "Too few reflections" in ranking_lines(single, 80)[0].text
