"""The measurement of one region: the whole chain once, from pixels to spacings."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from fringespan.beam import Lens, scattering_angle_mrad, signed_delocalisation_nm
from fringespan.cautions import Caution, gravest_first
from fringespan.crystal_fringes import CrystalFringes, DelocalisationLaw, find_crystal_fringes
from fringespan.exceptions import RegionError
from fringespan.judgement import (
    LensEffects,
    SpectrumSigns,
    lens_effects,
    peak_cautions,
    region_cautions,
    spectrum_signs,
)
from fringespan.lattice import PlaneLattice, combinations, plane_lattice
from fringespan.micrograph import Micrograph
from fringespan.region import PlacedRegion, Region, place_region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak, Scale, diagonal_blocks, pair_angles, spacings_of
from fringespan.spectrum import PowerSpectrum, RegionPixels, power_spectrum, prepare_pixels

__all__ = ["Measurement", "RegionInPixels", "measure", "recalibrated"]


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class RegionInPixels:
    """What a region shows before any unit: kept, so that another pixel size or voltage costs no new transform.

    Attributes
    ----------
    placed : PlacedRegion
    values : ndarray, shape (rows, columns)
        Pixels of the region's rectangle.
    pixels : RegionPixels
    signs : SpectrumSigns
    found : CrystalFringes
        With frequencies in cycles per pixel.
    """

    placed: PlacedRegion
    values: NDArray[np.generic]
    pixels: RegionPixels
    signs: SpectrumSigns
    found: CrystalFringes


@dataclass(frozen=True, eq=False, kw_only=True)
class Measurement:
    """What was measured in one region of a picture.

    Attributes
    ----------
    micrograph : Micrograph
    region : Region
    settings : MeasurementSettings
    peaks : tuple of Peak
        Strongest first.
    angles : tuple of PairAngle
        One for every pair of peaks.
    lattice : PlaneLattice or None
        Two-dimensional lattice fitted to the peaks.
    crystal_outline_px : ndarray, shape (n, 2), or None
        Corners (row, column) in the picture of the part of the region that shows the fringes.
    crystal_extent_nm : (float, float) or None
        Its greatest and smallest width.
    spectrum : PowerSpectrum
        Power spectrum that the peaks were found in.
    cautions : tuple of Caution
        About the region as a whole, gravest first.
    in_pixels : RegionInPixels or None
        What `recalibrated` starts from.
    """

    micrograph: Micrograph
    region: Region
    settings: MeasurementSettings
    peaks: tuple[Peak, ...]
    angles: tuple[PairAngle, ...]
    lattice: PlaneLattice | None
    crystal_outline_px: NDArray[np.float64] | None
    crystal_extent_nm: tuple[float, float] | None
    spectrum: PowerSpectrum
    cautions: tuple[Caution, ...]
    in_pixels: RegionInPixels | None = field(default=None, repr=False)


_DEFAULT = MeasurementSettings()


def measure(
    micrograph: Micrograph, region: Region | None = None, *, settings: MeasurementSettings | None = None
) -> Measurement:
    """Measure the lattice fringes in a region of a picture.

    Parameters
    ----------
    micrograph : Micrograph
    region : Region, optional
        Default: the whole picture.
    settings : MeasurementSettings, optional

    Returns
    -------
    Measurement

    Raises
    ------
    RegionError
        If the region lies outside the picture, is too small, or all its pixels are equal.
    """
    settings = settings or _DEFAULT
    region = region or Region.whole(micrograph.shape)
    placed = place_region(region, micrograph.shape)
    values = micrograph.crop(placed.rows, placed.columns)
    pixels = prepare_pixels(values, placed.footprint)
    spectrum, pixels = power_spectrum(pixels)
    if pixels.sigma == 0:
        raise RegionError(
            f"region {region.name!r}: all its pixels are equal; draw it where the picture shows something"
        )
    found = _find(micrograph, pixels, spectrum, settings)
    signs = spectrum_signs(spectrum)
    in_pixels = RegionInPixels(placed=placed, values=values, pixels=pixels, signs=signs, found=found)
    return _in_units(micrograph, region, settings, spectrum, in_pixels)


def recalibrated(measurement: Measurement, micrograph: Micrograph) -> Measurement:
    """Return a measurement for other beam values or another size of the same pixels.

    Nothing is transformed again. Where the pixels keep their shape and no lens is known, what was found in pixels stays
    and is told in the new units; else the fringes are sought again in the spectrum.

    Parameters
    ----------
    measurement : Measurement
        As `measure` returned it.
    micrograph : Micrograph
        The same pixels with other values beside them.

    Returns
    -------
    Measurement
        Equal to that of `measure`; where fringes are sought again, to within a small fraction of the uncertainties.

    Raises
    ------
    RegionError
        If the measurement is not of these pixels, or was not made by `measure`.
    """
    before, in_pixels = measurement.micrograph, measurement.in_pixels
    if in_pixels is None or micrograph.pixels is not before.pixels:
        raise RegionError(
            f"region {measurement.region.name!r}: only a measurement of the same pixels can be told in other units; "
            "measure it again"
        )
    settings, spectrum = measurement.settings, measurement.spectrum
    old, new = before.pixel_size_nm or (1.0, 1.0), micrograph.pixel_size_nm or (1.0, 1.0)
    same_shape = math.isclose(new[0] * old[1], new[1] * old[0], rel_tol=1e-12)
    if same_shape and _lens(before) is None and _lens(micrograph) is None:
        factor, extent = new[0] / old[0], in_pixels.found.extent
        scaled = None if extent is None else (extent[0] * factor, extent[1] * factor)
        found = replace(in_pixels.found, extent=scaled)
    else:
        found = _find(micrograph, in_pixels.pixels, spectrum, settings)
    return _in_units(micrograph, measurement.region, settings, spectrum, replace(in_pixels, found=found))


def _find(
    micrograph: Micrograph, pixels: RegionPixels, spectrum: PowerSpectrum, settings: MeasurementSettings
) -> CrystalFringes:
    lens = _lens(micrograph)
    law = None if lens is None else _delocalisation(lens)
    return find_crystal_fringes(pixels, spectrum, settings, micrograph.pixel_size_nm or (1.0, 1.0), law)


def _in_units(
    micrograph: Micrograph,
    region: Region,
    settings: MeasurementSettings,
    spectrum: PowerSpectrum,
    in_pixels: RegionInPixels,
) -> Measurement:
    """Tell what was found in pixels in the units of the picture, and judge it."""
    placed, values, pixels = in_pixels.placed, in_pixels.values, in_pixels.pixels
    signs, found = in_pixels.signs, in_pixels.found
    lens, scale = _lens(micrograph), Scale.of(micrograph)
    peaks, angles, effects = _peaks(micrograph, placed, pixels, found, scale, signs, lens)
    lattice = None
    if found.lattice is not None:
        lattice = plane_lattice(found.lattice, found.lattice_relative, scale.geometry)
    corner = np.array([placed.rows.start, placed.columns.start])
    return Measurement(
        micrograph=micrograph,
        region=region,
        settings=settings,
        peaks=peaks,
        angles=angles,
        lattice=lattice,
        crystal_outline_px=None if found.outline is None else found.outline + corner,
        crystal_extent_nm=found.extent if scale.geometry is not None else None,
        spectrum=spectrum,
        cautions=gravest_first(
            [
                *micrograph.cautions,
                *placed.cautions,
                *region_cautions(micrograph, settings, values, pixels, spectrum, signs, found, peaks, lens, effects),
            ]
        ),
        in_pixels=in_pixels,
    )


def _lens(micrograph: Micrograph) -> Lens | None:
    """Return the lens, where it and the pixel size are known."""
    voltage, cs, defocus = micrograph.voltage_kv, micrograph.cs_mm, micrograph.defocus_nm
    if voltage is None or cs is None or defocus is None or micrograph.pixel_size_nm is None:
        return None
    return Lens(voltage_kv=voltage, cs_mm=cs, defocus_nm=defocus)


def _delocalisation(lens: Lens) -> DelocalisationLaw:
    """Return the signed delocalisation as a function of g."""
    return lambda g_per_nm: np.asarray(signed_delocalisation_nm(g_per_nm, lens))


def _peaks(
    micrograph: Micrograph,
    placed: PlacedRegion,
    pixels: RegionPixels,
    found: CrystalFringes,
    scale: Scale,
    signs: SpectrumSigns,
    lens: Lens | None,
) -> tuple[tuple[Peak, ...], tuple[PairAngle, ...], LensEffects | None]:
    n = len(found.power_ratio)
    if n == 0:
        return (), (), None
    blocks = diagonal_blocks(found.covariance)
    spacings = spacings_of(found.frequency, blocks, found.crystal_along, found.crystal_across, scale)
    angles = pair_angles(spacings, found.covariance, scale, found.crystal_across)
    in_nm = scale.geometry is not None
    origin = placed.rows.start + found.phase_origin[0], placed.columns.start + found.phase_origin[1]
    amplitude = np.abs(found.amplitude) * pixels.unit
    phase = np.where(spacings.flipped, -1, 1) * np.angle(found.amplitude)
    mean = pixels.unit * found.mean_level
    visible = micrograph.dark_level is not None and mean > micrograph.dark_level
    theta = None
    if in_nm and micrograph.voltage_kv is not None:
        theta = scattering_angle_mrad(spacings.d, micrograph.voltage_kv).tolist()
    total = np.sqrt(spacings.fit**2 + spacings.crystal**2 + spacings.scale**2)
    stated = scale.uncertainty is not None
    combined: list[tuple[int, ...] | None] = [None] * n
    d_lattice, u_lattice, index = np.zeros(n), np.zeros(n), np.zeros((n, 2), int)
    member = np.zeros(n, bool)
    if found.lattice is not None:
        member = found.lattice.member
        index = np.where(spacings.flipped[:, None], -found.lattice.index, found.lattice.index)
        combined = combinations(found.lattice.index, member, found.power_ratio)
        exact = found.lattice.index @ found.lattice.basis
        # peaks off the lattice have no place in it: any value does, since it is not used
        exact = np.where(member[:, None], exact, found.frequency)
        from_lattice = spacings_of(exact, blocks, found.lattice_along, found.lattice_along, scale)
        d_lattice = from_lattice.d
        u_lattice = np.sqrt(from_lattice.crystal**2 + np.nan_to_num(from_lattice.scale) ** 2)
    effects = None if lens is None else lens_effects((1 / spacings.d).tolist(), lens)
    cautions = peak_cautions(
        found,
        combined,
        d_nm=spacings.d.tolist() if in_nm else None,
        shape=placed.footprint.shape,
        signs=signs,
        is_jpeg=any(caution.code == "jpeg-compression" for caution in micrograph.cautions),
        voltage_kv=micrograph.voltage_kv,
        cs_mm=micrograph.cs_mm,
        effects=effects,
    )
    peaks = []
    for k in range(n):
        gives_d = in_nm and found.withheld[k] is None
        peaks.append(
            Peak(
                g_per_px=spacings.g_px[k],
                g_covariance_per_px2=blocks[k],
                g_per_nm=spacings.g[k] if in_nm else None,
                g_covariance_per_nm2=spacings.covariance[k] if in_nm else None,
                period_px=1 / math.hypot(*spacings.g_px[k].tolist()),
                d_nm=float(spacings.d[k]) if gives_d else None,
                d_fit_uncertainty_nm=float(spacings.fit[k]) if gives_d else None,
                d_crystal_uncertainty_nm=float(spacings.crystal[k]) if gives_d else None,
                d_uncertainty_nm=float(total[k]) if gives_d and stated else None,
                d_lattice_nm=float(d_lattice[k]) if in_nm and member[k] else None,
                d_lattice_uncertainty_nm=float(u_lattice[k]) if in_nm and member[k] and stated else None,
                direction_deg=float(spacings.direction[k]),
                direction_uncertainty_deg=float(spacings.direction_uncertainty[k]),
                signal_to_noise=math.sqrt(found.power_ratio[k]),
                visibility=2 * float(amplitude[k]) / (mean - float(micrograph.dark_level or 0)) if visible else None,
                amplitude=2 * float(amplitude[k]),
                phase_rad=float(phase[k]),
                phase_origin_px=origin,
                two_theta_mrad=theta[k] if theta is not None else None,
                lattice_index=(int(index[k, 0]), int(index[k, 1])) if member[k] else None,
                combination_of=combined[k],
                origin="lattice point" if found.at_lattice_point[k] else "found",
                withheld=found.withheld[k],
                cautions=cautions[k],
            )
        )
    return tuple(peaks), angles, effects
