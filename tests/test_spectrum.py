"""The power spectrum of a region: its scale, its axes, and what is done about slow trends and bad pixels."""

import numpy as np
import pytest

from fringespan.spectrum import power_spectrum, prepare_pixels, taper, trend_surface
from simulated_fringes import Wave, ellipse_mask, fringes, places, prepared

RNG = np.random.default_rng


def mean_density(values, mask=None):
    """Return the mean power of the bins that neither axis touches."""
    return float(prepared(values, mask).spectrum.power[3:-3, 3:].mean())


# --- scale and axes --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [(128, 128), (101, 203), (240, 96)])
@pytest.mark.parametrize("sigma", [0.03, 1.0, 4000.0])
def test_white_noise_of_variance_s2_has_power_density_s2(shape, sigma):
    pixels = RNG(1).normal(5 * sigma, sigma, shape)
    # about shape / 4 independent bins: 2 % standard error of the mean
    assert mean_density(pixels) == pytest.approx(sigma**2, rel=0.07)


def test_the_scale_is_the_same_in_a_region_that_is_no_rectangle():
    pixels = RNG(2).normal(0, 3.0, (160, 160))
    mask = ellipse_mask(pixels.shape)
    assert mean_density(pixels, mask) == pytest.approx(9.0, rel=0.08)


@pytest.mark.parametrize("shape", [(96, 128), (75, 90), (128, 61)])
@pytest.mark.parametrize("g", [(0.21, 0.13), (-0.21, 0.13), (-0.33, 0.02), (0.02, 0.4)])
def test_a_fringe_lies_at_its_row_and_column_frequency(shape, g):
    spectrum = prepared(fringes(shape, [Wave(g)])).spectrum
    i, j = np.unravel_index(spectrum.power.argmax(), spectrum.power.shape)
    row = i if i <= spectrum.shape[0] // 2 else i - spectrum.shape[0]
    assert np.abs(np.array([row, j]) - np.array(g) * spectrum.shape).max() <= 0.5001


@pytest.mark.parametrize("masked", [False, True])
def test_the_transform_is_that_of_numpy_over_the_tapered_pixels_less_the_trend(masked):
    """numpy.fft, in double precision, of the window and trend that the library states."""
    shape = (90, 75)
    values = RNG(3).normal(10, 2, shape)
    mask = ellipse_mask(shape) if masked else None
    got = prepared(values, mask)
    window = taper(got.footprint)
    flat = np.outer(window.rows, window.columns) if mask is None else window.oblique
    expected = np.fft.rfft2((values - trend_surface(got.pixels.trend, shape)) * flat, got.spectrum.shape)
    assert np.abs(got.spectrum.transform - expected).max() < 1e-5 * np.abs(expected).max()
    power = np.abs(expected) ** 2 / (flat.astype(float) ** 2).sum()
    assert got.spectrum.power == pytest.approx(power, rel=1e-3, abs=1e-5 * power.max())


def test_block_maxima_are_the_largest_power_of_each_eight_by_eight_bins():
    spectrum = prepared(RNG(4).normal(size=(100, 70))).spectrum
    for i, row in enumerate(spectrum.block_maxima):
        for j, highest in enumerate(row):
            assert highest == spectrum.power[8 * i : 8 * i + 8, 8 * j : 8 * j + 8].max()


def test_the_window_falls_to_the_edge_and_is_nothing_outside():
    mask = ellipse_mask((120, 100))
    window = taper(prepared(RNG(5).normal(size=mask.shape), mask).footprint)
    assert (window.oblique[~mask] == 0).all()
    assert (window.oblique[mask] > 0).all()
    assert window.oblique[60, 50] == pytest.approx(1)
    assert window.oblique[60, 3] < 0.1


# --- the slow trend --------------------------------------------------------------------------------------------------

TRENDS = [
    pytest.param(lambda y, x: 1000 + 0 * y + 0 * x, id="constant"),
    pytest.param(lambda y, x: 30 * y - 20 * x, id="ramp"),
    pytest.param(lambda y, x: 40 * y * y + 25 * x * x - 30 * y * x, id="bowl"),
    pytest.param(lambda y, x: 20 * x**3 - 15 * y**2 * x + 10 * y**3, id="cubic"),
]


@pytest.mark.parametrize("masked", [False, True])
@pytest.mark.parametrize("trend", TRENDS)
def test_a_slow_trend_is_taken_off(trend, masked):
    shape = (110, 130)
    y, x = places(shape)
    noise = RNG(6).normal(size=shape)
    mask = ellipse_mask(shape) if masked else None
    slow = trend(2 * y / shape[0], 2 * x / shape[1])
    plain, with_trend = prepared(noise, mask).spectrum.power, prepared(noise + slow, mask).spectrum.power
    # the noise itself has power 1; the trend, untreated, would leave thousands of times that near the axes
    assert np.abs(with_trend - plain)[4:-4, 4:].max() < 0.3
    assert np.sqrt(np.mean((with_trend - plain)[4:-4, 4:] ** 2)) < 0.01


