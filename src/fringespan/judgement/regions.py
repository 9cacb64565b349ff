"""What to say about a region as a whole: each rule with its own text and remedy.

The articles named in the texts are cited from memory.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fringespan.beam import Lens
from fringespan.cautions import Caution
from fringespan.crystal_fringes import CrystalFringes
from fringespan.judgement.lens_effects import LensEffects, defocus_remedy, lens_cautions, off_bragg_caution
from fringespan.judgement.missing_fringes import arc_or_streak, needed_fringes, no_fringe_caution, strongest_arc
from fringespan.judgement.off_lattice import OFF_LATTICE
from fringespan.judgement.peaks import fringe_counts
from fringespan.judgement.pixel_signs import pixel_cautions, replaced_pixel_cautions
from fringespan.judgement.spectrum_signs import (
    FINE_DETAIL_MISSING,
    LOPSIDED_RINGS,
    SCAN_LINES,
    SpectrumSigns,
    is_lopsided,
)
from fringespan.micrograph import Micrograph
from fringespan.settings import MeasurementSettings
from fringespan.spacings import Peak
from fringespan.spectrum import PowerSpectrum, RegionPixels

__all__ = [
    "NOT_ONE_PLANE_WAVE",
    "ONE_OF_A_SERIES",
    "ONE_SPACING",
    "PIXEL_SIZE_NOT_STATED",
    "PIXEL_SIZE_RULES",
    "PIXEL_SIZE_UNCERTAINTY_NOT_STATED",
    "ROWS_AND_COLUMNS_MAY_DIFFER",
    "SMALL_CRYSTAL",
    "TWO_LATTICES",
    "UNCHECKED_PAIR",
    "VISIBILITY_IS_A_LOWER_LIMIT",
    "another_crystal",
    "are_all_parallel",
    "crystal_part_rules",
    "crystal_smaller_than_region",
    "region_cautions",
    "scale_cautions",
]

TWO_LATTICES = Caution(
    "two-lattices",
    "grave",
    "The peaks belong to two lattices: crystals or twins that overlap, whose moire fringes are no spacings, and whose "
    "angles to each other say nothing about either.",
    "Draw the region inside one grain.",
)

ONE_SPACING = Caution(
    "one-spacing",
    "warning",
    "Only one set of planes shows fringes: one spacing identifies nothing; two and the angle between them are the least.",
    "Look for a crystal that shows crossed fringes, or tilt this one to a zone axis.",
)

NOT_ONE_PLANE_WAVE = Caution(
    "not-one-plane-wave",
    "note",
    "The fringes are not plane waves over the whole region: they end, fade or bend in it; the uncertainty is widened for it.",
    "Draw the region where they run straight and even.",
)

UNCHECKED_PAIR = Caution(
    "unchecked-pair",
    "note",
    "Nothing checks the spacings: two and the angle between them are the least that identify; a third on a common lattice "
    "would check them.",
    "Draw the region larger within the grain, or look for a grain that shows more.",
)

SMALL_CRYSTAL = Caution(
    "small-crystal",
    "warning",
    "Small crystals deceive: off a zone axis their fringe spacings differ from the lattice by up to several per cent, and "
    "bend or split in a perfect crystal (Malm & O'Keefe, Ultramicroscopy 68 (1997) 13); one picture does not show a tilt.",
    "Measure several particles, and take d from the lattice; with voltage, Cs and defocus given the lens is counted in, and "
    "pictures at two tilts show the tilt (Qin & Fraundorf, Ultramicroscopy 94 (2003) 245).",
)

PIXEL_SIZE_NOT_STATED = Caution(
    "pixel-size-not-stated",
    "warning",
    "No pixel size is known; everything is measured in pixels.",
    "Give the pixel size in nm, from the microscope's log or a magnification check.",
)

PIXEL_SIZE_UNCERTAINTY_NOT_STATED = Caution(
    "pixel-size-uncertainty-not-stated",
    "warning",
    "How well the pixel size is known is not stated, so that d has no whole uncertainty; magnifications that nobody "
    "checked are commonly off by several per cent.",
    "State it, or check the magnification on a reference material; meanwhile trust angles and ratios of spacings first.",
)

PIXEL_SIZE_RULES = Caution(
    "pixel-size-rules",
    "note",
    "The pixel size's uncertainty is by far the largest part of that of d, and common to all spacings: angles and ratios "
    "are known much better.",
    "Check the magnification on a reference material; compare by angles and ratios.",
)

ROWS_AND_COLUMNS_MAY_DIFFER = Caution(
    "rows-and-columns-may-differ",
    "warning",
    "The pixel size's error is taken as common to rows and columns, but in a scanned picture, or with a tilted camera, they "
    "differ: then angles are wrong as well.",
    "State the uncertainty for rows and columns apart (two numbers), or check the magnification in two directions.",
)

VISIBILITY_IS_A_LOWER_LIMIT = Caution(
    "visibility-lower-limit",
    "note",
    "The detector's transfer lowers the visibility, which is not corrected for it: take it as a lower limit.",
    "Compare visibilities only between equal spacings in pixels.",
)

ONE_OF_A_SERIES = Caution(
    "one-of-a-series",
    "note",
    "The picture is one of a series: under the beam a crystal can lose its order or change its phase.",
    "Measure the same region in the first frame and the last, and compare.",
)

_DECEIVED_BELOW = 40.0
"""Fringes across an unevenly filled crystal, about 10 nm: up to there spacings were studied (`SMALL_CRYSTAL`)."""

_FILLED = 0.6
_PARALLEL_DEG = 1.0
_RULES = 3.0
_UNEQUAL = 1e-3
_OTHERS_NAMED = 4
_LEAST_OF_LATTICE = 3


def are_all_parallel(directions_deg: Sequence[float], uncertainties_deg: Sequence[float]) -> bool:
    """Say whether all sets of fringes run in one direction, within three standard uncertainties and one degree."""
    first, sigma = directions_deg[0], uncertainties_deg[0]
    for direction, own in zip(directions_deg, uncertainties_deg, strict=True):
        apart = abs(direction - first) % 180.0
        if min(apart, 180.0 - apart) > _PARALLEL_DEG + 3 * math.hypot(sigma, own):
            return False
    return True


def another_crystal(frequency: NDArray[np.float64], geometry: NDArray[np.float64] | None) -> Caution:
    """Name the fringes of the region that are not those of the crystal that was measured.

    Parameters
    ----------
    frequency : ndarray, shape (k, 2)
        Cycles per pixel.
    geometry : ndarray, shape (2, 2), or None
        nm per pixel.
    """
    g, unit = (frequency, "px") if geometry is None else (frequency @ np.linalg.inv(geometry), "nm")
    spacings = sorted((1 / np.hypot(*g.T)).tolist(), reverse=True)
    named = ", ".join(f"{d:.4g}" for d in spacings[:_OTHERS_NAMED])
    more = f" and {len(spacings) - _OTHERS_NAMED} more" if len(spacings) > _OTHERS_NAMED else ""
    return Caution(
        "another-crystal-in-region",
        "warning",
        f"The region holds fringes of another crystal as well ({named} {unit}{more}); the largest one alone was measured.",
        "Draw a region inside each grain, never across two.",
    )


def crystal_smaller_than_region(share: float) -> Caution:
    """Say that the crystal fills only this share of the region."""
    return Caution(
        "crystal-smaller-than-region",
        "note",
        f"The crystal fills only {100 * share:.0f} % of the region; it was measured within its own outline.",
        "See whether the outline is the crystal you mean, or draw the region around it.",
    )


def crystal_part_rules(voltage_kv: float | None, cs_mm: float | None, d_nm: float) -> Caution:
    """Say what helps where the shape of the crystal rules the uncertainty of a spacing."""
    remedy = (
        "Combine a focal series, of which five pictures lower this part to 0.6, or measure a larger, flatter crystal"
    )
    if voltage_kv is None or cs_mm is None:
        remedy += "."
    else:
        remedy += f"; {defocus_remedy(d_nm, voltage_kv, cs_mm)}"
    return Caution(
        "crystal-part-rules",
        "note",
        "The largest part of the uncertainty is what one picture cannot show of an uneven crystal: thickness and lens shift "
        "its fringes.",
        remedy,
    )


def scale_cautions(
    pixel_size_nm: tuple[float, float] | None,
    relative_uncertainty: float | tuple[float, float] | None,
    codes_said: Sequence[str],
    is_scanned: bool,
) -> tuple[Caution, ...]:
    """Return what to say about the pixel size before anything is measured.

    Parameters
    ----------
    pixel_size_nm : (float, float), or None
    relative_uncertainty : float, (float, float), or None
    codes_said : sequence of str
        Codes of the picture's own cautions: what reading the file has said of the pixel size is not said again.
    is_scanned : bool
        Whether the rows show that the picture was scanned line by line.
    """
    if pixel_size_nm is None:
        return () if any(code.startswith("pixel-size-not") for code in codes_said) else (PIXEL_SIZE_NOT_STATED,)
    found: tuple[Caution, ...] = ()
    if relative_uncertainty is None:
        found += (PIXEL_SIZE_UNCERTAINTY_NOT_STATED,)
    if not isinstance(relative_uncertainty, tuple):
        row, column = pixel_size_nm
        if is_scanned or abs(row / column - 1) > _UNEQUAL:
            found += (ROWS_AND_COLUMNS_MAY_DIFFER,)
    return found


def region_cautions(
    micrograph: Micrograph,
    settings: MeasurementSettings,
    values: NDArray[np.generic],
    pixels: RegionPixels,
    spectrum: PowerSpectrum,
    signs: SpectrumSigns,
    found: CrystalFringes,
    peaks: Sequence[Peak],
    lens: Lens | None,
    effects: LensEffects | None,
) -> list[Caution]:
    """Return what to say about a region as a whole, the same gravity in order of importance.

    Parameters
    ----------
    micrograph : Micrograph
    settings : MeasurementSettings
    values : ndarray, shape (rows, columns)
        Pixels of the region's rectangle as they were read.
    pixels : RegionPixels
        The same without defects.
    spectrum : PowerSpectrum
    signs : SpectrumSigns
    found : CrystalFringes
    peaks : sequence of Peak
    lens : Lens, or None
    effects : LensEffects, or None
        Of the peaks, where the lens is known.
    """
    said: list[Caution] = [*pixel_cautions(values, pixels.footprint)]
    if pixels.defect_count or pixels.saturated_count:
        said += replaced_pixel_cautions(pixels.defect_count, pixels.saturated_count, pixels.footprint.count)
    if signs.is_fine_detail_missing:
        said.append(FINE_DETAIL_MISSING)
    size = micrograph.pixel_size_nm
    if not peaks:
        if size is None:
            said += scale_cautions(None, None, [c.code for c in micrograph.cautions], False)
        aspect = round(size[1] / size[0], 3) if size is not None else 1.0
        mean = pixels.unit * float(pixels.trend[0] + (pixels.trend[2] + pixels.trend[7]) / 3)
        place = strongest_arc(spectrum, pixels.footprint, aspect)
        if place is not None:
            said.append(arc_or_streak(place, micrograph.geometry_nm_per_px))
            return said
        needed = needed_fringes(spectrum, pixels.footprint, settings, aspect)
        said.append(no_fringe_caution(needed, size, mean, micrograph.dark_level))
        if is_lopsided(spectrum):
            said.append(LOPSIDED_RINGS)
        return said
    if found.second_lattice is not None and _are_unexplained(peaks, found.second_lattice.member):
        said.append(TWO_LATTICES)
    if are_all_parallel([p.direction_deg for p in peaks], [p.direction_uncertainty_deg for p in peaks]):
        said.append(ONE_SPACING)
    elif found.lattice is None:
        said.append(UNCHECKED_PAIR)
    if len(found.others):
        said.append(another_crystal(found.others, micrograph.geometry_nm_per_px))
    if found.uneven and found.outline is not None:
        if fringe_counts(found.outline, found.frequency[:1])[0] < _DECEIVED_BELOW:
            said.append(SMALL_CRYSTAL)
        else:
            said.append(NOT_ONE_PLANE_WAVE)
        if found.share < _FILLED:
            said.append(crystal_smaller_than_region(found.share))
    said += scale_cautions(
        size,
        micrograph.pixel_size_relative_uncertainty,
        [c.code for c in micrograph.cautions],
        signs.rows_differ,
    )
    if lens is not None and effects is not None:
        said += lens_cautions(effects, [p.signal_to_noise for p in peaks], _spacing_nm(peaks[0]), lens)
    said += _part_that_rules(peaks, micrograph)
    if signs.rows_differ or signs.columns_differ:
        said.append(SCAN_LINES)
    if micrograph.frame_count > 1:
        said.append(ONE_OF_A_SERIES)
    if peaks[0].visibility is not None:
        said.append(VISIBILITY_IS_A_LOWER_LIMIT)
    if micrograph.voltage_kv is not None:
        finest = min((p.d_nm for p in peaks if p.d_nm is not None and p.combination_of is None), default=None)
        if finest is not None:
            said += off_bragg_caution(finest, micrograph.voltage_kv)
    return said


def _are_unexplained(peaks: Sequence[Peak], members: NDArray[np.bool_]) -> bool:
    """Say whether at least three peaks of a second lattice are neither superlattice nor folded."""
    own = [p for p, member in zip(peaks, members.tolist(), strict=True) if member]
    return sum(OFF_LATTICE in p.cautions for p in own) >= _LEAST_OF_LATTICE


def _spacing_nm(peak: Peak) -> float:
    """Return the spacing of a peak in nm, also where it is withheld."""
    assert peak.g_per_nm is not None
    return 1 / float(np.hypot(*peak.g_per_nm))


def _part_that_rules(peaks: Sequence[Peak], micrograph: Micrograph) -> tuple[Caution, ...]:
    """Say which part of the uncertainty of the strongest peak's spacing rules the others, if one does."""
    for peak in peaks:
        d, fit, crystal, total = (
            peak.d_nm,
            peak.d_fit_uncertainty_nm,
            peak.d_crystal_uncertainty_nm,
            peak.d_uncertainty_nm,
        )
        if d is None or fit is None or crystal is None:
            continue
        scale = 0.0 if total is None else math.sqrt(max(total**2 - fit**2 - crystal**2, 0.0))
        if scale > _RULES * math.hypot(fit, crystal):
            return (PIXEL_SIZE_RULES,)
        if crystal > _RULES * fit and crystal > scale:
            return (crystal_part_rules(micrograph.voltage_kv, micrograph.cs_mm, d),)
        return ()
    return ()
