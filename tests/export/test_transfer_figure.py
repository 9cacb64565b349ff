from __future__ import annotations

import itertools
import subprocess
import sys
import xml.etree.ElementTree as ElementTree

import numpy as np
import pytest
from matplotlib.figure import Figure

from fringespan.beam import (
    Lens,
    beam_summary,
    envelopes,
    information_limit_nm,
    phase_contrast_transfer,
    point_resolution_nm,
    transfer_zeros_per_nm,
)
from fringespan.exceptions import CalibrationError
from fringespan.export.figure import SMALL_TYPE_PT, figure_bytes
from fringespan.export.transfer_figure import draw_transfer, transfer_figure

LENS = Lens(voltage_kv=300, cs_mm=1.2, defocus_nm=60, focal_spread_nm=4, convergence_mrad=0.2, image_spread_nm=0.03)
COHERENT = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=57.8)


def svg_texts(figure: Figure) -> list[str]:
    root = ElementTree.fromstring(figure_bytes(figure, "svg"))
    return ["".join(element.itertext()) for element in root.iter("{http://www.w3.org/2000/svg}text")]


def test_draws_what_the_lens_transfers() -> None:
    _, transfer, above, below = draw_transfer(LENS).axes[0].lines[:4]
    g = np.asarray(transfer.get_xdata())
    np.testing.assert_array_equal(transfer.get_ydata(), phase_contrast_transfer(g, LENS))
    np.testing.assert_array_equal(above.get_ydata(), envelopes(g, LENS).total)
    np.testing.assert_array_equal(below.get_ydata(), -envelopes(g, LENS).total)


def test_says_under_which_conditions() -> None:
    texts = " ".join(svg_texts(draw_transfer(LENS)))
    for part in (
        "300 kV, Cs 1.2 mm, underfocus 60 nm",
        "focal spread 4 nm",
        "convergence 0.2 mrad",
        "image spread 0.03 nm",
    ):
        assert part in texts
    overfocus = Lens(voltage_kv=300, cs_mm=-0.015, defocus_nm=-7)
    assert "300 kV, Cs -0.015 mm, overfocus 7 nm" in " ".join(svg_texts(draw_transfer(overfocus)))


def test_marks_the_limits_where_they_are() -> None:
    figure = draw_transfer(LENS)
    point, limit = point_resolution_nm(300, 1.2), information_limit_nm(LENS)
    assert limit is not None
    marks = [line.get_xdata()[0] for line in figure.axes[0].lines[-2:]]  # type: ignore[index]
    assert marks == pytest.approx([1 / point, 1 / limit])
    texts = svg_texts(figure)
    assert f"point resolution {point:.3f} nm" in texts
    assert f"information limit {limit:.3f} nm" in texts


def test_a_lens_without_envelopes_shows_several_zeros_and_no_information_limit() -> None:
    figure = draw_transfer(COHERENT)
    reach = figure.axes[0].get_xlim()[1]
    assert 6 <= len(transfer_zeros_per_nm(COHERENT, reach)) <= 12
    assert not any(text.startswith(("information limit", "envelope")) for text in svg_texts(figure))


@pytest.mark.parametrize("cs_mm", [-50, -0.015, 0, 1.2, 50])
@pytest.mark.parametrize("defocus_nm", [-1e5, -7, 0, 60, 1e5])
@pytest.mark.parametrize("focal_spread_nm", [0, 5])
def test_every_lens_can_be_drawn(cs_mm: float, defocus_nm: float, focal_spread_nm: float) -> None:
    lens = Lens(voltage_kv=300, cs_mm=cs_mm, defocus_nm=defocus_nm, focal_spread_nm=focal_spread_nm)
    figure = draw_transfer(lens)
    assert len(figure_bytes(figure, "svg")) < 2_000_000


def test_is_as_wide_as_a_column_and_no_letter_is_too_small() -> None:
    figure = draw_transfer(LENS)
    assert figure.get_figwidth() * 25.4 == pytest.approx(85)
    sizes = [text.get_fontsize() for axes in figure.axes for text in [*axes.texts, *axes.get_xticklabels()]]
    assert min(sizes) >= SMALL_TYPE_PT


def test_labels_of_spacings_do_not_touch() -> None:
    for g_max in (1.5, 6.0, 12.0, 30.0):
        figure = draw_transfer(LENS, g_max_per_nm=g_max)
        figure.draw_without_rendering()
        top = figure.axes[0].child_axes[0]
        boxes = [label.get_window_extent() for label in top.get_xticklabels()]
        assert all(left.x1 < right.x0 for left, right in itertools.pairwise(boxes))


@pytest.mark.parametrize("g_max", [0, -1, np.nan, np.inf])
def test_refuses_an_impossible_reach(g_max: float) -> None:
    with pytest.raises(CalibrationError, match="g_max_per_nm must be a positive number"):
        draw_transfer(LENS, g_max_per_nm=g_max)


def test_of_a_summary_draws_its_lens() -> None:
    figure = transfer_figure(beam_summary(200, cs_mm=1.0))
    assert "200 kV, Cs 1 mm, underfocus 57.83 nm" in svg_texts(figure)
    with pytest.raises(CalibrationError, match="cs_mm must be given to draw"):
        transfer_figure(beam_summary(200))


def test_needs_no_window_and_no_global_state() -> None:
    code = """
import sys
from fringespan.beam import Lens
from fringespan.export.transfer_figure import draw_transfer
before = "matplotlib" in sys.modules
draw_transfer(Lens(voltage_kv=300, cs_mm=1.2, defocus_nm=60))
print(before, "matplotlib.pyplot" in sys.modules)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["False", "False"]
