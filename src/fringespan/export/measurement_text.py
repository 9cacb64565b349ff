"""A measurement in words and figures for people: what was measured, how sure it is, what to do next."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution, gravest_first
from fringespan.crystal.notation import direction_text, indices_text
from fringespan.export.plain_text import Column, Line, aligned_table, enumeration, one_line, paragraph, shortened
from fringespan.record import Match, Record, RecordedPicture, RecordedRegion
from fringespan.spacings import Peak
from fringespan.uncertainty import NOT_GIVEN, relative_length_uncertainty, value_text

__all__ = ["caution_lines", "measurement_lines", "picture_heading", "spacing_text"]

_CAUTIONS_SHOWN = 3
_PEAKS_WITH_ANGLES = 4
"""The angles between the strongest few are shown; all of them are in the record."""

_GRAVITY_WORDS = {"grave": "Grave", "warning": "Warning", "note": "Note"}


def measurement_lines(record: Record, width: int) -> list[Line]:
    """Return the text of a record.

    Parameters
    ----------
    record : Record
    width : int
        Characters that a line should have at most.

    Returns
    -------
    list of Line
        A heading for the picture, then for each region a heading, the table of spacings, the angles, the verdict, and
        at most three cautions, gravest first.
    """
    lines = picture_heading(record.picture, width)
    lines += caution_lines([(caution, "") for caution in record.cautions], width)
    for region in record.regions:
        lines.append(Line(""))
        lines += _region_lines(record.picture, region, width)
    return lines


def picture_heading(picture: RecordedPicture, width: int) -> list[Line]:
    """Return the heading of a picture: name, size, pixel size with its uncertainty and origin, voltage."""
    name = shortened(picture.name, max(20, width // 2))
    if picture.frame_count > 1:
        name += f", frame {picture.frame} of 0 to {picture.frame_count - 1}"
    rows, columns = picture.shape
    facts = [f"{rows} x {columns} px"]
    size = picture.pixel_size_nm
    if size is None:
        facts.append("pixel size not stated: everything is in pixels; give --pixel-size NM")
    else:
        per_pixel = f"{size[0]:.5g}" if size[0] == size[1] else f"{size[0]:.5g} (down) x {size[1]:.5g} (right)"
        origin = one_line(picture.pixel_size_source)
        facts.append(f"{per_pixel} nm/px, {_relative_uncertainty(picture)} ({origin})")
    if picture.voltage_kv is not None:
        facts.append(f"{picture.voltage_kv:g} kV")
    return [Line(name, "heading"), *paragraph(", ".join(facts), width, first="  ")]


def _relative_uncertainty(picture: RecordedPicture) -> str:
    uncertainty = picture.pixel_size_relative_uncertainty
    if uncertainty is None:
        return "uncertainty not stated"
    if isinstance(uncertainty, float):
        return f"known to {100 * uncertainty:.3g} %"
    return f"known to {100 * uncertainty[0]:.3g} % (down) and {100 * uncertainty[1]:.3g} % (right)"


def _region_lines(picture: RecordedPicture, region: RecordedRegion, width: int) -> list[Line]:
    name = shortened(region.region.name, max(20, width // 2))
    lines = [Line(name, "heading"), *paragraph(_region_facts(picture, region), width, first="  ")]
    if region.peaks:
        lines += _peak_lines(picture, region, width)
        lines += _angle_lines(region, width)
    lines += _verdict_lines(region, width)
    cautions = [(caution, "") for caution in region.cautions]
    for number, peak in enumerate(region.peaks, start=1):
        cautions += [(caution, str(number)) for caution in peak.cautions]
    lines += caution_lines(cautions, width)
    return lines


def _region_facts(picture: RecordedPicture, region: RecordedRegion) -> str:
    if not region.peaks:
        return "no fringe found"
    facts = []
    if region.crystal_extent_nm is not None:
        facts.append("crystal {:.1f} x {:.1f} nm".format(*region.crystal_extent_nm))
    if region.crystal_outline_px is not None:
        counted = float(np.ptp(region.crystal_outline_px @ region.peaks[0].g_per_px))
        facts.append(f"{counted:.0f} fringes across" if counted >= 1.5 else "a single fringe across")
    count = len(region.peaks)
    facts.append(f"{count} peaks" if count > 1 else "1 peak")
    lattice = region.lattice
    if lattice is not None:
        members = "all" if len(lattice.members) == count else str(len(lattice.members))
        text = f"{members} on one lattice"
        if lattice.lengths_nm is not None and lattice.length_uncertainties_nm is not None:
            sides = [
                value_text(length, math.hypot(uncertainty, length * _relative_pixel_part(picture, vector)))
                for length, uncertainty, vector in zip(
                    lattice.lengths_nm, lattice.length_uncertainties_nm, lattice.real_px, strict=True
                )
            ]
            angle = value_text(lattice.angle_deg, lattice.angle_uncertainty_deg)
            text += f" of {sides[0]} x {sides[1]} nm, {angle} deg"
        facts.append(text)
    return ", ".join(facts)


def _relative_pixel_part(picture: RecordedPicture, vector_px: NDArray[np.float64]) -> float:
    """Return the relative standard uncertainty of a length in this direction by the pixel size's; 0 if not stated."""
    uncertainty, size = picture.pixel_size_relative_uncertainty, picture.pixel_size_nm
    if uncertainty is None or size is None:
        return 0.0
    y, x = vector_px[0] * size[0], (vector_px[1] + picture.shear * vector_px[0]) * size[1]
    return relative_length_uncertainty(uncertainty, float(y), float(x))


