"""The picture: what is accepted as pixels and calibration, how pixels lie in the specimen, and what is refused."""

import hashlib
import math
from dataclasses import FrozenInstanceError, replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.exceptions import CalibrationError, FringespanError, UnreadablePictureError
from fringespan.micrograph import Micrograph

PIXELS = np.arange(12.0).reshape(3, 4)


# --- pixels ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "pixels",
    [
        pytest.param([[1, 2], [3, 4]], id="nested lists"),
        pytest.param(np.ones((2, 2), np.float16), id="half precision"),
        pytest.param(np.ones((2, 2), ">i2"), id="big-endian"),
        pytest.param(np.ones((2, 2), np.uint64), id="64-bit counts"),
    ],
)
def test_two_dimensional_real_numbers_are_pixels(pixels):
    assert Micrograph(pixels).shape == (2, 2)


@pytest.mark.parametrize(
    ("pixels", "problem"),
    [
        pytest.param(np.ones(5), r"got shape \(5,\)", id="a line"),
        pytest.param(np.ones((2, 3, 4)), r"got shape \(2, 3, 4\); choose one frame", id="a stack"),
        pytest.param(np.ones((0, 4)), r"got shape \(0, 4\)", id="no rows"),
        pytest.param(3.0, r"got shape \(\)", id="a number"),
        pytest.param(None, "picture|numbers", id="nothing"),
        pytest.param([[1, 2], [3]], "rectangular", id="ragged"),
        pytest.param(np.ones((2, 2), bool), "got bool", id="true and false"),
        pytest.param(np.ones((2, 2), complex), "got complex128; a complex picture needs its modulus", id="complex"),
        pytest.param(np.array([["a", "b"]]), "real numbers", id="text"),
        pytest.param(np.ones((2, 2), "datetime64[s]"), "real numbers", id="dates"),
        pytest.param(np.ones((2, 2), object), "real numbers", id="objects"),
    ],
)
def test_anything_else_is_no_picture(pixels, problem):
    with pytest.raises(UnreadablePictureError, match=problem):
        Micrograph(pixels)


class Frame:
    """A picture on a disk: says which parts of it were read."""

    shape = (4000, 3000)
    dtype = np.dtype(np.uint16)

    def __init__(self):
        self.read = []

    def __getitem__(self, key):
        self.read.append(key)
        rows, columns = key
        return np.zeros((rows.stop - rows.start, columns.stop - columns.start), self.dtype)


def test_a_picture_on_disk_is_read_only_where_it_is_cropped():
    frame = Frame()
    micrograph = Micrograph(frame)
    assert micrograph.shape == (4000, 3000)
    assert frame.read == []
    assert micrograph.crop(slice(10, 30), slice(5, 45)).shape == (20, 40)
    assert frame.read == [(slice(10, 30), slice(5, 45))]


# --- calibration -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("given_size", "stored"),
    [
        pytest.param(0.02, (0.02, 0.02), id="square"),
        pytest.param((0.02, 0.03), (0.02, 0.03), id="row and column"),
        pytest.param(np.array([0.02, 0.03]), (0.02, 0.03), id="array"),
        pytest.param(np.float32(0.5), (0.5, 0.5), id="numpy number"),
        pytest.param(1, (1.0, 1.0), id="whole number"),
        pytest.param(None, None, id="not known"),
    ],
)
def test_a_pixel_size_is_a_row_and_column_pair(given_size, stored):
    assert Micrograph(PIXELS, pixel_size_nm=given_size).pixel_size_nm == stored


@pytest.mark.parametrize(
    ("given_uncertainty", "stored"),
    [
        pytest.param(0.01, 0.01, id="one error for both axes"),
        pytest.param((0.01, 0.01), (0.01, 0.01), id="two independent errors of one size"),
        pytest.param([0.01, 0.02], (0.01, 0.02), id="two errors"),
        pytest.param(0, 0.0, id="exact"),
        pytest.param(None, None, id="not stated"),
    ],
)
def test_one_uncertainty_and_a_pair_mean_different_things(given_uncertainty, stored):
    micrograph = Micrograph(PIXELS, pixel_size_nm=0.02, pixel_size_relative_uncertainty=given_uncertainty)
    assert micrograph.pixel_size_relative_uncertainty == stored
    assert type(micrograph.pixel_size_relative_uncertainty) is type(stored)


