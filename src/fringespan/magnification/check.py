"""The magnification check: true over nominal pixel size from fringes of a known spacing."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution, gravest_first
from fringespan.crystal.phase import Phase
from fringespan.exceptions import CalibrationError, SettingsError
from fringespan.magnification.budget import (
    Acceptance,
    Budget,
    BudgetLine,
    Coverage,
    ToleranceVerdict,
    coverage_factor,
    judge,
)
from fringespan.magnification.combination import Combined, Estimate, combine
from fringespan.magnification.geometry import GeometryFit, fit_geometry, geometry_matrix
from fringespan.magnification.indexing import Grain, ObservedPeak, assign_indices, observed_peaks
from fringespan.magnification.reference import Expansion, ReferenceAtTemperature, ReferenceSpacing, reference_at
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph

__all__ = ["CheckedReflection", "CheckedRegion", "MagnificationCheck", "ReferenceSpacing", "check_magnification"]

TILT_DEG = 0.5
"""Standard uncertainty of the specimen's tilt off the zone about each axis where none is stated; a zone set by hand
(common practice, no source)."""

COMMON_SOURCES = ("reference spacing", "thermal expansion: coefficient", "thermal expansion: temperature")
"""Lines of the budget that rows and columns share: they change the size of all lengths alike, and no angle."""

_QUANTITIES = ("scale along rows", "scale along columns", "shear")
_ONE_QUANTITY = ("scale",)


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckedReflection:
    """One set of fringes and what it says.

    Attributes
    ----------
    picture, region : str
    peak : int
        Position in the measurement of the region.
    hkl : (int, int, int) or None
        None for a reference of one spacing, and where it is no reflection of the reference.
    g_per_nm : (float, float)
        Measured, (row, column), by the nominal pixel size.
    expected_d_nm : float or None
        Spacing of the reference at the specimen's temperature.
    nominal_d_nm : float
        Measured, by the nominal pixel size.
    corrected_d_nm : float or None
        Measured, by the true pixel size that the check found.
    deviation_percent : float or None
        Corrected spacing less expected, in per cent of it: the residual.
    pull : float or None
        The residual in standard uncertainties.
    used : bool
        Whether it entered the result.
    reason : str
        Why it did not.
    """

    picture: str
    region: str
    peak: int
    hkl: tuple[int, int, int] | None
    g_per_nm: tuple[float, float]
    expected_d_nm: float | None
    nominal_d_nm: float
    corrected_d_nm: float | None
    deviation_percent: float | None
    pull: float | None
    used: bool
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckedRegion:
    """What one region, or several grains together, give on their own.

    Attributes
    ----------
    picture, name : str
    scale : (float, float)
        Along (row, column).
    scale_uncertainty : (float, float)
        By the picture alone: fit and crystal.
    shear, shear_uncertainty : float or None
    rotation_deg : float or None
        Turn of the crystal on the screen, counter-clockwise: direction of the coarsest reflection of its zone; it
        cannot be told from a turn of the camera.
    zone : (int, int, int) or None
    """

    picture: str
    name: str
    scale: tuple[float, float]
    scale_uncertainty: tuple[float, float]
    shear: float | None
    shear_uncertainty: float | None
    rotation_deg: float | None
    zone: tuple[int, int, int] | None


@dataclass(frozen=True, slots=True, kw_only=True)
class MagnificationCheck:
    """The outcome of a magnification check.

    Attributes
    ----------
    scale, scale_uncertainty : (float, float)
        True over nominal pixel size along (row, column), with the combined standard uncertainty. One set of fringes gives
        one factor, and both entries are equal.
    shear, shear_uncertainty : float or None
        One row further is `shear` nominal pixels along x; None where only one factor is known.
    nominal_pixel_size_nm : (float, float)
        That of the pictures, before.
    reference : str
        Name of the reference.
    reference_id : str
        Id of the phase, or the spacing.
    reflections : tuple of CheckedReflection
        All peaks, also those left out, with the reason.
    regions : tuple of CheckedRegion
    budgets : tuple of Budget
        For rows, columns and shear; or for the one factor.
    coverage : {"k = 2", "from t"}
    coverage_factor : float
        The largest of the results.
    expanded_uncertainty : (float, float)
        Of `scale`.
    tolerance : float or None
    acceptance : {"simple", "guarded"}
    verdict : str
    temperature_c : float
    temperature_stated : bool
    pictures : tuple of str
    cautions : tuple of Caution
    """

    scale: tuple[float, float]
    scale_uncertainty: tuple[float, float]
    shear: float | None
    shear_uncertainty: float | None
    nominal_pixel_size_nm: tuple[float, float]
    reference: str
    reference_id: str
    reflections: tuple[CheckedReflection, ...]
    regions: tuple[CheckedRegion, ...]
    budgets: tuple[Budget, ...]
    coverage: Coverage
    coverage_factor: float
    expanded_uncertainty: tuple[float, float]
    tolerance: float | None
    acceptance: Acceptance
    verdict: ToleranceVerdict
    temperature_c: float
    temperature_stated: bool
    pictures: tuple[str, ...]
    cautions: tuple[Caution, ...]

    @property
    def pixel_size_nm(self) -> tuple[float, float]:
        """True pixel size along (row, column)."""
        return self.scale[0] * self.nominal_pixel_size_nm[0], self.scale[1] * self.nominal_pixel_size_nm[1]

    @property
    def pixel_size_relative_uncertainty(self) -> float | tuple[float, float]:
        """Its relative standard uncertainty, as `Micrograph` has it.

        One number where rows and columns mostly share their error, that of the reference and its temperature: the larger
        one. A pair where most of it is their own.
        """
        row, column = (u / s for u, s in zip(self.scale_uncertainty, self.scale, strict=True))
        budget = self.budgets[0]
        common = sum(line.contribution**2 for line in budget.lines if line.source in COMMON_SOURCES)
        if self.shear is None or common >= 0.5 * budget.standard_uncertainty**2:
            return max(row, column)
        return row, column

    @property
    def micrograph_shear(self) -> float:
        """The shear in true column pixels, as `Micrograph` has it; 0 where it is not known."""
        return 0.0 if self.shear is None else self.shear / self.scale[1]

    def ellipse_per_nm(self, d_nm: float, points: int = 181) -> NDArray[np.float64]:
        """Return where reflections of a spacing lie in the nominal spectrum, shape (points, 2), (row, column), closed.

        A circle in the specimen is an ellipse there while rows and columns differ.
        """
        if not (math.isfinite(d_nm) and d_nm > 0):
            raise SettingsError(f"d_nm must be greater than 0, got {d_nm!r}")
        row, column = self.nominal_pixel_size_nm
        # F is in nm per nominal nm; the shear counts nominal column pixels per row
        shear = 0.0 if self.shear is None else self.shear * column / row
        matrix = np.array([[self.scale[0], 0.0], [shear, self.scale[1]]])
        angle = np.linspace(0, 2 * np.pi, points)
        circle = np.stack([-np.sin(angle), np.cos(angle)], axis=1) / d_nm
        return np.asarray(circle @ matrix, dtype=np.float64)

    def corrected(self, micrograph: Micrograph, source: str = "") -> Micrograph:
        """Return a picture with the true pixel size, its uncertainty and where it came from; the one given is kept.

        Parameters
        ----------
        micrograph : Micrograph
            With the nominal pixel size that was checked.
        source : str, optional
            What to say of the origin; default: a sentence with the reference and the nominal pixel size.

        Raises
        ------
        CalibrationError
            If its pixel size is another one.
        """
        size = micrograph.pixel_size_nm
        if size is None or not _same_size(size, self.nominal_pixel_size_nm):
            raise CalibrationError(
                f"{micrograph.name}: its pixel size {size} is not the nominal one that was checked, "
                f"{self.nominal_pixel_size_nm}; apply the check to pictures taken under the same conditions"
            )
        row, column = self.nominal_pixel_size_nm
        return replace(
            micrograph,
            pixel_size_nm=self.pixel_size_nm,
            pixel_size_relative_uncertainty=self.pixel_size_relative_uncertainty,
            shear=self.micrograph_shear,
            pixel_size_source=source or f"magnification check on {self.reference}, nominal {row:g} x {column:g} nm",
        )

    @property
    def sentence(self) -> str:
        """The result in words."""
        from fringespan.uncertainty import value_text

        size = self.pixel_size_nm
        u = [s * n for s, n in zip(self.scale_uncertainty, self.nominal_pixel_size_nm, strict=True)]
        off = [
            f"{100 * (s - 1):+.2f} % +- {100 * e:.2f} %"
            for s, e in zip(self.scale, self.expanded_uncertainty, strict=True)
        ]
        k = f"k = {self.coverage_factor:.3g}"
        if self.shear is None:
            text = (
                f"True pixel size {value_text(size[0], u[0])} nm"
                f"{'' if size[0] == size[1] else f' (down) x {value_text(size[1], u[1])} nm (right)'}, "
                f"{off[0]} off the nominal one ({k}); one factor for all directions, as the fringes don't tell rows "
                "from columns."
            )
        else:
            shear = value_text(100 * self.shear, 100 * (self.shear_uncertainty or 0.0))
            text = (
                f"True pixel size {value_text(size[0], u[0])} nm (down) x {value_text(size[1], u[1])} nm (right), "
                f"{off[0]} and {off[1]} off the nominal one ({k}); shear {shear} %."
            )
        if self.tolerance is not None:
            text += f" {self._verdict_words}"
        return text

    @property
    def _verdict_words(self) -> str:
        rule = (
            "the value alone decides"
            if self.acceptance == "simple"
            else "the value with its expanded uncertainty must lie within"
        )
        words = {
            "within tolerance": "Within",
            "outside tolerance": "Outside",
            "not decided": "Too uncertain to say whether within",
        }[self.verdict]
        return f"{words} the tolerance of {100 * (self.tolerance or 0):g} % ({rule})."


def check_magnification(
    measurements: Measurement | Sequence[Measurement],
    reference: Phase | ReferenceSpacing,
    *,
    temperature_c: float | None = None,
    temperature_uncertainty_c: float | None = None,
    reference_relative_uncertainty: float | None = None,
    expansion: Expansion | None = None,
    tilt_deg: float = TILT_DEG,
    tolerance: float | None = None,
    acceptance: Acceptance = "simple",
    coverage: Coverage = "k = 2",
) -> MagnificationCheck:
    """Check the pixel size of pictures by a reference material.

    Parameters
    ----------
    measurements : Measurement or sequence of Measurement
        Regions of one or several pictures of the reference, all of the same nominal pixel size.
    reference : Phase or ReferenceSpacing
        The material, or the one spacing that its certificate states.
    temperature_c, temperature_uncertainty_c : float, optional
        Of the specimen. Default: a room's, 22.5 degrees with 2.9 degrees.
    reference_relative_uncertainty : float, optional
        Standard uncertainty (k = 1) of the reference's spacings as a fraction; default: what the reference says.
    expansion : Expansion, optional
        Thermal expansion; default: what is known of the reference.
    tilt_deg : float, optional
        Standard uncertainty of the specimen's tilt off the zone, about each of two axes, its most probable value 0.
    tolerance : float, optional
        Largest deviation of the pixel size allowed, as a fraction (0.01 is 1 per cent).
    acceptance : {"simple", "guarded"}, optional
        Whether the value alone must lie within the tolerance, or the value with its expanded uncertainty.
    coverage : {"k = 2", "from t"}, optional
        Coverage factor of the expanded uncertainty.

    Returns
    -------
    MagnificationCheck

    Raises
    ------
    CalibrationError
        If a picture has no pixel size, the pictures have different ones, or the fringes cannot be indexed without doubt.
    SettingsError
        If an argument is out of range.

    Notes
    -----
    The nominal pixel size may be off by up to 10 %, rows and columns by about 2 % from each other, a shear be as large.
    With g the vectors measured by the nominal pixel size and p those of the reference in the crystal's own frame,
    g = F^T R p is fitted by weighted least squares; F = [[row, 0], [shear, column]] is true over nominal pixel size and R
    the crystal's turn, which is not known. Tilts off the zone make spacings look larger, never smaller: their mean effect
    is corrected. Crystals that show one set of fringes each give a point of an ellipse,
    |F^-T g| = 1/d; five numbers of different direction are enough for F. If F cannot be determined, one factor is.

    References
    ----------
    ISO 29301 (the spirit, not the text); GUM (JCGM 100:2008) for the budget; JCGM 106:2012 for the verdict.
    """
    regions = [measurements] if isinstance(measurements, Measurement) else list(measurements)
    nominal = _nominal(regions)
    if not (math.isfinite(tilt_deg) and 0 <= tilt_deg <= 20):
        raise SettingsError(f"tilt_deg must lie between 0 and 20 degrees, got {tilt_deg!r}")
    judge([], [], tolerance, acceptance)
    coverage_factor(math.inf, coverage)
    at = reference_at(
        reference,
        temperature_c,
        temperature_uncertainty_c=temperature_uncertainty_c,
        relative_uncertainty=reference_relative_uncertainty,
        expansion=expansion,
    )
    peaks = [observed_peaks(m) for m in regions]
    grains = assign_indices(regions, reference, at.reference)
    estimates, isotropic = _estimates(regions, grains, peaks)
    combined = combine(estimates)
    final = _values_in_pixels(combined, nominal, regions[0].micrograph.shear)
    final[: 1 if isotropic else 2] *= 1 + math.radians(tilt_deg) ** 2 / 2
    budgets = tuple(
        _budget(name, k, final, combined, at, tilt_deg, nominal, len(estimates))
        for k, name in enumerate(_ONE_QUANTITY if isotropic else _QUANTITIES)
    )
    factors = [coverage_factor(b.degrees_of_freedom, coverage) for b in budgets]
    expanded = [f * b.standard_uncertainty for f, b in zip(factors, budgets, strict=True)]
    judged = [final[0] - 1] if isotropic else [final[0] - 1, final[1] - 1, final[2] / 2]
    # a shear alone makes lengths along the diagonals wrong by half of it
    judged_uncertainty = expanded if isotropic else [expanded[0], expanded[1], expanded[2] / 2]
    row, column = (0, 0) if isotropic else (0, 1)
    reflections = _reflections(regions, grains, peaks, estimates, combined, at)
    return MagnificationCheck(
        scale=(float(final[row]), float(final[column])),
        scale_uncertainty=(budgets[row].standard_uncertainty, budgets[column].standard_uncertainty),
        shear=None if isotropic else float(final[2]),
        shear_uncertainty=None if isotropic else budgets[2].standard_uncertainty,
        nominal_pixel_size_nm=nominal,
        reference=at.name,
        reference_id=reference.id if isinstance(reference, Phase) else f"{reference.d_nm:g} nm",
        reflections=reflections,
        regions=tuple(_checked_region(regions, grains, e, nominal) for e in estimates),
        budgets=budgets,
        coverage=coverage,
        coverage_factor=max(factors),
        expanded_uncertainty=(expanded[row], expanded[column]),
        tolerance=tolerance,
        acceptance=acceptance,
        verdict=judge(judged, judged_uncertainty, tolerance, acceptance),
        temperature_c=at.temperature_c,
        temperature_stated=at.temperature_stated,
        pictures=tuple(dict.fromkeys(m.micrograph.name for m in regions)),
        cautions=_cautions(reflections, estimates, isotropic, at, regions, final),
    )


def _same_size(one: tuple[float, float], other: tuple[float, float]) -> bool:
    return all(math.isclose(a, b, rel_tol=1e-6) for a, b in zip(one, other, strict=True))


def _nominal(regions: Sequence[Measurement]) -> tuple[float, float]:
    if not regions:
        raise CalibrationError("measurements must hold at least one measured region of the reference, got none")
    sizes = {}
    for measurement in regions:
        micrograph = measurement.micrograph
        if micrograph.pixel_size_nm is None:
            raise CalibrationError(
                f"{micrograph.name}: a magnification check compares the nominal pixel size with the true one, and the "
                "picture has none; give the nominal one (--pixel-size NM)"
            )
        sizes[micrograph.name] = micrograph.pixel_size_nm
    first = next(iter(sizes.values()))
    for name, size in sizes.items():
        if not _same_size(size, first):
            raise CalibrationError(
                f"{name}: its nominal pixel size {size} nm differs from {first} nm of {next(iter(sizes))}; check pictures of "
                "different magnifications one by one"
            )
    if len({m.micrograph.shear for m in regions}) > 1:
        raise CalibrationError("the pictures have different shears; check them one by one")
    return first


# --- estimates ------------------------------------------------------------------------------------------------------


def _estimates(
    regions: Sequence[Measurement], grains: Sequence[Grain], peaks: Sequence[Sequence[ObservedPeak]]
) -> tuple[list[Estimate], bool]:
    """Return what each region says; of regions that say too little alone, what they say together."""
    pictures = _picture_numbers(regions)
    estimates: list[Estimate] = []
    alone: dict[int, dict[int, Grain]] = {}
    for number, grain in enumerate(grains):
        if not grain.peaks:
            continue
        picture = pictures[grain.region]
        fit = fit_geometry({number: grain}, peaks) if len(grain.peaks) > 1 else None
        if fit is not None:
            estimates.append(Estimate(picture=picture, name=regions[grain.region].region.name, fit=fit))
        else:
            alone.setdefault(picture, {})[number] = grain
    for picture, members in alone.items():
        fit = fit_geometry(members, peaks) if len(members) > 2 else None
        if fit is not None:
            estimates.append(Estimate(picture=picture, name=f"{len(members)} grains together", fit=fit))
    if estimates:
        return estimates, False
    every = {n: g for members in alone.values() for n, g in members.items()}
    fit = fit_geometry(every, peaks) if len(every) > 2 else None
    if fit is not None:
        return [Estimate(picture=0, name=f"{len(every)} grains of all pictures together", fit=fit)], False
    for number, grain in every.items():
        one = fit_geometry({number: grain}, peaks, isotropic=True)
        if one is not None:
            name = regions[grain.region].region.name
            estimates.append(Estimate(picture=pictures[grain.region], name=name, fit=one))
    if not estimates:
        raise CalibrationError(
            "no set of fringes of the reference was found that can be used; draw the regions on the reference material, "
            "inside a grain, and check the nominal pixel size, which may be off by at most 10 %"
        )
    return estimates, True


def _picture_numbers(regions: Sequence[Measurement]) -> list[int]:
    """Return for each region the number of its picture: regions of the same picture share one."""
    seen: list[Micrograph] = []
    numbers = []
    for measurement in regions:
        for number, micrograph in enumerate(seen):
            if measurement.micrograph is micrograph:
                numbers.append(number)
                break
        else:
            numbers.append(len(seen))
            seen.append(measurement.micrograph)
    return numbers


def _values_in_pixels(combined: Combined, nominal: tuple[float, float], shear_before: float) -> NDArray[np.float64]:
    """Return scale along rows and columns, and the shear in nominal column pixels per row."""
    if len(combined.values) == 1:
        return combined.values.copy()
    row, column, shear = combined.values
    # a picture that is sheared already: the shear of F comes on top of that
    return np.array([row, column, shear * nominal[0] / nominal[1] + column * shear_before])


# --- budget ---------------------------------------------------------------------------------------------------------


def _budget(
    name: str,
    k: int,
    final: NDArray[np.float64],
    combined: Combined,
    at: ReferenceAtTemperature,
    tilt_deg: float,
    nominal: tuple[float, float],
    estimates: int,
) -> Budget:
    is_shear = name == "shear"
    in_pixels = nominal[0] / nominal[1] if is_shear else 1.0
    value = float(final[k])
    regions, pictures = combined.region_degrees_of_freedom, combined.picture_degrees_of_freedom
    tilt = math.radians(tilt_deg) ** 2
    return Budget(
        quantity=name,
        lines=(
            BudgetLine(
                source="fit",
                standard_uncertainty=float(combined.fit[k]),
                sensitivity=in_pixels,
                degrees_of_freedom=float(combined.fit_degrees_of_freedom[k]),
                note="noise of the picture, and departures from plane waves",
                remedy="larger regions, a higher dose, more reflections",
            ),
            BudgetLine(
                source="unevenness of the crystal",
                standard_uncertainty=float(combined.crystal[k]),
                sensitivity=in_pixels,
                note="what one picture cannot show: thickness and lens move the fringes",
                remedy="a flat foil in place of particles, larger regions, several defoci",
            ),
            BudgetLine(
                source="spread between regions",
                standard_uncertainty=float(combined.between_regions[k]),
                sensitivity=in_pixels,
                degrees_of_freedom=regions or math.inf,
                note="beyond their own uncertainties" if regions else "not seen: one region a picture",
                remedy="more regions, in the middle of the picture",
            ),
            BudgetLine(
                source="spread between pictures",
                standard_uncertainty=float(combined.between_pictures[k]),
                sensitivity=in_pixels,
                degrees_of_freedom=pictures or math.inf,
                note="beyond their own uncertainties" if pictures else "not seen: one picture",
                remedy="more pictures, with lens normalisation and specimen height set anew for each",
            ),
            BudgetLine(
                source="reference spacing",
                standard_uncertainty=at.relative_uncertainty,
                sensitivity=value,
                note=at.uncertainty_origin,
                remedy="a certified reference material, or the certificate of this one",
            ),
            BudgetLine(
                source="thermal expansion: coefficient",
                standard_uncertainty=abs(at.expansion_per_k) * at.expansion.relative_uncertainty,
                sensitivity=value * at.difference_k,
                note=f"{at.expansion_per_k:.3g} per K{'' if at.expansion_known else ', assumed'}, "
                f"{at.difference_k:+.3g} K from the reference's temperature",
                remedy="the coefficient of the reference material",
            ),
            BudgetLine(
                source="thermal expansion: temperature",
                standard_uncertainty=at.temperature_uncertainty_c,
                sensitivity=value * at.expansion_per_k,
                note=f"{at.temperature_c:g} degrees Celsius{'' if at.temperature_stated else ', assumed'}",
                remedy="measure the specimen's temperature",
            ),
            BudgetLine(
                source="tilt",
                # tilts by s about each of two axes lengthen spacings by s^2/2 on average, which is corrected, and by
                # s^2/sqrt(2) about that
                standard_uncertainty=tilt if is_shear else tilt / math.sqrt(2),
                sensitivity=1.0 if is_shear else value,
                note=f"{tilt_deg:g} degrees off the zone about each axis"
                + ("" if is_shear else f"; spacings look larger by {50 * tilt:.2g} % on average, corrected"),
                remedy="tilt the zone axis into the beam by its diffraction pattern",
            ),
        ),
    )


# --- what is shown --------------------------------------------------------------------------------------------------


def _reflections(
    regions: Sequence[Measurement],
    grains: Sequence[Grain],
    peaks: Sequence[Sequence[ObservedPeak]],
    estimates: Sequence[Estimate],
    combined: Combined,
    at: ReferenceAtTemperature,
) -> tuple[CheckedReflection, ...]:
    """Return every peak of every region with its residual about the common result."""
    fitted = {(r.grain, r.peak): r for e in estimates for r in e.fit.reflections}
    inverse = np.linalg.inv(geometry_matrix(combined.values).T)
    found: dict[tuple[int, int], CheckedReflection] = {}
    for number, grain in enumerate(grains):
        measurement = regions[grain.region]
        about = {"picture": measurement.micrograph.name, "region": measurement.region.name}
        for assigned in grain.peaks:
            own = peaks[grain.region][assigned.peak]
            expected = 1 / math.hypot(*assigned.vector_per_nm)
            corrected = 1 / math.hypot(*(inverse @ own.g_per_nm))
            unit = own.g_per_nm / math.hypot(*own.g_per_nm)
            covariance = own.fit_covariance + own.crystal_covariance
            relative = math.sqrt(float(unit @ covariance @ unit)) / math.hypot(*own.g_per_nm)
            outcome = fitted.get((number, assigned.peak))
            if outcome is None:
                reason = "its grain alone does not determine the geometry, which others do"
            elif not outcome.used:
                reason = "lies off the fit of the others"
            else:
                reason = ""
            found[grain.region, assigned.peak] = CheckedReflection(
                **about,
                peak=assigned.peak,
                hkl=assigned.hkl,
                g_per_nm=(float(own.g_per_nm[0]), float(own.g_per_nm[1])),
                expected_d_nm=expected,
                nominal_d_nm=1 / math.hypot(*own.g_per_nm),
                corrected_d_nm=corrected,
                deviation_percent=100 * (corrected / expected - 1),
                pull=(corrected / expected - 1) / relative,
                used=outcome is not None and outcome.used,
                reason=reason,
            )
        for peak, reason in grain.unassigned.items():
            own = peaks[grain.region][peak]
            found[grain.region, peak] = CheckedReflection(
                **about,
                peak=peak,
                hkl=None,
                g_per_nm=(float(own.g_per_nm[0]), float(own.g_per_nm[1])),
                expected_d_nm=None,
                nominal_d_nm=1 / math.hypot(*own.g_per_nm),
                corrected_d_nm=1 / math.hypot(*(inverse @ own.g_per_nm)),
                deviation_percent=None,
                pull=None,
                used=False,
                reason=reason,
            )
    return tuple(found[key] for key in sorted(found))


def _checked_region(
    regions: Sequence[Measurement], grains: Sequence[Grain], estimate: Estimate, nominal: tuple[float, float]
) -> CheckedRegion:
    fit: GeometryFit = estimate.fit
    sigma = np.sqrt(np.diag(fit.covariance))
    isotropic = len(fit.values) == 1
    row, column = (0, 0) if isotropic else (0, 1)
    in_pixels = nominal[0] / nominal[1]
    numbers = sorted(fit.rotations_rad)
    single = grains[numbers[0]] if len(numbers) == 1 else None
    rotation = None if single is None else math.degrees(fit.rotations_rad[numbers[0]])
    return CheckedRegion(
        picture=regions[grains[numbers[0]].region].micrograph.name,
        name=estimate.name,
        scale=(float(fit.values[row]), float(fit.values[column])),
        scale_uncertainty=(float(sigma[row]), float(sigma[column])),
        shear=None if isotropic else float(fit.values[2]) * in_pixels,
        shear_uncertainty=None if isotropic else float(sigma[2]) * in_pixels,
        rotation_deg=None if rotation is None else rotation % 360,
        zone=None if single is None else single.zone,
    )


def _cautions(
    reflections: Sequence[CheckedReflection],
    estimates: Sequence[Estimate],
    isotropic: bool,
    at: ReferenceAtTemperature,
    regions: Sequence[Measurement],
    final: NDArray[np.float64],
) -> tuple[Caution, ...]:
    cautions = []
    off = [r for r in reflections if r.reason.startswith("lies off")]
    if off:
        named = ", ".join(_reflection_name(r) for r in off[:4]) + (" ..." if len(off) > 4 else "")
        cautions.append(
            Caution(
                "outlying-reflections",
                "warning",
                f"{len(off)} reflection{'s' if len(off) > 1 else ''} of the reference lie off the fit of the others and did "
                f"not enter it: {named}.",
                "Look at these fringes; draw the region where they are even, or leave the region out.",
            )
        )
    if isotropic:
        cautions.append(
            Caution(
                "one-factor-only",
                "warning",
                "Fringes of one direction give one factor for the pixel size; whether rows and columns differ, and whether "
                "the picture is sheared, is not known.",
                "Measure reflections in at least two directions of one crystal, or several grains.",
            )
        )
    raised = [e for e in estimates if e.fit.raised_by > 1]
    if raised:
        worst = max(raised, key=lambda e: e.fit.raised_by)
        cautions.append(
            Caution(
                "reflections-scatter",
                "warning",
                f"In {len(raised)} of {len(estimates)} regions the reflections scatter more than their uncertainties say "
                f"(most in {worst.name}); the uncertainty of the fit was raised by up to {worst.fit.raised_by:.1f}.",
                "A flat part of the foil on the zone axis, in the middle of the picture, scatters less.",
            )
        )
    if len(set(_picture_numbers(regions))) == 1:
        cautions.append(
            Caution(
                "one-picture",
                "note",
                "One picture does not show how well the magnification comes back when the lenses are set anew.",
                "Check several pictures, with the lenses normalised and the height set before each.",
            )
        )
    if not at.expansion_known:
        cautions.append(
            Caution(
                "expansion-not-known",
                "note",
                "The thermal expansion of the reference is not known here; 10e-6 per kelvin was taken, uncertain by 60 %.",
                "State it, or let the reference be at its certificate's temperature.",
            )
        )
    if np.abs(final[: 1 if isotropic else 2] - 1).max() > 0.05:
        cautions.append(
            Caution(
                "far-off",
                "warning",
                f"The pixel size is {100 * float(np.abs(final[: 1 if isotropic else 2] - 1).max()):.1f} % off, more than a "
                "magnification usually drifts.",
                "Make sure that the specimen is the reference, and the nominal pixel size that of this picture (binning?).",
            )
        )
    return gravest_first(cautions)


def _reflection_name(reflection: CheckedReflection) -> str:
    indices = f"{reflection.nominal_d_nm:.4f} nm" if reflection.hkl is None else "({} {} {})".format(*reflection.hkl)
    return f"{indices} in {reflection.region}"
