"""The reference of a magnification check: a phase or a certificate's spacing, at the specimen's temperature."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from fringespan.crystal.phase import Phase
from fringespan.exceptions import SettingsError

__all__ = ["Expansion", "ReferenceAtTemperature", "ReferenceSpacing", "reference_at"]

_ROOM_C, _ROOM_UNCERTAINTY_C = 22.5, 2.9
"""Taken where no temperature is stated: 17.5 to 27.5 degrees, all alike (half width over the root of 3)."""

_STATED_UNCERTAINTY_C = 1.0
_TEMPERATURE_LIMITS_C = (-273.15, 3000.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Expansion:
    """Linear thermal expansion near room temperature.

    Parameters
    ----------
    per_k : (float, float)
        Across and along the principal axis (a and c); the same twice for cubic crystals.
    relative_uncertainty : float
        Standard uncertainty, as a fraction of the larger one.
    reference_c : float
        Temperature that the reference's spacings hold for.
    """

    per_k: tuple[float, float]
    relative_uncertainty: float
    reference_c: float


# Coefficients are handbook values near 25 degrees, from memory and not looked up; hence 5 to 10 per cent. The temperature
# is the one the published cell was measured at (from memory: NBS Circular 539 25 to 26 degrees, CODATA and SRM 22.5).
_KNOWN = {
    "au": Expansion(per_k=(14.2e-6, 14.2e-6), relative_uncertainty=0.03, reference_c=25.0),
    "al": Expansion(per_k=(23.1e-6, 23.1e-6), relative_uncertainty=0.03, reference_c=25.0),
    "pt": Expansion(per_k=(8.8e-6, 8.8e-6), relative_uncertainty=0.03, reference_c=25.0),
    "ag": Expansion(per_k=(18.9e-6, 18.9e-6), relative_uncertainty=0.03, reference_c=25.0),
    "si": Expansion(per_k=(2.57e-6, 2.57e-6), relative_uncertainty=0.03, reference_c=22.5),
    "mgo": Expansion(per_k=(10.5e-6, 10.5e-6), relative_uncertainty=0.05, reference_c=25.0),
    "ceo2": Expansion(per_k=(11.0e-6, 11.0e-6), relative_uncertainty=0.1, reference_c=25.0),
    "lab6": Expansion(per_k=(6.2e-6, 6.2e-6), relative_uncertainty=0.1, reference_c=22.5),
    "graphite": Expansion(per_k=(-1.2e-6, 26.5e-6), relative_uncertainty=0.1, reference_c=25.0),
    "mos2": Expansion(per_k=(1.9e-6, 8.6e-6), relative_uncertainty=0.2, reference_c=25.0),
}

_UNKNOWN = Expansion(per_k=(10e-6, 10e-6), relative_uncertainty=0.6, reference_c=22.5)
"""Most solids lie between 0 and 20e-6 per kelvin (common practice, no source): half width over the root of 3."""


@dataclass(frozen=True, slots=True)
class ReferenceSpacing:
    """A reference of one spacing, as a certificate states it.

    Parameters
    ----------
    d_nm : float
        Spacing of the fringes.
    relative_uncertainty : float
        Standard uncertainty (k = 1), as a fraction. A certificate's expanded uncertainty is divided by its k.
    name : str, optional
        What to call it: the certificate's number.
    expansion : Expansion, optional
        Default: unknown, and stands in the budget so.

    Raises
    ------
    SettingsError
        If a number is out of range.
    """

    d_nm: float
    relative_uncertainty: float
    name: str = ""
    expansion: Expansion = _UNKNOWN

    def __post_init__(self) -> None:
        if not (math.isfinite(self.d_nm) and 0.02 <= self.d_nm <= 1000):
            raise SettingsError(f"d_nm must lie between 0.02 and 1000 nm, got {self.d_nm!r}")
        if not 0 <= self.relative_uncertainty < 0.2:
            raise SettingsError(
                "relative_uncertainty must be a fraction from 0 up to 0.2 (0.001 is 0.1 per cent), got "
                f"{self.relative_uncertainty!r}"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class ReferenceAtTemperature:
    """A reference with the spacings that it has at the specimen's temperature.

    Attributes
    ----------
    reference : Phase or ReferenceSpacing
        Expanded.
    name : str
    relative_uncertainty : float
        Of its spacings, as a fraction.
    uncertainty_origin : str
    expansion : Expansion
    expansion_known : bool
    temperature_c, temperature_uncertainty_c : float
    temperature_stated : bool
    """

    reference: Phase | ReferenceSpacing
    name: str
    relative_uncertainty: float
    uncertainty_origin: str
    expansion: Expansion
    expansion_known: bool
    temperature_c: float
    temperature_uncertainty_c: float
    temperature_stated: bool

    @property
    def expansion_per_k(self) -> float:
        """The larger of the two coefficients, which the budget takes for all directions."""
        return max(self.expansion.per_k, key=abs)

    @property
    def difference_k(self) -> float:
        """Temperature above the one that the published spacings hold for."""
        return self.temperature_c - self.expansion.reference_c


def reference_at(
    reference: Phase | ReferenceSpacing,
    temperature_c: float | None,
    *,
    temperature_uncertainty_c: float | None = None,
    relative_uncertainty: float | None = None,
    expansion: Expansion | None = None,
) -> ReferenceAtTemperature:
    """Return a reference at a temperature.

    Parameters
    ----------
    reference : Phase or ReferenceSpacing
    temperature_c : float or None
        Of the specimen. None: a room's, 22.5 degrees with 2.9 degrees.
    temperature_uncertainty_c : float, optional
        Standard uncertainty; default: 1 degree where a temperature is stated.
    relative_uncertainty : float, optional
        Standard uncertainty of the spacings as a fraction; default: what the reference says of itself.
    expansion : Expansion, optional
        Default: what is known of the reference.

    Raises
    ------
    SettingsError
        If a temperature or an uncertainty is out of range.
    """
    stated = temperature_c is not None
    temperature = _ROOM_C if temperature_c is None else temperature_c
    low, high = _TEMPERATURE_LIMITS_C
    if not (math.isfinite(temperature) and low <= temperature <= high):
        raise SettingsError(f"temperature_c must lie between {low:g} and {high:g} degrees Celsius, got {temperature!r}")
    spread = temperature_uncertainty_c
    if spread is None:
        spread = _STATED_UNCERTAINTY_C if stated else _ROOM_UNCERTAINTY_C
    if not (math.isfinite(spread) and spread >= 0):
        raise SettingsError(f"temperature_uncertainty_c must be at least 0, got {spread!r}")
    if relative_uncertainty is not None and not 0 <= relative_uncertainty < 0.2:
        raise SettingsError(
            "the reference's relative uncertainty must be a fraction from 0 up to 0.2 (0.001 is 0.1 per cent), got "
            f"{relative_uncertainty!r}"
        )
    if isinstance(reference, ReferenceSpacing):
        known = expansion or reference.expansion
        uncertainty, origin = reference.relative_uncertainty, "stated for the reference spacing"
        name = reference.name or f"spacing of {reference.d_nm:g} nm"
    else:
        known = expansion or _KNOWN.get(reference.id, _UNKNOWN)
        role = reference.calibration
        uncertainty = reference.cell_relative_uncertainty if role is None else role.relative_uncertainty
        origin = "of the phase's cell" if role is None else f"as a reference material: {role.role}"
        if role is not None and role.note:
            origin += f" ({role.note})"
        name = reference.name
    if relative_uncertainty is not None:
        uncertainty, origin = relative_uncertainty, "stated by the user"
    return ReferenceAtTemperature(
        reference=_expanded(reference, known, temperature - known.reference_c),
        name=name,
        relative_uncertainty=uncertainty,
        uncertainty_origin=origin,
        expansion=known,
        expansion_known=known is not _UNKNOWN,
        temperature_c=temperature,
        temperature_uncertainty_c=spread,
        temperature_stated=stated,
    )


def _expanded(
    reference: Phase | ReferenceSpacing, expansion: Expansion, difference_k: float
) -> Phase | ReferenceSpacing:
    across, along = (1 + coefficient * difference_k for coefficient in expansion.per_k)
    if isinstance(reference, ReferenceSpacing):
        return replace(reference, d_nm=reference.d_nm * along)
    a, b, c, *angles = reference.cell_angstrom_deg
    alpha, beta, gamma = angles
    return replace(reference, cell_angstrom_deg=(a * across, b * across, c * along, alpha, beta, gamma))
