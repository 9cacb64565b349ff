"""The fringes of one crystal: plane waves, the extent they fill, the lattice they share, and how wrong they may be."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fringespan.extent import FringeField, crystal_footprint, crystal_mask, fringe_fields, outline
from fringespan.finite_crystal import (
    CrystalFit,
    crystal_uncertainty,
    fit_crystal,
    lattice_scatter,
    lattice_tolerance,
    smoothing_width_px,
    why_broken,
)
from fringespan.lattice import LatticeFit, find_lattice, unseen_lattice_points
from fringespan.noise import RingBackground, ring_background, rings_at
from fringespan.peaks.demodulation import demodulate
from fringespan.peaks.detection import density_at, matched_ratio_at, tapered_maximum, waves_removed
from fringespan.peaks.fringes import Fringes, close_pairs, find_fringes
from fringespan.peaks.joint_fit import JointFit, fit_jointly, solve_waves
from fringespan.peaks.misfit import MISFIT_LIMIT
from fringespan.region import Footprint
from fringespan.settings import MeasurementSettings
from fringespan.spacings import diagonal_blocks
from fringespan.spectrum import PowerSpectrum, RegionPixels, power_spectrum, prepare_pixels

__all__ = ["CrystalFringes", "DelocalisationLaw", "find_crystal_fringes"]

DelocalisationLaw = Callable[[NDArray[np.float64]], NDArray[np.float64]]
"""Signed delocalisation in nm as a function of spatial frequency in 1/nm."""

_CLEAR = 60.0
"""Power ratio of all that the fringes hold from which a misfit, or their extent, can be believed."""

_READABLE = 150.0
"""Power ratio from which the fringes' own phase and plateau are read; weaker ones take those of the crystal."""

_RUNAWAY_BINS = 0.4
"""A misfitting wave further than this from the tapered spectrum's maximum has run to one side."""

_DIRECTIONS = np.stack([np.sin(np.arange(36) * np.pi / 36), np.cos(np.arange(36) * np.pi / 36)])
"""Unit vectors in which widths are measured, shape (2, 36)."""

_STRAY = 0.02
"""Peaks off the lattice of an uneven crystal that have less than this share of the strongest power are strays."""

_FILLED = 0.6
"""A crystal that covers more of its region than this is measured in the whole region."""


@dataclass(frozen=True, eq=False, slots=True)
class CrystalFringes:
    """Plane waves of one crystal. Lengths and frequencies are in pixels of the picture.

    Attributes
    ----------
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel, strongest first.
    covariance : ndarray, shape (2n, 2n)
        Fit part.
    power_ratio, density : ndarray, shape (n,)
    amplitude : ndarray of complex128, shape (n,)
        Half the real amplitude, with the phase at `phase_origin`.
    phase_origin : (float, float)
        (row, column) from the first pixel of the region's rectangle.
    mean_level : float
        Mean pixel value inside the crystal.
    misfit : ndarray, shape (n,)
        See `fringespan.peaks.misfit`.
    crystal_along, crystal_across : ndarray, shape (n,)
        Standard uncertainty of g along and across itself that one picture cannot show, cycles per pixel.
    withheld : tuple of str or None
        Why a set of fringes gives no spacing.
    at_lattice_point : ndarray of bool, shape (n,)
        Found only because the lattice told where to look.
    lattice : LatticeFit or None
        In cycles per pixel.
    lattice_along : ndarray, shape (n,)
        Standard uncertainty of the lattice's g along itself at each peak, fit and crystal parts, cycles per pixel.
    lattice_relative : float
        Crystal part of the relative uncertainty of the lattice's lengths.
    outline : ndarray, shape (m, 2)
        Where the fringes end: (row, column) from the first pixel of the region's rectangle.
    extent : (float, float)
        Greatest and smallest width of the outline, in nm where there is a pixel size, else in pixels.
    uneven : bool
        Whether the fringes fill the region unevenly.
    share : float
        Part of the region that the crystal covers.
    others : ndarray, shape (k, 2)
        Strong peaks of the region that are not the crystal's.
    second_lattice : LatticeFit or None
        A lattice that peaks off the first one share.
    """

    frequency: NDArray[np.float64]
    covariance: NDArray[np.float64]
    power_ratio: NDArray[np.float64]
    density: NDArray[np.float64]
    amplitude: NDArray[np.complex128]
    phase_origin: tuple[float, float]
    mean_level: float
    misfit: NDArray[np.float64]
    crystal_along: NDArray[np.float64]
    crystal_across: NDArray[np.float64]
    withheld: tuple[str | None, ...]
    at_lattice_point: NDArray[np.bool_]
    lattice: LatticeFit | None
    lattice_along: NDArray[np.float64]
    lattice_relative: float
    outline: NDArray[np.float64] | None
    extent: tuple[float, float] | None
    uneven: bool
    share: float
    others: NDArray[np.float64]
    second_lattice: LatticeFit | None


