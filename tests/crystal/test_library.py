"""Finding phases: built in, the user's own, by name, formula, element."""

from __future__ import annotations

from pathlib import Path

import pytest

from fringespan.crystal.library import (
    PHASE_FOLDER_VARIABLE,
    built_in_phases,
    find_phases,
    load_phase,
    load_phases,
    own_phase_folder,
    own_phases,
)
from fringespan.exceptions import PhaseError

SPHERE = """data_{name}
_chemical_formula_sum 'Au'
_cell_length_a 4.08
_cell_length_b 4.08
_cell_length_c 4.08
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_symmetry_space_group_name_H-M 'F m -3 m'
loop_
_atom_site_label
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
Au1 0 0 0
"""


@pytest.fixture
def own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv(PHASE_FOLDER_VARIABLE, str(tmp_path))
    return tmp_path


@pytest.mark.usefixtures("own_folder")
@pytest.mark.parametrize(
    ("name", "phase"),
    [
        ("gold", "au"),
        ("Au", "au"),
        ("AU", "au"),
        ("rutile", "tio2_r"),
        ("tio2_r", "tio2_r"),
        ("SrTiO3", "srtio3"),
        ("Silicon", "si"),
        ("silicon carbide 3C", "sic_3c"),
        ("haematite", "fe2o3_a"),
        ("Fe3O4", "fe3o4"),
        ("sto", "srtio3"),
    ],
)
def test_a_phase_goes_by_id_name_alias_or_formula(name: str, phase: str) -> None:
    assert load_phase(name).id == phase


@pytest.mark.usefixtures("own_folder")
def test_a_formula_of_several_phases_lists_them() -> None:
    with pytest.raises(PhaseError, match=r"tio2_r .*tio2_a .*tio2_b"):
        load_phase("TiO2")


@pytest.mark.usefixtures("own_folder")
def test_an_unknown_name_is_refused_with_what_is_like_it() -> None:
    with pytest.raises(PhaseError, match="unobtainium"):
        load_phase("unobtainium")
    with pytest.raises(PhaseError, match="zro2_c"):
        load_phase("zirconium")


def test_ids_names_and_aliases_are_unique() -> None:
    names = [
        n.casefold()
        for p in built_in_phases()
        for n in {p.id.casefold(), p.name.casefold(), *map(str.casefold, p.aliases)}
    ]
    assert len(names) == len(set(names))
    assert len(built_in_phases()) >= 68


@pytest.mark.usefixtures("own_folder")
def test_search_by_element() -> None:
    titanium_oxides = {p.id for p in find_phases(elements=["Ti", "O"])}
    assert titanium_oxides == {"tio2_r", "tio2_a", "tio2_b", "srtio3", "batio3"}
    assert {p.id for p in find_phases(only_elements=["Ti", "O"])} == {"ti", "tio2_r", "tio2_a", "tio2_b"}
    assert {p.id for p in find_phases("zirconium")} == {"zro2_c", "zro2_t", "zro2_m"}
    with pytest.raises(PhaseError, match="Qq"):
        find_phases(elements=["Qq"])


def test_own_cif_files_are_found_by_name(own_folder: Path) -> None:
    (own_folder / "one.cif").write_text(SPHERE.format(name="bigger_gold"))
    assert own_phase_folder() == own_folder
    assert load_phase("bigger_gold").lengths_nm[0] == pytest.approx(0.408)
    assert "bigger_gold" in {p.id for p in load_phases(["all"])}


def test_a_broken_own_file_does_not_hide_the_others(own_folder: Path) -> None:
    (own_folder / "good.cif").write_text(SPHERE.format(name="good"))
    (own_folder / "bad.cif").write_text("data_bad\n_cell_length_a 'open\n")
    phases, problems = own_phases()
    assert [p.id for p in phases] == ["good"]
    assert len(problems) == 1
    assert "bad.cif: line 2" in problems[0]


def test_without_an_own_folder_nothing_is_missing(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv(PHASE_FOLDER_VARIABLE, str(tmp_path / "none"))
    assert own_phases() == ((), ())


def test_a_path_loads_a_file(tmp_path: Path) -> None:
    path = tmp_path / "s.cif"
    path.write_text(SPHERE.format(name="by_path"))
    assert load_phase(path).id == load_phase(str(path)).id == "by_path"
    with pytest.raises(PhaseError, match="cannot be read"):
        load_phase(tmp_path / "missing.cif")


def test_a_file_with_two_structures_is_loaded_by_load_phases(tmp_path: Path) -> None:
    path = tmp_path / "two.cif"
    path.write_text(SPHERE.format(name="a") + SPHERE.format(name="b"))
    with pytest.raises(PhaseError, match="2 structures"):
        load_phase(path)
    assert [p.id for p in load_phases([path, "gold", "au"])] == ["a", "b", "au"]
