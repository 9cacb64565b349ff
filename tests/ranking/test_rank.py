"""Ranking: which crystal, standing how, and what may be said of it."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.crystal.zone import zone_pattern
from fringespan.exceptions import CalibrationError, PhaseError, SettingsError
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph
from fringespan.ranking.hypotheses import RankingSettings
from fringespan.ranking.observation import Observation, ObservedReflection, observation_of
from fringespan.ranking.rank import prepare_ranking, rank_phases, rank_regions
from fringespan.spacings import Peak

ALL = built_in_phases()
Observe = Callable[..., Observation]
GOLD_110 = [(1, -1, 1), (-1, 1, 1), (0, 0, 2), (2, -2, 0)]
RUTILE_001 = [(1, 1, 0), (1, -1, 0), (2, 0, 0), (2, 1, 0)]


def equivalent(phase: str, one: tuple[int, int, int], other: tuple[int, int, int]) -> bool:
    images = load_phase(phase).symmetry.laue_rotations @ np.array(one)
    return bool(np.any(np.all(images == np.array(other), axis=1)))


def strongest(phase: str, zone: tuple[int, int, int], number: int) -> list[tuple[int, int, int]]:
    """Return the strongest reflections of a zone down to 0.12 nm, of g and -g one."""
    spots = zone_pattern(load_phase(phase), zone, d_min_nm=0.12).spots
    half = [s for s in spots if s.direction_deg < 180 - 1e-6 and s.relative_intensity]
    return [s.hkl for s in sorted(half, key=lambda s: -(s.relative_intensity or 0))[:number]]


@pytest.mark.parametrize(
    ("phase", "zone"),
    [
        ("tio2_a", (1, 0, 0)), ("tio2_r", (0, 1, 1)), ("graphite", (1, 0, 0)), ("zro2_m", (0, 1, 0)), ("quartz", (1, 0, 0)),
        ("calcite", (1, 0, 0)), ("lifepo4", (0, 1, 0)), ("mg", (1, 0, 0)), ("cuo", (1, 0, 1)),
    ],
)  # fmt: skip
def test_a_crystal_is_found_with_zone_indices_and_scale(
    observe: Observe, phase: str, zone: tuple[int, int, int]
) -> None:
    hkl = strongest(phase, zone, 6)
    ranking = rank_phases(observe(phase, zone, hkl, scale=1.002, told=0.002), ALL)
    best = ranking.matches[0]
    assert best.phase == phase
    assert ranking.probability_of_phase[phase] > 5 * max([0.0, *list(ranking.probability_of_phase.values())[1:]])
    assert best.zone is not None
    assert equivalent(phase, zone, best.zone)
    assert best.fits
    assert best.scale == pytest.approx(1.002, abs=3 * (best.scale_uncertainty or 0))
    structure = load_phase(phase)
    for found, given_hkl in zip(best.hkl, hkl, strict=True):
        assert found is not None
        assert tuple(found) in {tuple(row) for row in structure.symmetry.orbit(given_hkl)}


def test_a_crystal_of_its_own_kind_is_identified(observe: Observe) -> None:
    ranking = rank_phases(observe("tio2_a", (1, 0, 0), strongest("tio2_a", (1, 0, 0), 6), told=0.002), ALL)
    assert ranking.verdict == "identified"
    assert ranking.sentence.startswith("Titanium dioxide, anatase, seen along [100]: 6 of 6 peaks")


def test_the_indices_belong_together(observe: Observe) -> None:
    best = rank_phases(observe("tio2_a", (1, 0, 0), [(0, 1, 1), (0, -1, 1), (0, 2, 0), (0, 0, 4)]), ALL).matches[0]
    first, second, third, _ = (np.array(hkl) for hkl in best.hkl)
    # measured as sum and difference, whatever the equivalent chosen; each index set has the sense of its own g
    assert np.array_equal(first - second, third) or np.array_equal(second - first, third)
    assert all(np.dot(hkl, best.zone) == 0 for hkl in (first, second, third))


@pytest.mark.parametrize("rotation", [0.0, 33.0, 90.0, 179.0, 271.5])
def test_the_rotation_and_the_sense_come_back(observe: Observe, rotation: float) -> None:
    # seen along 321 a cubic pattern has no mirror line: only one of the two senses fits
    hkl = [(1, -1, -1), (0, 2, -4), (1, -3, 3), (2, -4, 2)]
    seen = observe("au", (3, 2, 1), hkl, rotation_deg=rotation, noise=0.0005, told=0.001)
    best = rank_phases(seen, [load_phase("au")]).matches[0]
    assert best.zone is not None
    proper = [r for r in load_phase("au").symmetry.laue_rotations if round(np.linalg.det(r)) == 1]
    assert any(np.array_equal(r @ best.zone, (3, 2, 1)) for r in proper)
    pattern = {s.hkl: s.direction_deg for s in zone_pattern(load_phase("au"), best.zone, d_min_nm=0.07).spots}
    for reflection, indices in zip(seen.reflections, best.hkl, strict=True):
        assert indices is not None
        row, column = reflection.g_per_nm
        on_screen = math.degrees(math.atan2(-row, column))
        off = (pattern[indices] + (best.rotation_deg or 0.0) - on_screen + 180) % 360 - 180
        assert abs(off) < 0.3


def test_a_mirrored_picture_is_the_opposite_zone(observe: Observe) -> None:
    hkl = [(1, -1, -1), (0, 2, -4), (1, -3, 3), (2, -4, 2)]
    seen = observe("au", (3, 2, 1), hkl, noise=0.0005, told=0.001)
    mirrored = replace(
        seen, reflections=tuple(replace(r, g_per_nm=(r.g_per_nm[0], -r.g_per_nm[1])) for r in seen.reflections)
    )
    one, other = (rank_phases(o, [load_phase("au")]).matches[0].zone for o in (seen, mirrored))
    assert one is not None
    assert other == (-one[0], -one[1], -one[2])


@settings(max_examples=25, deadline=None)
@given(
    st.floats(0, 360), st.integers(0, 2**31), st.permutations(range(4)), st.lists(st.booleans(), min_size=4, max_size=4)
)
def test_rotation_order_and_sign_of_the_peaks_do_not_matter(
    observe: Observe, rotation: float, seed: int, order: list[int], flips: list[bool]
) -> None:
    plain = rank_phases(observe("tio2_r", (0, 0, 1), RUTILE_001, noise=1e-4), ALL)
    seen = observe("tio2_r", (0, 0, 1), RUTILE_001, noise=1e-4, rotation_deg=rotation)
    moved = tuple(
        replace(seen.reflections[i], g_per_nm=tuple(-v if flips[i] else v for v in seen.reflections[i].g_per_nm))
        for i in order
    )
    again = rank_phases(replace(seen, reflections=moved), ALL)
    assert again.matches[0].phase == plain.matches[0].phase
    assert again.probability_of_phase["tio2_r"] == pytest.approx(plain.probability_of_phase["tio2_r"], abs=0.1)


def test_gold_and_silver_are_told_apart_by_the_pixel_size_alone(observe: Observe) -> None:
    # a = 0.40786 and 0.40862 nm: 0.19 % apart
    unsure = rank_phases(observe("au", (1, 1, 0), GOLD_110, told=0.015, noise=3e-4), ALL)
    assert unsure.verdict == "ambiguous"
    assert {"au", "ag"} <= set(unsure.credible_phases)
    named = {m.phase: {p for p, _ in m.indistinguishable_from} for m in unsure.matches if m.zone == (1, 1, 0)}
    assert "ag" in named["au"]
    assert "au" in named["ag"]
    assert "pixel size" in unsure.sentence
    sure = rank_phases(observe("au", (1, 1, 0), GOLD_110, told=0.0002, noise=1e-4), ALL)
    assert sure.matches[0].phase == "au"
    assert sure.probability_of_phase["au"] > 20 * sure.probability_of_phase.get("ag", 0.0)


def test_a_scale_that_is_off_is_found_and_said(observe: Observe) -> None:
    ranking = rank_phases(
        observe("tio2_a", (1, 0, 0), [(0, 1, 1), (0, -1, 1), (0, 2, 0), (0, 0, 4)], scale=1.03, told=0.01),
        [load_phase("tio2_a")],
    )
    assert ranking.matches[0].scale == pytest.approx(1.03, abs=0.003)
    assert "ranking-scale" in {c.code for c in ranking.cautions}


def test_different_errors_along_rows_and_columns_are_allowed_for(observe: Observe) -> None:
    seen = observe("au", (1, 1, 0), GOLD_110, noise=2e-4, told=(0.0, 0.03))
    # columns 4 % wrong, rows right
    stretched = replace(
        seen, reflections=tuple(replace(r, g_per_nm=(r.g_per_nm[0], 1.04 * r.g_per_nm[1])) for r in seen.reflections)
    )
    best = rank_phases(stretched, [load_phase("au")]).matches[0]
    assert best.fits
    assert best.scale == pytest.approx(1.02, abs=0.003)
    told_one = rank_phases(replace(stretched, pixel_size_relative_uncertainty=0.001), [load_phase("au")])
    assert not any(m.fits and m.zone == (1, 1, 0) for m in told_one.matches)


def test_one_spacing_gives_candidates_and_no_name(observe: Observe) -> None:
    ranking = rank_phases(observe("au", (1, 1, 0), [(1, -1, 1)]), ALL)
    assert ranking.verdict == "too few reflections"
    assert {"au", "ag", "al"} <= {m.phase for m in ranking.matches}
    assert all(m.zone is None for m in ranking.matches)
    assert max(ranking.probability_of_phase.values()) < 0.5
    assert "Two sets of fringes" in ranking.sentence


def test_one_row_of_reflections_is_one_spacing(observe: Observe) -> None:
    assert rank_phases(observe("au", (1, 1, 0), [(1, -1, 1), (2, -2, 2)]), ALL).verdict == "too few reflections"


def test_no_peaks_at_all() -> None:
    ranking = rank_phases(Observation(reflections=()), ALL)
    assert (ranking.verdict, ranking.matches) == ("too few reflections", ())


def test_a_crystal_that_is_not_in_the_list_is_not_given_a_name(observe: Observe) -> None:
    # sodium chloride among metals, pixel size to 0.2 %
    metals = [load_phase(p) for p in ("fe", "cr", "w", "mo", "mg", "ti", "zn")]
    hkl = [(1, -1, 1), (-1, 1, 1), (0, 0, 2), (2, -2, 0), (3, -3, 1)]
    ranking = rank_phases(observe("nacl", (1, 1, 0), hkl, told=0.002), metals)
    assert ranking.verdict == "unidentified"
    assert ranking.unlisted_probability > 0.9


def test_reflections_like_nothing_are_unidentified() -> None:
    def peak(d: float, direction: float) -> ObservedReflection:
        t = math.radians(direction)
        return ObservedReflection(
            g_per_nm=(-math.sin(t) / d, math.cos(t) / d), covariance_per_nm2=((1e-6, 0), (0, 1e-6))
        )

    seen = Observation(reflections=(peak(1.9, 0), peak(1.7, 71)), pixel_size_relative_uncertainty=0.001)
    ranking = rank_phases(seen, [load_phase("au"), load_phase("fe")])
    assert ranking.verdict in ("unidentified", "too few reflections")
    assert not any(m.fits for m in ranking.matches)


def test_two_grains_are_not_one_crystal(observe: Observe) -> None:
    one = observe("au", (1, 1, 0), GOLD_110, rotation_deg=10, noise=5e-4)
    other = observe("tio2_a", (1, 0, 0), [(0, 1, 1), (0, -1, 1), (0, 2, 0), (0, 0, 4)], rotation_deg=55, noise=5e-4)
    ranking = rank_phases(replace(one, reflections=one.reflections + other.reflections), ALL)
    assert ranking.verdict == "more than one crystal"
    assert ranking.second_crystal is not None
    pair = {ranking.matches[0].phase, ranking.second_crystal.phase}
    assert "tio2_a" in pair
    assert "one grain" in ranking.sentence


def test_two_grains_of_one_phase_are_not_one_crystal(observe: Observe) -> None:
    one = observe("au", (1, 1, 0), GOLD_110, rotation_deg=10, noise=5e-4)
    other = observe("au", (1, 1, 0), GOLD_110, rotation_deg=37, noise=5e-4)
    assert (
        rank_phases(replace(one, reflections=one.reflections + other.reflections), ALL).verdict
        == "more than one crystal"
    )


def test_a_weak_false_peak_changes_little(observe: Observe) -> None:
    clean = rank_phases(observe("tio2_a", (1, 0, 0), [(0, 1, 1), (0, -1, 1), (0, 2, 0), (0, 0, 4)]), ALL)
    seen = observe(
        "tio2_a",
        (1, 0, 0),
        [(0, 1, 1), (0, -1, 1), (0, 2, 0), (0, 0, 4)],
        extra=[(0.31, 3.0)],
        strengths=[100, 90, 80, 70, 12],
    )
    spoiled = rank_phases(seen, ALL)
    assert spoiled.matches[0].phase == clean.matches[0].phase == "tio2_a"
    assert spoiled.matches[0].hkl[4] is None
    assert spoiled.verdict != "more than one crystal"


def test_sums_and_harmonics_are_indexed_but_are_no_evidence(observe: Observe) -> None:
    hkl = [*GOLD_110, (2, -2, 2), (1, -1, 3)]
    marked = observe("au", (1, 1, 0), hkl, roles=["reflection"] * 2 + ["combination"] * 4)
    ranking = rank_phases(marked, ALL)
    best = next(m for m in ranking.matches if m.phase == "au")
    assert all(indices is not None for indices in best.hkl)
    assert best.degrees_of_freedom == 3  # of two peaks: 4 numbers and 3 priors less 4 unknowns
    moved = replace(
        marked,
        reflections=tuple(
            replace(r, g_per_nm=(1.002 * r.g_per_nm[0], r.g_per_nm[1])) if r.role == "combination" else r
            for r in marked.reflections
        ),
    )
    assert next(m for m in rank_phases(moved, ALL).matches if m.phase == "au").chi_squared == pytest.approx(
        best.chi_squared
    )


def test_a_peak_whose_place_is_not_trusted_does_not_count(observe: Observe) -> None:
    seen = observe("au", (1, 1, 0), GOLD_110, roles=["reflection", "reflection", "uncertain", "reflection"])
    astray = replace(
        seen,
        reflections=tuple(
            replace(r, g_per_nm=(1.05 * r.g_per_nm[0], 1.05 * r.g_per_nm[1])) if r.role == "uncertain" else r
            for r in seen.reflections
        ),
    )
    one, other = (rank_phases(o, ALL).probability_of_phase["au"] for o in (seen, astray))
    assert one == pytest.approx(other, rel=1e-6)


def test_strong_reflections_that_are_missing_are_named(observe: Observe) -> None:
    best = rank_phases(
        observe("au", (1, 1, 0), [(1, -1, 1), (2, -2, 0), (3, -3, 1)], told=0.002), [load_phase("au")]
    ).matches[0]
    families = {tuple(sorted(map(abs, hkl))) for hkl in best.missing}
    assert families & {(0, 0, 2), (1, 1, 1)}


def test_an_absent_reflection_speaks_for_germanium_only_mildly(observe: Observe) -> None:
    # gallium arsenide and germanium differ by 0.07 % and in 002, which double scattering shows in germanium too
    ranking = rank_phases(observe("ge", (1, 1, 0), [(1, -1, 1), (-1, 1, 1), (2, -2, 0), (1, -1, 3)], told=0.005), ALL)
    assert {"ge", "gaas"} <= set(ranking.credible_phases)
    best = {m.phase: m for m in ranking.matches if m.zone == (1, 1, 0)}
    assert "gaas" in {p for p, _ in best["ge"].indistinguishable_from}


def test_a_polar_axis_lists_its_opposite(observe: Observe) -> None:
    best = rank_phases(observe("zno", (0, 0, 1), [(1, 0, 0), (0, 1, 0), (1, 1, 0)]), [load_phase("zno")]).matches[0]
    assert best.zone is not None
    assert ("zno", tuple(-i for i in best.zone)) in best.indistinguishable_from
    centric = rank_phases(observe("au", (1, 1, 0), GOLD_110), [load_phase("au")]).matches[0]
    assert all(zone != (-1, -1, 0) for _, zone in centric.indistinguishable_from)


def test_hazards_sources_and_the_usual_care_are_said(observe: Observe) -> None:
    quartz = rank_phases(
        observe("quartz", (0, 0, 1), [(1, 0, 0), (0, 1, 0), (1, 1, 0)], told=0.002), [load_phase("quartz")]
    )
    assert {"hazard-quartz", "evidence-not-certificate"} <= {c.code for c in quartz.cautions}
    hematite = rank_phases(
        observe("fe2o3_a", (0, 0, 1), [(1, 1, 0), (-1, 2, 0), (3, 0, 0)], told=0.002), [load_phase("fe2o3_a")]
    )
    assert "structure-from-memory-fe2o3_a" in {c.code for c in hematite.cautions}


def test_a_pixel_size_of_unknown_uncertainty_is_taken_wide_and_said(observe: Observe) -> None:
    ranking = rank_phases(observe("au", (1, 1, 0), GOLD_110, told=None), ALL)
    assert "ranking-pixel-size" in {c.code for c in ranking.cautions}
    assert "scale known to 5 %" in ranking.assumptions
    assert len(ranking.credible_phases) > 3


def test_forbidden_reflections_are_marked(observe: Observe) -> None:
    best = rank_phases(
        observe("si", (1, 1, 0), [(1, -1, 1), (-1, 1, 1), (0, 0, 2), (2, -2, 0)], told=0.002), [load_phase("si")]
    ).matches[0]
    assert best.forbidden == (False, False, True, False)


def test_probabilities_and_pulls_are_what_they_say(observe: Observe) -> None:
    ranking = rank_phases(observe("al", (1, 1, 0), GOLD_110, noise=0.002), ALL)
    assert sum(ranking.probability_of_phase.values()) + ranking.unlisted_probability == pytest.approx(1)
    assert [m.probability for m in ranking.matches] == sorted((m.probability for m in ranking.matches), reverse=True)
    aluminium = next(m for m in ranking.matches if m.phase == "al")
    for pull, d in zip(aluminium.pulls, aluminium.expected_d_nm, strict=True):
        assert abs(pull or 0) < 5
        assert d == pytest.approx(0.2338, rel=0.5)


@pytest.mark.parametrize("shared", ["scale", "phase"])
def test_regions_of_one_picture_help_each_other(observe: Observe, shared: str) -> None:
    # a certain crystal fixes the scale, and with it which of the cubic metals the other is
    known = observe(
        "tio2_a", (1, 0, 0), [(0, 1, 1), (0, -1, 1), (0, 2, 0), (0, 0, 4)], scale=1.01, noise=2e-4, told=0.015
    )
    other = observe("pd", (1, 1, 0), GOLD_110, scale=1.01, noise=2e-4, told=0.015)
    alone = rank_phases(other, ALL)
    assert len(alone.credible_phases) > 1
    if shared == "scale":
        together = rank_regions([known, other], ALL, shared="scale")
        assert together[0].matches[0].phase == "tio2_a"
        assert together[1].probability_of_phase["pd"] > max(0.5, 2 * alone.probability_of_phase["pd"])
    else:
        second = observe("pd", (1, 0, 0), [(0, 2, 0), (0, 0, 2), (0, 2, 2)], scale=1.01, noise=2e-4, told=0.015)
        together = rank_regions([other, second], ALL, shared="phase")
        assert together[0].probability_of_phase.keys() & {"pd", "pt"}
        first, again = (t.probability_of_phase for t in together)
        assert first["pd"] == pytest.approx(again["pd"], abs=0.02)


def test_one_region_ranked_together_is_ranked_alone(observe: Observe) -> None:
    seen = observe("au", (1, 1, 0), GOLD_110)
    assert rank_regions([seen], ALL)[0].probability_of_phase == rank_phases(seen, ALL).probability_of_phase


def test_what_cannot_be_ranked_is_refused(observe: Observe) -> None:
    with pytest.raises(PhaseError, match="no phases"):
        rank_phases(observe("au", (1, 1, 0), GOLD_110), [])
    with pytest.raises(SettingsError, match="shared"):
        rank_regions([observe("au", (1, 1, 0), GOLD_110)], ALL, shared="both")  # type: ignore[arg-type]
    with pytest.raises(SettingsError, match="distortion"):
        RankingSettings(distortion=0.0)


@pytest.mark.parametrize(
    ("change", "named"),
    [
        ({"g_per_nm": (0.0, 0.0)}, "g_per_nm"),
        ({"g_per_nm": (float("nan"), 1.0)}, "g_per_nm"),
        ({"covariance_per_nm2": ((1.0, 2.0), (0.0, 1.0))}, "symmetric"),
        ({"covariance_per_nm2": ((1.0, 2.0), (2.0, 1.0))}, "negative"),
        ({"signal_to_noise": -1.0}, "signal_to_noise"),
        ({"role": "rumour"}, "role"),
    ],
)
def test_reflections_that_are_none_are_refused(change: dict[str, object], named: str) -> None:
    good = {"g_per_nm": (1.0, 2.0), "covariance_per_nm2": ((1e-4, 0.0), (0.0, 1e-4))}
    with pytest.raises(SettingsError, match=named):
        ObservedReflection(**{**good, **change})  # type: ignore[arg-type]


def test_a_measurement_of_gold_is_ranked(make_measurement: Callable[..., Measurement]) -> None:
    measurement = make_measurement()
    seen = observation_of(measurement)
    assert [r.role for r in seen.reflections] == ["reflection", "reflection", "combination"]
    assert seen.pixel_size_relative_uncertainty == 0.015
    # along g the crystal's part adds to the fit's: hypot of both over d^2
    n = np.array(seen.reflections[2].g_per_nm) * 0.2039
    along = n @ np.array(seen.reflections[2].covariance_per_nm2) @ n
    fit = n @ measurement.peaks[2].g_covariance_per_nm2 @ n
    assert along == pytest.approx(fit + (5e-4 / 0.2039) ** 2)
    ranking = rank_phases(measurement, ALL)
    assert "au" in ranking.credible_phases
    gold = next(m for m in ranking.matches if m.phase == "au")
    assert gold.zone == (1, 1, 0)
    assert {tuple(sorted(map(abs, hkl))) for hkl in gold.hkl if hkl} == {(1, 1, 1), (0, 0, 2)}


def test_a_withheld_spacing_is_not_trusted(
    make_measurement: Callable[..., Measurement], make_peak: Callable[..., Peak]
) -> None:
    peaks = (make_peak(0.2355, 35.264), make_peak(0.2039, 90.0, withheld="broken fringe", d_nm=None))
    assert [r.role for r in observation_of(make_measurement(peaks=peaks)).reflections] == ["reflection", "uncertain"]


def test_a_picture_without_a_pixel_size_cannot_be_compared(make_measurement: Callable[..., Measurement]) -> None:
    bare = make_measurement(Micrograph(np.zeros((64, 64)), name="bare"))
    with pytest.raises(CalibrationError, match="pixel size"):
        rank_phases(bare, ALL)


def test_nothing_heavy_is_loaded_before_a_ranking_is_asked_for() -> None:
    import subprocess
    import sys

    code = "import fringespan, sys; print([m for m in ('numba', 'gemmi', 'scipy', 'matplotlib') if m in sys.modules])"
    assert (
        subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.strip() == "[]"
    )


def test_a_region_that_was_seen_to_hold_another_crystal_is_not_one(observe: Observe) -> None:
    seen = observe("tio2_a", (1, 0, 0), strongest("tio2_a", (1, 0, 0), 6), told=0.002)
    ranking = rank_phases(replace(seen, holds_other_crystal=True), ALL)
    assert ranking.verdict == "more than one crystal"
    assert ranking.matches[0].phase == "tio2_a"
    assert "one grain" in ranking.sentence


def test_preparing_leaves_nothing_slow_for_the_first_region(observe: Observe) -> None:
    import time

    prepare_ranking(ALL)
    start = time.process_time()
    rank_phases(observe("tio2_a", (1, 0, 0), strongest("tio2_a", (1, 0, 0), 6)), ALL)
    assert time.process_time() - start < 0.1  # a compiler would take seconds, tables a good part of one


def test_candidates_that_are_not_it_are_ruled_out_with_the_reason(observe: Observe) -> None:
    asked = [load_phase(p) for p in ("au", "tio2_a", "fe", "mgo")]
    ranking = rank_phases(observe("au", (1, 1, 0), GOLD_110, told=0.005, noise=5e-4), asked)
    assert ranking.matches[0].phase == "au"
    assert set(ranking.ruled_out) == {"tio2_a", "fe", "mgo"}
    assert "pixel size" in ranking.ruled_out["mgo"]  # the same net, 3 % larger
    assert all(f"{phase.name} is ruled out" in ranking.sentence for phase in asked[1:])
    assert rank_phases(observe("au", (1, 1, 0), GOLD_110), ALL).ruled_out == {}