@dataclass(frozen=True, eq=False, slots=True)
class _Scene:
    """A region, or the part of it that a crystal fills, with what was found there."""

    pixels: RegionPixels
    spectrum: PowerSpectrum
    background: RingBackground
    fringes: Fringes
    corner: tuple[int, int]
    at_lattice_point: NDArray[np.bool_]

    @property
    def footprint(self) -> Footprint:
        return self.pixels.footprint


def find_crystal_fringes(
    pixels: RegionPixels,
    spectrum: PowerSpectrum,
    settings: MeasurementSettings,
    pixel_size: tuple[float, float],
    delocalisation_nm: DelocalisationLaw | None,
) -> CrystalFringes:
    """Find the fringes of the largest crystal in a region.

    Parameters
    ----------
    pixels : RegionPixels
    spectrum : PowerSpectrum
        Of these pixels.
    settings : MeasurementSettings
    pixel_size : (float, float)
        Along (row, column); (1, 1) if not known.
    delocalisation_nm : callable, or None
        Signed delocalisation in nm at spatial frequencies in 1/nm, where the lens is known.

    Returns
    -------
    CrystalFringes
    """
    aspect = round(pixel_size[1] / pixel_size[0], 3)
    whole = _scene(pixels, spectrum, settings, aspect, (0, 0))
    scene, others, share = whole, np.empty((0, 2)), 1.0
    misfit = whole.fringes.residuals.misfit
    # what a single wave leaves over is power of the fringes, too: the misfit is the mean of twelve projections
    clear = whole.fringes.fit.power_ratio + 12 * (misfit - 1) > _CLEAR
    uneven = bool((clear & (misfit > MISFIT_LIMIT)).any())
    if uneven:
        fields, strength = _strongest_fields(whole, clear)
        mask = crystal_mask(fields, strength, 0.35)
        share = float(crystal_mask(fields, strength).sum() / fields.inside.sum())
        if mask.sum() / fields.inside.sum() < _FILLED:
            footprint, corner = crystal_footprint(whole.footprint, fields, mask)
            if min(footprint.shape) >= 24 and footprint.count > 400:
                scene = _part(whole, footprint, corner, settings, aspect)
                others = _missing(whole, scene)
    size = np.array(pixel_size)
    lattice = _lattice(scene, None, size)
    if lattice is not None:
        if uneven:
            scene = _without_strays(scene, lattice, size)
        scene = _with_lattice_points(scene, lattice, settings, size)
    return _assembled(scene, uneven, others, share, size, delocalisation_nm, lattice)


def _scene(
    pixels: RegionPixels,
    spectrum: PowerSpectrum,
    settings: MeasurementSettings,
    aspect: float,
    corner: tuple[int, int],
) -> _Scene:
    background = ring_background(spectrum, aspect)
    fringes = find_fringes(
        pixels,
        spectrum,
        background,
        false_peaks_per_region=settings.false_peaks_per_region,
        smallest_distance_bins=settings.smallest_distance_bins,
    )
    return _Scene(pixels, spectrum, background, fringes, corner, np.zeros(len(fringes.density), bool))


