"""How the docks say it: spacings in the chosen unit, sentences, the table as text."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fringespan.cautions import Caution, gravest_first
from fringespan.export.plain_text import one_line
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph
from fringespan.spacings import Peak
from fringespan.uncertainty import value_text
from fringespan.viewer.line_angles import Line, planes_to_line_deg

if TYPE_CHECKING:
    from fringespan.viewer.state import MeasuredRegion, Unit

__all__ = [
    "GRAVITY_WORDS",
    "UNIT_SYMBOLS",
    "UncertaintyParts",
    "angle_text",
    "caution_words",
    "main_spacing",
    "picture_words",
    "region_words",
    "result_words",
    "spacing",
    "table_text",
    "uncertainty_parts",
    "unit_symbol",
]

UNIT_SYMBOLS: dict[Unit, str] = {"nm": "nm", "angstrom": "Å", "pm": "pm"}
_PER_NM: dict[Unit, float] = {"nm": 1.0, "angstrom": 10.0, "pm": 1000.0}

GRAVITY_WORDS = {"grave": "Grave", "warning": "Warning", "note": "Note"}


def unit_symbol(micrograph: Micrograph | None, unit: Unit) -> str:
    """Return the symbol of the unit that spacings are shown in; pixels without a pixel size."""
    return "px" if micrograph is None or micrograph.pixel_size_nm is None else UNIT_SYMBOLS[unit]


def spacing(peak: Peak, unit: Unit) -> str:
    """Return the spacing of a peak with its uncertainty in parentheses, without unit."""
    if peak.g_per_nm is None:
        along = peak.g_per_px * peak.period_px
        variance = float(along @ peak.g_covariance_per_px2 @ along)
        return value_text(peak.period_px, peak.period_px**2 * math.sqrt(max(0.0, variance)))
    if peak.d_nm is None:
        return "withheld"
    factor = _PER_NM[unit]
    parts = uncertainty_parts(peak)
    return value_text(factor * peak.d_nm, None if parts is None else factor * parts.total_nm)


def lattice_spacing(peak: Peak, unit: Unit) -> str:
    """Return the spacing that the common lattice gives a peak, without unit; a dash where there is none."""
    factor, stated = _PER_NM[unit], peak.d_lattice_uncertainty_nm
    return value_text(
        None if peak.d_lattice_nm is None else factor * peak.d_lattice_nm, None if stated is None else factor * stated
    )


def angle_text(degrees: float, uncertainty: float) -> str:
    """Return an angle with its uncertainty in parentheses, without unit."""
    return value_text(degrees, uncertainty)


@dataclass(frozen=True, slots=True)
class UncertaintyParts:
    """The three parts of the standard uncertainty of a spacing in nm; the pixel size's is 0 while not stated."""

    spacing_nm: float
    noise_nm: float
    crystal_nm: float
    pixel_size_nm: float

    @property
    def total_nm(self) -> float:
        """All three together."""
        return math.hypot(self.noise_nm, self.crystal_nm, self.pixel_size_nm)

    def advice(self) -> str:
        """Say what the uncertainty consists of and what would shorten its longest part."""
        per_cent = [100 * part / self.spacing_nm for part in (self.noise_nm, self.crystal_nm, self.pixel_size_nm)]
        remedies = (
            "a larger region, or a longer exposure",
            "a slab-like part of the crystal, or three pictures at different defocus",
            "a magnification check with a known crystal",
        )
        longest = max(range(3), key=lambda i: per_cent[i])
        said = f"Noise {per_cent[0]:.2g} %, crystal {per_cent[1]:.2g} %, pixel size {per_cent[2]:.2g} % of the spacing."
        if self.total_nm == 0:
            return said
        return f"{said}\nWhat would shorten the longest: {remedies[longest]}."


def uncertainty_parts(peak: Peak) -> UncertaintyParts | None:
    """Return the parts of a spacing's uncertainty; None without a spacing in nm."""
    d, fit, crystal = peak.d_nm, peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm
    if d is None or fit is None or crystal is None:
        return None
    total = peak.d_uncertainty_nm
    rest = 0.0 if total is None else math.sqrt(max(0.0, total**2 - fit**2 - crystal**2))
    return UncertaintyParts(d, fit, crystal, rest)


def main_spacing(region: MeasuredRegion, unit: Unit) -> str:
    """Return the strongest spacing of a region with its unit, for the label on the picture; empty without one."""
    measurement = region.measurement
    if measurement is None or not measurement.peaks or region.problem is not None:
        return ""
    return f"{spacing(measurement.peaks[0], unit)} {unit_symbol(measurement.micrograph, unit)}"


# --- sentences -----------------------------------------------------------------------------------------------------


