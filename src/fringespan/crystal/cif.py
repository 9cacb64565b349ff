"""Crystal structures from CIF files, with the defects that such files have in practice."""

from __future__ import annotations

import math
import os
import re
import unicodedata
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from fringespan.cautions import Caution
from fringespan.crystal.phase import Phase, Site
from fringespan.crystal.plausibility import (
    composition_misfit,
    formula_composition,
    implausibilities,
    shortest_distance_ratio,
)
from fringespan.crystal.symmetry import group_triplets
from fringespan.exceptions import PhaseError

__all__ = ["phases_from_cif", "read_cif"]

_MOST_BYTES = 20_000_000
_MOST_SITES = 5000
_LENGTHS = ("_cell_length_a", "_cell_length_b", "_cell_length_c")
_ANGLES = ("_cell_angle_alpha", "_cell_angle_beta", "_cell_angle_gamma")
_UNSTATED_UNCERTAINTY = 0.001
_LEAST_UNCERTAINTY = 1e-4
"""A file's uncertainty is that of one specimen; others of the same substance differ by more."""

_OPERATION_TAGS = ("_space_group_symop_operation_xyz", "_space_group_symop.operation_xyz", "_symmetry_equiv_pos_as_xyz")
_NAME_TAGS = ("_space_group_name_H-M_alt", "_symmetry_space_group_name_H-M", "_space_group.name_H-M_alt")
_HALL_TAGS = ("_space_group_name_Hall", "_symmetry_space_group_name_Hall")
_NUMBER_TAGS = ("_space_group_IT_number", "_symmetry_Int_Tables_number")


@dataclass(frozen=True, slots=True)
class _Setting:
    """One way to read the symmetry of a block."""

    name: str
    triplets: tuple[str, ...]


def read_cif(path: str | os.PathLike[str]) -> tuple[Phase, ...]:
    """Read the crystal structures of a CIF file.

    Parameters
    ----------
    path : path-like

    Returns
    -------
    tuple of Phase
        One for every data block with a cell and atoms; their `cautions` say what had to be assumed. A file whose only
        usable block has no atoms gives a phase without intensities.

    Raises
    ------
    PhaseError
        If the file cannot be read, is no CIF, or is broken or incomplete; the text names the line and what is missing.
    """
    path = Path(path)
    try:
        if path.stat().st_size > _MOST_BYTES:
            raise PhaseError(
                f"{path}: larger than {_MOST_BYTES // 10**6} MB, which is no crystal structure; check the file"
            )
        content = path.read_bytes()
    except OSError as problem:
        reason = problem.strerror or str(problem)
        raise PhaseError(f"{path}: cannot be read: {reason}; check the path") from None
    return phases_from_cif(content, name=str(path))


def phases_from_cif(content: bytes, *, name: str = "CIF") -> tuple[Phase, ...]:
    """Read the crystal structures from the bytes of a CIF file; `name` is what error messages call it.

    Raises
    ------
    PhaseError
        As for `read_cif`.
    """
    from gemmi import cif

    text = _decoded(content, name)
    try:
        document = cif.read_string(text)
    except (ValueError, RuntimeError) as problem:
        raise PhaseError(_parse_error(name, str(problem))) from None
    with_cell = [block for block in document if any(_value(block, tag) for tag in (*_LENGTHS, *_ANGLES))]
    if not with_cell:
        if any(block.find_value("_cell.length_a") for block in document):
            raise PhaseError(f"{name}: is a macromolecular file; give one in the form used for small structures")
        raise PhaseError(
            f"{name}: has no block with a unit cell (_cell_length_a ...); check that it is a structure file"
        )
    with_atoms = [block for block in with_cell if block.find_values("_atom_site_fract_x")]
    phases = [_phase_of(block, name) for block in with_atoms or with_cell[:1]]
    names = [phase.id for phase in phases]
    return tuple(
        replace(phase, id=f"{phase.id}#{names[: i + 1].count(phase.id)}") if names.count(phase.id) > 1 else phase
        for i, phase in enumerate(phases)
    )


def _decoded(content: bytes, name: str) -> str:
    if content.startswith((b"\xff\xfe", b"\xfe\xff")):
        try:
            text = content.decode("utf-16")
        except UnicodeDecodeError:
            raise PhaseError(f"{name}: is not text; give a CIF file") from None
    else:
        try:
            text = content.decode("utf-8-sig")
        except UnicodeDecodeError:
            text = content.decode("latin-1")
    if "\0" in text:
        raise PhaseError(f"{name}: holds null characters, so it is not a text file; give a CIF file")
    # the format allows ASCII outside of text; names with accents are common all the same
    return "".join(_ascii_line(line) for line in text.splitlines(keepends=True))


