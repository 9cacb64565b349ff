"""What is drawn of a measurement: fringes on the picture, the spectrum as an image, words."""

import numpy as np
import pytest

import fringespan as fs
from fringespan.viewer.fringe_lines import dashes, fringe_lines
from fringespan.viewer.line_angles import planes_to_line_deg
from fringespan.viewer.spectrum_image import spectrum_image
from fringespan.viewer.state import DrawnRegion, MeasuredRegion
from fringespan.viewer.wording import region_words, spacing, table_text, uncertainty_parts


@pytest.fixture
def measurement(micrograph):
    return fs.measure(micrograph, fs.Region.rectangle("square", 30, 20, 221, 229))


def test_fringe_lines_lie_on_the_bright_fringes_of_the_picture(measurement, micrograph):
    """The mean pixel on the lines against that half a period beside them, read from the picture itself."""
    pixels = np.asarray(micrograph.pixels)
    for peak in measurement.peaks[:2]:
        lines = fringe_lines(peak, measurement.region.vertices_px)
        on, beside = [], []
        half = peak.g_per_px * peak.period_px**2 / 2
        for start, end in lines:
            for share in np.linspace(0.1, 0.9, 40):
                point = start + share * (end - start)
                for place, values in ((point, on), (point + half, beside)):
                    row, column = np.round(place).astype(int)
                    if 0 <= row < 256 and 0 <= column < 256:
                        values.append(pixels[row, column])
        # 60 is the amplitude put in; rounding to whole pixels takes a little
        assert np.mean(on) - np.mean(beside) == pytest.approx(120, rel=0.15)


def test_fringe_lines_stay_inside_the_outline(measurement):
    corners = np.array([(60.0, 60.0), (60.0, 180.0), (180.0, 120.0)])
    lines = fringe_lines(measurement.peaks[0], corners)
    assert len(lines) > 5
    assert (lines[..., 0] >= 60 - 1e-9).all()
    assert (lines[..., 0] <= 180 + 1e-9).all()
    # the two slanted edges: |column - 120| shrinks from 60 to 0 over 120 rows
    assert (np.abs(lines[..., 1] - 120) <= (180 - lines[..., 0]) / 2 + 1e-9).all()


def test_dashes_cover_half_of_the_outline():
    outline = np.array([(0.0, 0.0), (0.0, 100.0), (50.0, 100.0), (50.0, 0.0)])
    ends = dashes(outline, 5)
    assert np.hypot(*(ends[:, 1] - ends[:, 0]).T).sum() == pytest.approx(150, rel=0.03)


@pytest.mark.parametrize("side", [120, 121, 700])
def test_the_brightest_point_of_the_spectrum_is_where_the_peak_is(side):
    row, column = np.indices((side, side))
    g = np.array([0.07, 0.11])
    pixels = 100 + 30 * np.cos(2 * np.pi * (g[0] * row + g[1] * column))
    pixels += np.random.default_rng(2).normal(0, 5, pixels.shape)
    image = spectrum_image(fs.measure(fs.Micrograph(pixels.astype(np.float32))).spectrum)
    assert max(image.values.shape) <= 512
    assert image.values == pytest.approx(image.values[::-1, ::-1], abs=1e-4) or side == 700
    place = np.array(np.unravel_index(np.argmax(image.values), image.values.shape))
    found = (place - image.middle) * image.step
    assert min(np.abs(found - g).max(), np.abs(found + g).max()) <= 0.75 * max(image.step)


def test_shades_span_black_to_white(measurement):
    shades = spectrum_image(measurement.spectrum).shades(0, 1)
    assert (shades.min(), shades.max()) == (0, 255)


@pytest.mark.parametrize(("unit", "factor"), [("nm", 1), ("angstrom", 10), ("pm", 1000)])
def test_spacings_are_told_in_the_chosen_unit(measurement, unit, factor):
    peak = measurement.peaks[0]
    number, uncertainty = spacing(peak, unit).rstrip(")").split("(")
    assert float(number) == pytest.approx(factor * peak.d_nm, abs=factor * peak.d_uncertainty_nm)
    decimals = len(number.partition(".")[2])
    stated = float(uncertainty) if "." in uncertainty else float(uncertainty) * 10**-decimals
    assert stated == pytest.approx(factor * peak.d_uncertainty_nm, rel=0.2)


def test_the_parts_of_an_uncertainty_make_the_whole(measurement):
    for peak in measurement.peaks:
        parts = uncertainty_parts(peak)
        assert parts.total_nm == pytest.approx(peak.d_uncertainty_nm)
        assert parts.pixel_size_nm == pytest.approx(0.01 * peak.d_nm, rel=1e-6)
        assert "magnification check" in parts.advice()


def test_without_a_pixel_size_everything_is_in_pixels(measurement, micrograph):
    bare = fs.measure(fs.Micrograph(micrograph.pixels), measurement.region)
    drawn = DrawnRegion(1, "square", measurement.region.vertices_px)
    region = MeasuredRegion(drawn, bare, None, tuple(range(len(bare.peaks))))
    assert float(spacing(bare.peaks[0], "pm").split("(")[0]) == pytest.approx(bare.peaks[0].period_px, rel=1e-3)
    assert uncertainty_parts(bare.peaks[0]) is None
    assert "px" in region_words(region, bare.micrograph)
    assert "d (px)" in table_text(region, "pm")


# fringes whose spacing points along `direction` run at right angles to it; the line from (0, 0) to (rows, columns)
LINES = [
    pytest.param(90.0, ((0, 0), (0, 50)), (0.02, 0.02), 0.0, id="level fringes, level line"),
    pytest.param(0.0, ((0, 0), (0, 50)), (0.02, 0.02), 90.0, id="upright fringes, level line"),
    pytest.param(0.0, ((0, 0), (50, 50)), (0.02, 0.02), 45.0, id="upright fringes, line down to the right"),
    pytest.param(60.0, ((0, 0), (-50, 50)), (0.02, 0.02), 75.0, id="fringes at 150, line at 45"),
    pytest.param(60.0, ((-50, 50), (0, 0)), (0.02, 0.02), 75.0, id="the other way round"),
    # a line at 45 degrees in pixels is one at atan(2) = 63.43 degrees where rows are twice as far apart
    pytest.param(90.0, ((0, 0), (-50, 50)), (0.04, 0.02), 63.435, id="pixels that are not square"),
]


@pytest.mark.parametrize(("direction", "line", "size", "angle"), LINES)
def test_angle_of_planes_to_a_line(make_peak, direction, line, size, angle):
    micrograph = fs.Micrograph(np.zeros((60, 60)), pixel_size_nm=size)
    peak = make_peak(0.2, direction)
    found, uncertainty = planes_to_line_deg(peak, line, micrograph)
    assert found == pytest.approx(angle, abs=1e-3)
    assert uncertainty == peak.direction_uncertainty_deg


def test_a_line_without_length_has_no_angle(make_peak):
    assert planes_to_line_deg(make_peak(0.2, 10), ((3, 3), (3, 3)), fs.Micrograph(np.zeros((60, 60)))) is None
