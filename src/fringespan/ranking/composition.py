"""The composition of an alloy between two end members, from its lattice parameter."""

from __future__ import annotations

import math
from dataclasses import dataclass

from fringespan.cautions import Caution
from fringespan.exceptions import SettingsError

__all__ = ["VEGARD_CAUTION", "AlloyComposition", "alloy_composition"]

VEGARD_CAUTION = Caution(
    "vegard",
    "warning",
    "A composition from a lattice parameter takes Vegard's law for granted; strain and small size change the lattice "
    "parameter as composition does, and many alloys deviate from the law.",
    "Confirm it by a chemical analysis of the same particles.",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class AlloyComposition:
    """Share of the second end member.

    Attributes
    ----------
    fraction, uncertainty : float
        Atomic fraction with its standard uncertainty; outside 0 to 1 the lattice parameter does not lie between those
        of the end members.
    is_between : bool
        Whether the fraction lies between 0 and 1 within twice its uncertainty.
    cautions : tuple of Caution
    """

    fraction: float
    uncertainty: float
    is_between: bool
    cautions: tuple[Caution, ...]


def alloy_composition(
    a_nm: float,
    a_uncertainty_nm: float,
    first_nm: float,
    second_nm: float,
    *,
    end_uncertainties_nm: tuple[float, float] = (0.0, 0.0),
    bowing_nm: float = 0.0,
) -> AlloyComposition:
    """Return the composition of an alloy by Vegard's law [1]_.

    a = (1 - x) a1 + x a2 - bowing x (1 - x)

    Parameters
    ----------
    a_nm, a_uncertainty_nm : float
        Lattice parameter of the alloy.
    first_nm, second_nm : float
        Those of the end members, x = 0 and x = 1.
    end_uncertainties_nm : (float, float), optional
    bowing_nm : float, optional
        Known deviation from the straight line.

    Raises
    ------
    SettingsError
        If a number is not positive, the end members are alike, or no composition gives the lattice parameter.

    References
    ----------
    .. [1] L. Vegard, Z. Phys. 5 (1921) 17, doi:10.1007/BF01349680 (from memory).

    Examples
    --------
    >>> silver_in_gold = alloy_composition(0.4082, 0.0002, 0.40786, 0.40862)
    >>> round(silver_in_gold.fraction, 2), round(silver_in_gold.uncertainty, 2)
    (0.45, 0.26)
    """
    for name, value in (("a_nm", a_nm), ("first_nm", first_nm), ("second_nm", second_nm)):
        if not (math.isfinite(value) and value > 0):
            raise SettingsError(f"{name} must be greater than 0 nm, got {value!r}")
    if min(a_uncertainty_nm, *end_uncertainties_nm) < 0:
        raise SettingsError("uncertainties must not be negative")
    difference = second_nm - first_nm
    if abs(difference) < 1e-6 * first_nm:
        raise SettingsError(f"the end members must differ, got {first_nm:g} and {second_nm:g} nm for both")
    # bowing x^2 + (difference - bowing) x + (a1 - a) = 0, the root that joins the straight line as bowing vanishes
    linear, constant = difference - bowing_nm, first_nm - a_nm
    discriminant = linear**2 - 4 * bowing_nm * constant
    if discriminant < 0:
        raise SettingsError(f"no composition gives a = {a_nm:g} nm with a bowing of {bowing_nm:g} nm; check the bowing")
    fraction = -2 * constant / (linear + math.copysign(math.sqrt(discriminant), difference))
    slope = difference - bowing_nm + 2 * bowing_nm * fraction
    first, second = end_uncertainties_nm
    uncertainty = math.hypot(a_uncertainty_nm, (1 - fraction) * first, fraction * second) / abs(slope)
    return AlloyComposition(
        fraction=fraction,
        uncertainty=uncertainty,
        is_between=-2 * uncertainty <= fraction <= 1 + 2 * uncertainty,
        cautions=(VEGARD_CAUTION,),
    )
