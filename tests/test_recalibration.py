"""Telling a measurement in other units gives what measuring again would give."""

import dataclasses

import numpy as np
import pytest

import fringespan as fs
from fringespan.exceptions import RegionError
from fringespan.measurement import recalibrated
from fringespan.sample_pictures import sample_file


@pytest.fixture(scope="module")
def gold() -> fs.Measurement:
    file = fs.read(sample_file("two_grains.ome.tif"))
    micrograph = dataclasses.replace(file, pixels=np.asarray(file.pixels[:, :]), path=None)
    return fs.measure(micrograph, fs.read_regions(sample_file("two_grains.json"))[0])


def numbers(measurement: fs.Measurement) -> list[list[float | None]]:
    fields = [
        "d_nm",
        "d_fit_uncertainty_nm",
        "d_crystal_uncertainty_nm",
        "d_uncertainty_nm",
        "d_lattice_nm",
        "d_lattice_uncertainty_nm",
        "direction_deg",
        "direction_uncertainty_deg",
        "two_theta_mrad",
    ]
    return [[getattr(peak, field) for field in fields] for peak in measurement.peaks]


@pytest.mark.parametrize(
    "changes",
    [
        pytest.param({"pixel_size_nm": 0.021}, id="another pixel size"),
        pytest.param({"pixel_size_nm": None}, id="no pixel size"),
        pytest.param({"pixel_size_nm": (0.03, 0.0303)}, id="pixels of another shape"),
        pytest.param({"pixel_size_relative_uncertainty": 0.01}, id="its uncertainty"),
        pytest.param({"pixel_size_relative_uncertainty": (0.01, 0.02)}, id="two uncertainties"),
        pytest.param({"voltage_kv": 200.0}, id="the voltage"),
        pytest.param({"voltage_kv": 300.0, "cs_mm": 0.005, "defocus_nm": 9.0}, id="the lens"),
    ],
)
def test_other_units_give_what_measuring_again_gives(gold, changes):
    micrograph = dataclasses.replace(gold.micrograph, **changes)
    told, measured = recalibrated(gold, micrograph), fs.measure(micrograph, gold.region)
    for one, other in zip(numbers(told), numbers(measured), strict=True):
        assert [v is None for v in one] == [v is None for v in other]
        assert [v for v in one if v is not None] == pytest.approx([v for v in other if v is not None], rel=1e-5)
    assert told.crystal_extent_nm == (
        None if measured.crystal_extent_nm is None else pytest.approx(measured.crystal_extent_nm)
    )
    assert [c.code for c in told.cautions] == [c.code for c in measured.cautions]
    assert told.spectrum is gold.spectrum


def test_other_pixels_are_refused(gold):
    other = dataclasses.replace(gold.micrograph, pixels=np.array(gold.micrograph.pixels))
    with pytest.raises(RegionError, match="measure it again"):
        recalibrated(gold, other)