def picture_words(micrograph: Micrograph) -> str:
    """Say what is known of a picture's scale and beam."""
    size, uncertainty = micrograph.pixel_size_nm, micrograph.pixel_size_relative_uncertainty
    rows, columns = micrograph.shape
    said = [f"{rows} x {columns} px"]
    if micrograph.frame_count > 1:
        said.append(f"frame {micrograph.frame} of 0 to {micrograph.frame_count - 1}")
    if size is None:
        said.append("pixel size not stated")
    else:
        per_px = f"{size[0]:.5g}" if size[0] == size[1] else f"{size[0]:.5g} (down) x {size[1]:.5g} (right)"
        known = "uncertainty not stated"
        if isinstance(uncertainty, tuple):
            known = f"± {100 * uncertainty[0]:.3g} % and {100 * uncertainty[1]:.3g} %"
        elif uncertainty is not None:
            known = f"± {100 * uncertainty:.3g} %"
        said.append(f"{per_px} nm/px, {known}")
        said.append(f"from: {one_line(micrograph.pixel_size_source)}")
    if micrograph.voltage_kv is not None:
        said.append(f"{micrograph.voltage_kv:g} kV")
    return " · ".join(said)


def region_words(region: MeasuredRegion, micrograph: Micrograph) -> str:
    """Say how large a region is, in nm and in fringes."""
    corners = np.array(region.drawn.vertices_px)
    height, width = np.ptp(corners, axis=0)
    size = micrograph.pixel_size_nm
    said = f"{height:.0f} x {width:.0f} px" if size is None else f"{height * size[0]:.1f} x {width * size[1]:.1f} nm"
    measurement = region.measurement
    if measurement is None or region.is_stale:
        return said
    if measurement.peaks and measurement.crystal_outline_px is not None:
        count = float(np.ptp(measurement.crystal_outline_px @ measurement.peaks[0].g_per_px))
        said += f", {count:.0f} fringes across" if count >= 1.5 else ", a single fringe across"
    return said


def result_words(measurement: Measurement, unit: Unit) -> str:
    """Say in a sentence what was found."""
    count = len(measurement.peaks)
    if count == 0:
        return "No fringe found."
    if count == 1:
        return "One set of fringes: one spacing identifies nothing."
    lattice = measurement.lattice
    if lattice is None:
        return f"{count} sets of fringes without a common lattice."
    members = "All" if len(lattice.members) == count else f"{len(lattice.members)} of"
    said = f"{members} {count} sets of fringes lie on one lattice"
    if lattice.lengths_nm is not None:
        factor = _PER_NM[unit]
        sides = " x ".join(f"{factor * length:.4g}" for length in lattice.lengths_nm)
        angle = angle_text(lattice.angle_deg, lattice.angle_uncertainty_deg)
        said += f" of {sides} {UNIT_SYMBOLS[unit]}, {angle}°"
    return f"{said}."


def caution_words(measurement: Measurement) -> list[tuple[Caution, str]]:
    """Return the cautions of a region and its peaks, gravest first, each once with the peaks that it concerns."""
    concerned: dict[Caution, list[str]] = {caution: [] for caution in measurement.cautions}
    for number, peak in enumerate(measurement.peaks, start=1):
        for caution in peak.cautions:
            concerned.setdefault(caution, []).append(str(number))
    return [
        (caution, f"spacing{'s' if len(concerned[caution]) > 1 else ''} {', '.join(concerned[caution])}: ")
        if concerned[caution]
        else (caution, "")
        for caution in gravest_first(concerned)
    ]


def table_text(region: MeasuredRegion, unit: Unit, line: Line | None = None) -> str:
    """Return the spacings and angles of a region as text with tabs, as a spreadsheet takes it: numbers in full."""
    measurement = region.measurement
    if measurement is None:
        return ""
    symbol, factor = unit_symbol(measurement.micrograph, unit), _PER_NM[unit]
    in_nm = measurement.micrograph.pixel_size_nm is not None
    heads = ["peak", f"d ({symbol})", f"u(d) ({symbol})", f"u noise ({symbol})", f"u crystal ({symbol})"]
    heads += ["direction (deg)", "u(direction) (deg)", "planes to line (deg)"]
    heads += ["S/N", "visibility", "lattice", "origin", "remark"]
    lines = [f"{measurement.micrograph.name}\t{region.drawn.name}", "\t".join(heads)]
    for number, peak in enumerate(measurement.peaks, start=1):
        if in_nm:
            values = (peak.d_nm, peak.d_uncertainty_nm, peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm)
            lengths = [None if v is None else factor * v for v in values]
        else:
            along = peak.g_per_px * peak.period_px
            fit = peak.period_px**2 * math.sqrt(max(0.0, float(along @ peak.g_covariance_per_px2 @ along)))
            lengths = [peak.period_px, None, fit, None]
        index = "" if peak.lattice_index is None else "{} {}".format(*peak.lattice_index)
        to_line = None if line is None else planes_to_line_deg(peak, line, measurement.micrograph)
        cells: list[object] = [number, *lengths, peak.direction_deg, peak.direction_uncertainty_deg]
        cells.append(None if to_line is None else to_line[0])
        cells += [peak.signal_to_noise, peak.visibility, index, peak.origin, one_line(peak.withheld or "")]
        lines.append("\t".join("" if c is None else f"{c:.7g}" if isinstance(c, float) else str(c) for c in cells))
    if measurement.angles:
        lines += ["", "\t".join(["peak", "peak", "angle (deg)", "u(angle) (deg)"])]
        lines += [
            f"{a.peaks[0] + 1}\t{a.peaks[1] + 1}\t{a.angle_deg:.7g}\t{a.angle_uncertainty_deg:.3g}"
            for a in measurement.angles
        ]
    return "\n".join(lines) + "\n"