REFUSED = [
    pytest.param("pixel_size_nm", 0, id="pixel size zero"),
    pytest.param("pixel_size_nm", -0.02, id="pixel size negative"),
    pytest.param("pixel_size_nm", (0.02, 0), id="one of two zero"),
    pytest.param("pixel_size_nm", math.nan, id="pixel size not a number"),
    pytest.param("pixel_size_nm", math.inf, id="pixel size infinite"),
    pytest.param("pixel_size_nm", 9e-5, id="pixel smaller than any lens shows"),
    pytest.param("pixel_size_nm", 1001, id="pixel larger than any lattice"),
    pytest.param("pixel_size_nm", (0.02, 0.02, 0.02), id="three pixel sizes"),
    pytest.param("pixel_size_nm", (), id="no pixel sizes"),
    pytest.param("pixel_size_nm", "small", id="a word for a pixel size"),
    pytest.param("pixel_size_nm", 0.02 + 1j, id="complex pixel size"),
    pytest.param("pixel_size_relative_uncertainty", 1.0, id="one hundred per cent"),
    pytest.param("pixel_size_relative_uncertainty", -0.01, id="negative uncertainty"),
    pytest.param("pixel_size_relative_uncertainty", math.nan, id="uncertainty not a number"),
    pytest.param("pixel_size_relative_uncertainty", (0.01, 2.0), id="per cent for a fraction"),
    pytest.param("shear", 1.0, id="sheared beyond sense"),
    pytest.param("shear", math.nan, id="shear not a number"),
    pytest.param("shear", None, id="shear left empty"),
    pytest.param("voltage_kv", 0.5, id="too few kilovolts"),
    pytest.param("voltage_kv", 300_000, id="volts for kilovolts"),
    pytest.param("voltage_kv", math.nan, id="voltage not a number"),
    pytest.param("voltage_kv", "300 kV", id="voltage with its unit"),
    pytest.param("cs_mm", 1200, id="micrometres for millimetres"),
    pytest.param("cs_mm", math.inf, id="infinite spherical aberration"),
    pytest.param("defocus_nm", 2e5, id="defocus of a fraction of a millimetre"),
    pytest.param("defocus_nm", math.nan, id="defocus not a number"),
    pytest.param("dark_level", math.inf, id="infinite dark level"),
]


@pytest.mark.parametrize(("name", "value"), REFUSED)
def test_an_impossible_value_is_refused_by_name(name, value):
    with pytest.raises(CalibrationError, match=name) as refusal:
        Micrograph(PIXELS, **{name: value})
    assert isinstance(refusal.value, FringespanError)


def test_where_the_pixel_size_came_from_is_always_said():
    assert Micrograph(PIXELS).pixel_size_source == "not stated"
    assert Micrograph(PIXELS, pixel_size_nm=0.02).pixel_size_source == "given by the user"
    assert Micrograph(PIXELS, pixel_size_nm=0.02, pixel_size_source="file").pixel_size_source == "file"


def test_a_picture_is_immutable_and_checked_again_when_replaced():
    micrograph = Micrograph(PIXELS, pixel_size_nm=0.02)
    with pytest.raises(FrozenInstanceError):
        micrograph.voltage_kv = 300.0
    assert replace(micrograph, voltage_kv=300).voltage_kv == 300.0
    with pytest.raises(CalibrationError):
        replace(micrograph, pixel_size_nm=-1)


def test_all_but_the_pixels_is_given_by_name():
    with pytest.raises(TypeError):
        Micrograph(PIXELS, 0.02)


# --- geometry --------------------------------------------------------------------------------------------------------


def test_geometry_is_none_without_a_pixel_size():
    assert Micrograph(PIXELS).geometry_nm_per_px is None


@given(
    row_nm=st.floats(1e-3, 1.0), column_nm=st.floats(1e-3, 1.0), shear=st.floats(-0.9, 0.9),
    row=st.floats(-100, 100), column=st.floats(-100, 100),
)  # fmt: skip
def test_one_row_further_is_along_y_and_sheared_along_x(row_nm, column_nm, shear, row, column):
    geometry = Micrograph(PIXELS, pixel_size_nm=(row_nm, column_nm), shear=shear).geometry_nm_per_px
    y, x = geometry @ (row, column)
    assert y == pytest.approx(row * row_nm)
    assert x == pytest.approx((column + shear * row) * column_nm, abs=1e-9)


# --- checksum --------------------------------------------------------------------------------------------------------


def test_the_checksum_of_pixels_does_not_depend_on_how_they_lie_in_memory():
    pixels = np.random.default_rng(1).integers(0, 60000, (30, 40), dtype=np.uint16)
    expected = hashlib.sha256(pixels.astype("<u2").tobytes()).hexdigest()
    for stored in (pixels, pixels.astype(">u2"), np.asfortranarray(pixels), np.pad(pixels, 3)[3:-3, 3:-3]):
        assert Micrograph(stored).sha256() == expected
    other = pixels.copy()
    other[3, 4] ^= 1
    assert Micrograph(other).sha256() != expected


def test_the_checksum_of_a_file_is_that_of_its_bytes(tmp_path):
    path = tmp_path / "particle.dat"
    path.write_bytes(b"some bytes")
    assert Micrograph(PIXELS, path=path).sha256() == hashlib.sha256(b"some bytes").hexdigest()
