"""Phases: values that refuse nonsense, and the built-in list."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import gemmi
import pytest

from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.crystal.phase import Phase, Site
from fringespan.crystal.plausibility import formula_composition, implausibilities
from fringespan.crystal.symmetry import Symmetry, group_triplets
from fringespan.exceptions import PhaseError

PHASES = [pytest.param(phase, id=phase.id) for phase in built_in_phases()]


@pytest.mark.parametrize("phase", PHASES)
def test_a_built_in_structure_is_plausible(phase: Phase) -> None:
    assert implausibilities(phase, formula_composition(phase.formula)) == ()
    assert phase.source
    assert phase.source_status in ("read", "packaged data", "from memory")
    assert phase.confirmations if phase.source_status == "packaged data" else True


# densities in g/cm3 of handbooks of chemistry and mineralogy, from memory, rounded as there
@pytest.mark.parametrize(
    ("phase", "density"),
    [
        ("au", 19.3),
        ("ag", 10.5),
        ("al", 2.70),
        ("cu", 8.96),
        ("pt", 21.45),
        ("w", 19.3),
        ("mg", 1.74),
        ("ti", 4.51),
        ("si", 2.33),
        ("ge", 5.32),
        ("diamond", 3.51),
        ("gaas", 5.32),
        ("nacl", 2.16),
        ("mgo", 3.58),
        ("caf2", 3.18),
        ("ceo2", 7.2),
        ("tio2_r", 4.25),
        ("tio2_a", 3.89),
        ("tio2_b", 4.13),
        ("sno2", 6.99),
        ("al2o3_a", 3.99),
        ("fe3o4", 5.2),
        ("fe2o3_a", 5.27),
        ("cu2o", 6.1),
        ("cuo", 6.5),
        ("srtio3", 5.12),
        ("batio3", 6.02),
        ("quartz", 2.65),
        ("calcite", 2.71),
        ("graphite", 2.26),
        ("mos2", 5.00),
        ("pbs", 7.6),
        ("zns", 4.09),
        ("hap", 3.16),
    ],
)
def test_density_agrees_with_the_handbook(phase: str, density: float) -> None:
    assert load_phase(phase).density_g_cm3 == pytest.approx(density, rel=0.012)


@pytest.mark.parametrize("phase", PHASES)
def test_the_symmetry_agrees_with_the_tables(phase: Phase) -> None:
    group = gemmi.find_spacegroup_by_name(phase.space_group)
    assert phase.crystal_system == group.crystal_system_str()
    assert len(phase.operations) == len(list(group.operations()))
    assert len(phase.symmetry.laue_rotations) == 2 * len(group.operations().sym_ops) // (
        2 if group.is_centrosymmetric() else 1
    )


def test_every_crystal_system_is_told_from_its_operations() -> None:
    for group in gemmi.spacegroup_table():
        symmetry = Symmetry.from_triplets(group_triplets(group.xhm()))
        assert symmetry.crystal_system == group.crystal_system_str(), group.xhm()


def test_the_certified_reference_material() -> None:
    # NIST SRM 660c certificate: a = 0.4156826(8) nm at 22.5 C (from memory)
    lab6 = load_phase("lab6")
    assert lab6.calibration is not None
    assert lab6.calibration.role == "certified"
    assert lab6.lengths_nm[0] == pytest.approx(0.4156826, abs=8e-7)
    assert lab6.calibration.relative_uncertainty == pytest.approx(8e-6 / 0.4156826, rel=0.05)


def test_silicon_is_the_unit_constant() -> None:
    from scipy.constants import value

    silicon = load_phase("silicon")
    assert silicon.lengths_nm[0] == pytest.approx(value("lattice parameter of silicon") * 1e9, rel=1e-9)
    assert silicon.calibration is not None
    assert silicon.calibration.role == "unit constant"


def test_hazards_are_told_where_they_are_known() -> None:
    told = {phase.id for phase in built_in_phases() if phase.hazard}
    assert {"pb", "pbs", "cdse", "cdte", "gaas", "quartz", "licoo2", "ni"} <= told


@pytest.fixture
def gold() -> Phase:
    return load_phase("au")


@pytest.mark.parametrize(
    ("change", "named"),
    [
        pytest.param(lambda p: replace(p, cell_angstrom_deg=(0, 4, 4, 90, 90, 90)), "edges", id="no edge"),
        pytest.param(lambda p: replace(p, cell_angstrom_deg=(4, 4, 4, 10, 10, 170)), "span no cell", id="flat"),
        pytest.param(lambda p: replace(p, cell_angstrom_deg=(4, 4, float("nan"), 90, 90, 90)), "finite", id="nan"),
        pytest.param(lambda p: replace(p, cell_angstrom_deg=(4, 4, 5, 90, 90, 90)), "shape", id="not cubic"),
        pytest.param(lambda p: replace(p, operations=()), "identity", id="no symmetry"),
        pytest.param(lambda p: replace(p, operations=("x,y,z", "y,z,x")), "form no group", id="half a group"),
        pytest.param(lambda p: replace(p, operations=("x,y,z", "x,y,z")), "twice", id="twice"),
        pytest.param(lambda p: replace(p, operations=("x,y,q",)), "cannot be read", id="garbage"),
        pytest.param(
            lambda p: replace(p, cell_relative_uncertainty=2.0), "cell_relative_uncertainty", id="uncertainty"
        ),
        pytest.param(lambda p: replace(p, source_status="sure"), "source_status", id="status"),
        pytest.param(
            lambda p: Site(label="A", element="Au", position=(0, 0, 0), occupancy=1.5), "occupancy", id="overfull"
        ),
        pytest.param(lambda p: Site(label="A", element="Au", position=(0, float("inf"), 0)), "finite", id="nowhere"),
    ],
)
def test_nonsense_is_refused(gold: Phase, change: Callable[[Phase], object], named: str) -> None:
    with pytest.raises(PhaseError, match=named):
        change(gold)


@pytest.mark.parametrize(
    ("formula", "atoms"),
    [
        ("TiO2", {"Ti": 1, "O": 2}),
        ("Ca5(PO4)3(OH)", {"Ca": 5, "P": 3, "O": 13, "H": 1}),
        ("O2 Ti", {"O": 2, "Ti": 1}),
        ("Al2.67O4", {"Al": 2.67, "O": 4}),
        ("Mg3[Si2O5](OH)4", {"Mg": 3, "Si": 2, "O": 9, "H": 4}),
    ],
)
def test_formulas_are_counted(formula: str, atoms: dict[str, float]) -> None:
    assert formula_composition(formula) == pytest.approx(atoms)


@pytest.mark.parametrize("formula", ["", "Ti(O2", "TiO2)", "12"])
def test_formulas_that_are_none_are_refused(formula: str) -> None:
    with pytest.raises(PhaseError):
        formula_composition(formula)


def test_a_structure_at_the_wrong_origin_is_called_doubtful() -> None:
    silicon = load_phase("si")
    wrong = replace(silicon, operations=group_triplets("F d -3 m:2"))
    assert {c.code for c in implausibilities(wrong)} >= {"structure-distances"} or wrong.density_g_cm3 > 4
    assert "structure-formula" in {c.code for c in implausibilities(wrong, {"Si": 1}, 8)}


def test_equal_structures_have_equal_fingerprints(gold: Phase) -> None:
    assert replace(gold, name="Au again").fingerprint == gold.fingerprint
    assert replace(gold, cell_angstrom_deg=(4.08, 4.08, 4.08, 90, 90, 90)).fingerprint != gold.fingerprint
