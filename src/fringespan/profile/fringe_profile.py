"""Fringes along a line: the mean profile of a strip, and the spacing of the fringes fitted to it.

A second road to a spacing, in direct space; it should agree with the spectrum's.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution, gravest_first
from fringespan.exceptions import RegionError
from fringespan.micrograph import Micrograph
from fringespan.profile.strip import Strip
from fringespan.profile.tilt import Tilt, fringes_in_single_lines, tilt_of
from fringespan.profile.waves import Fit, fitted_fringes
from fringespan.uncertainty import relative_length_uncertainty

__all__ = ["FringeProfile", "measure_profile"]

_FEW_FRINGES = 8.0
_OFF_NORMAL_WORTH_A_WORD_DEG = 1.0

_ROUNDING = 1e-11

_LEAST_KEPT = 0.3
"""Where the average across the strip has kept less of the fringes' amplitude, what stands out may be something else."""


@dataclass(frozen=True, eq=False, kw_only=True)
class FringeProfile:
    """The mean profile along a line, and the fringes in it.

    Every uncertainty is a standard uncertainty (k = 1). What needs a fringe is None where none was found, what is in nm
    is None without a pixel size.

    Attributes
    ----------
    line_px : ((float, float), (float, float))
        From where to where, (row, column).
    width_px : float
        Width of the strip.
    positions_px, values : ndarray, shape (n,)
        Distance from the beginning of the line, and the mean pixel value across the strip there.
    fitted_values : ndarray, shape (n,), or None
        The fitted fringes with the slow trend.
    direction_deg : float
        Direction of the line on the screen, counter-clockwise from the right, in [0, 180).
    period_px, period_uncertainty_px : float or None
        Distance from fringe to fringe along the line.
    degrees_of_freedom : float or None
        Of the uncertainty, which rests on few spectrum bins: Student's t, not 1.96, gives a 95 % interval.
    fringe_count : float or None
        Periods on the line.
    spacing_nm : float or None
        Distance from fringe to fringe along the line.
    spacing_fit_uncertainty_nm, spacing_uncertainty_nm : float or None
        From the picture alone; with the pixel size's (None while that is not stated).
    off_normal_deg, off_normal_uncertainty_deg : float or None
        Angle between the line and the normal of the fringes, 0 to 90, from the phase across the strip; None where the
        strip is too narrow to tell.
    d_nm, d_fit_uncertainty_nm, d_uncertainty_nm : float or None
        Spacing across the fringes, `spacing_nm` times the cosine of this angle.
    amplitude : float or None
        Of the fitted fundamental, in pixel values.
    signal_to_noise : float or None
        Square root of its matched-filter power ratio.
    cautions : tuple of Caution
        Gravest first.
    """

    line_px: tuple[tuple[float, float], tuple[float, float]]
    width_px: float
    positions_px: NDArray[np.float64]
    values: NDArray[np.float64]
    fitted_values: NDArray[np.float64] | None = None
    direction_deg: float
    period_px: float | None = None
    period_uncertainty_px: float | None = None
    degrees_of_freedom: float | None = None
    fringe_count: float | None = None
    spacing_nm: float | None = None
    spacing_fit_uncertainty_nm: float | None = None
    spacing_uncertainty_nm: float | None = None
    off_normal_deg: float | None = None
    off_normal_uncertainty_deg: float | None = None
    d_nm: float | None = None
    d_fit_uncertainty_nm: float | None = None
    d_uncertainty_nm: float | None = None
    amplitude: float | None = None
    signal_to_noise: float | None = None
    cautions: tuple[Caution, ...] = ()


def measure_profile(
    micrograph: Micrograph, line_px: Sequence[Sequence[float]], *, width_px: float = 11.0
) -> FringeProfile:
    """Measure the fringes along a line, averaged across a width.

    Parallel lines about 1 px apart are sampled by a quintic spline and averaged. A quadratic trend, one frequency with
    its harmonics, and whatever other waves stand out are fitted by least squares; the noise is that of the residual
    around the frequency.

    Parameters
    ----------
    micrograph : Micrograph
    line_px : ((float, float), (float, float))
        Where the line begins and ends, (row, column). Best along the normal of the fringes: off by an angle e, the
        distance from fringe to fringe along the line is d / cos e.
    width_px : float, optional
        Width of the strip across the line, at least 1. The strip must lie inside the picture.

    Returns
    -------
    FringeProfile

    Raises
    ------
    RegionError
        If the line is shorter than `SHORTEST_LINE_PX`, or the strip is narrower than 1 px, reaches beyond the picture,
        or has no variation.

    References
    ----------
    The bound that the fit reaches: D. C. Rife, R. R. Boorstyn, IEEE Trans. Inf. Theory 20 (1974) 591,
    doi:10.1109/TIT.1974.1055282.
    """
    strip = Strip.of(micrograph, line_px, width_px)
    lines, defects = strip.sampled(micrograph)
    values = lines.mean(axis=0)
    cautions = [_defects(defects)] if defects else []
    if np.ptp(values) <= _ROUNDING * np.abs(values).max():
        raise RegionError("line_px: all values along the line are the same; draw it where there are fringes")
    profile = FringeProfile(
        line_px=strip.ends,
        width_px=strip.width,
        positions_px=strip.positions,
        values=values,
        direction_deg=strip.direction_deg,
    )
    scale = float(np.ptp(values))
    fit = fitted_fringes(strip.positions, values / scale)
    tilt = None if fit is None else tilt_of(lines / scale, strip, fit)
    if fit is None or (tilt is not None and tilt.kept < _LEAST_KEPT):
        lost = fit is not None or fringes_in_single_lines(lines / scale)
        cautions.append(_AVERAGED_AWAY if lost else _NO_FRINGE)
        return replace(profile, cautions=gravest_first(cautions))
    period = 1 / fit.frequency
    period_uncertainty = fit.frequency_uncertainty / fit.frequency**2
    count = strip.length * fit.frequency
    cautions += _fit_cautions(fit, count, tilt)
    if tilt is not None and not tilt.single:
        tilt = None
    return replace(
        profile,
        fitted_values=fit.values * scale,
        period_px=period,
        period_uncertainty_px=period_uncertainty,
        degrees_of_freedom=fit.degrees_of_freedom,
        fringe_count=count,
        amplitude=fit.amplitude * scale,
        signal_to_noise=math.sqrt(fit.power_ratio),
        off_normal_deg=None if tilt is None else tilt.angle_deg,
        off_normal_uncertainty_deg=None if tilt is None else tilt.uncertainty_deg,
        cautions=gravest_first(cautions),
        **_in_nm(micrograph, strip, period, period_uncertainty, tilt),
    )


