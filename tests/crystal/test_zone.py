"""Zone-axis patterns: the zone law, the sense on the screen, double scattering, the Ewald sphere."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.crystal.reflections import angle_between_deg
from fringespan.crystal.zone import ZonePattern, zone_axis, zone_pattern
from fringespan.exceptions import PhaseError, SettingsError

CASES = tomllib.loads((Path(__file__).parent.parent / "known" / "double_scattering.toml").read_text())["case"]


def angle_on_screen(pattern: ZonePattern, hkl1: tuple[int, int, int], hkl2: tuple[int, int, int]) -> float:
    directions = {spot.hkl: spot.direction_deg for spot in pattern.spots}
    return (directions[hkl2] - directions[hkl1]) % 360


def test_gold_110_pattern_has_the_textbook_angles() -> None:
    # the [110] pattern of every fcc textbook: 111 and 11-1 70.53 degrees apart, 002 halfway between
    pattern = zone_pattern(load_phase("au"), (1, 1, 0), d_min_nm=0.14)
    assert angle_on_screen(pattern, (1, -1, 1), (-1, 1, 1)) in (
        pytest.approx(109.471, abs=1e-3),
        pytest.approx(250.529, abs=1e-3),
    )
    allowed = {spot.hkl for spot in pattern.spots if not spot.forbidden}
    assert allowed == {(s * h, -s * h, s * last) for s in (1, -1) for h, last in ((1, 1), (1, -1), (0, 2), (2, 0))}


def test_the_sense_is_that_of_a_viewer_against_the_zone_axis() -> None:
    # a cubic crystal with c towards the viewer, a to the right, has b pointing up: counter-clockwise from a
    pattern = zone_pattern(load_phase("srtio3"), (0, 0, 1), d_min_nm=0.2)
    assert angle_on_screen(pattern, (1, 0, 0), (0, 1, 0)) == pytest.approx(90)
    opposite = zone_pattern(load_phase("srtio3"), (0, 0, -1), d_min_nm=0.2)
    assert angle_on_screen(opposite, (1, 0, 0), (0, 1, 0)) == pytest.approx(270)


def test_rows_run_downwards() -> None:
    spot = next(
        s
        for s in zone_pattern(load_phase("srtio3"), (0, 0, 1), d_min_nm=0.2).spots
        if s.direction_deg == pytest.approx(90)
    )
    assert spot.g_per_nm == (pytest.approx(-1 / 0.3905), pytest.approx(0, abs=1e-12))


@pytest.mark.parametrize("case", CASES, ids=lambda c: f"{c['phase']}{c['hkl']}@{c['zone']}")
def test_double_scattering_depends_on_the_zone(case: dict[str, object]) -> None:
    pattern = zone_pattern(load_phase(str(case["phase"])), case["zone"], d_min_nm=0.12)
    spot = next(s for s in pattern.spots if list(s.hkl) == case["hkl"])
    expected = "absence, reachable by double scattering" if case["reachable"] else "absence"
    assert spot.forbidden == expected


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from(built_in_phases()),
    st.tuples(*[st.integers(-3, 3)] * 3).filter(any),
)
def test_every_pattern_obeys_the_zone_law_and_the_cell(phase, zone) -> None:
    pattern = zone_pattern(phase, zone, d_min_nm=0.15)
    by_hkl = {spot.hkl: spot for spot in pattern.spots}
    for spot in pattern.spots:
        assert np.dot(spot.hkl, pattern.zone) == 0
        opposite = by_hkl[tuple(-i for i in spot.hkl)]
        assert opposite.g_per_nm == (
            pytest.approx(-spot.g_per_nm[0], abs=1e-9),
            pytest.approx(-spot.g_per_nm[1], abs=1e-9),
        )
    for first, second in zip(pattern.spots, pattern.spots[1:], strict=False):
        on_screen = abs((first.direction_deg - second.direction_deg + 180) % 360 - 180)
        assert on_screen == pytest.approx(angle_between_deg(phase, first.hkl, second.hkl), abs=1e-6)


def test_excitation_error_and_scattering_angle() -> None:
    # s = -lambda g^2 / 2 and 2 theta = 2 asin(lambda / 2d) with lambda = 2.508 pm at 200 kV (textbook values)
    spot = next(
        s for s in zone_pattern(load_phase("au"), (1, 0, 0), d_min_nm=0.2, voltage_kv=200).spots if s.hkl == (0, 2, 0)
    )
    assert spot.excitation_error_per_nm == pytest.approx(-0.002508 / 2 / spot.d_nm**2, rel=1e-3)
    assert spot.two_theta_mrad == pytest.approx(2.508 / spot.d_nm, rel=1e-3)


def test_four_indices_name_the_same_zone() -> None:
    titanium = load_phase("ti")
    assert zone_axis((2, -1, -1, 0)) == (1, 0, 0)
    assert zone_pattern(titanium, (2, -1, -1, 0)).zone == (1, 0, 0)
    assert zone_pattern(titanium, (0, 0, 0, 2)).zone == (0, 0, 1)


@pytest.mark.parametrize("zone", [(0, 0, 0), (1, 0), (1, 1, 1, 0)])
def test_a_zone_axis_that_is_none_is_refused(zone: tuple[int, ...]) -> None:
    with pytest.raises(PhaseError):
        zone_pattern(load_phase("au"), zone)


def test_a_senseless_smallest_spacing_is_refused() -> None:
    with pytest.raises(SettingsError):
        zone_pattern(load_phase("au"), (1, 0, 0), d_min_nm=-1)