def _ascii_line(line: str) -> str:
    if line.isascii() or any(quote in line for quote in "'\";"):
        return line.replace("\x85", " ")
    plain = unicodedata.normalize("NFKD", line.replace("\u2212", "-").replace("\u2013", "-"))
    return plain.encode("ascii", "ignore").decode() or "\n"


def _parse_error(name: str, problem: str) -> str:
    where = re.match(r"string:(\d+)(?::\d+)?(?:\(\d+\))?:?\s*(?:in \S+:\s*)?(.*)", problem, re.DOTALL)
    if not where:
        return f"{name}: is not a readable CIF file: {problem}; mend it in a text editor"
    line, what = where.groups()
    return f"{name}: line {line}: {what.strip()}; mend it in a text editor"


def _value(block: Any, tag: str) -> str | None:
    from gemmi import cif

    found = block.find_value(tag)
    if found is None or cif.is_null(found):
        return None
    text = str(cif.as_string(found)).strip()
    return text or None


def _first(block: Any, tags: Sequence[str]) -> str | None:
    return next((v for v in (_value(block, tag) for tag in tags) if v), None)


def _line_of(block: Any, tag: str) -> str:
    item = block.find_pair_item(tag)
    return f"line {item.line_number}: " if item is not None else ""


def _number(text: str | None) -> float:
    from gemmi import cif

    return math.nan if text is None else float(cif.as_number(text))


def _phase_of(block: Any, name: str) -> Phase:
    where = f"{name}, block {block.name or 'without a name'}"
    cautions: list[Caution] = []
    cell = [_number(_value(block, tag)) for tag in (*_LENGTHS, *_ANGLES)]
    for tag, value in zip(_LENGTHS, cell, strict=False):
        if not math.isfinite(value):
            raise PhaseError(f"{where}: {_line_of(block, tag)}{tag} is missing or no number; add it in angstrom")
    sites = tuple(_sites_of(block, where, cautions))
    settings = _settings_of(block, where, cell, cautions)
    if any(not math.isfinite(v) for v in cell[3:]):
        cell = _with_fixed_angles(cell, settings[0], where, cautions)
    formula = _formula_of(block)
    candidates = []
    problems: list[PhaseError] = []
    for setting in settings:
        try:
            candidates.append(
                Phase(
                    id=block.name or Path(name).stem,
                    name=_first(block, ("_chemical_name_mineral", "_chemical_name_common", "_chemical_name_systematic"))
                    or formula
                    or block.name
                    or Path(name).stem,
                    formula=formula,
                    cell_angstrom_deg=(cell[0], cell[1], cell[2], cell[3], cell[4], cell[5]),
                    operations=setting.triplets,
                    sites=sites,
                    space_group=setting.name,
                    source=_source_of(block, name),
                    source_status="read",
                    cell_relative_uncertainty=_cell_uncertainty(block, cell),
                )
            )
        except PhaseError as problem:
            problems.append(problem)
    if not candidates:
        raise PhaseError(f"{where}: {problems[0]}")
    counts, units = _content_of(block, formula)
    phase = _most_plausible(candidates, counts, units, cautions)
    if not phase.formula and phase.has_known_atoms:
        phase = replace(phase, formula=" ".join(f"{e}{n:g}" for e, n in sorted(phase.composition.items())))
        phase = replace(phase, name=phase.formula) if phase.name == block.name else phase
    cautions.extend(implausibilities(phase, counts, units))
    return replace(phase, cautions=tuple(cautions))


def _sites_of(block: Any, where: str, cautions: list[Caution]) -> Iterator[Site]:
    import gemmi

    try:
        structure = gemmi.make_small_structure_from_block(block)
    except (ValueError, RuntimeError) as problem:
        raise PhaseError(f"{where}: {problem}; mend it in a text editor") from None
    unknown = []
    atoms = [atom for atom in structure.sites if atom.occ != 0]
    if len(atoms) > _MOST_SITES:
        raise PhaseError(f"{where}: has {len(atoms)} atom sites, more than {_MOST_SITES}; give a small structure")
    for atom in atoms:
        position = (atom.fract.x, atom.fract.y, atom.fract.z)
        if not all(math.isfinite(v) for v in position):
            raise PhaseError(
                f"{where}: atom {atom.label}: a coordinate (_atom_site_fract_x, _y, _z) is missing or no "
                "number; fill it in, or take the atom out"
            )
        element = atom.element.name
        if element == "X" or atom.element.c4322 is None:
            unknown.append(atom.label)
            element = "X"
        u_iso = atom.u_iso if math.isfinite(atom.u_iso) and 0 < atom.u_iso < 1 else None
        yield Site(
            label=atom.label,
            element="H" if element == "D" else element,
            position=position,
            occupancy=min(atom.occ, 1.0) if math.isfinite(atom.occ) else 1.0,
            b_iso_angstrom2=8 * math.pi**2 * u_iso if u_iso else 0.5,
        )
    if unknown:
        cautions.append(
            Caution(
                "structure-elements",
                "warning",
                f"The element of {', '.join(unknown[:5])} is not known, so only spacings are given, no intensities.",
                "Add the atom types (_atom_site_type_symbol) to the file.",
            )
        )
    if not atoms:
        cautions.append(
            Caution(
                "structure-atoms",
                "warning",
                "The file has no atoms, so only spacings are given, no intensities.",
                "Take a file with atom positions.",
            )
        )