def _peak_lines(picture: RecordedPicture, region: RecordedRegion, width: int) -> list[Line]:
    peaks = region.peaks
    columns = [Column("", "", [str(number) for number in range(1, len(peaks) + 1)])]
    if picture.pixel_size_nm is None:
        columns.append(Column("period", "px", [spacing_text(p, "px") for p in peaks]))
    else:
        columns += _spacing_columns(peaks)
    directions = [value_text(p.direction_deg, p.direction_uncertainty_deg) for p in peaks]
    columns.append(Column("direction", "deg", directions, rank=1))
    columns.append(Column("S/N", "", [f"{p.signal_to_noise:.0f}" for p in peaks], rank=5))
    if region.identification.matches:
        best = region.identification.matches[0]
        found = dict(enumerate(best.hkl))
        planes = [NOT_GIVEN if (hkl := found.get(i)) is None else indices_text(hkl) for i in range(len(peaks))]
        columns.append(Column(one_line(best.phase), "hkl", planes, "left", rank=1))
    if any(p.lattice_index is not None for p in peaks):
        indices = ["off" if p.lattice_index is None else "{:2d} {:2d}".format(*p.lattice_index) for p in peaks]
        columns.append(Column("lattice", "", indices, "left", rank=2))
    if any(p.combination_of is not None for p in peaks):
        combined = [", ".join(str(i + 1) for i in p.combination_of or ()) for p in peaks]
        columns.append(Column("combines", "", combined, "left", rank=4))
    if any(p.visibility is not None for p in peaks):
        visibilities = [NOT_GIVEN if p.visibility is None else f"{p.visibility:.2f}" for p in peaks]
        columns.append(Column("visibility", "", visibilities, rank=6))
    lines, left_out = aligned_table(columns, width, indent=" ")
    if picture.pixel_size_nm is not None and any(p.d_nm is not None and p.d_uncertainty_nm is None for p in peaks):
        lines += paragraph(
            "The uncertainty of d leaves out that of the pixel size, which is not stated: give "
            "--pixel-size-uncertainty PERCENT.",
            width,
            first="  ",
            emphasis="quiet",
        )
    if left_out:
        lines += paragraph(
            f"No room for: {', '.join(left_out)}; widen the window, or write --csv.",
            width,
            first="  ",
            emphasis="quiet",
        )
    return [*lines, *_remark_lines(peaks, width)]


def _spacing_columns(peaks: Sequence[Peak]) -> list[Column]:
    columns = [Column("d", "nm", [spacing_text(p, "nm") for p in peaks])]
    parts = {
        "fit": [_share(p.d_fit_uncertainty_nm, p) for p in peaks],
        "crystal": [_share(p.d_crystal_uncertainty_nm, p) for p in peaks],
        "pixel": [_share(_pixel_size_part(p), p) for p in peaks],
    }
    # an error of the pixel size that all spacings share stands above, in the line of the picture
    if len(set(parts["pixel"]) - {NOT_GIVEN}) == 1:
        del parts["pixel"]
    columns += [
        Column(name, "%", cells, rank=3) for name, cells in parts.items() if any(cell != NOT_GIVEN for cell in cells)
    ]
    if any(p.d_lattice_nm is not None for p in peaks):
        from_lattice = [value_text(p.d_lattice_nm, p.d_lattice_uncertainty_nm) for p in peaks]
        columns.append(Column("d lattice", "nm", from_lattice, rank=2))
    return columns


