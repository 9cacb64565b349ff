"""What several test modules need: a measurement whose every value is known, without measuring."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable

import hypothesis
import numpy as np
import pytest

from fringespan.cautions import Caution
from fringespan.lattice import PlaneLattice
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak
from fringespan.spectrum import PowerSpectrum

# the same examples in every run, on however slow a machine
hypothesis.settings.register_profile("repeatable", derandomize=True, deadline=None)
hypothesis.settings.load_profile("repeatable")

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


@pytest.fixture
def make_peak() -> Callable[..., Peak]:
    return handmade_peak


@pytest.fixture
def make_measurement() -> Callable[..., Measurement]:
    """Return a maker of the measurement of gold along [110]: two {111} sets, 70.5 degrees apart, and 200."""

    def make(
        micrograph: Micrograph | None = None,
        region: Region | None = None,
        *,
        peaks: tuple[Peak, ...] | None = None,
        cautions: tuple[Caution, ...] = (FEW_FRINGES,),
        lattice: PlaneLattice | None = None,
        settings: MeasurementSettings | None = None,
    ) -> Measurement:
        if micrograph is None:
            pixels = np.random.default_rng(7).normal(1000, 30, (300, 280)).astype(np.float32)
            micrograph = Micrograph(
                pixels,
                pixel_size_nm=0.02,
                pixel_size_relative_uncertainty=0.015,
                voltage_kv=300.0,
                name="particle.tif",
            )
        if peaks is None:
            peaks = (
                handmade_peak(0.2355, 35.264, lattice_index=(1, 0)),
                handmade_peak(0.2355, 144.736, lattice_index=(0, 1)),
                handmade_peak(0.2039, 90.0, lattice_index=(1, 1), combination_of=(0, 1)),
            )
        angles = tuple(
            PairAngle((i, j), abs(peaks[i].direction_deg - peaks[j].direction_deg), 0.09)
            for i in range(len(peaks))
            for j in range(i + 1, len(peaks))
        )
        return Measurement(
            micrograph=micrograph,
            region=region or Region.rectangle("grain A", 20, 30, 275.5, 250),
            settings=settings or MeasurementSettings(),
            peaks=peaks,
            angles=angles,
            lattice=lattice,
            crystal_outline_px=np.array([[30.0, 40.0], [30.0, 240.0], [260.0, 240.0], [260.0, 40.0]]),
            crystal_extent_nm=(4.6, 4.0),
            spectrum=handmade_spectrum(),
            cautions=cautions,
        )

    return make


@pytest.fixture
def square_lattice() -> PlaneLattice:
    return PlaneLattice(
        reciprocal_per_px=np.eye(2) * 0.1,
        reciprocal_uncertainty_per_px=np.full((2, 2), 1e-5),
        reciprocal_per_nm=np.eye(2) * 5,
        reciprocal_uncertainty_per_nm=np.full((2, 2), 5e-4),
        real_px=np.eye(2) * 10,
        real_nm=np.eye(2) * 0.2,
        lengths_nm=(0.2, 0.2),
        length_uncertainties_nm=(2e-5, 2e-5),
        angle_deg=90.0,
        angle_uncertainty_deg=0.01,
        residual_rms=1.1,
        members=(0, 1),
    )