def _settings_of(block: Any, where: str, cell: Sequence[float], cautions: list[Caution]) -> list[_Setting]:
    import gemmi

    named = _named_settings(block, cell, cautions)
    listed = [v for tag in _OPERATION_TAGS for v in block.find_values(tag)]
    if listed:
        triplets = _unique_triplets(listed, where)
        own = _Setting(_group_name(triplets) or (named[0].name if named else ""), triplets)
        only_identity = len(triplets) == 1
        if only_identity and named and len(named[0].triplets) > 1:
            # either the atoms are all listed and the name is a leftover, or the operations are: the atoms will tell
            return [own, *named]
        if named and all(len(setting.triplets) != len(triplets) for setting in named):
            cautions.append(
                Caution(
                    "structure-symmetry",
                    "warning",
                    f"The file lists {len(triplets)} symmetry operations, but its space group {named[0].name} has "
                    f"{len(named[0].triplets)}; the listed ones are used.",
                    "Check the space group against the source.",
                )
            )
        return [own]
    hall = _first(block, _HALL_TAGS)
    if hall:
        try:
            group = gemmi.symops_from_hall(hall)
        except (ValueError, RuntimeError):
            cautions.append(
                Caution(
                    "structure-symmetry",
                    "note",
                    f"The Hall symbol {hall!r} cannot be read and is passed over.",
                    "Check the space group against the source.",
                )
            )
        else:
            triplets = tuple(op.triplet() for op in group)
            return [_Setting(_group_name(triplets) or hall, triplets)]
    if named:
        return named
    cautions.append(
        Caution(
            "structure-symmetry",
            "warning",
            "The file does not state its symmetry; it is taken as P 1, so that only the atoms listed are there.",
            "Add the space group to the file unless all atoms of the cell are listed.",
        )
    )
    return [_Setting("P 1", group_triplets("P 1"))]


def _named_settings(block: Any, cell: Sequence[float], cautions: list[Caution]) -> list[_Setting]:
    import gemmi

    name = _first(block, _NAME_TAGS)
    alpha, gamma = (v if math.isfinite(v) else 0.0 for v in (cell[3], cell[5]))
    group = None
    if name:
        written = re.sub(r"\s*[:(]?\s*([SZ])\)?$", lambda m: {"S": ":1", "Z": ":2"}[m.group(1)], name.strip())
        written = written.replace("_", " ").replace("~", " ")
        group = gemmi.find_spacegroup_by_name(written, alpha, gamma)
        if group is None:
            cautions.append(
                Caution(
                    "structure-symmetry",
                    "warning",
                    f"The space group {name!r} is not known and is passed over.",
                    "Write it as in 'F m -3 m', or list the symmetry operations.",
                )
            )
        elif ":" in written:
            return [_setting_of(group)]
    if group is None:
        number = _number(_first(block, _NUMBER_TAGS))
        if not (math.isfinite(number) and 1 <= number <= 230 and number == int(number)):
            return []
        group = gemmi.find_spacegroup_by_number(int(number))
        if group.number in (146, 148, 155, 160, 161, 166, 167) and abs(gamma - 120) > 0.1 and gamma:
            group = gemmi.find_spacegroup_by_name(group.hm, alpha, gamma) or group
        cautions.append(
            Caution(
                "structure-symmetry",
                "note",
                f"Only the number {int(number)} of the space group could be used; {group.xhm()} is assumed.",
                "State the space group's full name in the file if the setting is another one.",
            )
        )
    if group.ext in ("1", "2"):
        return [_setting_of(g) for g in gemmi.spacegroup_table() if g.hm == group.hm and g.ext in ("1", "2")]
    return [_setting_of(group)]


def _setting_of(group: Any) -> _Setting:
    return _Setting(group.xhm(), group_triplets(group.xhm()))


def _group_name(triplets: tuple[str, ...]) -> str:
    import gemmi

    found = gemmi.find_spacegroup_by_ops(gemmi.GroupOps([gemmi.Op(t) for t in triplets]))
    return str(found.xhm()) if found is not None else ""


