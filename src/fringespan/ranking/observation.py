"""What a ranking starts from: reciprocal vectors with their covariances, measured or typed in."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import CalibrationError, SettingsError
from fringespan.measurement import Measurement

__all__ = ["Observation", "ObservedReflection", "Role", "observation_of"]

Role = Literal["reflection", "combination", "uncertain"]
_ROLES = ("reflection", "combination", "uncertain")

_CRYSTAL_ACROSS = 0.3
"""An uneven crystal shifts a spacing's direction by this part of what it shifts its length by."""

_OTHER_CRYSTAL = "another-crystal-in-region"
"""Code of the caution by which a measurement says so."""

_LEAST_RELATIVE_SIGMA = 1e-6
_MOST_RELATIVE_SIGMA = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class ObservedReflection:
    """One reciprocal vector.

    Parameters
    ----------
    g_per_nm : (float, float)
        (row, column), without 2 pi; its sign does not matter.
    covariance_per_nm2 : ((float, float), (float, float))
        What the picture and the crystal leave uncertain; the pixel size's part, common to all, stays out of it.
    signal_to_noise : float, optional
        Strength, in the same unit for all reflections of a region; weak ones weigh little.
    role : {"reflection", "combination", "uncertain"}, optional
        "combination": it may be a sum, difference or harmonic of others, and is no evidence of its own for the lattice;
        "uncertain": its position is not to be trusted. Both are given indices all the same.

    Raises
    ------
    SettingsError
        If the vector is zero or not finite, the covariance is none, the strength negative, or the role unknown.
    """

    g_per_nm: tuple[float, float]
    covariance_per_nm2: tuple[tuple[float, float], tuple[float, float]]
    signal_to_noise: float = 1.0
    role: Role = "reflection"

    def __post_init__(self) -> None:
        length = math.hypot(*self.g_per_nm)
        if not (math.isfinite(length) and length > 0):
            raise SettingsError(f"g_per_nm must be finite and not zero, got {self.g_per_nm}")
        if self.role not in _ROLES:
            raise SettingsError(f"role must be one of {', '.join(_ROLES)}, got {self.role!r}")
        if not (math.isfinite(self.signal_to_noise) and self.signal_to_noise >= 0):
            raise SettingsError(f"signal_to_noise must be finite and at least 0, got {self.signal_to_noise!r}")
        covariance = np.asarray(self.covariance_per_nm2, dtype=np.float64)
        if covariance.shape != (2, 2) or not np.all(np.isfinite(covariance)):
            raise SettingsError(f"covariance_per_nm2 must be a finite 2 x 2 matrix, got {self.covariance_per_nm2!r}")
        if abs(covariance[0, 1] - covariance[1, 0]) > 1e-9 * abs(np.trace(covariance)):
            raise SettingsError(f"covariance_per_nm2 must be symmetric, got {self.covariance_per_nm2!r}")
        if np.linalg.eigvalsh(covariance)[0] < -1e-12 * abs(np.trace(covariance)):
            raise SettingsError(
                f"covariance_per_nm2 must not have a negative variance, got {self.covariance_per_nm2!r}"
            )


