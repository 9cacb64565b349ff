"""One region of known spacing calibrates the others of the same picture; mismatch, where the pixel size cancels."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.crystal.phase import Phase
from fringespan.exceptions import CalibrationError
from fringespan.magnification.check import COMMON_SOURCES, MagnificationCheck, check_magnification
from fringespan.magnification.indexing import observed_peaks
from fringespan.magnification.reference import ReferenceSpacing
from fringespan.measurement import Measurement

__all__ = ["InternalStandard", "Mismatch", "calibrate_within_picture"]

_LARGEST_MISMATCH = 0.3
"""Spacings farther apart than this are not compared: they are no planes that could match."""

_LARGEST_ANGLE_DEG = 30.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Mismatch:
    """One spacing of another crystal against the nearest one of the standard.

    Attributes
    ----------
    region : str
    peak : int
        Position in that region's measurement.
    d_nm, d_uncertainty_nm : float
        By the standard, its reference's uncertainty included.
    standard_hkl : (int, int, int) or None
        Reflection of the standard that it is compared with.
    standard_d_nm : float
    angle_deg : float
        Between the two, from 0 to 90 degrees.
    mismatch_percent : float
        (d - d of the standard) / d of the standard, in per cent.
    mismatch_uncertainty_percent : float
        Standard uncertainty by the fits, the crystals and the tilt; pixel size and reference cancel.
    """

    region: str
    peak: int
    d_nm: float
    d_uncertainty_nm: float
    standard_hkl: tuple[int, int, int] | None
    standard_d_nm: float
    angle_deg: float
    mismatch_percent: float
    mismatch_uncertainty_percent: float


@dataclass(frozen=True, slots=True, kw_only=True)
class InternalStandard:
    """The outcome: the check on the standard, and the other regions measured by it.

    Attributes
    ----------
    check : MagnificationCheck
    mismatches : tuple of Mismatch
        One for each peak that has a reflection of the standard within 30 % in spacing and 30 degrees in direction.
    """

    check: MagnificationCheck
    mismatches: tuple[Mismatch, ...]


def calibrate_within_picture(
    standard: Measurement,
    reference: Phase | ReferenceSpacing,
    others: Sequence[Measurement],
    *,
    temperature_c: float | None = None,
) -> InternalStandard:
    """Measure regions of a picture by one whose spacings are known.

    Parameters
    ----------
    standard : Measurement
        Region of the known crystal: substrate, support.
    reference : Phase or ReferenceSpacing
        What it is.
    others : sequence of Measurement
        Regions of the same picture.
    temperature_c : float, optional
        Of the specimen.

    Returns
    -------
    InternalStandard

    Raises
    ------
    CalibrationError
        If a region is of another picture, or the standard cannot be indexed.

    Notes
    -----
    With one factor for all directions the mismatch is the ratio of the two spacings as measured, which an error of the
    pixel size does not touch while rows and columns share it. Where the standard gives the whole geometry, spacings are
    compared through it, so that an error along one axis cancels too.
    """
    if any(m.micrograph is not standard.micrograph for m in others):
        raise CalibrationError(
            "an internal standard calibrates regions of its own picture only; measure them in the same picture, or apply a "
            "magnification check"
        )
    check = check_magnification(standard, reference, temperature_c=temperature_c)
    own = observed_peaks(standard)
    geometry = _Geometry.of(check)
    known = [r for r in check.reflections if r.used and r.expected_d_nm is not None]
    found = []
    for measurement in others:
        for number, peak in enumerate(observed_peaks(measurement)):
            if peak.withheld is not None:
                continue
            g = geometry.true(peak.g_per_nm)
            d = 1 / math.hypot(*g)
            near = []
            for reflection in known:
                h = geometry.true(own[reflection.peak].g_per_nm)
                angle = math.degrees(math.acos(min(1.0, abs(float(g @ h)) / math.hypot(*g) / math.hypot(*h))))
                expected = reflection.expected_d_nm or 0.0
                if abs(d / expected - 1) <= _LARGEST_MISMATCH and angle <= _LARGEST_ANGLE_DEG:
                    near.append((abs(d / expected - 1) + math.radians(angle), angle, reflection))
            if not near:
                continue
            _, angle, best = min(near, key=lambda item: item[0])
            standard_d = best.expected_d_nm or 0.0
            fit = geometry.relative(peak.g_per_nm, peak.fit_covariance + peak.crystal_covariance)
            by_standard = geometry.calibration_part(g)
            found.append(
                Mismatch(
                    region=measurement.region.name,
                    peak=number,
                    d_nm=d,
                    d_uncertainty_nm=d * math.hypot(fit, by_standard, geometry.common),
                    standard_hkl=best.hkl,
                    standard_d_nm=standard_d,
                    angle_deg=angle,
                    mismatch_percent=100 * (d / standard_d - 1),
                    mismatch_uncertainty_percent=100 * d / standard_d * math.hypot(fit, by_standard),
                )
            )
    return InternalStandard(check=check, mismatches=tuple(found))


@dataclass(frozen=True, eq=False, slots=True)
class _Geometry:
    """Nominal to true reciprocal vectors.

    `own` are the standard uncertainties of scale and shear that differ from direction to direction, `common` the relative
    one that all lengths share, which cancels in a ratio.
    """

    inverse: NDArray[np.float64]
    own: tuple[float, ...]
    common: float

    @classmethod
    def of(cls, check: MagnificationCheck) -> _Geometry:
        row, column = check.nominal_pixel_size_nm
        shear = 0.0 if check.shear is None else check.shear * column / row
        matrix = np.array([[check.scale[0], 0.0], [shear, check.scale[1]]])
        own = [
            math.sqrt(sum(line.contribution**2 for line in b.lines if line.source not in COMMON_SOURCES))
            for b in check.budgets
        ]
        shared = [line.contribution for line in check.budgets[0].lines if line.source in COMMON_SOURCES]
        return cls(np.asarray(np.linalg.inv(matrix.T)), tuple(own), math.hypot(*shared) / check.scale[0])

    def true(self, g: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(self.inverse @ g, dtype=np.float64)

    def relative(self, g: NDArray[np.float64], covariance: NDArray[np.float64]) -> float:
        """Return the relative standard uncertainty of a length by its vector's covariance."""
        h = self.true(g)
        unit = h / math.hypot(*h)
        return math.sqrt(max(0.0, float(unit @ self.inverse @ covariance @ self.inverse.T @ unit))) / math.hypot(*h)

    def calibration_part(self, g: NDArray[np.float64]) -> float:
        """Return the relative standard uncertainty of a length by the standard, without what all lengths share."""
        n = g / math.hypot(*g)
        weights = (1.0,) if len(self.own) == 1 else (n[0] ** 2, n[1] ** 2, abs(n[0] * n[1]))
        return math.sqrt(sum((w * u) ** 2 for w, u in zip(weights, self.own, strict=True)))