def _unique_triplets(listed: Sequence[str], where: str) -> tuple[str, ...]:
    import gemmi
    from gemmi import cif

    unique: dict[str, None] = {}
    for text in listed:
        try:
            operation = gemmi.Op(str(cif.as_string(text)).lower()).wrap()
        except (ValueError, RuntimeError):
            raise PhaseError(
                f"{where}: the symmetry operation {text} cannot be read; write it like '-x,y+1/2,-z'"
            ) from None
        unique[operation.triplet()] = None
    return tuple(unique)


def _with_fixed_angles(cell: Sequence[float], setting: _Setting, where: str, cautions: list[Caution]) -> list[float]:
    from fringespan.crystal.symmetry import Symmetry

    system = Symmetry.from_triplets(setting.triplets).crystal_system
    fixed: dict[str, tuple[float, float, float]] = {
        "cubic": (90, 90, 90),
        "tetragonal": (90, 90, 90),
        "orthorhombic": (90, 90, 90),
        "hexagonal": (90, 90, 120),
    }
    if system == "trigonal" and not setting.name.endswith(":R"):
        fixed["trigonal"] = (90, 90, 120)
    if system == "monoclinic" and math.isfinite(cell[4]):
        fixed["monoclinic"] = (90, cell[4], 90)
    filled = list(cell[:3])
    for index, (tag, value) in enumerate(zip(_ANGLES, cell[3:], strict=True)):
        if math.isfinite(value):
            filled.append(value)
        elif system in fixed:
            filled.append(fixed[system][index])
            cautions.append(
                Caution(
                    "structure-cell",
                    "note",
                    f"{tag} is missing; the {system} symmetry fixes it at {filled[-1]:g} degrees.",
                    "Add it to the file.",
                )
            )
        else:
            raise PhaseError(f"{where}: {tag} is missing or no number, and {system} symmetry does not fix it; add it")
    return filled


def _formula_of(block: Any) -> str:
    text = _first(block, ("_chemical_formula_sum", "_chemical_formula_structural", "_chemical_formula_iupac"))
    return re.sub(r"(?<=[A-Za-z])1(?![\d.])", "", re.sub(r"\s+", "", text)) if text else ""


def _content_of(block: Any, formula: str) -> tuple[dict[str, float] | None, float | None]:
    units = _number(_value(block, "_cell_formula_units_Z"))
    try:
        counts = formula_composition(formula) if formula else None
    except PhaseError:
        counts = None  # a formula that cannot be read checks nothing
    return counts, units if math.isfinite(units) and units > 0 else None


def _most_plausible(
    candidates: list[Phase], counts: dict[str, float] | None, units: float | None, cautions: list[Caution]
) -> Phase:
    """Choose between settings: first the one whose content fits the formula, then the one with the longest bonds."""
    if len(candidates) == 1:
        return candidates[0]

    def merit(phase: Phase) -> tuple[float, float, float]:
        fits = [composition_misfit(phase, counts, z) < 0.01 if counts else True for z in (None, units)]
        return float(fits[0]), float(fits[1]), shortest_distance_ratio(phase) or 0.0

    best = max(candidates, key=merit)
    others = ", ".join(phase.space_group or "the listed operations" for phase in candidates if phase is not best)
    cautions.append(
        Caution(
            "structure-origin",
            "note",
            f"The file leaves the setting open; {best.space_group or 'the listed operations'} is the sensible one "
            f"(the other choice: {others}).",
            "State the origin in the space group's name, as in 'F d -3 m:1'.",
        )
    )
    return best


def _cell_uncertainty(block: Any, cell: Sequence[float]) -> float:
    relative = []
    for tag, value in zip(_LENGTHS, cell, strict=False):
        written = re.match(r"[\d.]*?(?:\.(\d*))?\((\d+)\)", _value(block, tag) or "")
        if written:
            decimals = len(written.group(1) or "")
            relative.append(int(written.group(2)) * 10.0**-decimals / value)
    return min(max(*relative, _LEAST_UNCERTAINTY), 0.1) if relative else _UNSTATED_UNCERTAINTY


def _source_of(block: Any, name: str) -> str:
    journal = _first(block, ("_journal_name_full", "_citation_journal_full", "_journal_name_abbrev"))
    parts = [
        journal,
        _first(block, ("_journal_volume", "_citation_journal_volume")),
        _first(block, ("_journal_year", "_citation_year")),
        _first(block, ("_journal_page_first", "_citation_page_first")),
    ]
    published = ", ".join(part for part in parts if part)
    return f"{published} ({Path(name).name})" if published else Path(name).name
