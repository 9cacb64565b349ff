"""What a careful person would say about a measurement: one rule for each caution, each with its remedy."""

from fringespan.judgement.focus_advice import FocusAdvice, focus_advice
from fringespan.judgement.lens_effects import LensEffects, lens_effects
from fringespan.judgement.peaks import peak_cautions
from fringespan.judgement.regions import region_cautions
from fringespan.judgement.spectrum_signs import SpectrumSigns, spectrum_signs

__all__ = [
    "FocusAdvice",
    "LensEffects",
    "SpectrumSigns",
    "focus_advice",
    "lens_effects",
    "peak_cautions",
    "region_cautions",
    "spectrum_signs",
]
