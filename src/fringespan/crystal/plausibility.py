"""Whether a structure can be true: its density, its shortest distances, its filled sites, its formula."""

from __future__ import annotations

import re
from collections.abc import Mapping

import numpy as np

from fringespan.cautions import Caution
from fringespan.crystal.phase import Phase
from fringespan.exceptions import PhaseError

__all__ = ["composition_misfit", "formula_composition", "implausibilities", "shortest_distance_ratio"]

_DENSITY_LIMITS_G_CM3 = (0.3, 25.0)
_SHORTEST_RATIO = 0.6
_FORMULA_TOLERANCE = 0.01
_MOST_ATOMS = 800
"""Distances grow with the square of the number of atoms; beyond this they are not checked."""


def formula_composition(formula: str) -> dict[str, float]:
    """Return the number of atoms of each element in a formula such as "Ca5(PO4)3(OH)" or "O2 Ti".

    Raises
    ------
    PhaseError
        If it cannot be read.
    """
    tokens = re.findall(r"[A-Z][a-z]?|[()\[\]]|\d*\.?\d+", formula)
    stack: list[dict[str, float]] = [{}]
    last: dict[str, float] = {}
    for token in tokens:
        if token in "([":
            stack.append({})
            last = {}
        elif token in ")]":
            if len(stack) == 1:
                raise PhaseError(f"the formula {formula!r} closes a bracket that it never opened")
            last = stack.pop()
            _add(stack[-1], last, 1.0)
        elif token[0].isalpha():
            last = {token: 1.0}
            _add(stack[-1], last, 1.0)
        else:
            _add(stack[-1], last, float(token) - 1)
    if len(stack) != 1 or not stack[0]:
        raise PhaseError(f"the formula {formula!r} cannot be read; write it as in TiO2 or Ca5(PO4)3(OH)")
    return stack[0]


def _add(total: dict[str, float], part: Mapping[str, float], times: float) -> None:
    for element, number in part.items():
        total[element] = total.get(element, 0.0) + times * number


def composition_misfit(phase: Phase, formula: Mapping[str, float], formula_units: float | None = None) -> float:
    """Return the largest relative difference between the cell's content and a formula.

    With the number of formula units in the cell, absolute numbers are compared, otherwise the shares of the elements.
    Hydrogen is left out: many structures do not locate it.
    """
    content = {e: n for e, n in phase.composition.items() if e not in ("H", "D")}
    wanted = {e: n for e, n in formula.items() if e not in ("H", "D") and n > 0}
    if set(content) != set(wanted):
        return 1.0
    units = formula_units or sum(content.values()) / sum(wanted.values())
    return max(abs(content[e] / (units * n) - 1) for e, n in wanted.items())


def shortest_distance_ratio(phase: Phase) -> float | None:
    """Return the shortest distance between atoms over the sum of their covalent radii; None if it was not looked for.

    Atoms that cannot be there together (occupancies that add up to at most 1) do not count.
    """
    import gemmi

    atoms = [(site, row) for site, copies in phase.cell_atoms for row in copies if site.element not in ("X", "H", "D")]
    if not 0 < len(atoms) <= _MOST_ATOMS:
        return None
    positions = np.array([row for _, row in atoms])
    radii = np.array([gemmi.Element(site.element).covalent_r for site, _ in atoms])
    occupancy = np.array([site.occupancy for site, _ in atoms])
    together = occupancy[:, None] + occupancy[None, :] > 1.001
    shifts = np.stack(np.meshgrid(*[(-1, 0, 1)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    offset = positions[:, None, :] - positions[None, :, :]
    offset -= np.round(offset)
    best = np.inf
    for shift in shifts:
        distance = np.linalg.norm((offset + shift) @ phase.direct_basis, axis=2)
        ratio = distance / (radii[:, None] + radii[None, :])
        ratio[~together | (distance < 1e-6)] = np.inf
        best = min(best, float(ratio.min()))
    return best


def implausibilities(
    phase: Phase, formula: Mapping[str, float] | None = None, formula_units: float | None = None
) -> tuple[Caution, ...]:
    """Return a caution for everything about a structure that cannot be true."""
    found = []
    density = phase.density_g_cm3
    low, high = _DENSITY_LIMITS_G_CM3
    if density is not None and phase.sites and not low <= density <= high:
        found.append(_wrong("density", f"its density would be {density:.3g} g/cm3, outside {low:g} to {high:g}"))
    ratio = shortest_distance_ratio(phase)
    if ratio is not None and ratio < _SHORTEST_RATIO:
        found.append(_wrong("distances", f"two of its atoms are only {ratio:.2f} of their bond length apart"))
    for group in _sites_by_position(phase):
        filled = sum(phase.sites[i].occupancy for i in group)
        if filled > 1.01:
            labels = ", ".join(phase.sites[i].label for i in group)
            found.append(_wrong("occupancy", f"the site of {labels} is filled {filled:.2f} times"))
    if formula is not None and phase.has_known_atoms:
        misfit = composition_misfit(phase, formula, formula_units)
        if misfit > _FORMULA_TOLERANCE:
            content = " ".join(f"{e}{n:g}" for e, n in sorted(phase.composition.items()))
            found.append(_wrong("formula", f"its cell holds {content}, which is not the formula {phase.formula}"))
    return tuple(found)


def _sites_by_position(phase: Phase) -> list[list[int]]:
    groups: list[list[int]] = []
    places: list[np.ndarray] = []
    for index, (_, copies) in enumerate(phase.cell_atoms):
        for group, place in zip(groups, places, strict=True):
            offset = copies - place
            offset -= np.round(offset)
            if np.min(np.linalg.norm(offset @ phase.direct_basis, axis=1)) < 0.05:
                group.append(index)
                break
        else:
            groups.append([index])
            places.append(copies[0])
    return groups


def _wrong(what: str, text: str) -> Caution:
    return Caution(
        f"structure-{what}",
        "warning",
        f"The structure is doubtful: {text}.",
        "Check the file against its source, above all the space group, its origin, and the cell.",
    )
