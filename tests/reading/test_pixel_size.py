from __future__ import annotations

import math
from pathlib import Path

import pytest

from fringespan.exceptions import UnreadablePictureError
from fringespan.reading.pixel_size import StatedPixelSize, believe

FILE = Path("picture.tif")


def test_rows_and_columns_stay_apart() -> None:
    believed = believe([StatedPixelSize(0.2, 0.21, "angstrom", "somewhere")], FILE)
    assert believed.nm == pytest.approx((0.02, 0.021))
    assert believed.source == "somewhere"
    assert believed.cautions == ()


def test_nothing_stated_is_said() -> None:
    believed = believe([], FILE)
    assert believed.nm is None
    (caution,) = believed.cautions
    assert caution.code == "pixel-size-not-stated"
    assert "pixels" in caution.text


@pytest.mark.parametrize(
    ("stated", "named"),
    [
        (StatedPixelSize(0, 0, "nm", "header"), "0 x 0 nm"),
        (StatedPixelSize(0.02, 0, "nm", "header"), "0.02 x 0 nm"),
        (StatedPixelSize(-0.02, 0.02, "nm", "header"), "-0.02 x 0.02 nm"),
        (StatedPixelSize(math.nan, 0.02, "nm", "header"), "nan x 0.02 nm"),
        (StatedPixelSize(math.inf, math.inf, "nm", "header"), "inf x inf nm"),
        (StatedPixelSize(1, 1, None, "header"), "1 x 1 without a unit"),
        (StatedPixelSize(1, 1, "pixel", "header"), "1 x 1 without a unit"),
        (StatedPixelSize(0.02, 0.02, None, "header"), "0.02 x 0.02 without a unit"),
        (StatedPixelSize(1 / 96, 1 / 96, "inch", "header"), "96 dots per inch, a screen or print setting"),
        (StatedPixelSize(1 / 37.8, 1 / 37.8, "cm", "header"), "2.646e+05 x 2.646e+05 nm, beyond 0.0001 to 1000 nm"),
        (StatedPixelSize(0.01, 0.01, "fm", "header"), "1e-08 x 1e-08 nm, beyond"),
        (StatedPixelSize(0.02, 0.02, "furlongish", "header"), "0.02 x 0.02 'furlongish', which is no unit of length"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_a_size_that_cannot_be_believed_counts_as_not_stated_and_is_named(stated: StatedPixelSize, named: str) -> None:
    believed = believe([stated], FILE)
    assert believed.nm is None
    (caution,) = believed.cautions
    assert caution.code == "pixel-size-not-believed"
    assert caution.gravity == "warning"
    assert f"header: {named}" in caution.text
    assert "nm" in caution.remedy


@pytest.mark.parametrize("size_nm", [1e-4, 1e3])
@pytest.mark.parametrize(("unit", "nm"), [("nm", 1), ("angstrom", 0.1), ("pm", 1e-3), ("um", 1e3), ("m", 1e9)])
def test_the_limits_themselves_are_believed(size_nm: float, unit: str, nm: float) -> None:
    believed = believe([StatedPixelSize(size_nm / nm, size_nm / nm, unit, "header")], FILE)
    assert believed.nm == pytest.approx((size_nm, size_nm))


def test_the_next_best_is_taken_where_the_first_is_unusable() -> None:
    stated = [StatedPixelSize(1, 1, None, "description"), StatedPixelSize(2e-9, 2e-9, "cm", "tags")]
    believed = believe(stated, FILE)
    assert believed.nm == pytest.approx((0.02, 0.02))
    assert believed.source == "tags"


def test_two_that_agree_need_no_word() -> None:
    stated = [StatedPixelSize(0.02, 0.02, "nm", "description"), StatedPixelSize(2.001e-9, 2e-9, "cm", "tags")]
    assert believe(stated, FILE).cautions == ()


def test_two_that_differ_are_both_named() -> None:
    stated = [StatedPixelSize(0.02, 0.02, "nm", "description"), StatedPixelSize(2e-9, 2.1e-9, "cm", "tags")]
    believed = believe(stated, FILE)
    assert believed.nm == (0.02, 0.02)
    (caution,) = believed.cautions
    assert caution.code == "pixel-size-contradicted"
    assert "description: 0.02 x 0.02 nm" in caution.text
    assert "tags: 0.02 x 0.021 nm" in caution.text


@pytest.mark.parametrize("unit", ["1/nm", "nm^-1", "1/A", "mrad"])
def test_a_diffraction_pattern_is_refused_with_its_reason(unit: str) -> None:
    stated = [StatedPixelSize(0.02, 0.02, "nm", "tags"), StatedPixelSize(0.02, 0.02, unit, "description")]
    with pytest.raises(UnreadablePictureError, match=r"^picture\.tif: calibrated in .* so it is a diffraction pattern"):
        believe(stated, FILE)
