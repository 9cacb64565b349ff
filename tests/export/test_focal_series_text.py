"""What people read of a focal series."""

import numpy as np
import pytest

from fringespan.export.focal_series_text import focal_series_lines
from fringespan.focal_series import combine_focal_series
from fringespan.micrograph import Micrograph


@pytest.fixture
def series(make_measurement, make_peak):
    def make(*spacings, **known):
        facts = {"pixel_size_nm": 0.02, "pixel_size_relative_uncertainty": 0.001, "voltage_kv": 200.0} | known
        measurements = [
            make_measurement(
                Micrograph(np.ones((300, 300)), name=f"f{n}.tif", defocus_nm=20.0 * n, **facts),
                peaks=(make_peak(d, 30, stated_uncertainty=0.001),),
                cautions=(),
            )
            for n, d in enumerate(spacings)
        ]
        return combine_focal_series(measurements)

    return make


def text_of(series, width=100):
    return "\n".join(line.text for line in focal_series_lines([("grain A", series)], width))


def test_the_whole_text_of_a_series(series):
    # parts of one picture: fit 0.1 %, crystal 0.05 %; two pictures: 0.1 / sqrt(2), 0.05 * 2^-0.3
    assert text_of(series(0.2354, 0.2356, cs_mm=1.0)) == "\n".join(
        [
            "Focal series of 2 pictures",
            "  underfocus: f0.tif (0 nm), f1.tif (20 nm)",
            "",
            "grain A",
            "  1 reflection in at least two pictures",
            "            d   fit  crystal  of one  direction  pictures  calmest",
            "         (nm)   (%)      (%)     (%)      (deg)    (of 2)     (nm)",
            " 1  0.2355(3)  0.07     0.04    0.05   30.00(5)         2    113.4",
            "  crystal: what the pictures together cannot show of an uneven crystal; of one: what one picture",
            "  cannot. calmest: the underfocus at which the lens does not shift these fringes.",
        ]
    )


def test_without_a_lens_there_is_no_calmest_defocus(series):
    assert "calmest" not in text_of(series(0.2354, 0.2356))


def test_nothing_in_common_is_said_in_words(series):
    text = text_of(series(0.2354, 0.3))
    assert "no reflection in two pictures" in text
    assert "check that it did not turn" in " ".join(text.split())


@pytest.mark.parametrize("width", [40, 60, 80, 120])
def test_lines_keep_to_the_width(series, width):
    assert all(len(line.text) <= width for line in focal_series_lines([("grain A", series(0.2354, 0.2356))], width))
