"""The strength said to be needed is that at which fringes are found nine times in ten."""

import math

import numpy as np
import pytest

import fringespan as fs
from fringespan.judgement.missing_fringes import NeededFringes, needed_fringes, no_fringe_caution
from fringespan.measurement import measure
from fringespan.micrograph import Micrograph
from fringespan.settings import MeasurementSettings
from simulated_fringes import Wave, fringes, noise, prepared

SHAPE = (128, 128)


def needed_in(seed: int) -> NeededFringes:
    picture = prepared(noise(np.random.default_rng(seed), SHAPE))
    return needed_fringes(picture.spectrum, picture.footprint, MeasurementSettings())


def test_in_white_noise_the_amplitude_is_that_of_the_matched_filter():
    # threshold T = 16.0 for 128 x 128 px at 0.01 false peaks; A = 2 (sqrt(T) + 0.9) sqrt(S / n) with S = 1
    needed = needed_in(1)
    expected = 2 * (math.sqrt(16.0) + 0.9) / 128
    assert needed.least_amplitude == pytest.approx(expected, rel=0.15)
    assert needed.greatest_amplitude == pytest.approx(expected, rel=0.25)
    assert needed.finest_px == 2
    assert needed.coarsest_px == 128 / 4


@pytest.mark.parametrize(("share", "least", "most"), [(1.0, 0.8, 1.0), (0.5, 0.0, 0.1)])
def test_fringes_of_the_stated_strength_are_found_nine_times_in_ten(share, least, most):
    rng = np.random.default_rng(7)
    found = 0
    for seed in range(50):
        needed = needed_in(1000 + seed)
        amplitude = share * (needed.least_amplitude + needed.greatest_amplitude) / 2
        g = (rng.uniform(-0.3, 0.3), rng.uniform(0.1, 0.3))
        picture = 20 + fringes(SHAPE, [Wave(g, amplitude, rng.uniform(0, 6))]) + noise(rng, SHAPE)
        found += bool(measure(Micrograph(picture)).peaks)
    assert least <= found / 50 <= most


@pytest.mark.parametrize(
    ("pixel_size", "mean", "dark_level", "words"),
    [
        ((0.02, 0.02), 50.0, None, ["from 0.04 to 1 nm", "of 2 to 4 % of the mean,"]),
        ((0.02, 0.02), 50.0, 25.0, ["of 4 to 8 % of the mean above the dark level,"]),
        (None, 50.0, None, ["from 2 to 50 px"]),
        (None, -3.0, None, ["of 1 to 2 pixel values,"]),
    ],
)
def test_the_caution_says_what_was_looked_for(pixel_size, mean, dark_level, words):
    text = no_fringe_caution(NeededFringes(2.0, 50.0, 1.0, 2.0), pixel_size, mean, dark_level).text
    for word in words:
        assert word in text


def test_fringes_that_bend_all_over_are_named_and_noise_is_not():
    y, x = np.mgrid[:256, :256] - 128.0
    noise_only = np.random.default_rng(2).standard_normal((256, 256)) + 50
    # a quarter of concentric fringes: every direction, one spacing of 9 pixels
    curved = noise_only + 4 * np.cos(2 * np.pi * np.hypot(y + 150, x + 150) / 9) * (
        np.abs(np.hypot(y + 150, x + 150) - 200) < 40
    )
    codes = [c.code for c in fs.measure(fs.Micrograph(curved)).cautions]
    assert "fringes-bend-all-over" in codes
    assert "no-fringe-found" not in codes
    assert "fringes-bend-all-over" not in [c.code for c in fs.measure(fs.Micrograph(noise_only)).cautions]