def test_a_scale_of_the_pixel_values_squares_in_the_power():
    values = RNG(7).normal(3, 1, (90, 90)) + fringes((90, 90), [Wave((0.1, 0.2))])
    one, many = prepared(values).spectrum.power, prepared(values * 1e4).spectrum.power
    assert many == pytest.approx(one * 1e8, rel=1e-3, abs=1e3)


# --- the type of the pixels ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "dtype", ["u1", "i1", "u2", "i2", "i4", "u4", "i8", "u8", "f2", "f4", "f8", ">u2", ">i4", ">f4", ">f8", ">u8"]
)
def test_whole_numbers_have_one_spectrum_in_every_type(dtype):
    counts = RNG(8).poisson(20, (64, 80))
    expected = prepared(counts.astype(np.float64)).spectrum.power
    assert prepared(counts.astype(dtype)).spectrum.power == pytest.approx(expected, rel=1e-4, abs=1e-4)


def test_half_precision_of_the_other_byte_order_has_the_same_spectrum():
    counts = RNG(8).poisson(20, (64, 80))
    assert mean_density(counts.astype(">f2")) == pytest.approx(mean_density(counts.astype("f8")))


# --- bad pixels ------------------------------------------------------------------------------------------------------


def spoilt(values, count, value, seed=0):
    """Return a copy with some pixels, chosen at random, set to a value, or to any beyond it where there are many."""
    out, rng = values.copy(), RNG(seed)
    many = count > 1 and np.isfinite(value) and value != 0
    out.ravel()[rng.permutation(out.size)[:count]] = value * rng.uniform(1, 3, count) if many else value
    return out


BAD = [
    pytest.param(np.float64, 1, np.nan, id="one not a number"),
    pytest.param(np.float32, 60, np.nan, id="many not a number"),
    pytest.param(np.float64, 20, np.inf, id="infinite"),
    pytest.param(np.float64, 20, -np.inf, id="infinitely negative"),
    pytest.param(np.float64, 1, 1e6, id="one hot pixel"),
    pytest.param(np.float64, 30, 5e4, id="hot pixels"),
    pytest.param(np.float32, 12, -4e3, id="cold pixels"),
    pytest.param(np.uint16, 30, 0, id="dead pixels"),
    pytest.param(np.float64, 5, 1e30, id="beyond what squares in single precision"),
    pytest.param(np.float64, 5, 1e300, id="beyond single precision"),
]


@pytest.mark.parametrize(("dtype", "count", "value"), BAD)
def test_bad_pixels_are_left_out_and_counted(dtype, count, value):
    shape = (128, 128)
    clean = (RNG(9).normal(1000, 20, shape) + fringes(shape, [Wave((0.11, 0.23), 30)])).astype(dtype)
    bad = spoilt(clean, count, value)
    kept = bad.copy()
    got = prepared(bad)
    assert np.array_equal(bad, kept, equal_nan=True)
    assert (got.pixels.defect_count, got.pixels.saturated_count) == (count, 0)
    assert got.pixels.sigma == pytest.approx(prepared(clean).pixels.sigma, rel=0.02)
    assert got.spectrum.power[3:-3, 3:].mean() == pytest.approx(
        prepared(clean).spectrum.power[3:-3, 3:].mean(), rel=0.05
    )
    assert got.spectrum.power.argmax() == prepared(clean).spectrum.power.argmax()


SATURATED = [
    pytest.param(np.uint8, 255, id="8 bit"),
    pytest.param(np.uint16, 65535, id="16 bit"),
    pytest.param(np.int16, 32767, id="16 bit with sign"),
    pytest.param(np.uint16, 4095, id="12 bit camera in 16 bit"),
    pytest.param(np.float32, 1000.0, id="scaled afterwards"),
]


@pytest.mark.parametrize(("dtype", "top"), SATURATED)
def test_saturated_pixels_are_left_out_and_counted(dtype, top):
    shape = (128, 128)
    values = RNG(10).normal(top * 0.78, top * 0.09, shape)
    at_top = (values >= top).sum()
    assert 60 < at_top < 200
    got = prepared(np.minimum(values, top).astype(dtype))
    assert got.pixels.saturated_count == at_top
    assert got.pixels.defect_count == 0


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.float32])
def test_a_good_picture_has_no_bad_pixels(dtype):
    values = RNG(11).poisson(60, (150, 150)).astype(dtype)
    got = prepared(values)
    assert (got.pixels.defect_count, got.pixels.saturated_count) == (0, 0)
    assert np.shares_memory(got.pixels.values, values)


@pytest.mark.parametrize("value", [0.0, 7.0, np.nan, np.inf])
def test_equal_pixels_have_no_spread(value):
    footprint = prepared(RNG(12).normal(size=(40, 50))).footprint
    spectrum, pixels = power_spectrum(prepare_pixels(np.full((40, 50), value), footprint))
    assert pixels.sigma == 0
    assert np.isfinite(spectrum.power).all()
