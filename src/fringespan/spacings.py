"""Spacings and angles: the values a measurement returns for each set of fringes and each pair of them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.micrograph import Micrograph

__all__ = ["PairAngle", "Peak", "PeakOrigin", "Scale", "Spacings", "diagonal_blocks", "pair_angles", "spacings_of"]

PeakOrigin = Literal["found", "lattice point", "added by hand"]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Peak:
    """One set of fringes, found as a peak of the spectrum.

    Every uncertainty is a standard uncertainty (k = 1). Vectors are (row, column). Fields in nm are None without
    a pixel size.

    Attributes
    ----------
    g_per_px, g_per_nm : ndarray, shape (2,)
        Reciprocal vector without 2 pi, |g| = 1/d, in cycles per pixel and in 1/nm; of +g and -g the one that points to
        the right (or straight up).
    g_covariance_per_px2, g_covariance_per_nm2 : ndarray, shape (2, 2)
        Covariance of g, fit part alone.
    period_px : float
        Distance from fringe to fringe in pixels, 1 / |g_per_px|.
    d_nm : float or None
        Fringe spacing; None also where it is withheld.
    d_fit_uncertainty_nm, d_crystal_uncertainty_nm, d_uncertainty_nm : float or None
        From what the picture itself shows; from what one picture cannot show of an uneven crystal; these two and
        the pixel size's combined (None while the pixel size's uncertainty is not stated).
    d_lattice_nm, d_lattice_uncertainty_nm : float or None
        From the two-dimensional lattice common to all peaks.
    direction_deg, direction_uncertainty_deg : float
        Direction of g on the screen, counter-clockwise from the right, in [0, 180).
    signal_to_noise : float
        Square root of the matched-filter power ratio.
    visibility : float or None
        Fitted amplitude / (mean - dark level); None without a dark level.
    amplitude, phase_rad : float
        Of the fitted wave `amplitude * cos(2 pi (g_per_px @ (r - r0)) + phase)`, in pixel values, with r0 the pixel
        `phase_origin_px`.
    phase_origin_px : (float, float)
        (row, column) in the picture.
    two_theta_mrad : float or None
        Scattering angle; None without a voltage or a pixel size.
    lattice_index : (int, int) or None
        Indices in the two-dimensional lattice; None off it or without one.
    combination_of : tuple of int or None
        Positions (in the list of peaks) of those that this one is the sum, difference or harmonic of.
    origin : {"found", "lattice point", "added by hand"}
    withheld : str or None
        Why no d is given.
    cautions : tuple of Caution
    """

    g_per_px: NDArray[np.float64]
    g_covariance_per_px2: NDArray[np.float64]
    g_per_nm: NDArray[np.float64] | None
    g_covariance_per_nm2: NDArray[np.float64] | None
    period_px: float
    d_nm: float | None
    d_fit_uncertainty_nm: float | None
    d_crystal_uncertainty_nm: float | None
    d_uncertainty_nm: float | None
    d_lattice_nm: float | None
    d_lattice_uncertainty_nm: float | None
    direction_deg: float
    direction_uncertainty_deg: float
    signal_to_noise: float
    visibility: float | None
    amplitude: float
    phase_rad: float
    phase_origin_px: tuple[float, float]
    two_theta_mrad: float | None
    lattice_index: tuple[int, int] | None
    combination_of: tuple[int, ...] | None
    origin: PeakOrigin
    withheld: str | None
    cautions: tuple[Caution, ...]


@dataclass(frozen=True, slots=True)
class PairAngle:
    """The angle between the fringes of two peaks.

    Attributes
    ----------
    peaks : (int, int)
        Positions in the list of peaks.
    angle_deg, angle_uncertainty_deg : float
        Between the two g as reported, from 0 to 180 degrees, with its standard uncertainty.
    """

    peaks: tuple[int, int]
    angle_deg: float
    angle_uncertainty_deg: float


@dataclass(frozen=True, eq=False, slots=True)
class Scale:
    """What turns cycles per pixel into 1/nm: the pixels' geometry and how well it is known.

    Attributes
    ----------
    geometry : ndarray, shape (2, 2), or None
        nm per pixel, as `Micrograph.geometry_nm_per_px`.
    to_per_nm : ndarray, shape (2, 2)
        Its inverse: a row vector in cycles per pixel times it is in 1/nm; the unit matrix without a pixel size.
    uncertainty : (float, float) or None
        Relative standard uncertainty along (row, column); None if not stated.
    common : bool
        Whether both directions share one and the same error.
    """

    geometry: NDArray[np.float64] | None
    to_per_nm: NDArray[np.float64]
    uncertainty: tuple[float, float] | None
    common: bool

    @classmethod
    def of(cls, micrograph: Micrograph) -> Scale:
        """Return the scale of a picture."""
        stated = micrograph.pixel_size_relative_uncertainty
        common = not isinstance(stated, tuple)
        pair = stated if isinstance(stated, tuple) or stated is None else (stated, stated)
        geometry = micrograph.geometry_nm_per_px
        to_per_nm = np.asarray(np.eye(2) if geometry is None else np.linalg.inv(geometry), dtype=float)
        return cls(geometry, to_per_nm, pair, common)


@dataclass(frozen=True, eq=False, slots=True)
class Spacings:
    """Spacings and directions of several reciprocal vectors, all arrays of n rows.

    Lengths are in nm, or in pixels without a pixel size.

    Attributes
    ----------
    g_px, g : ndarray, shape (n, 2)
        In cycles per pixel and in the unit of the lengths, both of the half plane that is reported.
    flipped : ndarray of bool
        Whether the sign of the vector given was turned round.
    covariance : ndarray, shape (n, 2, 2)
        Fit part, in the unit of g.
    d, fit, crystal, scale : ndarray
        Spacing, and its standard uncertainty from the fit, from the crystal, and from the pixel size (nan if not stated).
    direction, direction_uncertainty : ndarray
        Degrees; fit, crystal and anisotropic pixel-size parts.
    """

    g_px: NDArray[np.float64]
    g: NDArray[np.float64]
    flipped: NDArray[np.bool_]
    covariance: NDArray[np.float64]
    d: NDArray[np.float64]
    fit: NDArray[np.float64]
    crystal: NDArray[np.float64]
    scale: NDArray[np.float64]
    direction: NDArray[np.float64]
    direction_uncertainty: NDArray[np.float64]


def spacings_of(
    frequency: NDArray[np.float64],
    covariance: NDArray[np.float64],
    crystal_along: NDArray[np.float64],
    crystal_across: NDArray[np.float64],
    scale: Scale,
) -> Spacings:
    """Return spacings d = 1 / |g| and directions with their uncertainties.

    Parameters
    ----------
    frequency : ndarray, shape (n, 2)
        Cycles per pixel.
    covariance : ndarray, shape (n, 2, 2)
        Fit part, (cycles per pixel)^2.
    crystal_along, crystal_across : ndarray, shape (n,)
        Crystal part of g along and across itself, cycles per pixel.
    scale : Scale

    Returns
    -------
    Spacings

    Notes
    -----
    g in 1/nm is M^-T g_px, M the geometry. With n = g / |g| and t across it, u(d) = d^2 sqrt(n C n), u(direction) =
    sqrt(t C t) / |g|. A pixel size off by (e_row, e_column) changes d by n_row^2 e_row + n_col^2 e_col, relatively, and the
    direction by n_row n_col (e_row - e_col).
    """
    n = len(frequency)
    flipped = np.empty(n, np.bool_)
    g_px, g, full, values = np.empty((n, 2)), np.empty((n, 2)), np.empty((n, 2, 2)), np.empty((6, n))
    row, column = scale.uncertainty if scale.uncertainty is not None else (math.nan, math.nan)
    _fill_spacings(
        frequency, covariance, crystal_along, crystal_across, scale.to_per_nm, row, column, scale.common,
        flipped, g_px, g, full, values,
    )  # fmt: skip
    return Spacings(g_px, g, flipped, full, *values)


@numba.njit(cache=True, nogil=True)
def _fill_spacings(  # type: ignore[no-untyped-def]
    frequency, covariance, crystal_along, crystal_across, transform, row, column, common,
    flipped, g_px, g, full, values,
):  # fmt: skip
    for k in range(frequency.shape[0]):
        fy, fx = frequency[k]
        flipped[k] = fx < 0 or (fx == 0 and fy > 0)
        if flipped[k]:
            fy, fx = -fy, -fx
        g_px[k, 0], g_px[k, 1] = fy, fx
        for a in range(2):
            g[k, a] = fy * transform[0, a] + fx * transform[1, a]
            for b in range(2):
                full[k, a, b] = 0.0
                for i in range(2):
                    for j in range(2):
                        full[k, a, b] += transform[i, a] * covariance[k, i, j] * transform[j, b]
        length = np.hypot(g[k, 0], g[k, 1])
        y, x = g[k, 0] / length, g[k, 1] / length
        along = y * y * full[k, 0, 0] + 2 * y * x * full[k, 0, 1] + x * x * full[k, 1, 1]
        across = x * x * full[k, 0, 0] - 2 * y * x * full[k, 0, 1] + y * y * full[k, 1, 1]
        turned = np.sqrt(max(across, 0.0)) / length
        # a crystal part along g in pixels, relative to |g|, stays the same relative part
        relative = 1 / np.hypot(fy, fx)
        d = 1 / length
        twist = 0.0 if common else abs(y * x) * np.hypot(row, column)
        values[0, k] = d
        values[1, k] = d * d * np.sqrt(max(along, 0.0))
        values[2, k] = d * crystal_along[k] * relative
        values[3, k] = d * (row if common else np.hypot(y * y * row, x * x * column))
        direction = np.degrees(np.arctan2(-g[k, 0], g[k, 1])) % 180.0
        # the remainder of a tiny negative angle rounds up to 180
        values[4, k] = direction if direction < 180.0 else 0.0
        values[5, k] = np.degrees(np.sqrt(turned**2 + (crystal_across[k] * relative) ** 2 + twist**2))


def diagonal_blocks(covariance: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the covariance of each vector, shape (n, 2, 2), from that of all of them, shape (2n, 2n)."""
    n = len(covariance) // 2
    k = np.arange(n)
    return covariance.reshape(n, 2, n, 2)[k, :, k, :]


