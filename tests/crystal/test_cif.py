"""CIF files as they come: complete, sloppy, broken."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from fringespan.crystal.cif import phases_from_cif, read_cif
from fringespan.crystal.library import built_in_phases, load_phase
from fringespan.crystal.phase import Phase
from fringespan.crystal.reflections import reflection_arrays
from fringespan.exceptions import FringespanError, PhaseError


def cif(
    *,
    name: str = "x",
    cell: tuple[str, ...] = ("5.431", "5.431", "5.431", "90", "90", "90"),
    symmetry: str = "_symmetry_space_group_name_H-M 'F d -3 m :1'",
    atoms: str = "Si1 0 0 0",
    columns: str = "label fract_x fract_y fract_z",
    extra: str = "",
) -> str:
    tags = ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma")
    lines = [f"data_{name}", *(f"_cell_{tag} {v}" for tag, v in zip(tags, cell, strict=True) if v), symmetry, extra]
    loop = ["loop_", *(f"_atom_site_{column}" for column in columns.split()), atoms]
    return "\n".join([*lines, *loop, ""])


def only(text: str | bytes) -> Phase:
    [phase] = phases_from_cif(text if isinstance(text, bytes) else text.encode())
    return phase


def codes(phase: Phase) -> set[str]:
    return {caution.code for caution in phase.cautions}


def cif_of(phase: Phase) -> str:
    a, b, c, *angles = (f"{v:.10g}" for v in phase.cell_angstrom_deg)
    operations = "loop_\n_symmetry_equiv_pos_as_xyz\n" + "\n".join(f"'{t}'" for t in phase.operations)
    rows = "\n".join(
        f"{s.label} {s.element} {s.position[0]:.6f} {s.position[1]:.6f} {s.position[2]:.6f} {s.occupancy:.6f} 0.5"
        for s in phase.sites
    )
    return cif(
        cell=(a, b, c, *angles),
        symmetry=operations,
        atoms=rows,
        columns="label type_symbol fract_x fract_y fract_z occupancy B_iso_or_equiv",
        extra=f"_chemical_formula_sum '{phase.formula}'",
    )


@pytest.mark.parametrize("phase", built_in_phases(), ids=lambda p: p.id)
def test_a_structure_comes_back_from_its_file(phase: Phase) -> None:
    again = only(cif_of(phase))
    assert again.cautions == ()
    assert_allclose(again.cell_angstrom_deg, phase.cell_angstrom_deg)
    ours, theirs = reflection_arrays(again, 0.12), reflection_arrays(phase, 0.12)
    assert np.array_equal(ours.hkl, theirs.hkl)
    assert_allclose(ours.relative_intensity, theirs.relative_intensity, atol=1e-4)  # six decimals in the file


@pytest.mark.parametrize(
    ("text", "atoms_in_cell"),
    [
        pytest.param(cif(cell=("5.431(2)",) * 3 + ("90.00(1)",) * 3, atoms="Si1 0.0(0) 0 0."), 8, id="uncertainties"),
        pytest.param(cif().replace("\n", "\r\n"), 8, id="CRLF"),
        pytest.param("\ufeff" + cif(), 8, id="byte-order mark"),
        pytest.param(cif(name="K\u00f6nig"), 8, id="accent in the block's name"),
        pytest.param(
            cif(symmetry="_symmetry_space_group_name_H-M 'Fd3m'\n_symmetry_Int_Tables_number 227"), 8, id="old name"
        ),
        pytest.param(cif(symmetry="_symmetry_space_group_name_Hall 'F 4d 2 3 -1d'"), 8, id="only Hall"),
        pytest.param(cif(symmetry="_symmetry_space_group_name_H-M 'F d -3 m S'"), 8, id="origin 1 as S"),
        pytest.param(
            cif(symmetry="_symmetry_space_group_name_H-M 'F d -3 m Z'", atoms="Si1 .125 .125 .125"),
            8,
            id="origin 2 as Z",
        ),
        pytest.param(
            cif(symmetry="loop_\n_symmetry_equiv_pos_as_xyz\nX,Y,Z\n-x,-y,-z", atoms="Si1 .1 .2 .3"), 2, id="capitals"
        ),
        pytest.param(
            cif(atoms="Si1+ ? Si 0 0 0", columns="label aniso_label type_symbol fract_x fract_y fract_z"),
            8,
            id="unknown values",
        ),
        pytest.param(cif(atoms="Ti(1) 0 0 0"), 8, id="label with brackets"),
    ],
)
def test_sloppy_files_are_read(text: str, atoms_in_cell: int) -> None:
    phase = only(text)
    assert sum(phase.composition.values()) == pytest.approx(atoms_in_cell)


def test_latin_1_text_is_read() -> None:
    assert only(cif(extra="_chemical_name_mineral 'L\u00f6llingit'").encode("latin-1")).name == "L\u00f6llingit"


def test_utf_16_text_is_read() -> None:
    assert only(cif().encode("utf-16")).composition == {"Si": 8}


@pytest.mark.parametrize("element", ["CA1", "Ca", "Co2+", "Ti(1)", "O1A", "Si_2"])
def test_elements_are_read_from_labels(element: str) -> None:
    expected = {"CA1": "Ca", "Ca": "Ca", "Co2+": "Co", "Ti(1)": "Ti", "O1A": "O", "Si_2": "Si"}[element]
    assert only(cif(atoms=f"{element} 0 0 0")).elements == {expected}


@pytest.mark.parametrize("label", ["OH1", "Wat1", "M1"])
def test_a_label_that_is_no_element_gives_spacings_only_and_says_so(label: str) -> None:
    phase = only(cif(atoms=f"{label} 0 0 0"))
    assert not phase.has_known_atoms
    assert "structure-elements" in codes(phase)


def test_mixed_occupancy_of_one_site() -> None:
    phase = only(
        cif(
            symmetry="_symmetry_space_group_name_H-M 'F m -3 m'",
            atoms="Au1 Au 0 0 0 0.7\nAg1 Ag 0 0 0 0.3",
            columns="label type_symbol fract_x fract_y fract_z occupancy",
            cell=("4.08",) * 3 + ("90",) * 3,
        )
    )
    assert phase.composition == pytest.approx({"Au": 2.8, "Ag": 1.2})
    assert phase.cautions == ()


def test_rounded_thirds_lie_on_the_special_position() -> None:
    magnesium = only(
        cif(
            symmetry="_symmetry_space_group_name_H-M 'P 63/m m c'",
            atoms="Mg 0.333 0.667 0.25",
            cell=("3.2094", "3.2094", "5.2112", "90", "90", "120"),
        )
    )
    assert magnesium.composition == {"Mg": 2}
    assert (
        reflection_arrays(magnesium, 0.1).is_absent[(reflection_arrays(magnesium, 0.1).hkl == (0, 0, 1)).all(1)].all()
    )


@pytest.mark.parametrize(
    "phase", ["si", "zro2_t", "tio2_a", "al2o3_g", "fe3o4", "co3o4", "cu2o", "sn", "ge", "diamond"]
)
@pytest.mark.parametrize("symmetry", ["name", "number"])
def test_an_origin_left_open_is_found_from_the_atoms(phase: str, symmetry: str) -> None:
    # all ten built-in structures whose space group has two origins; the file does not say which
    import gemmi

    known = load_phase(phase)
    group = gemmi.find_spacegroup_by_name(known.space_group)
    stated = (
        f"_symmetry_space_group_name_H-M '{group.hm}'"
        if symmetry == "name"
        else f"_symmetry_Int_Tables_number {group.number}"
    )
    rows = "\n".join(
        f"{s.label} {s.element} {s.position[0]} {s.position[1]} {s.position[2]} {s.occupancy}" for s in known.sites
    )
    cell = tuple(str(v) for v in known.cell_angstrom_deg)
    found = only(
        cif(
            cell=cell,
            symmetry=stated,
            atoms=rows,
            columns="label type_symbol fract_x fract_y fract_z occupancy",
            extra=f"_chemical_formula_sum '{known.formula}'",
        )
    )
    assert found.space_group == known.space_group
    assert found.composition == pytest.approx(known.composition)
    assert "structure-origin" in codes(found)


def test_rhombohedral_axes_are_told_by_the_cell() -> None:
    bismuth = cif(
        cell=("4.746", "4.746", "4.746", "57.23", "57.23", "57.23"),
        atoms="Bi 0.234 0.234 0.234",
        symmetry="_symmetry_space_group_name_H-M 'R -3 m'",
    )
    assert only(bismuth).space_group == "R -3 m:R"
    assert only(bismuth).composition == {"Bi": 2}


@pytest.mark.parametrize("missing", range(3))
def test_a_missing_edge_is_refused(missing: int) -> None:
    cell = ["5.431"] * 3 + ["90"] * 3
    cell[missing] = ""
    with pytest.raises(PhaseError, match=f"_cell_length_{'abc'[missing]} is missing"):
        only(cif(cell=tuple(cell)))


def test_an_edge_that_is_no_number_is_refused_with_its_line() -> None:
    with pytest.raises(PhaseError, match="line 3: _cell_length_b"):
        only(cif(cell=("5.4", "five", "5.4", "90", "90", "90")))


def test_angles_that_symmetry_fixes_are_filled_in_and_said() -> None:
    phase = only(cif(cell=("5.431", "5.431", "5.431", "", "", "")))
    assert phase.angles_deg == (90, 90, 90)
    assert "structure-cell" in codes(phase)
    hexagonal = only(
        cif(
            cell=("3.2", "3.2", "5.2", "", "", ""),
            symmetry="_symmetry_space_group_name_H-M 'P 63/m m c'",
            atoms="Mg 0.3333 0.6667 0.25",
        )
    )
    assert hexagonal.angles_deg == (90, 90, 120)


def test_an_angle_that_symmetry_leaves_free_is_refused() -> None:
    with pytest.raises(PhaseError, match="_cell_angle_beta is missing"):
        only(
            cif(
                cell=("5", "6", "7", "90", "", "90"),
                symmetry="_symmetry_space_group_name_H-M 'P 1 21/c 1'",
                atoms="C .1 .2 .3",
            )
        )


def test_no_symmetry_is_taken_as_p1_and_said() -> None:
    phase = only(cif(symmetry="", atoms="Si1 0 0 0\nSi2 .25 .25 .25"))
    assert phase.space_group == "P 1"
    assert "structure-symmetry" in codes(phase)


def test_an_unknown_space_group_is_said() -> None:
    assert "structure-symmetry" in codes(only(cif(symmetry="_symmetry_space_group_name_H-M 'Q q q'")))


@pytest.mark.parametrize(
    ("text", "what"),
    [
        pytest.param("hello world", "line 1", id="no CIF"),
        pytest.param("", "no block with a unit cell", id="empty"),
        pytest.param("data_a\n_audit_author 'me'\n", "no block with a unit cell", id="no cell"),
        pytest.param("data_a\n_x 'open\n_y 1\n", "line 2", id="open quote"),
        pytest.param("data_a\n_cell_length_a 1\n_cell_length_a 2\n", "line 3: duplicate tag", id="duplicate"),
        pytest.param("data_a\nloop_\n_a\n_b\n1 2 3\n", "line 2", id="ragged loop"),
        pytest.param("data_a\n_cell.length_a 50\n", "macromolecular", id="macromolecule"),
        pytest.param(cif(atoms="Si1 0 ? 0"), "atom Si1", id="coordinate missing"),
        pytest.param(
            cif(symmetry="loop_\n_symmetry_equiv_pos_as_xyz\nx,y,z\ny,z,x"), "form no group", id="half a group"
        ),
        pytest.param(cif(symmetry="loop_\n_symmetry_equiv_pos_as_xyz\nx,y,what"), "cannot be read", id="bad operation"),
        pytest.param(cif(cell=("5", "6", "7", "90", "90", "90")), "shape", id="cell against symmetry"),
        pytest.param(cif(cell=("5e9",) * 3 + ("90",) * 3), "edges", id="huge cell"),
        pytest.param("data_a\n_x \0\n", "null characters", id="binary"),
    ],
)
def test_broken_files_are_refused_with_the_reason(text: str, what: str) -> None:
    with pytest.raises(PhaseError, match=what):
        phases_from_cif(text.encode(), name="f.cif")


@pytest.mark.parametrize(
    ("text", "code"),
    [
        pytest.param(cif(cell=("50",) * 3 + ("90",) * 3), "structure-density", id="too light"),
        pytest.param(cif(atoms="Si1 0 0 0\nSi2 0 0 0.03"), "structure-distances", id="too close"),
        pytest.param(cif(atoms="Si1 0 0 0\nGe1 0 0 0"), "structure-occupancy", id="one site filled twice"),
        pytest.param(cif(extra="_chemical_formula_sum 'Ge'"), "structure-formula", id="another formula"),
        pytest.param(
            cif(extra="_chemical_formula_sum 'Si'\n_cell_formula_units_Z 4"), "structure-formula", id="wrong Z"
        ),
    ],
)
def test_doubtful_structures_are_read_with_a_caution(text: str, code: str) -> None:
    assert code in codes(only(text))


def test_every_block_with_a_cell_and_atoms_is_a_phase_of_its_own() -> None:
    text = (
        "data_global\n_journal_year 1990\n"
        + cif(name="one")
        + cif(name="two", cell=("5.6575",) * 3 + ("90",) * 3, atoms="Ge1 0 0 0")
    )
    assert [phase.id for phase in phases_from_cif(text.encode())] == ["one", "two"]


def test_a_file_without_atoms_gives_spacings_and_absences() -> None:
    phase = only("\n".join(cif().splitlines()[:8]) + "\n")
    assert "structure-atoms" in codes(phase)
    assert reflection_arrays(phase, 0.2).is_absent.any()


def test_the_uncertainty_of_the_cell_is_the_file_s_but_never_below_that_of_specimens() -> None:
    assert only(cif(cell=("5.431(5)",) * 3 + ("90",) * 3)).cell_relative_uncertainty == pytest.approx(0.005 / 5.431)
    assert only(cif(cell=("5.43102(1)",) * 3 + ("90",) * 3)).cell_relative_uncertainty == pytest.approx(1e-4)
    assert only(cif()).cell_relative_uncertainty == pytest.approx(1e-3)


def test_a_file_is_named_in_its_errors(tmp_path: Path) -> None:
    path = tmp_path / "broken.cif"
    path.write_text("data_a\n_x 'open\n")
    with pytest.raises(PhaseError, match=r"broken\.cif: line 2"):
        read_cif(path)
    with pytest.raises(PhaseError, match="cannot be read"):
        read_cif(tmp_path)


GOOD = cif_of(load_phase("tio2_r"))


@settings(max_examples=150, deadline=None)
@given(st.data())
def test_a_damaged_file_is_read_or_refused_never_worse(data: st.DataObject) -> None:
    text = bytearray(GOOD.encode())
    for _ in range(data.draw(st.integers(1, 6))):
        place = data.draw(st.integers(0, len(text) - 1))
        length = data.draw(st.integers(0, 12))
        text[place : place + length] = data.draw(st.binary(max_size=12))
    outcome: tuple[Phase, ...] | str
    try:
        outcome = phases_from_cif(bytes(text), name="damaged.cif")
    except FringespanError as problem:
        outcome = str(problem)
    assert "damaged.cif" in outcome if isinstance(outcome, str) else outcome


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=300))
def test_any_bytes_are_read_or_refused(content: bytes) -> None:
    with pytest.raises(FringespanError):
        phases_from_cif(b"data_z\n" + content)
