"""A magnification check reads as a person would report it: the result, what was left out, the budget, what to do next."""

import dataclasses

import numpy as np
import pytest

from fringespan.crystal.library import load_phase
from fringespan.export.check_figure import check_figure
from fringespan.export.check_text import check_lines, internal_standard_lines, reflection_table, what_to_do
from fringespan.magnification.check import check_magnification
from fringespan.magnification.internal_standard import InternalStandard
from simulated_reference import crystal_peaks, geometry, measured_peak, picture, region_measurement

GOLD = load_phase("gold")


@pytest.fixture(scope="module")
def check():
    peaks, _ = crystal_peaks(
        np.random.default_rng(0), GOLD, (1, 1, 0), geometry(1.004, 1.013), rotation=0.4, reflections=8, noise=1e-4
    )
    peaks[2] = measured_peak(np.asarray(peaks[2].g_per_nm) * 1.005, np.asarray(peaks[2].g_covariance_per_nm2), 0.025)
    return check_magnification(region_measurement(picture(), peaks), GOLD, tolerance=0.02, temperature_c=22.0)


def text_of(lines):
    return " ".join(" ".join(line.text for line in lines).split())


@pytest.mark.parametrize("width", [60, 80, 100, 140])
def test_it_says_all_at_any_width(check, width):
    lines = check_lines(check, width)
    assert max(len(line.text) for line in lines) <= width
    text = text_of(lines)
    assert "Magnification check on Gold" in text
    row, column = (100 * (scale - 1) for scale in check.scale)
    assert [row, column] == pytest.approx([0.4, 1.3], abs=0.03)
    assert f"{row:+.2f} % +- 0.20 % and {column:+.2f} % +- 0.20 % off the nominal one (k = 2)" in text
    assert "Within the tolerance of 2 % (the value alone decides)" in text
    assert "lies off the fit of the others" in text
    assert "reference spacing" in text
    assert "specimen at 22 degrees Celsius" in text


def test_the_largest_contribution_is_named_with_what_reduces_it(check):
    assert "reference spacing" in what_to_do(check)
    assert "certified reference material" in what_to_do(check)
    shaky = dataclasses.replace(check.budgets[0].lines[0], standard_uncertainty=0.05)
    budgets = (dataclasses.replace(check.budgets[0], lines=(shaky, *check.budgets[0].lines[1:])), *check.budgets[1:])
    assert "larger regions" in what_to_do(dataclasses.replace(check, budgets=budgets))


def test_the_table_holds_every_peak(check):
    table = reflection_table(check)
    used = table.columns.index("used")
    assert [row[used] for row in table.rows].count("no") == 1
    assert len(table.rows) == len(check.reflections)


def test_what_was_left_out_is_drawn_as_a_cross(check):
    figure = check_figure(check)
    markers = [line.get_marker() for line in figure.axes[1].get_lines()]
    assert markers.count("x") == 1
    assert markers.count("o") == 7


def test_no_spacing_to_compare_is_said(check):
    text = text_of(internal_standard_lines(InternalStandard(check=check, mismatches=()), 80))
    assert "No spacing of the other regions lies near" in text
