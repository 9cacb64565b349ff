"""What several test modules need."""

from __future__ import annotations

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
from handmade import FEW_FRINGES, handmade_peak, handmade_spectrum

# the same examples in every run, on however slow a machine
hypothesis.settings.register_profile("repeatable", derandomize=True, deadline=None)
hypothesis.settings.load_profile("repeatable")


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