def spacing_text(peak: Peak, unit: Literal["nm", "px"]) -> str:
    """Return the spacing of a peak with its uncertainty in parentheses, or "withheld".

    In nm the uncertainty is the whole one, or that of fit and crystal while the pixel size's is not stated; in pixels
    that of the fit.
    """
    if unit == "px":
        return value_text(peak.period_px, _period_uncertainty(peak))
    if peak.d_nm is None:
        return "withheld"
    stated = peak.d_uncertainty_nm
    if stated is None and peak.d_fit_uncertainty_nm is not None:
        stated = math.hypot(peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm or 0.0)
    return value_text(peak.d_nm, stated)


def _pixel_size_part(peak: Peak) -> float | None:
    total, fit, crystal = peak.d_uncertainty_nm, peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm
    if total is None or fit is None or crystal is None:
        return None
    return math.sqrt(max(0.0, total**2 - fit**2 - crystal**2))


def _share(part: float | None, peak: Peak) -> str:
    if part is None or peak.d_nm is None:
        return NOT_GIVEN
    per_cent = 100 * part / peak.d_nm
    return "0" if per_cent == 0 else f"{per_cent:.2f}" if per_cent < 0.995 else f"{per_cent:.1f}"


def _period_uncertainty(peak: Peak) -> float:
    """Return the standard uncertainty of 1 / |g|, the fit part: period^2 times that of g along itself."""
    along = peak.g_per_px * peak.period_px
    return peak.period_px**2 * math.sqrt(max(0.0, float(along @ peak.g_covariance_per_px2 @ along)))


def _remark_lines(peaks: Sequence[Peak], width: int) -> list[Line]:
    """Say of which peaks something is to be said, the same only once."""
    remarks: dict[str, list[str]] = {}
    for number, peak in enumerate(peaks, start=1):
        if peak.withheld is not None:
            remarks.setdefault(f"no d: {one_line(peak.withheld)}", []).append(str(number))
        if peak.origin != "found":
            remarks.setdefault(peak.origin, []).append(str(number))
    lines: list[Line] = []
    for remark, numbers in remarks.items():
        lines += paragraph(f"{remark}.", width, first=f"  {', '.join(numbers)}: ")
    return lines


def _angle_lines(region: RecordedRegion, width: int) -> list[Line]:
    if not region.angles:
        return []
    shown = [angle for angle in region.angles if max(angle.peaks) < _PEAKS_WITH_ANGLES]
    texts = [
        f"{angle.peaks[0] + 1}-{angle.peaks[1] + 1} {value_text(angle.angle_deg, angle.angle_uncertainty_deg)}"
        for angle in shown
    ]
    if more := len(region.angles) - len(shown):
        texts.append(f"{more} more in the record")
    return enumeration(texts, width, first="  angles (deg): ")


def _verdict_lines(region: RecordedRegion, width: int) -> list[Line]:
    verdict, matches = region.identification.verdict, region.identification.matches
    if verdict is None:
        return []
    text = region.identification.sentence or f"{verdict[0].upper()}{verdict[1:]}."
    lines = paragraph(text, width, first="  ", emphasis="subheading")
    if matches:
        best = "; ".join(_match_words(match) for match in matches[:3])
        lines += paragraph(f"{best}.", width, first="  best: ", emphasis="quiet")
    return lines


def _match_words(match: Match) -> str:
    seen = "" if match.zone is None else f" along {direction_text(match.zone)}"
    return f"{one_line(match.phase)}{seen}, probability {match.probability:.2g}"


def caution_lines(cautions: Iterable[tuple[Caution, str]], width: int) -> list[Line]:
    """Return at most three cautions with their remedies, gravest first, the same one once.

    Parameters
    ----------
    cautions : iterable of (Caution, str)
        With the number of the peak that it concerns, or an empty text.
    width : int
    """
    concerned: dict[Caution, list[str]] = {}
    for caution, peak in cautions:
        concerned.setdefault(caution, []).extend([peak] if peak else [])
    lines: list[Line] = []
    ordered = gravest_first(concerned)
    for caution in ordered[:_CAUTIONS_SHOWN]:
        peaks = concerned[caution]
        about = f"peak{'s' if len(peaks) > 1 else ''} {', '.join(peaks)}: " if peaks else ""
        lines += paragraph(
            f"{_GRAVITY_WORDS[caution.gravity]}: {about}{caution.text} {caution.remedy}",
            width,
            first="  ",
            emphasis=caution.gravity,
        )
    if len(ordered) > _CAUTIONS_SHOWN:
        lines.append(Line(f"  {len(ordered) - _CAUTIONS_SHOWN} more in the record (--json FILE).", "quiet"))
    return lines
