"""Demodulation: sums over blocks and over the whole region are those of the definition."""

import numpy as np
import pytest

from fringespan.peaks.demodulation import block_size, demodulate
from fringespan.spectrum import trend_surface
from simulated_fringes import ellipse_mask, places, prepared

FREQUENCIES = np.array([(0.11, 0.23), (-0.31, 0.07), (0.02, 0.44), (-0.09, 0.0)])

REGIONS = [
    pytest.param(((64, 64), False), id="square"),
    pytest.param(((61, 83), False), id="odd rectangle"),
    pytest.param(((97, 90), True), id="ellipse"),
    pytest.param(((420, 410), False), id="large, in blocks of eight"),
    pytest.param(((419, 405), True), id="large ellipse"),
]


def directly(prepared_picture, frequency):
    """Return the demodulated, detrended pixels by the definition, nothing outside the region."""
    pixels, footprint = prepared_picture.pixels, prepared_picture.footprint
    y, x = places(footprint.shape)
    z = pixels.values.astype(float) - trend_surface(pixels.trend, footprint.shape)
    if footprint.mask is not None:
        z = z * footprint.mask
    return z * np.exp(-2j * np.pi * (frequency[0] * y + frequency[1] * x)), y, x


@pytest.fixture(scope="module", params=REGIONS)
def picture(request):
    shape, masked = request.param
    values = np.random.default_rng(1).normal(100, 5, shape)
    return prepared(values, ellipse_mask(shape) if masked else None)


def test_the_moments_are_sums_over_the_region_weighted_by_one_y_and_x(picture):
    got = demodulate(picture.pixels, FREQUENCIES)
    n = np.sqrt(picture.footprint.count)
    for frequency, moments in zip(FREQUENCIES, got.moments, strict=True):
        z, y, x = directly(picture, frequency)
        expected = np.array([z.sum(), (y * z).sum(), (x * z).sum()])
        scale = 5 * n * np.array([1, np.ptp(y), np.ptp(x)])
        assert np.abs(moments - expected) / scale == pytest.approx(np.zeros(3), abs=2e-5)


def test_the_blocks_are_sums_over_whole_blocks_and_what_is_left_at_the_far_edges(picture):
    got = demodulate(picture.pixels, FREQUENCIES)
    size = got.block
    assert size == block_size(picture.footprint)
    for frequency, blocks in zip(FREQUENCIES, got.blocks, strict=True):
        z, _, _ = directly(picture, frequency)
        edges = [np.arange(0, n, size) for n in picture.footprint.shape]
        expected = np.add.reduceat(np.add.reduceat(z, edges[0], axis=0), edges[1], axis=1)
        assert blocks.shape == expected.shape
        assert np.abs(blocks - expected).max() < 1e-3 * 5 * size
    assert got.blocks.sum(axis=(1, 2)) == pytest.approx(got.moments[:, 0], abs=0.02 * np.sqrt(picture.footprint.count))


def test_parts_joined_and_replaced_are_those_of_a_new_demodulation(picture):
    whole = demodulate(picture.pixels, FREQUENCIES)
    first, rest = whole.part(np.array([True, False, False, False])), whole.part(np.array([1, 2, 3]))
    joined = first.joined(rest)
    other = FREQUENCIES + 0.01
    swapped = whole.replaced(np.array([False, True, False, True]), demodulate(picture.pixels, other[[1, 3]]))
    for got, frequency in ((joined, FREQUENCIES), (swapped, np.where([[0], [1], [0], [1]], other, FREQUENCIES))):
        expected = demodulate(picture.pixels, frequency)
        assert (got.frequency == frequency).all()
        assert got.blocks == pytest.approx(expected.blocks)
        assert got.moments == pytest.approx(expected.moments)