def _part(
    whole: _Scene, footprint: Footprint, corner: tuple[int, int], settings: MeasurementSettings, aspect: float
) -> _Scene:
    """Find fringes again in the crystal alone: its own edge tapered, they have no side lobes, and less noise."""
    top, left = corner
    values = whole.pixels.values[top : top + footprint.shape[0], left : left + footprint.shape[1]]
    spectrum, pixels = power_spectrum(prepare_pixels(values, footprint))
    return _scene(pixels, spectrum, settings, aspect, corner)


def _strongest_fields(scene: _Scene, used: NDArray[np.bool_]) -> tuple[FringeField, NDArray[np.float64]]:
    """Return the fields of the strongest fringes and their signal to noise."""
    fit = scene.fringes.fit
    strongest = np.flatnonzero(used)[np.argsort(-fit.power_ratio[used])][:8]
    width = smoothing_width_px(scene.footprint.count, fit.power_ratio, fit.frequency)[strongest]
    fields = fringe_fields(scene.footprint, fit.demodulation.part(strongest), fit.frequency[strongest], width)
    return fields, np.sqrt(fit.power_ratio[strongest])


def _missing(whole: _Scene, part: _Scene) -> NDArray[np.float64]:
    """Return the strong peaks of the region that the crystal's part does not have: another crystal's."""
    before, after = whole.fringes, part.fringes
    strong = before.fit.power_ratio > 3 * before.limit
    bins = np.array(part.footprint.shape)
    if not len(after.density):
        return before.fit.frequency[strong]
    difference = before.fit.frequency[:, None] - after.fit.frequency[None]
    total = before.fit.frequency[:, None] + after.fit.frequency[None]
    distance = np.minimum(np.hypot(*(difference * bins).T), np.hypot(*(total * bins).T)).T
    # side lobes of the crystal's own peaks lie within some bins of them
    return np.asarray(before.fit.frequency[strong & (distance.min(axis=1) > 6)])


def _lattice(scene: _Scene, crystal: CrystalFit | None, size: NDArray[np.float64]) -> LatticeFit | None:
    """Fit the common lattice, in cycles per pixel scaled by the pixel size."""
    fit = scene.fringes.fit
    n = len(fit.power_ratio)
    if n < 3:
        return None
    g = fit.frequency / size
    noise_along, noise_across = _along_across(g, fit.covariance, size)
    if crystal is None:
        extent = np.full(n, np.sqrt(scene.footprint.count * size.prod()))
        even = scene.fringes.residuals.misfit <= MISFIT_LIMIT
        tolerance = np.where(even, 0.02, 0.1)
    else:
        extent, tolerance = crystal.length, lattice_tolerance(crystal.phase_rms, crystal.plateau_loss)
    length = np.sqrt((g * g).sum(axis=1))
    # a sum or harmonic has the errors of the waves it is made of: in cycles they grow with its order
    tolerance = tolerance * length / length.min()
    sigma = np.hypot(noise_along, tolerance / extent)
    return find_lattice(g, sigma, np.hypot(noise_across, 0.3 * tolerance / extent), np.sqrt(fit.power_ratio))


