"""Spacings and angles: the values a measurement returns for each set of fringes and each pair of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution

__all__ = ["PairAngle", "Peak", "PeakOrigin"]

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


def peaks_from_waves(micrograph, placed, fit):
    inv = np.eye(2) if micrograph.geometry_nm_per_px is None else np.linalg.inv(micrograph.geometry_nm_per_px).T
    out = []
    order = np.argsort(-fit.power_ratio)
    for k in order:
        f = fit.frequency[k]
        cov = fit.covariance[2 * k : 2 * k + 2, 2 * k : 2 * k + 2]
        if f[1] < 0 or (f[1] == 0 and f[0] > 0):
            f = -f
        g = inv @ f
        c = inv @ cov @ inv.T
        norm = np.hypot(*g)
        n = g / norm
        t = np.array([-n[1], n[0]])
        d = 1 / norm
        fitu = d * d * np.sqrt(n @ c @ n)
        out.append(Peak(g_per_px=f, g_covariance_per_px2=cov, g_per_nm=g, g_covariance_per_nm2=c, period_px=1 / np.hypot(*f), d_nm=d, d_fit_uncertainty_nm=fitu,
            d_crystal_uncertainty_nm=0., d_uncertainty_nm=None, d_lattice_nm=None, d_lattice_uncertainty_nm=None, direction_deg=np.degrees(np.arctan2(-g[0], g[1])) % 180,
            direction_uncertainty_deg=np.degrees(np.sqrt(t @ c @ t) / norm), signal_to_noise=np.sqrt(fit.power_ratio[k]), visibility=None, amplitude=2 * abs(fit.amplitude[k]),
            phase_rad=0., phase_origin_px=(0., 0.), two_theta_mrad=None, lattice_index=None, combination_of=None, origin="found", withheld=None, cautions=()))
    return tuple(out)


def pair_angles(micrograph, peaks):
    return ()
