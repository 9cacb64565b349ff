"""Single rules of judgement on plain values."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.judgement.peaks import beyond_point_resolution, few_fringes, fringe_counts, is_on_block_grid
from fringespan.judgement.pixel_signs import pixel_cautions, replaced_pixel_cautions
from fringespan.judgement.regions import (
    another_crystal,
    are_all_parallel,
    crystal_part_rules,
    crystal_smaller_than_region,
    scale_cautions,
)
from fringespan.region import Footprint, rectangle_footprint


@given(st.floats(0, 180, exclude_max=True), st.lists(st.floats(-0.9, 0.9), min_size=1, max_size=6))
def test_directions_within_a_degree_are_parallel_across_the_end_of_the_scale_too(first, offsets):
    directions = [first, *((first + offset) % 180 for offset in offsets)]
    assert are_all_parallel(directions, [0.0] * len(directions))


@given(st.floats(0, 180, exclude_max=True), st.floats(5, 175))
def test_crossed_directions_are_not_parallel(first, angle):
    assert not are_all_parallel([first, (first + angle) % 180], [0.5, 0.5])


def test_directions_count_as_parallel_within_their_uncertainty():
    assert are_all_parallel([10, 16], [2, 0.5])
    assert not are_all_parallel([10, 16], [0.2, 0.5])


@pytest.mark.parametrize(
    ("frequency", "tolerance", "expected"),
    [(0.125, 1e-3, True), (-0.375, 1e-3, True), (0.0, 1e-3, True), (0.127, 1e-3, False), (0.127, 3e-3, True)],
)
def test_jpeg_blocks_are_eight_pixels_wide(frequency, tolerance, expected):
    assert is_on_block_grid(frequency, tolerance) is expected


def test_fringes_are_counted_across_the_outline_along_their_normal():
    square = np.array([(0, 0), (0, 100), (50, 100), (50, 0)], float)
    assert fringe_counts(square, np.array([(0.1, 0), (0, 0.1), (0.06, 0.08)])) == pytest.approx([5, 10, 11])


def test_the_number_of_fringes_is_the_resolution():
    # d / N: common practice, no source
    assert "Only 5 fringes" in few_fringes(5).text
    assert "20 %" in few_fringes(5).text


def test_cautions_of_equal_content_are_one():
    assert beyond_point_resolution(0.23) == beyond_point_resolution(0.23)
    assert crystal_smaller_than_region(0.41) == crystal_smaller_than_region(0.41)


def test_another_crystal_is_named_by_its_spacings():
    frequency = np.array([(0.0, 0.1), (0.05, 0.0), (0.2, 0.0), (0.0, 0.25), (0.3, 0.0)])
    assert "(0.4, 0.2, 0.1, 0.08 nm and 1 more)" in another_crystal(frequency, np.diag([0.02, 0.02])).text
    assert "(20, 10 px)" in another_crystal(frequency[:2], None).text


def test_where_the_crystal_rules_a_series_is_advised_and_if_the_lens_is_known_a_defocus():
    # Cs lambda^2 / d^2 with 1 mm, 2.5079 pm, 0.2355 nm: 113.4 nm
    assert "113 nm underfocus" in crystal_part_rules(200, 1.0, 0.2355).remedy
    assert "focal series" in crystal_part_rules(None, None, 0.2355).remedy
    assert "underfocus" not in crystal_part_rules(None, None, 0.2355).remedy
    # with Cs = 0 that defocus is 0, where contrast vanishes: d^2 / (6 lambda) brings half of it back
    assert "3.39 nm underfocus" in crystal_part_rules(300, 0.0, 0.2).remedy


@pytest.mark.parametrize(
    ("size", "uncertainty", "said", "scanned", "codes"),
    [
        (None, None, [], False, ["pixel-size-not-stated"]),
        (None, None, ["pixel-size-not-believed"], False, []),
        ((0.02, 0.02), None, [], False, ["pixel-size-uncertainty-not-stated"]),
        ((0.02, 0.02), 0.01, [], False, []),
        ((0.02, 0.021), 0.01, [], False, ["rows-and-columns-may-differ"]),
        ((0.02, 0.02), 0.01, [], True, ["rows-and-columns-may-differ"]),
        ((0.02, 0.021), (0.01, 0.02), [], True, []),
    ],
)
def test_what_is_said_of_the_pixel_size(size, uncertainty, said, scanned, codes):
    assert [c.code for c in scale_cautions(size, uncertainty, said, scanned)] == codes


@pytest.mark.parametrize(
    ("defects", "saturated", "codes"),
    [
        (0, 0, []),
        (3, 0, ["defective-pixels"]),
        (0, 1, ["saturated-pixels"]),
        (2, 90, ["saturated-pixels", "defective-pixels"]),
    ],
)
def test_pixels_left_out_are_counted(defects, saturated, codes):
    cautions = replaced_pixel_cautions(defects, saturated, 10_000)
    assert [c.code for c in cautions] == codes
    if saturated == 90:
        assert cautions[0].text.startswith("90 pixels (0.9 %) are")
    if saturated == 1:
        assert cautions[0].text.startswith("One pixel is")


def test_a_flat_border_outside_the_outline_does_not_count():
    values = np.random.default_rng(1).normal(100, 5, (200, 200))
    values[:60] = 0
    mask = np.zeros((200, 200), bool)
    mask[70:, :] = True
    inside, everywhere = Footprint.from_mask(mask), rectangle_footprint((200, 200))
    assert [c.code for c in pixel_cautions(values, everywhere)] == ["label-in-region"]
    assert pixel_cautions(values, inside) == ()


@pytest.mark.parametrize("mean", [0.05, 0.5, 2.0, 10.0])
@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.float32])
def test_counted_electrons_are_no_label_and_no_enlargement(mean, dtype):
    for seed in range(20):
        counts = np.random.default_rng(seed).poisson(mean, (256, 300)).astype(dtype)
        assert pixel_cautions(counts, rectangle_footprint(counts.shape)) == ()