def _in_nm(
    micrograph: Micrograph, strip: Strip, period: float, uncertainty: float, tilt: Tilt | None
) -> dict[str, Any]:
    if micrograph.pixel_size_nm is None:
        return {}
    y, x = strip.geometry @ strip.along
    nm_per_px = math.hypot(y, x)
    spacing, fit_part = period * nm_per_px, uncertainty * nm_per_px
    stated = micrograph.pixel_size_relative_uncertainty
    relative = None if stated is None else relative_length_uncertainty(stated, float(y), float(x))
    values = {
        "spacing_nm": spacing,
        "spacing_fit_uncertainty_nm": fit_part,
        "spacing_uncertainty_nm": None if relative is None else math.hypot(fit_part, relative * spacing),
    }
    if tilt is not None:
        angle, angle_uncertainty = math.radians(tilt.angle_deg), math.radians(tilt.uncertainty_deg)
        # noise tilts a line that is not tilted: its mean square is taken off
        d = spacing * math.cos(math.sqrt(max(0.0, angle**2 - angle_uncertainty**2)))
        # near 0 the cosine's slope vanishes, but not its curvature
        turned = spacing * math.hypot(math.sin(angle) * angle_uncertainty, math.cos(angle) * angle_uncertainty**2 / 2)
        d_fit = math.hypot(fit_part * math.cos(angle), turned)
        values |= {
            "d_nm": d,
            "d_fit_uncertainty_nm": d_fit,
            "d_uncertainty_nm": None if relative is None else math.hypot(d_fit, relative * d),
        }
    return values


_NO_FRINGE = Caution(
    "no-fringe-along-line",
    "note",
    "No fringe stands out of the noise along the line.",
    "Make the line longer or the strip wider, and lay it along the normal of the fringes.",
)

_AVERAGED_AWAY = Caution(
    "width-averages-fringes-away",
    "warning",
    "Single lines of the strip show fringes, but the average across its width has lost them: they do not run straight "
    "across it.",
    "Turn the line to the normal of the fringes, or make the strip narrower.",
)

_OTHERS_CROSS = Caution(
    "other-fringes-cross",
    "note",
    "Other fringes cross the strip: how far the line is off the normal of these cannot be told.",
    "Make the strip wider.",
)


def _defects(count: int) -> Caution:
    return Caution(
        "profile-defects",
        "warning",
        f"{count} pixel{'s' if count > 1 else ''} near the line had no finite value and were replaced by the median.",
        "Lay the line beside them.",
    )


def _fit_cautions(fit: Fit, count: float, tilt: Tilt | None) -> list[Caution]:
    cautions = []
    if count < _FEW_FRINGES:
        cautions.append(
            Caution(
                "few-fringes",
                "warning",
                f"Only {count:.1f} fringes lie on the line; under {_FEW_FRINGES:g} a spacing is easily deceived by the "
                "crystal's shape.",
                "Make the line longer.",
            )
        )
    if fit.uneven:
        cautions.append(
            Caution(
                "fringes-uneven",
                "warning",
                "The fringes along the line are not evenly spaced or not equally strong; the uncertainty is widened.",
                "Measure where they are straight and even.",
            )
        )
    if tilt is None:
        return cautions
    if not tilt.single:
        return [*cautions, _OTHERS_CROSS]
    if tilt.kept < 2 / math.pi:
        cautions.append(
            Caution(
                "width-averages-fringes-away",
                "warning",
                f"The average across the width has kept {100 * tilt.kept:.0f} % of the fringes' contrast.",
                "Turn the line to the normal of the fringes, or make the strip narrower.",
            )
        )
    if tilt.angle_deg - 2 * tilt.uncertainty_deg > _OFF_NORMAL_WORTH_A_WORD_DEG:
        longer = 100 * (1 / math.cos(math.radians(tilt.angle_deg)) - 1)
        cautions.append(
            Caution(
                "line-off-normal",
                "note",
                f"The line is {tilt.angle_deg:.1f} degrees off the normal of the fringes: the distance along it is "
                f"{longer:.2g} % longer than their spacing.",
                "Use the spacing across the fringes, or turn the line.",
            )
        )
    return cautions
