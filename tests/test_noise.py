"""The noise background of a spectrum: the stated density comes back, and fringes do not raise it."""

import numpy as np
import pytest

from fringespan.noise import rings_at
from simulated_fringes import (
    Wave,
    blurred,
    ellipse_mask,
    falling,
    fringes,
    noise,
    places,
    prepared,
    random_g,
    steeply_falling,
    transfer_rings,
    white,
)

SHAPE = (160, 160)
RADII = np.array([0.08, 0.12, 0.2, 0.3, 0.42])


def background_over_truth(density, pictures=30, shape=SHAPE, mask=None):
    """Return the mean background over the density put in, at some frequencies along a slanting line."""
    place = np.outer(RADII, (0.6, 0.8))
    total = np.zeros(len(RADII))
    for seed in range(pictures):
        got = prepared(noise(np.random.default_rng(seed), shape, density), mask)
        total += rings_at(got.background, place * got.spectrum.shape)
    return total / pictures / density(RADII)


@pytest.mark.parametrize(
    ("density", "tolerance"),
    [
        pytest.param(white, 0.04, id="white"),
        pytest.param(falling, 0.06, id="falling"),
        pytest.param(steeply_falling, 0.08, id="steeply falling"),
        pytest.param(blurred, 0.08, id="blurred by the detector"),
    ],
)
def test_the_background_is_the_density_of_the_noise(density, tolerance):
    assert background_over_truth(density) == pytest.approx(np.ones(len(RADII)), abs=tolerance)


def test_the_background_follows_the_rings_of_a_lens():
    # a ring's flank is smoothed: within a fifth
    assert background_over_truth(transfer_rings, shape=(256, 256), pictures=15) == pytest.approx(np.ones(5), abs=0.2)


def test_the_background_is_the_density_of_the_noise_in_an_ellipse():
    mask = ellipse_mask(SHAPE)
    assert background_over_truth(falling, mask=mask) == pytest.approx(np.ones(len(RADII)), abs=0.08)


def test_counts_have_the_density_of_their_mean():
    values = np.random.default_rng(3).poisson(7.0, (256, 256))
    got = prepared(values)
    place = np.outer(RADII, (0.6, 0.8)) * got.spectrum.shape
    assert rings_at(got.background, place) == pytest.approx(np.full(5, 7.0), rel=0.15)


@pytest.mark.parametrize("amplitude", [0.5, 5.0])
def test_fringes_do_not_raise_the_background(amplitude):
    rng = np.random.default_rng(4)
    plain = noise(rng, SHAPE)
    waves = [Wave(random_g(rng, SHAPE), amplitude, rng.uniform(0, 6)) for _ in range(6)]
    place = np.outer(RADII, (0.6, -0.8)) * SHAPE
    before = rings_at(prepared(plain).background, place)
    after = rings_at(prepared(plain + fringes(SHAPE, waves)).background, place)
    assert after == pytest.approx(before, rel=0.3)


def test_rings_are_round_in_the_specimen_where_pixels_are_not_square():
    """Noise that is round per nm, in pixels half as high as wide: along the rows' axis it falls half as fast."""
    shape = (192, 192)
    v, u = np.fft.fftfreq(384)[:, None], np.fft.rfftfreq(384)[None]
    # cycles per column pixel's width; a row pixel is half of it
    radius = np.hypot(2 * v, u)
    ratios = []
    for seed in range(20):
        spectrum = np.fft.rfft2(np.random.default_rng(seed).standard_normal((384, 384)))
        values = np.fft.irfft2(spectrum * np.sqrt(falling(radius)))[:192, :192]
        background = prepared(values, aspect=2.0).background
        ratios.append(rings_at(background, np.array([(0.0, 0.1), (0.05, 0.0), (0.04, 0.06)]) * shape))
    expected = falling(np.array([0.1, 0.1, 0.1]))
    assert np.mean(ratios, axis=0) == pytest.approx(expected, rel=0.06)


def test_an_edge_through_the_picture_raises_the_background_little():
    y, x = places(SHAPE)
    values = noise(np.random.default_rng(5), SHAPE)
    place = np.outer(RADII, (0.9, -0.45)) * SHAPE
    before = rings_at(prepared(values).background, place)
    after = rings_at(prepared(values + 5.0 * (x + 0.2 * y > 9)).background, place)
    assert after == pytest.approx(before, rel=0.3)
