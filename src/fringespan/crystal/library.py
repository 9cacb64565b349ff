"""The phases at hand: those built in, and the user's own folder of CIF files."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Iterable, Sequence
from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

from fringespan.crystal.phase import CalibrationRole, Phase, Site
from fringespan.crystal.symmetry import group_triplets
from fringespan.exceptions import PhaseError

__all__ = [
    "PHASE_FOLDER_VARIABLE",
    "built_in_phases",
    "find_phases",
    "load_phase",
    "load_phases",
    "own_phase_folder",
    "own_phases",
]

PHASE_FOLDER_VARIABLE = "FRINGESPAN_PHASES"
"""Environment variable that names another folder for the user's own phases."""


@lru_cache(maxsize=1)
def built_in_phases() -> tuple[Phase, ...]:
    """Return the phases that come with the package."""
    text = resources.files("fringespan.crystal").joinpath("phases.toml").read_text(encoding="utf-8")
    return tuple(_phase(entry) for entry in tomllib.loads(text)["phase"])


def _phase(entry: dict[str, Any]) -> Phase:
    sites = tuple(
        Site(
            label=site["label"],
            element=site["element"],
            position=tuple(site["xyz"]),
            occupancy=site.get("occupancy", 1.0),
            b_iso_angstrom2=site["b_iso"],
        )
        for site in entry["sites"]
    )
    calibration = entry.get("calibration")
    contradiction = entry.get("contradiction")
    return Phase(
        id=entry["id"],
        name=entry["name"],
        formula=entry["formula"],
        cell_angstrom_deg=tuple(entry["cell"]),
        operations=group_triplets(entry["space_group"]),
        sites=sites,
        space_group=entry["space_group"],
        aliases=tuple(entry.get("aliases", ())),
        source=entry["source"],
        source_status=entry["source_status"],
        confirmations=tuple(entry.get("confirmation", ())),
        contradictions=(contradiction,) if contradiction else (),
        cell_relative_uncertainty=entry["cell_relative_uncertainty"],
        calibration=CalibrationRole(**calibration) if calibration else None,
        hazard=entry.get("hazard", ""),
        note=entry.get("note", ""),
    )


def own_phase_folder() -> Path:
    """Return the folder for the user's own CIF files; it need not exist yet.

    The environment variable FRINGESPAN_PHASES overrides the platform's place for settings.
    """
    chosen = os.environ.get(PHASE_FOLDER_VARIABLE)
    if chosen:
        return Path(chosen).expanduser()
    import platformdirs

    return Path(platformdirs.user_config_dir("fringespan", appauthor=False)) / "phases"


def own_phases() -> tuple[tuple[Phase, ...], tuple[str, ...]]:
    """Return the phases in the user's own folder, and for each file that could not be used a line that says why."""
    from fringespan.crystal.cif import read_cif

    folder = own_phase_folder()
    phases: list[Phase] = []
    problems: list[str] = []
    for path in sorted(folder.glob("*.[cC][iI][fF]")) if folder.is_dir() else ():
        try:
            phases.extend(read_cif(path))
        except PhaseError as problem:
            problems.append(str(problem))
    return tuple(phases), tuple(problems)


def load_phase(name: str | os.PathLike[str]) -> Phase:
    """Return one phase.

    Parameters
    ----------
    name : str or path-like
        Id, name, alias, or a formula that only one phase has, of a built-in phase or of one in the user's own folder;
        or the path of a CIF file with one structure in it.

    Returns
    -------
    Phase

    Raises
    ------
    PhaseError
        If nothing or more than one thing is called so, or the file cannot be used.

    Examples
    --------
    >>> load_phase("rutile").formula
    'TiO2'
    """
    text = os.fspath(name)
    if isinstance(name, os.PathLike) or text.lower().endswith(".cif") or os.sep in text:
        from fringespan.crystal.cif import read_cif

        phases = read_cif(Path(text))
        if len(phases) > 1:
            blocks = ", ".join(phase.id for phase in phases)
            raise PhaseError(
                f"{text}: holds {len(phases)} structures ({blocks}); save the wanted one in a file of its own"
            )
        return phases[0]
    exact = _called(text, built_in_phases())
    if not exact:
        exact = _called(text, own_phases()[0])
    if len(exact) == 1:
        return exact[0]
    if exact:
        choices = ", ".join(f"{phase.id} ({phase.name})" for phase in exact)
        raise PhaseError(f"{text!r} may mean any of: {choices}; give one of these ids")
    near = ", ".join(phase.id for phase in find_phases(text)[:6]) or "none is near it"
    raise PhaseError(
        f"there is no phase called {text!r}; give a built-in id, name or formula (like it: {near}), or a CIF file"
    )


def load_phases(names: Iterable[str | os.PathLike[str]]) -> tuple[Phase, ...]:
    """Return several phases; "all" stands for every built-in phase and every one in the user's own folder.

    A CIF file with several structures gives all of them. Each phase is returned once.

    Raises
    ------
    PhaseError
        As for `load_phase`.
    """
    chosen: dict[str, Phase] = {}
    for name in names:
        text = os.fspath(name).strip()
        if text.lower() == "all":
            found: Sequence[Phase] = (*built_in_phases(), *own_phases()[0])
        elif text.lower().endswith(".cif"):
            from fringespan.crystal.cif import read_cif

            found = read_cif(Path(text))
        else:
            found = (load_phase(name),)
        for phase in found:
            chosen.setdefault(phase.fingerprint + phase.id, phase)
    return tuple(chosen.values())


def find_phases(
    text: str = "",
    *,
    elements: Iterable[str] = (),
    only_elements: Iterable[str] | None = None,
    phases: Iterable[Phase] | None = None,
) -> tuple[Phase, ...]:
    """Return the phases that fit a search.

    Parameters
    ----------
    text : str, optional
        Part of the id, name, an alias, the formula or the note; upper and lower case are alike.
    elements : iterable of str, optional
        Elements that must all be there.
    only_elements : iterable of str, optional
        Elements present in the specimen: phases with any other element are left out.
    phases : iterable of Phase, optional
        Where to search; default: the built-in ones and the user's own.

    Raises
    ------
    PhaseError
        If an element's symbol is none.
    """
    wanted = _symbols(elements)
    allowed = None if only_elements is None else _symbols(only_elements)
    pool = (*built_in_phases(), *own_phases()[0]) if phases is None else tuple(phases)
    key = _plain(text)
    return tuple(
        phase
        for phase in pool
        if any(key in _plain(word) for word in (phase.id, phase.name, phase.formula, *phase.aliases, phase.note))
        and wanted <= phase.elements
        and (allowed is None or phase.elements <= allowed)
    )


def _symbols(elements: Iterable[str]) -> frozenset[str]:
    import gemmi

    symbols = []
    for element in elements:
        found = gemmi.Element(element.strip())
        if found.atomic_number == 0:
            raise PhaseError(f"{element!r} is not the symbol of an element; write it as in Au, Ti, O")
        symbols.append(found.name)
    return frozenset(symbols)


def _called(text: str, phases: Iterable[Phase]) -> list[Phase]:
    pool = list(phases)
    key = _plain(text)
    named = [phase for phase in pool if key in map(_plain, (phase.id, phase.name, *phase.aliases))]
    return named or [phase for phase in pool if phase.formula == text.strip()]


def _plain(text: str) -> str:
    return re.sub(r"[\s\-_()]+", "", text).casefold()
