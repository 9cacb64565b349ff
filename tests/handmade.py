"""Measurements and peaks whose every value is known, made without measuring."""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from fringespan.cautions import Caution
from fringespan.spacings import Peak
from fringespan.spectrum import PowerSpectrum

FEW_FRINGES = Caution("few-fringes", "warning", "Only 6 fringes lie in the region.", "Draw it larger.")


def handmade_peak(
    d_nm: float,
    direction_deg: float,
    /,
    *,
    pixel_size_nm: float = 0.02,
    stated_uncertainty: float | None = 0.015,
    **other,
) -> Peak:
    """Return the peak of fringes of this spacing and direction; the size of its uncertainties is made up."""
    direction = math.radians(direction_deg)
    g_per_nm = np.array([-math.sin(direction), math.cos(direction)]) / d_nm
    covariance = np.diag([1e-4, 2e-4]) / d_nm**2
    fit, crystal = d_nm * 1e-3, d_nm * 5e-4
    pixel_part = None if stated_uncertainty is None else d_nm * stated_uncertainty
    values = {
        "g_per_px": g_per_nm * pixel_size_nm,
        "g_covariance_per_px2": covariance * pixel_size_nm**2,
        "g_per_nm": g_per_nm,
        "g_covariance_per_nm2": covariance,
        "period_px": d_nm / pixel_size_nm,
        "d_nm": d_nm,
        "d_fit_uncertainty_nm": fit,
        "d_crystal_uncertainty_nm": crystal,
        "d_uncertainty_nm": None if pixel_part is None else math.hypot(fit, crystal, pixel_part),
        "d_lattice_nm": None,
        "d_lattice_uncertainty_nm": None,
        "direction_deg": direction_deg,
        "direction_uncertainty_deg": 0.06,
        "signal_to_noise": 23.4,
        "visibility": 0.21,
        "amplitude": 40.0,
        "phase_rad": 0.7,
        "phase_origin_px": (127.5, 127.5),
        "two_theta_mrad": 1.9687 / (1000 * d_nm) * 1000,
        "lattice_index": None,
        "combination_of": None,
        "origin": "found",
        "withheld": None,
        "cautions": (),
    }
    return Peak(**(values | other))


def handmade_spectrum() -> PowerSpectrum:
    """Return a spectrum of noise; what only the search for peaks needs of it is left empty."""
    empty = dict.fromkeys(field.name for field in dataclasses.fields(PowerSpectrum))
    power = np.random.default_rng(8).exponential(900, (256, 129)).astype(np.float32)
    return PowerSpectrum(**(empty | {"power": power, "shape": (256, 256)}))
