"""Measurements of a reference material whose truth is known, without measuring a picture.

The reflections come from the zone-axis code; nothing of the magnification check is used to make them.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence

import numpy as np

from fringespan.crystal.phase import Phase
from fringespan.crystal.zone import zone_arrays
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import Peak
from fringespan.spectrum import PowerSpectrum


def geometry(row: float, column: float, shear: float = 0.0) -> np.ndarray:
    """Return F, shape (2, 2): (y, x) true = F (y, x) nominal."""
    return np.array([[row, 0.0], [shear, column]])


def tilted(g: np.ndarray, tilt: Sequence[float]) -> np.ndarray:
    """Return vectors of a zone that is tilted by small angles about two axes, as they show in the picture.

    A vector across the tilt axis is shortened by the cosine, so its spacing looks larger.
    """
    angle = math.hypot(*tilt)
    if angle == 0:
        return g
    across = np.array(tilt) / angle
    return g - (1 - math.cos(angle)) * (g @ across)[:, None] * across


def vectors(
    phase: Phase, zone: tuple[int, int, int], rotation: float, d_min_nm: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return hkl, g (row, column) in 1/nm and intensity of the allowed reflections of a zone, one of each pair."""
    arrays = zone_arrays(phase, zone, d_min_nm)
    turned = arrays.g_per_angstrom * 10 * np.exp(1j * rotation)
    g = np.stack([-turned.imag, turned.real], axis=1)
    right = (g[:, 1] > 1e-9) | ((np.abs(g[:, 1]) <= 1e-9) & (g[:, 0] < 0))
    kept = right & ~arrays.is_absent
    return arrays.hkl[kept], g[kept], arrays.relative_intensity[kept]


def measured_peak(g_nominal: np.ndarray, covariance: np.ndarray, pixel_size_nm: float, strength: float = 30.0) -> Peak:
    """Return the peak of a reciprocal vector in 1/nm by the nominal pixel size."""
    g = g_nominal if g_nominal[1] > 0 or (g_nominal[1] == 0 and g_nominal[0] < 0) else -g_nominal
    length = math.hypot(*g)
    unit = g / length
    fit = math.sqrt(float(unit @ covariance @ unit)) / length**2
    return Peak(
        g_per_px=g * pixel_size_nm,
        g_covariance_per_px2=covariance * pixel_size_nm**2,
        g_per_nm=g,
        g_covariance_per_nm2=covariance,
        period_px=1 / length / pixel_size_nm,
        d_nm=1 / length,
        d_fit_uncertainty_nm=fit,
        d_crystal_uncertainty_nm=0.0,
        d_uncertainty_nm=None,
        d_lattice_nm=None,
        d_lattice_uncertainty_nm=None,
        direction_deg=math.degrees(math.atan2(-g[0], g[1])) % 180,
        direction_uncertainty_deg=0.05,
        signal_to_noise=strength,
        visibility=None,
        amplitude=10.0,
        phase_rad=0.0,
        phase_origin_px=(127.5, 127.5),
        two_theta_mrad=None,
        lattice_index=None,
        combination_of=None,
        origin="found",
        withheld=None,
        cautions=(),
    )


def picture(name: str = "reference.tif", pixel_size_nm: float | None = 0.025, **other: object) -> Micrograph:
    """Return an empty picture of this nominal pixel size."""
    size = None if pixel_size_nm is None else (pixel_size_nm, pixel_size_nm)
    return Micrograph(np.zeros((256, 256), np.float32), pixel_size_nm=size, name=name, **other)


def region_measurement(micrograph: Micrograph, peaks: Sequence[Peak], name: str = "middle") -> Measurement:
    """Return the measurement of one region with these peaks."""
    empty = dict.fromkeys(field.name for field in dataclasses.fields(PowerSpectrum))
    power = np.random.default_rng(8).exponential(900, (256, 129)).astype(np.float32)
    return Measurement(
        micrograph=micrograph,
        region=Region.rectangle(name, 20, 20, 235, 235),
        settings=MeasurementSettings(),
        peaks=tuple(peaks),
        angles=(),
        lattice=None,
        crystal_outline_px=None,
        crystal_extent_nm=None,
        spectrum=PowerSpectrum(**(empty | {"power": power, "shape": (256, 256)})),
        cautions=(),
    )


def crystal_peaks(
    rng: np.random.Generator,
    phase: Phase,
    zone: tuple[int, int, int],
    true: np.ndarray,
    *,
    rotation: float,
    reflections: int = 4,
    noise: float = 1e-3,
    tilt: Sequence[float] = (0.0, 0.0),
    enlarged: float = 1.0,
    d_min_nm: float = 0.1,
    random_choice: bool = False,
    pixel_size_nm: float = 0.025,
) -> tuple[list[Peak], list[tuple[int, int, int]]]:
    """Return the peaks of a crystal and their indices: the strongest reflections, or some of the stronger half.

    `true` is F; `enlarged` how much larger the specimen's spacings are than the reference's; `noise` the standard
    deviation of g along and across itself, relative to its length.
    """
    hkl, g, intensity = vectors(phase, zone, rotation, d_min_nm)
    order = np.argsort(-intensity, kind="stable")
    if random_choice:
        pool = order[: max(reflections, 2 * reflections)]
        order = rng.permutation(pool)
        order = order[np.argsort(-intensity[order], kind="stable")] if len(order) <= reflections else order
    chosen = list(order[:reflections])
    if np.linalg.matrix_rank(g[chosen], tol=1e-3) < 2:
        other = next(
            i for i in np.argsort(-intensity) if np.linalg.matrix_rank(np.vstack([g[chosen], g[i]]), tol=1e-3) == 2
        )
        chosen[-1] = int(other)
    seen = tilted(g[chosen], tilt) / enlarged @ true
    peaks, indices = [], []
    for k, i in enumerate(chosen):
        sigma = noise * math.hypot(*seen[k])
        covariance = np.eye(2) * max(sigma, 1e-9) ** 2
        peaks.append(
            measured_peak(
                seen[k] + sigma * rng.standard_normal(2), covariance, pixel_size_nm, 40.0 * float(intensity[i]) ** 0.25
            )
        )
        indices.append(tuple(int(v) for v in hkl[i]))
    return peaks, indices