def pair_angles(
    spacings: Spacings, joint_covariance: NDArray[np.float64], scale: Scale, crystal_across: NDArray[np.float64]
) -> tuple[PairAngle, ...]:
    """Return the angle between every pair of vectors, with its standard uncertainty.

    Parameters
    ----------
    spacings : Spacings
    joint_covariance : ndarray, shape (2n, 2n)
        Fit part of all vectors together, (cycles per pixel)^2, in the sign that the vectors had before they were turned.
    scale : Scale
    crystal_across : ndarray, shape (n,)
        As in `spacings_of`.

    Notes
    -----
    The direction of each vector moves by t C t / |g|^2; neighbouring peaks share part of their errors, which the joint
    covariance holds. An isotropic error of the pixel size turns nothing, an anisotropic one turns both vectors by
    n_row n_col (e_row - e_col) each, so that only the difference counts.
    """
    n = len(spacings.d)
    if n < 2:
        return ()
    row, column = scale.uncertainty if scale.uncertainty is not None and not scale.common else (0.0, 0.0)
    angle, sigma = np.empty((n, n)), np.empty((n, n))
    _fill_angles(
        spacings.g, spacings.g_px, spacings.flipped, joint_covariance, crystal_across, scale.to_per_nm,
        np.hypot(row, column), angle, sigma,
    )  # fmt: skip
    angles, sigmas = angle.tolist(), sigma.tolist()
    return tuple(PairAngle((i, j), angles[i][j], sigmas[i][j]) for i in range(n) for j in range(i + 1, n))


