"""What the lens does to each set of fringes, and what to say about it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fringespan.beam import Lens, parabolic_excitation_error_per_nm, phase_contrast_transfer, signed_delocalisation_nm
from fringespan.cautions import Caution
from fringespan.judgement.focus_advice import focus_advice

__all__ = ["LensEffects", "defocus_remedy", "defocus_words", "lens_cautions", "lens_effects", "off_bragg_caution"]

_FAR_NM = 0.5
"""Delocalisation from which the region's place, and the error of a particle's spacing, are ruled by it."""

_PEAKS_NAMED = 8
_STRONG = 0.2
"""Share of the strongest signal to noise from which a peak counts as strong."""

_OFF_BRAGG_PER_NM = 0.1
"""Excitation error from which only crystals thinner than 10 nm show a reflection well."""


@dataclass(frozen=True, slots=True)
class LensEffects:
    """What the lens does to each peak.

    Attributes
    ----------
    transfer : tuple of float
        Phase-contrast transfer, from -1 to 1.
    delocalisation_nm : tuple of float
        Sideways shift, signed.
    """

    transfer: tuple[float, ...]
    delocalisation_nm: tuple[float, ...]


def lens_effects(g_per_nm: Sequence[float], lens: Lens) -> LensEffects:
    """Return what a lens does to reflections of these spatial frequencies."""
    g = np.asarray(g_per_nm, float)
    return LensEffects(
        tuple(phase_contrast_transfer(g, lens).tolist()), tuple(signed_delocalisation_nm(g, lens).tolist())
    )


def lens_cautions(
    effects: LensEffects, signal_to_noise: Sequence[float], strongest_nm: float, lens: Lens
) -> tuple[Caution, ...]:
    """State the transfer at each peak, and warn where the fringes of strong ones lie off their crystal.

    Parameters
    ----------
    effects : LensEffects
        Of at least one peak.
    signal_to_noise : sequence of float
        Of the peaks.
    strongest_nm : float
        Spacing of the strongest peak.
    lens : Lens

    Returns
    -------
    tuple of Caution
    """
    # weak peaks are mostly sums and harmonics, which the lens does not move as it moves a beam
    least = _STRONG * max(signal_to_noise)
    shifts = [abs(r) for r, s in zip(effects.delocalisation_nm, signal_to_noise, strict=True) if s >= least]
    named = ", ".join(f"{number}: {t:+.2f}" for number, t in enumerate(effects.transfer[:_PEAKS_NAMED], start=1))
    more = ", ..." if len(effects.transfer) > _PEAKS_NAMED else ""
    low, high = min(shifts), max(shifts)
    shift = f"{high:.2f}" if f"{low:.2f}" == f"{high:.2f}" else f"{low:.2f} to {high:.2f}"
    found: tuple[Caution, ...] = (
        Caution(
            "lens-transfer",
            "note",
            f"At {defocus_words(lens.defocus_nm)} and Cs {lens.cs_mm:g} mm the lens transfers the peaks with {named}{more} "
            f"(1 in full, 0 not at all, negative: atoms dark) and shifts the strong fringes sideways by {shift} nm.",
            "Compare strengths only between peaks of like transfer.",
        ),
    )
    if high > _FAR_NM:
        found += (
            Caution(
                "delocalised-fringes",
                "warning",
                f"The lens shifts fringes sideways by up to {high:.1f} nm: they do not stand where their crystal is, and "
                "its shape bends them.",
                f"Draw the region where the fringes are; {defocus_remedy(strongest_nm, lens.voltage_kv, lens.cs_mm)}",
            ),
        )
    return found


def defocus_words(defocus_nm: float) -> str:
    """Return a defocus in words, such as "60 nm underfocus"."""
    return f"{abs(defocus_nm):.3g} nm {'overfocus' if defocus_nm < 0 else 'underfocus'}"


def defocus_remedy(d_nm: float, voltage_kv: float, cs_mm: float) -> str:
    """Say at which defocus the lens disturbs a spacing least and still shows it; ends with a full stop."""
    advice = focus_advice(d_nm, voltage_kv, cs_mm)
    return (
        f"near {defocus_words(advice.defocus_nm)} the lens shows fringes of {d_nm:.4f} nm and shifts them by "
        f"{advice.delocalisation_nm:.2f} nm only."
    )


def off_bragg_caution(finest_nm: float, voltage_kv: float) -> tuple[Caution, ...]:
    """Say when the finest reflection lies far off the Ewald sphere with the beam along the zone axis.

    Parameters
    ----------
    finest_nm : float
    voltage_kv : float

    Notes
    -----
    s = -lambda g^2 / 2; a crystal of thickness t shows a reflection well while |s| t < 1.
    """
    s = abs(float(parabolic_excitation_error_per_nm(1 / finest_nm, voltage_kv)))
    if s < _OFF_BRAGG_PER_NM:
        return ()
    return (
        Caution(
            "off-bragg",
            "note",
            f"Along the zone axis the finest peak ({finest_nm:.3f} nm) is {s:.2f} 1/nm off Bragg's condition at "
            f"{voltage_kv:g} kV: only a crystal thinner than about {_rounded(1 / s)} nm shows it by itself.",
            "In a thicker crystal take it for double diffraction, or for a crystal tilted off its zone axis.",
        ),
    )


def _rounded(thickness_nm: float) -> str:
    return f"{thickness_nm:.{max(0, 1 - math.floor(math.log10(thickness_nm)))}f}"