def _along_across(
    g: NDArray[np.float64], covariance: NDArray[np.float64], size: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return the standard uncertainties of each g along and across itself from the covariance in cycles per pixel."""
    unit = g / np.sqrt((g * g).sum(axis=1))[:, None]
    blocks = diagonal_blocks(covariance) / (size[:, None] * size)
    y, x = unit[:, 0], unit[:, 1]
    yy, yx, xx = blocks[:, 0, 0], blocks[:, 0, 1], blocks[:, 1, 1]
    along = np.sqrt(y * y * yy + 2 * y * x * yx + x * x * xx)
    return along, np.sqrt(np.maximum(x * x * yy - 2 * y * x * yx + y * y * xx, 0.0))


def _without_strays(scene: _Scene, lattice: LatticeFit, size: NDArray[np.float64]) -> _Scene:
    """Leave out weak peaks off the lattice of an uneven crystal: side lobes of its shape and sums with the film.

    Those that have a lattice of their own stay, and those that are not weak.
    """
    fringes = scene.fringes
    second = _second_lattice(scene, lattice, size)
    own = second.member if second is not None else np.zeros(len(lattice.member), bool)
    strays = ~lattice.member & ~own & (fringes.fit.power_ratio < _STRAY * fringes.fit.power_ratio.max())
    if lattice.member.sum() < 4 or not strays.any():
        return scene
    stays = ~strays
    fit, kept = fit_jointly(
        scene.pixels, fringes.fit.demodulation.part(stays), fringes.density[stays], fringes.limit[stays]
    )
    kept = np.flatnonzero(stays)[kept]
    residuals = replace(fringes.residuals, misfit=fringes.residuals.misfit[kept])
    return replace(
        scene,
        fringes=Fringes(fit, fringes.density[kept], fringes.limit[kept], residuals),
        at_lattice_point=scene.at_lattice_point[kept],
    )


def _with_lattice_points(
    scene: _Scene, lattice: LatticeFit, settings: MeasurementSettings, size: NDArray[np.float64]
) -> _Scene:
    """Look at the lattice points that show no peak yet, at the lower threshold that a known position allows."""
    fringes, footprint = scene.fringes, scene.footprint
    bins = np.array(footprint.shape, dtype=float)
    basis = lattice.basis * size
    on_lattice = lattice.index[lattice.member] @ basis
    finest = 1.2 * float(np.sqrt((on_lattice * on_lattice).sum(axis=1).max()))
    point = unseen_lattice_points(basis, min(finest, 0.7), fringes.fit.frequency, bins, settings.smallest_distance_bins)
    if not len(point) or len(point) > 2000:
        return scene
    threshold = float(np.log(len(point) / settings.false_peaks_per_region)) + 1.0
    with waves_removed(scene.spectrum, footprint, fringes.fit.frequency, fringes.fit.amplitude) as rest:
        power = matched_ratio_at(rest, footprint, point)
        # the rings are a cheap first judge; they are hardly ever twice the local noise
        worth = power > 0.4 * threshold * rings_at(scene.background, point * scene.spectrum.shape)
        if not worth.any():
            return scene
        point = point[worth]
        density, samples = density_at(rest, scene.background, point)
        ratio = power[worth] / density
    limit = samples * np.expm1(threshold / samples)
    hopeful = ratio > 0.8 * limit
    if not hopeful.any():
        return scene
    start = fringes.fit.demodulation.joined(demodulate(scene.pixels, point[hopeful]))
    all_density = np.append(fringes.density, density[hopeful])
    all_limit = np.append(fringes.limit, limit[hopeful])
    fit, kept = fit_jointly(scene.pixels, start, all_density, all_limit)
    new = kept >= len(fringes.density)
    # a weak peak that wandered off its lattice point is no lattice point
    moved = np.zeros(len(kept))
    moved[new] = np.hypot(*((fit.frequency[new] - point[hopeful][kept[new] - len(fringes.density)]) * bins).T)
    stays = moved < 1.0
    if not stays.all():
        fit, kept_again = fit_jointly(
            scene.pixels, fit.demodulation.part(stays), all_density[kept[stays]], all_limit[kept[stays]]
        )
        kept, new = kept[stays][kept_again], new[stays][kept_again]
    misfit = np.ones(len(kept))
    misfit[~new] = fringes.residuals.misfit[kept[~new]]
    residuals = replace(fringes.residuals, misfit=misfit)
    return replace(
        scene,
        fringes=Fringes(fit, all_density[kept], all_limit[kept], residuals),
        at_lattice_point=new,
    )


def _centred(scene: _Scene) -> _Scene:
    """Put waves that misfit where the tapered spectrum has its maximum.

    The plane-wave fit of a bent or broken fringe runs to whichever side of its region happens to be straighter.
    """
    fit, spectrum = scene.fringes.fit, scene.spectrum
    bins = np.array(scene.footprint.shape)
    top = np.array([tapered_maximum(spectrum, f) for f in fit.frequency]).reshape(-1, 2)
    away = np.hypot(*((top - fit.frequency) * bins).T)
    moved = (scene.fringes.residuals.misfit > MISFIT_LIMIT) & (fit.power_ratio > _CLEAR) & (away > _RUNAWAY_BINS)
    moved &= ~close_pairs(scene.footprint, scene.fringes)
    if not moved.any():
        return scene
    frequency = np.where(moved[:, None], top, fit.frequency)
    demodulation = fit.demodulation.replaced(moved, demodulate(scene.pixels, frequency[moved]))
    amplitude, _, covariance = solve_waves(scene.footprint, demodulation, scene.fringes.density)
    power_ratio = np.abs(amplitude) ** 2 * scene.footprint.count / scene.fringes.density
    fit = JointFit(frequency, amplitude, covariance, power_ratio, demodulation)
    return replace(scene, fringes=replace(scene.fringes, fit=fit))


def _assembled(
    scene: _Scene,
    uneven: bool,
    others: NDArray[np.float64],
    share: float,
    size: NDArray[np.float64],
    delocalisation_nm: DelocalisationLaw | None,
    first_lattice: LatticeFit | None,
) -> CrystalFringes:
    if uneven:
        scene = _centred(scene)
    fit, misfit = scene.fringes.fit, scene.fringes.residuals.misfit
    n = len(fit.power_ratio)
    frequency, covariance, amplitude = fit.frequency.copy(), fit.covariance.copy(), fit.amplitude.copy()
    ny, nx = scene.footprint.shape
    withheld: list[str | None] = [None] * n
    crystal: CrystalFit | None = None
    fields: FringeField | None = None
    if n and uneven:
        width = smoothing_width_px(scene.footprint.count, fit.power_ratio, fit.frequency)
        fields = fringe_fields(scene.footprint, fit.demodulation, fit.frequency, width)
        crystal = _crystal_fit(scene, fields, size)
        alone = ~close_pairs(scene.footprint, scene.fringes)
        readable = (fit.power_ratio > _READABLE) & alone
        own = ((misfit > MISFIT_LIMIT) & alone) | readable
        own &= (crystal.share < 0.95) | (crystal.phase_rms > 0.1) | (crystal.plateau_loss > 0.1)
        frequency[own] += (crystal.shift * size)[own]
        amplitude[own] = crystal.amplitude[own]
        for k in np.flatnonzero(own):
            covariance[2 * k : 2 * k + 2] *= crystal.efficiency[k]
            covariance[:, 2 * k : 2 * k + 2] *= crystal.efficiency[k]
            covariance[2 * k : 2 * k + 2, 2 * k : 2 * k + 2] += crystal.bend[k] * np.outer(size, size)
        withheld = [reason if r else None for reason, r in zip(why_broken(crystal), readable, strict=True)]
        crystal = _levelled(crystal, readable, fit.power_ratio)
    moved = replace(scene, fringes=replace(scene.fringes, fit=replace(fit, frequency=frequency, covariance=covariance)))
    sound = np.array([w is None for w in withheld], bool)
    # plane waves throughout and no further peak: the lattice is the one already found
    settled = crystal is None and (first_lattice is None or len(first_lattice.member) == n)
    lattice = first_lattice if settled else _lattice(moved, crystal, size)
    along, across, lattice_along, lattice_relative = _uncertainties(
        moved, crystal, lattice, sound, size, delocalisation_nm
    )
    order = np.argsort(-fit.power_ratio)
    middle = scene.corner[0] + (ny - 1) / 2, scene.corner[1] + (nx - 1) / 2
    drawn, extent, mean_level = _outline(scene, fields, middle, size)
    pairs = np.stack([2 * order, 2 * order + 1], axis=1).ravel()
    second = _second_lattice(moved, lattice, size)
    return CrystalFringes(
        frequency=frequency[order],
        covariance=covariance[np.ix_(pairs, pairs)],
        power_ratio=fit.power_ratio[order],
        density=scene.fringes.density[order],
        amplitude=amplitude[order],
        phase_origin=middle,
        mean_level=mean_level,
        misfit=misfit[order],
        crystal_along=along[order],
        crystal_across=across[order],
        withheld=tuple(withheld[k] for k in order),
        at_lattice_point=scene.at_lattice_point[order],
        lattice=_reordered(lattice, order, size),
        lattice_along=lattice_along[order],
        lattice_relative=lattice_relative,
        outline=drawn,
        extent=extent,
        uneven=uneven,
        share=share,
        others=others,
        second_lattice=_reordered(second, order, size),
    )


def _crystal_fit(scene: _Scene, fields: FringeField, size: NDArray[np.float64]) -> CrystalFit:
    """Fit each peak over its own extent, lengths in nm (or pixels without a pixel size)."""
    fit = scene.fringes.fit
    scaled = replace(
        fields, y=fields.y * size[0], x=fields.x * size[1], width_px=fields.width_px * np.sqrt(size.prod())
    )
    return fit_crystal(scaled, fit.frequency / size, fit.power_ratio, scene.footprint.count * size.prod())


def _levelled(crystal: CrystalFit, readable: NDArray[np.bool_], power_ratio: NDArray[np.float64]) -> CrystalFit:
    """Give fringes too weak to read the extent, phase and plateau that the readable ones of the crystal have."""
    if readable.all() or not readable.any():
        return crystal
    weight = np.sqrt(power_ratio[readable])

    def common(values: NDArray[np.float64]) -> NDArray[np.float64]:
        mean = float((weight * values[readable]).sum() / weight.sum())
        return np.where(readable, values, np.maximum(mean, 0))

    return replace(
        crystal,
        length=common(crystal.length),
        width=common(crystal.width),
        phase_rms=common(crystal.phase_rms),
        plateau_loss=common(crystal.plateau_loss),
    )


def _uncertainties(
    scene: _Scene,
    crystal: CrystalFit | None,
    lattice: LatticeFit | None,
    sound: NDArray[np.bool_],
    size: NDArray[np.float64],
    delocalisation_nm: DelocalisationLaw | None,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], float]:
    """Return the crystal part along and across g, and the lattice's uncertainty along g, in cycles per pixel."""
    fit = scene.fringes.fit
    n = len(fit.power_ratio)
    if n == 0:
        return np.zeros(0), np.zeros(0), np.zeros(0), 0.0
    g = fit.frequency / size
    noise, _ = _along_across(g, fit.covariance, size)
    member = lattice.member & sound if lattice is not None else np.zeros(n, bool)
    length = crystal.length if crystal is not None else _region_extent(scene.footprint, g, size)
    residual = lattice.along * length if lattice is not None else None
    if crystal is not None:
        deloc = None if delocalisation_nm is None else np.asarray(delocalisation_nm(np.hypot(*g.T)))
        enough = residual if member.sum() >= 3 else None
        part = crystal_uncertainty(crystal, noise * length, enough, member, deloc)
        along, across, floor = part.along, part.across, part.lattice
    else:
        # nothing departs from plane waves: what the lens may still do is bounded by what the noise lets see
        scatter = 0.0
        if residual is not None and member.sum() >= 3:
            scatter = lattice_scatter(residual[member], (noise * length)[member], np.full(int(member.sum()), 0.002))
        along = np.minimum(1.5 * scatter, 2 * noise * length)
        across, floor = 0.25 * along, 0.0
    # direction of g in pixels differs from that in nm by the pixel's aspect only, which these rough terms can ignore
    norm = np.sqrt((g * g).sum(axis=1))
    scale = np.sqrt((fit.frequency * fit.frequency).sum(axis=1)) / norm
    lattice_along, relative = np.zeros(n), 0.0
    if lattice is not None:
        unit = g / norm[:, None]
        jacobian = np.concatenate([lattice.index[:, :1] * unit, lattice.index[:, 1:] * unit], axis=1)
        formal = 0.9 * np.sqrt(((jacobian @ lattice.covariance) * jacobian).sum(axis=1))
        lattice_along = formal * scale
        if crystal is not None:
            lattice_along = np.hypot(formal, floor / length) * scale
            relative = float(np.median(floor / length / norm))
    return along / length * scale, across / length * scale, lattice_along, relative


def _region_extent(footprint: Footprint, g: NDArray[np.float64], size: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return sqrt(12 var) of a footprint's pixels along each g, in nm (or pixels)."""
    yy, yx, xx = footprint.second_moments
    scaled = g * size
    y, x = scaled[:, 0], scaled[:, 1]
    return np.asarray(np.sqrt(12 * (y * y * yy + x * x * xx + 2 * y * x * yx) / (g * g).sum(axis=1)))


def _reordered(lattice: LatticeFit | None, order: NDArray[np.intp], size: NDArray[np.float64]) -> LatticeFit | None:
    """Return a lattice with its peaks in another order and its lengths in cycles per pixel."""
    if lattice is None:
        return None
    scale = np.concatenate([size, size])
    return replace(
        lattice,
        basis=lattice.basis * size,
        covariance=lattice.covariance * (scale[:, None] * scale),
        index=lattice.index[order],
        member=lattice.member[order],
        along=lattice.along[order],
    )


def _second_lattice(scene: _Scene, first: LatticeFit | None, size: NDArray[np.float64]) -> LatticeFit | None:
    """Return a lattice that at least three strong peaks off the first one share."""
    if first is None:
        return None
    fringes = scene.fringes
    off = ~first.member & (fringes.fit.power_ratio > 2 * fringes.limit)
    if off.sum() < 3:
        return None
    pairs = np.stack([2 * np.flatnonzero(off), 2 * np.flatnonzero(off) + 1], axis=1).ravel()
    fit = replace(
        fringes.fit,
        frequency=fringes.fit.frequency[off],
        covariance=fringes.fit.covariance[np.ix_(pairs, pairs)],
        power_ratio=fringes.fit.power_ratio[off],
    )
    residuals = replace(fringes.residuals, misfit=fringes.residuals.misfit[off])
    lattice = _lattice(replace(scene, fringes=replace(fringes, fit=fit, residuals=residuals)), None, size)
    if lattice is None:
        return None
    index, member, along = np.zeros((len(off), 2), np.int64), np.zeros(len(off), bool), np.zeros(len(off))
    index[off], member[off], along[off] = lattice.index, lattice.member, lattice.along
    return replace(lattice, index=index, member=member, along=along)


def _outline(
    scene: _Scene, fields: FringeField | None, middle: tuple[float, float], size: NDArray[np.float64]
) -> tuple[NDArray[np.float64] | None, tuple[float, float] | None, float]:
    """Return the crystal's outline from the region's first pixel, its greatest and smallest width, and its mean pixel."""
    power_ratio = scene.fringes.fit.power_ratio
    trend = scene.pixels.trend
    mean = float(trend[0] + (trend[2] + trend[7]) / 3)
    if not len(power_ratio):
        return None, None, mean
    if fields is None:
        corners = _corners(scene.footprint) + scene.corner
    else:
        used = power_ratio > min(_CLEAR, power_ratio.max() * 0.99)
        part = replace(fields, field=fields.field[used], width_px=fields.width_px[used])
        mask = crystal_mask(part, np.sqrt(power_ratio[used]))
        corners = outline(part, mask) + middle
        filled, (top, left) = crystal_footprint(scene.footprint, part, mask)
        values = scene.pixels.values[top : top + filled.shape[0], left : left + filled.shape[1]]
        mean = float(values[filled.mask].mean(dtype=np.float64))
    along = (corners * size) @ _DIRECTIONS
    widths = along.max(axis=0) - along.min(axis=0)
    return corners, (float(widths.max()), float(widths.min())), mean


def _corners(footprint: Footprint) -> NDArray[np.float64]:
    """Return corners of a footprint: its four for a rectangle, else the ends of its rows."""
    ny, nx = footprint.shape
    if footprint.mask is None:
        return np.array([(-0.5, -0.5), (-0.5, nx - 0.5), (ny - 0.5, nx - 0.5), (ny - 0.5, -0.5)])
    rows, first = np.unique(footprint.spans[:, 0], return_index=True)
    last = np.append(first[1:], len(footprint.spans)) - 1
    left, right = footprint.spans[first, 1], footprint.spans[last, 2] - 1
    step = max(1, len(rows) // 60)
    down, up = np.stack([rows, right], axis=1)[::step], np.stack([rows, left], axis=1)[::step][::-1]
    return np.concatenate([down, up]).astype(float)
