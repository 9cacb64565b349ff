"""Lattice parameters, means, compositions: what follows from a match."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from fringespan.crystal.library import load_phase
from fringespan.exceptions import SettingsError
from fringespan.measurement import Measurement
from fringespan.ranking.averages import weighted_mean
from fringespan.ranking.composition import alloy_composition
from fringespan.ranking.lattice_parameters import IndexedSpacing, indexed_spacings, lattice_parameters
from fringespan.ranking.rank import rank_phases


def spacings(
    phase: str, hkl: list[tuple[int, int, int]], scale: float = 1.0, relative: float = 1e-3
) -> list[IndexedSpacing]:
    basis = load_phase(phase).reciprocal_basis * 10
    values = [scale / float(np.linalg.norm(np.array(h) @ basis)) for h in hkl]
    return [IndexedSpacing(hkl=h, d_nm=d, d_uncertainty_nm=relative * d) for h, d in zip(hkl, values, strict=True)]


# powder cards (from memory): lines of gold, titanium, rutile and the cells that were derived from them
@pytest.mark.parametrize(
    ("phase", "lines", "cell"),
    [
        pytest.param("au", {(1, 1, 1): 0.2355, (2, 0, 0): 0.2039, (2, 2, 0): 0.1442}, (0.4079,) * 3, id="gold"),
        pytest.param("ti", {(1, 0, 0): 0.2555, (0, 0, 2): 0.2341, (1, 0, 1): 0.2243}, (0.2950, 0.2950, 0.4683), id="titanium"),
        pytest.param("tio2_r", {(1, 1, 0): 0.3247, (1, 0, 1): 0.2487, (2, 1, 1): 0.1687}, (0.4593, 0.4593, 0.2959), id="rutile"),
    ],
)  # fmt: skip
def test_cells_come_out_of_the_powder_lines(
    phase: str, lines: dict[tuple[int, int, int], float], cell: tuple[float, float, float]
) -> None:
    seen = [IndexedSpacing(hkl=hkl, d_nm=d, d_uncertainty_nm=5e-5) for hkl, d in lines.items()]
    result = lattice_parameters(load_phase(phase), seen, scale_relative_uncertainty=0.0)
    assert result.lengths_nm == pytest.approx(cell, rel=8e-4)
    assert result.held == ""


@pytest.mark.parametrize("phase", ["au", "mg", "tio2_a", "lifepo4", "zro2_m", "quartz"])
def test_exact_spacings_give_the_exact_cell(phase: str) -> None:
    hkl = [
        (1, 0, 0),
        (0, 1, 0),
        (0, 0, 1),
        (1, 1, 0),
        (1, 0, 1),
        (0, 1, 1),
        (1, 1, 1),
        (1, -1, 1),
        (2, 0, 1),
        (-1, 0, 1),
    ]
    result = lattice_parameters(load_phase(phase), spacings(phase, hkl), scale_relative_uncertainty=0.01)
    structure = load_phase(phase)
    assert result.lengths_nm == pytest.approx(structure.lengths_nm)
    assert result.angles_deg == pytest.approx(structure.angles_deg)
    for length, total, fit in zip(
        result.lengths_nm, result.length_uncertainties_nm, result.fit_uncertainties_nm, strict=True
    ):
        assert total == pytest.approx(math.hypot(fit or 0, 0.01 * (length or 0)))


def test_an_edge_that_no_spacing_shows_is_not_given() -> None:
    result = lattice_parameters(load_phase("mg"), spacings("mg", [(1, 0, 0), (1, 1, 0)], scale=1.01))
    assert result.lengths_nm[0] == pytest.approx(1.01 * 0.32094)
    assert result.lengths_nm[2] is None
    assert result.length_uncertainties_nm == (None, None, None)  # the pixel size's is not stated


def test_too_few_spacings_hold_the_shape() -> None:
    result = lattice_parameters(load_phase("tio2_r"), spacings("tio2_r", [(1, 0, 1)], scale=1.02))
    assert result.held == "shape of the cell"
    assert result.lengths_nm == pytest.approx([1.02 * v for v in load_phase("tio2_r").lengths_nm])
    monoclinic = lattice_parameters(load_phase("zro2_m"), spacings("zro2_m", [(1, 1, 1), (-1, 1, 1)], scale=0.99))
    assert monoclinic.lengths_nm == pytest.approx([0.99 * v for v in load_phase("zro2_m").lengths_nm])


def test_uncertainty_agrees_with_monte_carlo() -> None:
    rng = np.random.default_rng(3)
    exact = spacings("ti", [(1, 0, 0), (0, 0, 2), (1, 0, 1), (1, 1, 0)])
    draws = []
    for _ in range(400):
        noisy = [replace(s, d_nm=s.d_nm + s.d_uncertainty_nm * rng.normal()) for s in exact]
        draws.append(lattice_parameters(load_phase("ti"), noisy).lengths_nm)
    spread = np.std(np.array(draws, dtype=float), axis=0)
    stated = lattice_parameters(load_phase("ti"), exact).fit_uncertainties_nm
    assert spread[0] == pytest.approx(stated[0], rel=0.15)
    assert spread[2] == pytest.approx(stated[2], rel=0.15)


def test_spacings_that_disagree_widen_the_uncertainty() -> None:
    good = spacings("au", [(1, 1, 1), (2, 0, 0), (2, 2, 0)], relative=1e-4)
    bad = [good[0], replace(good[1], d_nm=good[1].d_nm * 1.002), good[2]]
    agree, disagree = (lattice_parameters(load_phase("au"), s) for s in (good, bad))
    assert disagree.chi_squared > 50
    assert (disagree.fit_uncertainties_nm[0] or 0) > 5 * (agree.fit_uncertainties_nm[0] or 1)


def test_a_match_gives_the_spacings_with_their_indices(make_measurement: Callable[..., Measurement]) -> None:
    measurement = make_measurement()
    gold = next(m for m in rank_phases(measurement, [load_phase("au")]).matches if m.phase == "au")
    seen = indexed_spacings(measurement, gold)
    assert len(seen) == 2  # the third is the sum of the others
    cell = lattice_parameters(load_phase("au"), seen, scale_relative_uncertainty=0.015)
    assert cell.lengths_nm[0] == pytest.approx(0.2355 * math.sqrt(3), rel=1e-3)
    assert cell.length_uncertainties_nm[0] == pytest.approx(0.015 * 0.408, rel=0.05)


def test_no_spacing_gives_no_cell() -> None:
    with pytest.raises(SettingsError, match="at least one spacing"):
        lattice_parameters(load_phase("au"), [])
    with pytest.raises(SettingsError, match="hkl"):
        IndexedSpacing(hkl=(0, 0, 0), d_nm=0.2, d_uncertainty_nm=0.001)
    with pytest.raises(SettingsError, match="d_uncertainty_nm"):
        IndexedSpacing(hkl=(1, 0, 0), d_nm=0.2, d_uncertainty_nm=0.0)


def test_a_weighted_mean_of_what_agrees() -> None:
    # textbook case: weights 1/u^2; 10.0(1) and 10.4(2) give 10.08(9)
    result = weighted_mean([10.0, 10.4], [0.1, 0.2])
    assert result.mean == pytest.approx(10.08)
    assert result.chi_squared == pytest.approx(3.2)
    assert result.probability == pytest.approx(0.0736, abs=1e-3)  # chi-squared tables, 1 degree of freedom
    assert result.is_consistent
    assert result.uncertainty == pytest.approx(math.sqrt(0.008) * math.sqrt(3.2))


def test_a_weighted_mean_of_what_disagrees_says_so() -> None:
    result = weighted_mean([0.4078, 0.4090, 0.4079], [1e-4] * 3)
    assert not result.is_consistent
    assert result.uncertainty > 3e-4


def test_a_common_error_does_not_average_out() -> None:
    many = weighted_mean([0.408] * 100, [1e-4] * 100, common_relative_uncertainty=0.01)
    assert many.uncertainty == pytest.approx(0.00408, rel=1e-3)


@pytest.mark.parametrize(
    ("values", "uncertainties"), [([], []), ([1.0], [0.0]), ([1.0, 2.0], [0.1]), ([float("nan")], [1.0])]
)
def test_means_of_nothing_are_refused(values: list[float], uncertainties: list[float]) -> None:
    with pytest.raises(SettingsError):
        weighted_mean(values, uncertainties)


# Vegard's straight line between the end members; silicon-germanium's bowing of about -0.0027 nm (published values, from memory)
@pytest.mark.parametrize(
    ("a", "ends", "bowing", "fraction"),
    [(0.40786, (0.40786, 0.40862), 0.0, 0.0), (0.55443, (0.54310, 0.56575), 0.0, 0.5002),
     (0.55375, (0.54310, 0.56575), 0.0027, 0.5)],
)  # fmt: skip
def test_compositions(a: float, ends: tuple[float, float], bowing: float, fraction: float) -> None:
    result = alloy_composition(a, 1e-5, *ends, bowing_nm=bowing)
    assert result.fraction == pytest.approx(fraction, abs=2e-3)
    assert result.is_between
    assert "strain" in result.cautions[0].text


def test_the_composition_carries_the_uncertainties_and_admits_what_lies_outside() -> None:
    result = alloy_composition(0.50, 0.001, 0.40, 0.42, end_uncertainties_nm=(0.001, 0.0))
    assert result.fraction == pytest.approx(5.0)
    assert not result.is_between
    assert result.uncertainty == pytest.approx(math.hypot(0.001, 4 * 0.001) / 0.02)


@pytest.mark.parametrize("arguments", [(0.4, 0.001, 0.41, 0.41), (-0.4, 0.001, 0.4, 0.41), (0.4, -1.0, 0.4, 0.41)])
def test_compositions_that_make_no_sense_are_refused(arguments: tuple[float, ...]) -> None:
    with pytest.raises(SettingsError):
        alloy_composition(*arguments)