@dataclass(frozen=True, kw_only=True)
class Observation:
    """The reflections of one crystal in one picture.

    Parameters
    ----------
    reflections : tuple of ObservedReflection
    pixel_size_relative_uncertainty : float or (float, float), optional
        Standard uncertainty of the scale common to all, as a fraction; a pair for independent errors along (row,
        column). None: not stated.
    directions_known : bool, optional
        False: only lengths were given, and the directions in `reflections` mean nothing.
    band_limit_per_nm : float, optional
        Length of g up to which reflections would have been seen, where it is known: then also those count as not seen
        that lie beyond the longest one observed.
    holds_other_crystal : bool, optional
        Whether the region showed fringes of another crystal too, which are not among the reflections.
    name : str, optional
        What to call it.
    """

    reflections: tuple[ObservedReflection, ...]
    pixel_size_relative_uncertainty: float | tuple[float, float] | None = None
    directions_known: bool = True
    band_limit_per_nm: float | None = None
    holds_other_crystal: bool = False
    name: str = "region"

    def __post_init__(self) -> None:
        uncertainty = self.pixel_size_relative_uncertainty
        if uncertainty is not None:
            values = np.atleast_1d(np.asarray(uncertainty, dtype=np.float64))
            if values.size not in (1, 2) or not np.all((values >= 0) & (values < 1)):
                raise SettingsError(
                    "pixel_size_relative_uncertainty must be a fraction from 0 up to 1 (0.01 is 1 per cent), or a "
                    f"(row, column) pair of them, got {uncertainty!r}"
                )

        limit = self.band_limit_per_nm
        if limit is not None and not (math.isfinite(limit) and limit > 0):
            raise SettingsError(f"band_limit_per_nm must be greater than 0, got {limit!r}; leave it out if not known")

    def vectors(self) -> NDArray[np.complex128]:
        """Return the reciprocal vectors as x + i y, y upwards, shape (n,)."""
        return np.array([complex(r.g_per_nm[1], -r.g_per_nm[0]) for r in self.reflections], dtype=np.complex128)

    def covariances(self) -> NDArray[np.float64]:
        """Return (xx, xy, yy) of each, shape (n, 3), kept away from 0 and from the length of the vector itself."""
        rows = []
        for reflection in self.reflections:
            (rr, rc), (_, cc) = reflection.covariance_per_nm2
            square = reflection.g_per_nm[0] ** 2 + reflection.g_per_nm[1] ** 2
            least, most = _LEAST_RELATIVE_SIGMA**2 * square, _MOST_RELATIVE_SIGMA**2 * square
            rows.append(
                (min(max(cc, 0.0) + least, most), -rc if max(rr, cc) < most else 0.0, min(max(rr, 0.0) + least, most))
            )
        return np.array(rows, dtype=np.float64).reshape(-1, 3)


def observation_of(measurement: Measurement) -> Observation:
    """Return what a measurement gives a ranking to start from.

    Harmonics and sums of other peaks, and peaks whose spacing is withheld, are marked as no evidence of their own. The
    covariance is that of the fit, with the part of an uneven crystal added along g and three tenths of it across.

    Raises
    ------
    CalibrationError
        If the picture has no pixel size.
    """
    micrograph = measurement.micrograph
    if micrograph.pixel_size_nm is None:
        raise CalibrationError(
            "phases can only be compared with spacings in nm, and the picture has no pixel size; state it, or "
            "calibrate on a reference material"
        )
    reflections = []
    for peak in measurement.peaks:
        g, covariance = peak.g_per_nm, peak.g_covariance_per_nm2
        if g is None or covariance is None:
            raise CalibrationError("a peak has no g in 1/nm although the picture has a pixel size; measure it again")
        length = float(np.hypot(*g))
        along = np.asarray(g) / length
        across = np.array([-along[1], along[0]])
        crystal = (peak.d_crystal_uncertainty_nm or 0.0) * length**2
        total = covariance + crystal**2 * (np.outer(along, along) + _CRYSTAL_ACROSS**2 * np.outer(across, across))
        reflections.append(
            ObservedReflection(
                g_per_nm=(float(g[0]), float(g[1])),
                covariance_per_nm2=_matrix(total),
                signal_to_noise=float(peak.signal_to_noise),
                role="uncertain" if peak.withheld else "combination" if peak.combination_of else "reflection",
            )
        )
    return Observation(
        reflections=tuple(reflections),
        pixel_size_relative_uncertainty=micrograph.pixel_size_relative_uncertainty,
        holds_other_crystal=any(caution.code == _OTHER_CRYSTAL for caution in measurement.cautions),
        name=measurement.region.name,
    )


def _matrix(values: Sequence[Sequence[float]] | NDArray[np.float64]) -> tuple[tuple[float, float], tuple[float, float]]:
    (a, b), (_, d) = np.asarray(values, dtype=np.float64).tolist()
    return (a, b), (b, d)
