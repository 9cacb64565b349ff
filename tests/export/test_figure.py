"""Figures: readable in print, text as text, fonts inside, written whole."""

import dataclasses
import re
import xml.etree.ElementTree as ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.exceptions import RecordError, SettingsError
from fringespan.export.figure import SMALL_TYPE_PT, draw_picture, figure_bytes, new_figure, round_length, write_figure
from fringespan.export.measurement_figure import measurement_figure
from fringespan.micrograph import Micrograph
from fringespan.region import Region


def svg_texts(figure):
    root = ElementTree.fromstring(figure_bytes(figure, "svg"))
    return ["".join(element.itertext()) for element in root.iter("{http://www.w3.org/2000/svg}text")]


def drawn(micrograph):
    figure = new_figure(80, 80)
    draw_picture(figure.subplots(), micrograph)
    return figure


class ReadInPieces:
    """Pixels that are never handed out in one piece, as those of a large file."""

    dtype = np.dtype(np.float32)

    def __init__(self, rows, columns):
        self.shape = (rows, columns)
        self.largest_piece = 0

    def __getitem__(self, key):
        rows, columns = (np.arange(n)[k] for n, k in zip(self.shape, key, strict=True))
        self.largest_piece = max(self.largest_piece, rows.size * columns.size)
        return np.broadcast_to(rows[:, None] // 1000 + 10.0 * (columns // 1000), (rows.size, columns.size))


def test_the_figure_names_picture_region_peaks_and_spacings_in_text_that_can_be_searched(make_measurement):
    texts = svg_texts(measurement_figure([make_measurement()]))
    assert "particle.tif" in texts
    assert texts.count("grain A") == 2
    for number in ("1", "2", "3"):
        assert number in texts
    assert any("1: 0.235(4)" in text and "3: 0.204(3)" in text for text in texts)
    assert "1 nm" in texts  # scale bar: a quarter of 280 px of 0.02 nm, rounded down
    assert {"region", "crystal", "peak: found"} <= set(texts)


def test_each_kind_of_peak_has_a_mark_of_its_own_that_the_legend_explains(make_measurement, make_peak, square_lattice):
    peaks = (
        make_peak(0.2355, 35, lattice_index=(1, 0)),
        make_peak(0.2, 90, origin="lattice point", lattice_index=(0, 1)),
        make_peak(0.15, 10, origin="added by hand", lattice_index=(1, 1)),
        make_peak(0.3, 150),
        make_peak(0.3, 80, withheld="broken", d_nm=None),
    )
    figure = measurement_figure([make_measurement(peaks=peaks, lattice=square_lattice)])
    texts = svg_texts(figure)
    kinds = ["found", "lattice point", "added by hand", "off the lattice", "no d given"]
    assert [t for t in texts if t.startswith("peak: ")] == [f"peak: {kind}" for kind in kinds]
    spectrum = figure.axes[1]
    markers = [line.get_marker() for line in spectrum.lines]
    assert len(set(markers)) == len(peaks)


def test_peaks_stand_where_the_spectrum_has_them(make_measurement, make_peak):
    peak = make_peak(0.25, 30)
    figure = measurement_figure([make_measurement(peaks=(peak,))])
    (mark,) = figure.axes[1].lines
    assert mark.get_xdata()[0] == pytest.approx(4 * np.cos(np.radians(30)))
    # rows count downwards, and so does the axis
    assert mark.get_ydata()[0] == pytest.approx(-4 * np.sin(np.radians(30)))
    bottom, top = figure.axes[1].get_ylim()
    assert bottom > top


@pytest.mark.parametrize("shape", [(256, 256), (255, 200), (64, 301)])
def test_the_drawn_spectrum_is_bright_where_the_wave_is(make_measurement, make_peak, shape):
    # a wave of whole cycles across the region has its power in one bin of each half plane
    rows, columns = shape
    cycles = (-9, 13)
    row, column = np.indices(shape)
    wave = np.cos(2 * np.pi * (cycles[0] * row / rows + cycles[1] * column / columns))
    power = np.abs(np.fft.rfft2(wave)) ** 2 + 1.0
    measurement = make_measurement(peaks=())
    spectrum = dataclasses.replace(measurement.spectrum, power=power.astype(np.float32), shape=shape)
    figure = measurement_figure([dataclasses.replace(measurement, spectrum=spectrum)])
    (image,) = figure.axes[1].images
    pixels, (left, right, bottom, top) = np.asarray(image.get_array()), image.get_extent()
    brightest = np.argwhere(pixels > 0.9 * pixels.max())
    y = top + (brightest[:, 0] + 0.5) / pixels.shape[0] * (bottom - top)
    x = left + (brightest[:, 1] + 0.5) / pixels.shape[1] * (right - left)
    expected = np.array(cycles) / shape / 0.02
    found = sorted(zip(y, x, strict=True))
    assert np.array(found) == pytest.approx(np.array(sorted([tuple(expected), tuple(-expected)])), abs=1e-6)


def test_without_a_pixel_size_the_axes_are_in_cycles_per_pixel_and_there_is_no_scale_bar(make_measurement, make_peak):
    micrograph = Micrograph(np.random.default_rng(0).normal(size=(300, 300)))
    peak = make_peak(0.2, 30, g_per_nm=None, d_nm=None, d_uncertainty_nm=None)
    texts = svg_texts(measurement_figure([make_measurement(micrograph, peaks=(peak,))]))
    assert any(text.startswith("1/px") for text in texts)
    assert any("(px)" in text for text in texts)
    assert not any(text.endswith(" nm") for text in texts)


@pytest.mark.parametrize("count", [2, 3, 4, 7, 13])
def test_every_region_gets_a_spectrum(make_measurement, count):
    first = make_measurement()
    regions = [Region.rectangle(f"grain {i}", 20, 20 + i, 200, 200 + i) for i in range(count)]
    figure = measurement_figure([make_measurement(first.micrograph, region) for region in regions])
    titles = [axes.get_title() for axes in figure.axes]
    assert [title for title in titles if title.startswith("grain")] == [region.name for region in regions]


def test_a_region_without_fringes_says_so(make_measurement):
    assert any("no fringe found" in text for text in svg_texts(measurement_figure([make_measurement(peaks=())])))


def test_all_type_is_readable_at_the_width_of_a_journal_page(make_measurement):
    figure = measurement_figure([make_measurement()])
    assert figure.get_figwidth() * 25.4 == pytest.approx(180)
    sizes = [float(size) for size in re.findall(rb"font-size: ?([\d.]+)px", figure_bytes(figure, "svg"))]
    sizes += [float(size) for size in re.findall(rb"font: ([\d.]+)px", figure_bytes(figure, "svg"))]
    assert sizes
    assert min(sizes) >= SMALL_TYPE_PT


def test_the_pdf_carries_its_fonts(make_measurement):
    content = figure_bytes(measurement_figure([make_measurement()]), "pdf")
    assert content.startswith(b"%PDF")
    assert b"/FontFile2" in content
    assert b"/Type3" not in content


def test_the_bitmap_has_300_dots_an_inch(make_measurement):
    content = figure_bytes(measurement_figure([make_measurement()]), "png")
    width = int.from_bytes(content[16:20], "big")
    assert width == pytest.approx(180 / 25.4 * 300, abs=2)


@pytest.mark.parametrize("file_format", ["png", "svg", "pdf"])
def test_the_same_measurement_gives_the_same_file(make_measurement, file_format):
    first, second = (figure_bytes(measurement_figure([make_measurement()]), file_format) for _ in range(2))
    assert first == second


@pytest.mark.parametrize("name", [r"$\frac{", "晶粒 γ", "a\nb\x1b", "\udcff", "x" * 400, ""])
def test_any_name_can_be_drawn(make_measurement, name):
    micrograph = Micrograph(np.ones((300, 300)), name=name)
    figure = measurement_figure([make_measurement(micrograph, Region.rectangle(name, 20, 20, 200, 200))])
    for file_format in ("png", "svg", "pdf"):
        assert figure_bytes(figure, file_format)


def test_pictures_of_odd_content_can_be_drawn():
    for pixels in (np.zeros((30, 40)), np.full((30, 40), np.nan), np.full((30, 40), 1e30), np.eye(40, dtype=np.uint8)):
        assert figure_bytes(drawn(Micrograph(pixels, pixel_size_nm=0.02)), "png")


def test_pixels_that_are_not_square_are_drawn_in_true_proportions():
    figure = drawn(Micrograph(np.zeros((100, 100)), pixel_size_nm=(0.02, 0.04)))
    assert figure.axes[0].get_aspect() == pytest.approx(0.5)


def test_a_large_picture_is_read_in_pieces_and_averaged_down():
    pixels = ReadInPieces(16_000, 9_000)
    (image,) = drawn(Micrograph(pixels)).axes[0].images
    shown = np.asarray(image.get_array())
    assert max(shown.shape) <= 1400
    assert pixels.largest_piece <= 5_000_000
    # each thousand rows and columns of the picture has a value of its own
    for row, column in ((500, 500), (15_500, 500), (8_500, 8_500)):
        scale = np.array(shown.shape) / pixels.shape
        i, j = (np.array([row, column]) * scale).astype(int)
        assert shown[i, j] == row // 1000 + 10 * (column // 1000)


@given(rows=st.integers(1, 6000), columns=st.integers(1, 6000))
def test_pictures_of_any_shape_are_drawn_small_enough_and_with_their_mean(rows, columns):
    (image,) = drawn(Micrograph(np.broadcast_to(np.float32(7.0), (rows, columns)))).axes[0].images
    shown = np.asarray(image.get_array())
    assert max(shown.shape) <= 1400
    assert np.all(shown == 7.0)


@pytest.mark.parametrize(
    ("about", "length"), [(1.4, 1.0), (2.0, 2.0), (4.99, 2.0), (7.0, 5.0), (0.035, 0.02), (123.0, 100.0), (0.1, 0.1)]
)
def test_scale_bars_have_round_lengths(about, length):
    assert round_length(about) == pytest.approx(length)


def test_a_figure_is_written_in_the_format_of_its_name(make_measurement, tmp_path):
    figure = measurement_figure([make_measurement()])
    for suffix, begins in ((".png", b"\x89PNG"), (".SVG", b"<?xml"), (".pdf", b"%PDF")):
        assert write_figure(figure, tmp_path / f"figure{suffix}").read_bytes().startswith(begins)


@pytest.mark.parametrize("name", ["figure", "figure.jpg", "figure.png.txt"])
def test_other_formats_are_refused(make_measurement, tmp_path, name):
    with pytest.raises(SettingsError, match=r"must end in \.png, \.svg or \.pdf"):
        write_figure(measurement_figure([make_measurement()]), tmp_path / name)


def test_a_figure_needs_measurements_of_one_picture(make_measurement):
    with pytest.raises(RecordError, match="all of the same picture"):
        measurement_figure([])
    with pytest.raises(RecordError, match="all of the same picture"):
        measurement_figure([make_measurement(), make_measurement()])


def test_no_window_and_no_global_state_are_touched(make_measurement):
    import sys

    figure_bytes(measurement_figure([make_measurement()]), "png")
    assert "matplotlib.pyplot" not in sys.modules
