"""Spacings and angles as people type them."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.exceptions import SettingsError
from fringespan.ranking.rank import rank_phases
from fringespan.ranking.typed_values import observation_from_text, observations_from_text, read_value


@pytest.mark.parametrize(
    ("text", "value", "uncertainty"),
    [("0.2355(4)", 0.2355, 0.0004), ("0.2355(14)", 0.2355, 0.0014), ("54.7(3)", 54.7, 0.3), ("54.7(1.2)", 54.7, 1.2),
     ("109(2)", 109, 2), (".2355(4)", 0.2355, 0.0004), ("0.2355", 0.2355, None), ("54", 54, None)],
)  # fmt: skip
def test_values_with_uncertainties(text: str, value: float, uncertainty: float | None) -> None:
    assert read_value(text) == (value, pytest.approx(uncertainty) if uncertainty else uncertainty)


@given(st.integers(1, 99999), st.integers(1, 99), st.integers(1, 6))
def test_any_digits_mean_units_of_the_last_one(number: int, uncertainty: int, places: int) -> None:
    text = f"{number / 10**places:.{places}f}({uncertainty})"
    value, sigma = read_value(text)
    assert value == pytest.approx(number / 10**places)
    assert sigma == pytest.approx(uncertainty / 10**places)


@pytest.mark.parametrize("text", ["", "abc", "0.23(", "0.23()", "-0.2", "0,2355", "1e-3", "0.2355(4)x"])
def test_what_is_no_value_is_refused(text: str) -> None:
    with pytest.raises(SettingsError, match="not a value"):
        read_value(text)


def test_two_spacings_and_their_angle_make_two_vectors() -> None:
    seen = observation_from_text("0.2355(4) 0.2039(5) @54.7(3)")
    first, second = (complex(r.g_per_nm[1], -r.g_per_nm[0]) for r in seen.reflections)
    assert 1 / abs(first) == pytest.approx(0.2355)
    assert 1 / abs(second) == pytest.approx(0.2039)
    turned = second / first
    assert math.degrees(math.atan2(turned.imag, turned.real)) == pytest.approx(54.7)  # counter-clockwise on the screen
    # uncertainties: along g that of d over d^2, across it that of the angle
    (rr, _), (_, cc) = seen.reflections[0].covariance_per_nm2
    assert math.sqrt(cc) == pytest.approx(0.0004 / 0.2355**2)
    assert math.sqrt(rr) < math.sqrt(cc)
    (rr, _), (_, cc) = seen.reflections[1].covariance_per_nm2
    assert rr + cc == pytest.approx((0.0005 / 0.2039**2) ** 2 + (math.radians(0.3) / 0.2039) ** 2)


@pytest.mark.parametrize(
    "text", ["0.2355(4) 0.2039(5)@54.7(3)", "0.2355(4), 0.2039(5), @ 54.7(3)", " 0.2355(4)\t0.2039(5) @54.7(3) "]
)
def test_spaces_and_commas_do_not_matter(text: str) -> None:
    plain = observation_from_text("0.2355(4) 0.2039(5) @54.7(3)")
    assert observation_from_text(text).reflections == plain.reflections


def test_gold_is_among_what_its_spacings_name() -> None:
    ranking = rank_phases(
        observation_from_text("0.2355(4) 0.2039(5) @54.7(3)", pixel_size_relative_uncertainty=0.005), built_in_phases()
    )
    assert "au" in ranking.credible_phases
    gold = next(m for m in ranking.matches if m.phase == "au")
    assert gold.zone is not None
    assert {tuple(sorted(map(abs, hkl))) for hkl in gold.hkl if hkl} == {(1, 1, 1), (0, 0, 2)}


def test_spacings_without_angles_give_candidates_only() -> None:
    seen = observation_from_text("0.2355(4) 0.2039(5) 0.1442(3)", pixel_size_relative_uncertainty=0.003)
    assert not seen.directions_known
    ranking = rank_phases(seen, [load_phase("au"), load_phase("fe"), load_phase("si")])
    assert ranking.verdict == "too few reflections"
    assert [m.phase for m in ranking.matches] == ["au"]
    assert ranking.matches[0].hkl == ((1, 1, 1), (2, 0, 0), (2, 2, 0))


def test_regions_stand_between_semicolons() -> None:
    regions = observations_from_text("0.2355(4) 0.2039(5) @54.7(3); 0.2106(4) 0.2106(4) @90(0.4);")
    assert [len(r.reflections) for r in regions] == [2, 2]


@pytest.mark.parametrize(
    ("text", "what"),
    [("", "no spacings"), ("@54", "counted from the first"), ("0.2355 @54", "counted from the first"),
     ("0.2355 0.2039 @54 @60", "has an angle already"), ("0.2355 0.2039 @54 0.1442", "have no angle"), ("2.355 45", "nm"),
     ("0.2355 0.2039 @200", "180"), ("gold", "not a value")],
)  # fmt: skip
def test_what_makes_no_sense_is_refused_with_the_reason(text: str, what: str) -> None:
    with pytest.raises(SettingsError, match=what):
        observation_from_text(text)