@numba.njit(cache=True, nogil=True)
def _fill_angles(g, g_px, flipped, covariance, crystal_across, transform, anisotropy, angle, sigma):  # type: ignore[no-untyped-def]
    n = g.shape[0]
    # gradient of each direction, in rad, with respect to the vector in cycles per pixel
    gradient = np.empty((n, 2))
    unit = np.empty((n, 2))
    for k in range(n):
        length = np.hypot(g[k, 0], g[k, 1])
        unit[k, 0], unit[k, 1] = g[k, 0] / length, g[k, 1] / length
        sign = -1.0 if flipped[k] else 1.0
        for a in range(2):
            gradient[k, a] = (-unit[k, 1] * transform[a, 0] + unit[k, 0] * transform[a, 1]) * sign / length
    turning = np.zeros((n, n))
    for i in range(n):
        for j in range(n):
            for a in range(2):
                for b in range(2):
                    turning[i, j] += gradient[i, a] * covariance[2 * i + a, 2 * j + b] * gradient[j, b]
    for i in range(n):
        for j in range(i + 1, n):
            variance = turning[i, i] + turning[j, j] - 2 * turning[i, j]
            for k in (i, j):
                variance += (crystal_across[k] / np.hypot(g_px[k, 0], g_px[k, 1])) ** 2
            variance += ((unit[i, 0] * unit[i, 1] - unit[j, 0] * unit[j, 1]) * anisotropy) ** 2
            cosine = unit[i, 0] * unit[j, 0] + unit[i, 1] * unit[j, 1]
            cross = abs(unit[i, 0] * unit[j, 1] - unit[i, 1] * unit[j, 0])
            angle[i, j] = np.degrees(np.arctan2(cross, cosine))
            sigma[i, j] = np.degrees(np.sqrt(max(variance, 0.0)))
