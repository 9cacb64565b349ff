"""Expected reflections, held against powder cards, handbook angles, closed formulas, and ase's own symmetry data."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest
from ase.cell import Cell
from ase.spacegroup import Spacegroup
from numpy.testing import assert_allclose

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import (
    angle_between_deg,
    expected_reflections,
    hkl_within,
    reflection_arrays,
    structure_factors,
)
from fringespan.exceptions import CalibrationError, PhaseError, SettingsError

KNOWN = Path(__file__).parent.parent / "known"
POWDER = tomllib.loads((KNOWN / "d_spacings.toml").read_text())["rows"]
ANGLES = tomllib.loads((KNOWN / "crystal_angles.toml").read_text())["rows"]
PHASES = [pytest.param(phase, id=phase.id) for phase in built_in_phases()]


@pytest.mark.parametrize(("phase", "h", "k", "last", "d_nm"), POWDER)
def test_spacings_agree_with_the_powder_cards(phase: str, h: int, k: int, last: int, d_nm: float) -> None:
    # a card is the measurement of one specimen, rounded: 0.2 per cent covers both
    families = expected_reflections(load_phase(phase), d_nm * 0.98)
    orbit = {tuple(row) for row in load_phase(phase).symmetry.orbit((h, k, last))}
    found = next(r for r in families if r.hkl in orbit)
    assert not found.forbidden
    assert found.d_nm == pytest.approx(d_nm, rel=2e-3)


@pytest.mark.parametrize("row", ANGLES, ids=lambda row: "-".join(map(str, row[:6])))
def test_angles_agree_with_the_handbook(row: list[float]) -> None:
    h1, k1, l1, h2, k2, l2, angle = row
    planes = (int(h1), int(k1), int(l1)), (int(h2), int(k2), int(l2))
    assert angle_between_deg(load_phase("si"), *planes) == pytest.approx(angle, abs=0.0051)


@pytest.mark.parametrize(
    ("phase", "planes", "expected"),
    [  # closed formulas: tan(angle) = (c / l) * sqrt(4/3 (h2 + hk + k2)) / a for a hexagonal cell, from 00l
        pytest.param(
            "graphite", ((0, 0, 2), (1, 0, 1)), np.degrees(np.arctan(6.711 * np.sqrt(4 / 3) / 2.464)), id="hexagonal"
        ),
        pytest.param("tio2_r", ((0, 0, 1), (1, 0, 1)), np.degrees(np.arctan(2.9587 / 4.5937)), id="tetragonal"),
        pytest.param("zro2_m", ((1, 0, 0), (0, 0, 1)), 180 - 99.23, id="monoclinic"),
    ],
)
def test_angles_agree_with_closed_formulas(
    phase: str, planes: tuple[tuple[int, int, int], tuple[int, int, int]], expected: float
) -> None:
    assert angle_between_deg(load_phase(phase), *planes) == pytest.approx(expected, abs=1e-9)


@pytest.mark.parametrize("phase", PHASES)
def test_spacings_agree_with_an_independent_cell(phase: Phase) -> None:
    hkl = hkl_within(phase, 0.08)
    theirs = np.linalg.norm(hkl @ Cell.fromcellpar(phase.cell_angstrom_deg).reciprocal(), axis=1)
    ours = np.linalg.norm(hkl @ phase.reciprocal_basis, axis=1)
    assert_allclose(ours, theirs, rtol=1e-12)


def _positions_by_ase(phase: Phase) -> list[tuple[int, np.ndarray]]:
    import gemmi

    group = gemmi.find_spacegroup_by_name(phase.space_group)
    theirs = Spacegroup(group.number, 2 if group.ext == "2" else 1)
    return [(i, theirs.equivalent_sites([site.position], symprec=1e-4)[0]) for i, site in enumerate(phase.sites)]


@pytest.mark.parametrize("phase", PHASES)
def test_intensities_and_absences_agree_with_an_independent_symmetry_expansion(phase: Phase) -> None:
    hkl = hkl_within(phase, 0.08)
    s_squared = np.sum((hkl @ Cell.fromcellpar(phase.cell_angstrom_deg).reciprocal()) ** 2, axis=1) / 4
    theirs = np.zeros(len(hkl), dtype=complex)
    for index, positions in _positions_by_ase(phase):
        site = phase.sites[index]
        factor = _doyle_turner_like(site.element, s_squared) * np.exp(-site.b_iso_angstrom2 * s_squared)
        theirs += site.occupancy * factor * np.exp(2j * np.pi * hkl @ positions.T).sum(axis=1)
    ours = np.abs(structure_factors(phase, hkl)) ** 2
    strongest = ours.max()
    assert_allclose(ours / strongest, np.abs(theirs) ** 2 / strongest, atol=1e-9)
    assert np.array_equal(reflection_arrays(phase, 0.08).is_absent, np.abs(theirs) ** 2 < 1e-9 * strongest)


def _doyle_turner_like(element: str, s_squared: np.ndarray) -> np.ndarray:
    import gemmi

    table = gemmi.Element(element).c4322
    return sum(a * np.exp(-b * s_squared) for a, b in zip(table.a, table.b, strict=True))


@pytest.mark.parametrize(("element", "tolerance"), [("C", 0.02), ("O", 0.02), ("Si", 0.02), ("Fe", 0.02), ("Au", 0.02)])
def test_scattering_factors_obey_the_mott_bethe_law(element: str, tolerance: float) -> None:
    # f_e = (Z - f_x) / (8 pi^2 a0 s^2), f_x from the X-ray table of the International Tables: another table
    import gemmi

    for s in np.linspace(0.15, 1.2, 12):
        x_ray = gemmi.Element(element).it92.calculate_sf(s * s)
        mott_bethe = (gemmi.Element(element).atomic_number - x_ray) / (8 * np.pi**2 * 0.529177 * s * s)
        assert _doyle_turner_like(element, np.array([s * s]))[0] == pytest.approx(mott_bethe, rel=tolerance)


@pytest.mark.parametrize("phase", PHASES)
def test_systematic_absences_never_hide_a_reflection_with_intensity(phase: Phase) -> None:
    arrays = reflection_arrays(phase, 0.1)
    by_symmetry = phase.symmetry.is_systematically_absent(arrays.hkl)
    assert not np.any(by_symmetry & (arrays.relative_intensity > 0))
    import gemmi

    by_gemmi = gemmi.find_spacegroup_by_name(phase.space_group).operations().systematic_absences(arrays.hkl)
    assert np.array_equal(by_symmetry, by_gemmi)


@pytest.mark.parametrize(
    ("phase", "multiplicities"),
    [  # textbook multiplicities of the cubic, hexagonal and tetragonal forms (International Tables, from memory)
        pytest.param(
            "au", {(1, 1, 1): 8, (2, 0, 0): 6, (2, 2, 0): 12, (3, 1, 1): 24, (3, 3, 1): 24, (4, 2, 0): 24}, id="m-3m"
        ),
        pytest.param("ti", {(1, 0, 0): 6, (0, 0, 2): 2, (1, 0, 1): 12, (1, 1, 0): 6}, id="6/mmm"),
        pytest.param("tio2_r", {(1, 1, 0): 4, (1, 0, 1): 8, (2, 1, 1): 16, (0, 0, 2): 2}, id="4/mmm"),
        pytest.param("zro2_m", {(1, 1, 1): 4, (0, 2, 0): 2, (2, 0, 0): 2}, id="2/m"),
    ],
)
def test_multiplicities(phase: str, multiplicities: dict[tuple[int, int, int], int]) -> None:
    found = {r.hkl: r.multiplicity for r in expected_reflections(load_phase(phase), 0.09)}
    assert {hkl: found[hkl] for hkl in multiplicities} == multiplicities


def test_families_of_equal_spacing_stay_apart() -> None:
    cubic = {r.hkl: r for r in expected_reflections(load_phase("au"), 0.075)}
    assert cubic[3, 3, 3].d_nm == pytest.approx(cubic[5, 1, 1].d_nm, rel=1e-12)
    assert (cubic[3, 3, 3].multiplicity, cubic[5, 1, 1].multiplicity) == (8, 24)


@pytest.mark.parametrize(
    ("phase", "hkl", "reason"),
    [
        ("au", (1, 0, 0), "centring"),
        ("fe", (1, 0, 0), "centring"),
        ("si", (2, 0, 0), "absence, reachable by double scattering"),
        ("si", (1, 1, 0), "centring"),
        ("ti", (0, 0, 1), "absence, reachable by double scattering"),
        ("nacl", (1, 1, 1), False),
        ("gaas", (2, 0, 0), False),
    ],
)
def test_why_a_reflection_is_missing(phase: str, hkl: tuple[int, int, int], reason: object) -> None:
    assert next(r.forbidden for r in expected_reflections(load_phase(phase), 0.2) if r.hkl == hkl) == reason


def test_an_absence_that_no_pair_reaches_is_called_so() -> None:
    # rock salt from equal atoms is simple cubic: F of the odd reflections vanishes, and no sum of even ones is odd
    from dataclasses import replace

    salt = load_phase("nacl")
    alike = replace(salt, sites=tuple(replace(site, element="Na") for site in salt.sites))
    assert {r.hkl: r.forbidden for r in expected_reflections(alike, 0.2)}[1, 1, 1] == "absence"


def test_the_strongest_reflection_has_intensity_one_and_the_order_is_by_spacing() -> None:
    families = expected_reflections(load_phase("quartz"), 0.1)
    assert max(r.relative_intensity or 0 for r in families) == pytest.approx(1)
    assert [r.d_nm for r in families] == sorted((r.d_nm for r in families), reverse=True)


def test_hexagonal_cells_have_four_indices_and_cubic_ones_do_not() -> None:
    assert next(r.hkil for r in expected_reflections(load_phase("ti"), 0.2) if r.hkl == (1, 0, 1)) == (1, 0, -1, 1)
    assert expected_reflections(load_phase("au"), 0.2)[0].hkil is None


def test_scattering_angle_of_the_beam() -> None:
    # Bragg's law with the wavelength of 200 kV electrons, 2.5079 pm (standard tables)
    [gold111] = [r for r in expected_reflections(load_phase("au"), 0.23, voltage_kv=200) if r.hkl == (1, 1, 1)]
    assert gold111.two_theta_mrad == pytest.approx(2000 * np.arcsin(0.0025079 / (2 * gold111.d_nm)), rel=1e-4)


@pytest.mark.parametrize("d_min", [0.0, -1.0, float("nan"), float("inf"), 0.001])
def test_a_senseless_smallest_spacing_is_refused(d_min: float) -> None:
    with pytest.raises(SettingsError, match="d_min_nm"):
        expected_reflections(load_phase("au"), d_min)


def test_a_senseless_voltage_is_refused() -> None:
    with pytest.raises(CalibrationError, match="voltage"):
        expected_reflections(load_phase("au"), 0.1, voltage_kv=-3)


def test_an_unknown_element_gives_spacings_without_intensities() -> None:
    from dataclasses import replace

    gold = load_phase("au")
    unknown = replace(gold, sites=(replace(gold.sites[0], element="X"),))
    first = next(r for r in expected_reflections(unknown, 0.2) if not r.forbidden)
    assert (first.hkl, first.relative_intensity) == ((1, 1, 1), None)
    with pytest.raises(PhaseError, match="'X'"):
        structure_factors(unknown, np.array([[1, 1, 1]]))
