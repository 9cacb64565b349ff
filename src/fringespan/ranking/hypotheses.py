"""The outcome of a ranking: hypotheses, best first, and what may be said of them."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

from fringespan.cautions import Caution
from fringespan.crystal.phase import Phase
from fringespan.exceptions import SettingsError

__all__ = ["Hypothesis", "Ranking", "RankingSettings", "Verdict"]

Verdict = Literal["identified", "ambiguous", "unidentified", "too few reflections", "more than one crystal"]


@dataclass(frozen=True, slots=True, kw_only=True)
class RankingSettings:
    """What a ranking takes for granted.

    Parameters
    ----------
    distortion : float, optional
        Standard deviation of the picture's stretch and shear, as a fraction: different pixel size along rows and
        columns beyond what is stated, camera, drift, slight tilt. Too small a value misleads, too large a one costs
        little.
    scale_when_unstated : float, optional
        Relative standard uncertainty of the pixel size where none is stated.
    false_share : float, optional
        Share of peaks that belong to no crystal.
    unlisted_probability : float, optional
        Probability, before looking, that the phase is none of the list.
    unlisted_spread : float, optional
        How much such a phase's size differs from a listed one of the same shape (standard deviation of the logarithm).
    identified_above : float, optional
        Probability that a phase must have to be called identified.
    most_matches : int, optional
        Most hypotheses returned.

    Raises
    ------
    SettingsError
        If one of them is out of range.
    """

    distortion: float = 0.005
    scale_when_unstated: float = 0.05
    false_share: float = 0.05
    unlisted_probability: float = 0.3
    unlisted_spread: float = 0.2
    identified_above: float = 0.95
    most_matches: int = 40

    def __post_init__(self) -> None:
        limits = {
            "distortion": (1e-5, 0.1),
            "scale_when_unstated": (1e-4, 0.5),
            "false_share": (1e-6, 0.5),
            "unlisted_probability": (1e-9, 0.999),
            "unlisted_spread": (0.01, 1.0),
            "identified_above": (0.5, 0.999999),
            "most_matches": (1, 1000),
        }
        for name, (low, high) in limits.items():
            value = getattr(self, name)
            if not low <= value <= high:
                raise SettingsError(f"{name} must lie between {low:g} and {high:g}, got {value!r}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Hypothesis:
    """One explanation of the peaks: a phase, seen along a zone axis, in one orientation.

    Attributes
    ----------
    phase : str
        Id of the phase.
    structure : Phase
    zone : (int, int, int) or None
        [uvw] from the specimen to the viewer; None where only one set of fringes was seen.
    probability : float
        Of this phase and zone among all that were compared, the possibility of a phase not in the list included.
    hkl : tuple of (int, int, int) or None
        Indices of each peak in the sense of its g; None where the peak is left unexplained.
    rotation_deg : float or None
        Direction, counter-clockwise from the right, of the zone's coarsest allowed reflection (first of its pattern).
    scale, scale_uncertainty : float or None
        True over nominal pixel size, by this hypothesis, within what is stated of the pixel size.
    fits : bool
        Whether the peaks agree with it within their uncertainties.
    pulls : tuple of float or None
        For each peak the difference of measured and expected length of g after the fit, in standard uncertainties.
    expected_d_nm : tuple of float or None
        Spacing of the phase for each peak.
    chi_squared, degrees_of_freedom : float, int
        Of the fit, the stated uncertainties of scale and distortion included.
    missing : tuple of (int, int, int)
        Strong reflections among those looked for that no peak shows, strongest first.
    forbidden : tuple of bool
        For each peak whether its reflection has no kinematic intensity.
    indistinguishable_from : tuple of (str, (int, int, int))
        Phases and zones whose reflections fall on the same places within the uncertainties.
    """

    phase: str
    structure: Phase = field(repr=False)
    zone: tuple[int, int, int] | None
    probability: float
    hkl: tuple[tuple[int, int, int] | None, ...]
    rotation_deg: float | None
    scale: float | None
    scale_uncertainty: float | None
    fits: bool
    pulls: tuple[float | None, ...]
    expected_d_nm: tuple[float | None, ...]
    chi_squared: float
    degrees_of_freedom: int
    missing: tuple[tuple[int, int, int], ...] = ()
    forbidden: tuple[bool, ...] = ()
    indistinguishable_from: tuple[tuple[str, tuple[int, int, int]], ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Ranking:
    """All hypotheses for the peaks of one region.

    Attributes
    ----------
    matches : tuple of Hypothesis
        Best first, one for each phase and zone.
    verdict : str
    sentence : str
        The verdict in words, with what would decide an open case.
    probability_of_phase : dict of str to float
        Summed over zones, most probable first.
    unlisted_probability : float
        That the phase is none of the list.
    credible_phases : tuple of str
        The most probable listed phases that together reach 95 % of the probability of all listed ones.
    cautions : tuple of Caution
        What the naming of a phase adds to the region's cautions.
    second_crystal : Hypothesis or None
        What the peaks that the best hypothesis leaves over look like, where they are those of another crystal.
    assumptions : str
        What was compared and taken for granted, in words.
    ruled_out : dict of str to str
        For each phase of a short list whose probability is below 1 %, what speaks against it.
    """

    matches: tuple[Hypothesis, ...]
    verdict: Verdict
    sentence: str
    probability_of_phase: dict[str, float]
    unlisted_probability: float
    credible_phases: tuple[str, ...]
    cautions: tuple[Caution, ...]
    second_crystal: Hypothesis | None = None
    assumptions: str = ""
    ruled_out: dict[str, str] = field(default_factory=dict)
