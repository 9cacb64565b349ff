"""A fringe profile in words, as a table, and as a document."""

from __future__ import annotations

import math
from importlib import metadata
from typing import Any

import numpy as np

from fringespan.export.measurement_text import caution_lines
from fringespan.export.plain_text import Line, paragraph
from fringespan.export.table import Table
from fringespan.micrograph import Micrograph
from fringespan.profile import FringeProfile
from fringespan.record import RecordedPicture, plain_values
from fringespan.uncertainty import value_text

__all__ = ["nm_per_px_along", "profile_document", "profile_lines", "profile_table"]


def profile_lines(profile: FringeProfile, width: int) -> list[Line]:
    """Return the text of a fringe profile: line, fringes, spacing along it and across the fringes, cautions.

    Parameters
    ----------
    profile : FringeProfile
    width : int
        Characters that a line should have at most.
    """
    (r0, c0), (r1, c1) = profile.line_px
    length = float(profile.positions_px[-1])
    lines = [
        Line(f"Line from {r0:g},{c0:g} to {r1:g},{c1:g}", "heading"),
        *paragraph(
            f"{length:.1f} px long, {profile.width_px:g} px wide, direction {profile.direction_deg:.2f} deg",
            width,
            first="  ",
        ),
    ]
    if profile.period_px is None or profile.fringe_count is None:
        lines.append(Line("  no fringe found"))
    else:
        lines += [Line(f"  {name.ljust(20)}  {value}") for name, value in _facts(profile)]
        if profile.spacing_nm is not None and profile.spacing_uncertainty_nm is None:
            lines += paragraph(
                "The uncertainties in nm leave out that of the pixel size, which is not stated: give "
                "--pixel-size-uncertainty PERCENT.",
                width,
                first="  ",
                emphasis="quiet",
            )
    return [*lines, *caution_lines([(caution, "") for caution in profile.cautions], width)]


def _facts(profile: FringeProfile) -> list[tuple[str, str]]:
    facts = [("fringes on the line", f"{profile.fringe_count:.2f}")]
    if profile.spacing_nm is None:
        facts.append(("spacing along it", f"{value_text(profile.period_px, profile.period_uncertainty_px)} px"))
    else:
        facts.append(("spacing along it", _spacing(profile, "spacing")))
    if profile.off_normal_deg is not None:
        off = value_text(profile.off_normal_deg, profile.off_normal_uncertainty_deg)
        facts.append(("off their normal by", f"{off} deg"))
    if profile.d_nm is not None:
        facts.append(("spacing across them", _spacing(profile, "d")))
    if profile.signal_to_noise is not None:
        facts.append(("signal to noise", f"{profile.signal_to_noise:.0f}"))
    return facts


def _spacing(profile: FringeProfile, name: str) -> str:
    """Return a spacing in nm with its parts in per cent."""
    value = getattr(profile, f"{name}_nm")
    fit, whole = getattr(profile, f"{name}_fit_uncertainty_nm"), getattr(profile, f"{name}_uncertainty_nm")
    text = f"{value_text(value, fit if whole is None else whole)} nm   fit {100 * fit / value:.2f} %"
    if whole is not None:
        text += f", pixel size {100 * math.sqrt(max(0.0, whole**2 - fit**2)) / value:.2f} %"
    return text


def profile_document(picture: RecordedPicture, profile: FringeProfile) -> dict[str, Any]:
    """Return picture and profile as nested dictionaries and lists, for JSON."""
    measured = plain_values(profile, "profile")
    assert isinstance(measured, dict)
    return {
        "schema": "fringespan.profile/1",
        "program_version": metadata.version("fringespan"),
        "picture": plain_values(picture, "picture"),
        **measured,
    }


def profile_table(micrograph: Micrograph, profile: FringeProfile) -> Table:
    """Return positions, mean values and fitted values, one row a point."""
    factor = nm_per_px_along(micrograph, profile)
    fitted = profile.fitted_values
    rows = tuple(
        (
            float(position),
            None if factor is None else float(position) * factor,
            float(profile.values[i]),
            None if fitted is None else float(fitted[i]),
        )
        for i, position in enumerate(profile.positions_px)
    )
    return Table(("position_px", "position_nm", "mean_value", "fitted_value"), rows)


def nm_per_px_along(micrograph: Micrograph, profile: FringeProfile) -> float | None:
    """Return nm per pixel along the line of a profile; None without a pixel size."""
    geometry = micrograph.geometry_nm_per_px
    if geometry is None:
        return None
    start, end = np.array(profile.line_px)
    return float(np.hypot(*(geometry @ (end - start))) / np.hypot(*(end - start)))
