"""One geometry from many regions and pictures, with what they scatter by beyond their own uncertainties."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fringespan.magnification.budget import effective_degrees_of_freedom, excess_variance
from fringespan.magnification.geometry import GeometryFit

__all__ = ["Combined", "Estimate", "combine"]


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Estimate:
    """The geometry from one region, or from several grains that determine it only together.

    Attributes
    ----------
    picture : int
    name : str
    fit : GeometryFit
    """

    picture: int
    name: str
    fit: GeometryFit


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Combined:
    """The mean of estimates, with the parts of its uncertainty; all arrays have one entry a value of the geometry.

    Attributes
    ----------
    values : ndarray
    fit, crystal : ndarray
        Standard uncertainties by the fits and by what one picture cannot show of a crystal.
    fit_degrees_of_freedom : ndarray
    between_regions, between_pictures : ndarray
        Standard uncertainties by what regions of a picture, and pictures, scatter by beyond that; 0 where they don't.
    region_degrees_of_freedom, picture_degrees_of_freedom : float
        0: there was nothing to compare.
    """

    values: NDArray[np.float64]
    fit: NDArray[np.float64]
    crystal: NDArray[np.float64]
    fit_degrees_of_freedom: NDArray[np.float64]
    between_regions: NDArray[np.float64]
    between_pictures: NDArray[np.float64]
    region_degrees_of_freedom: float
    picture_degrees_of_freedom: float


def combine(estimates: Sequence[Estimate]) -> Combined:
    """Return the weighted mean over regions, then over pictures.

    Weights are the inverse of each one's own variance plus that of the scatter beyond it, which is estimated by the
    method of moments; so no region and no picture rules because its fringes happen to be sharp.
    """
    pictures = sorted({e.picture for e in estimates})
    members = [[i for i, e in enumerate(estimates) if e.picture == p] for p in pictures]
    values = np.array([e.fit.values for e in estimates])
    own = np.array([np.diag(e.fit.covariance) for e in estimates])
    number = values.shape[1]
    mean = np.zeros(number)
    weights = np.zeros_like(values)
    regions, between = np.zeros(number), np.zeros(number)
    region_freedom = picture_freedom = 0.0
    for c in range(number):
        tau_region, region_freedom = excess_variance([values[m, c] for m in members], [own[m, c] for m in members])
        means, variances, shares = [], [], []
        for m in members:
            w = 1 / (own[m, c] + tau_region)
            shares.append(w / w.sum())
            means.append(float(shares[-1] @ values[m, c]))
            variances.append(float(1 / w.sum()))
        tau_picture, picture_freedom = excess_variance([means], [variances])
        w = 1 / (np.array(variances) + tau_picture)
        w /= w.sum()
        mean[c] = float(w @ means)
        for m, share, weight in zip(members, shares, w, strict=True):
            weights[m, c] = weight * share
        regions[c] = math.sqrt(tau_region * float((weights[:, c] ** 2).sum()))
        between[c] = math.sqrt(tau_picture * float((w**2).sum()))
    fit = np.array([[e.fit.fit_covariance[c, c] for c in range(number)] for e in estimates])
    crystal = np.array([[max(e.fit.crystal_covariance[c, c], 0.0) for c in range(number)] for e in estimates])
    freedom = np.array(
        [
            effective_degrees_of_freedom(
                (weights[:, c] * np.sqrt(fit[:, c])).tolist(), [e.fit.degrees_of_freedom for e in estimates]
            )
            for c in range(number)
        ]
    )
    return Combined(
        values=mean,
        fit=np.sqrt((weights**2 * fit).sum(axis=0)),
        crystal=np.sqrt((weights**2 * crystal).sum(axis=0)),
        fit_degrees_of_freedom=freedom,
        between_regions=regions,
        between_pictures=between,
        region_degrees_of_freedom=region_freedom,
        picture_degrees_of_freedom=picture_freedom,
    )
