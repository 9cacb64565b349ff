"""Detection: the threshold keeps its promise on noise, and candidates lie where fringes were put."""

from dataclasses import replace

import numpy as np
import pytest
import scipy.ndimage
from hypothesis import given, settings
from hypothesis import strategies as st

from fringespan.peaks.detection import (
    density_at,
    detection_threshold,
    find_candidates,
    matched_ratio_at,
    waves_removed,
)
from simulated_fringes import (
    Wave,
    blurred,
    ellipse_mask,
    falling,
    fringes,
    noise,
    prepared,
    random_g,
    steeply_falling,
    transfer_rings,
    white,
)

SHAPE = (128, 128)


def candidates(picture, rate=0.01, smallest_distance=4.0):
    threshold = detection_threshold(picture.footprint.count, rate)
    return find_candidates(
        picture.spectrum, picture.background, picture.footprint,
        threshold=threshold, smallest_distance_bins=smallest_distance,
    )  # fmt: skip


def away(frequency, g, shape):
    """Return the distance in bins of each frequency from g or its opposite."""
    bins = np.array(shape)
    return np.minimum(np.hypot(*((frequency - g) * bins).T), np.hypot(*((frequency + g) * bins).T))


# --- the threshold ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("rate", [0.3, 2.0 / 3])
@pytest.mark.parametrize("size", [48, 96])
def test_noise_has_no_more_maxima_above_the_threshold_than_promised(size, rate):
    """Maxima of the untapered spectrum of known white noise, on a grid four times finer than its bins (numpy.fft)."""
    threshold = detection_threshold(size * size, rate)
    rng = np.random.default_rng([size, int(100 * rate)])
    pictures, maxima = 250, 0
    for _ in range(pictures):
        power = np.abs(np.fft.fft2(rng.standard_normal((size, size)), (4 * size, 4 * size))) ** 2 / size**2
        top = scipy.ndimage.maximum_filter(power, 3, mode="wrap")
        maxima += ((power == top) & (power > threshold)).sum() / 2
    # the promise holds with a third to spare; the counts scatter by their root
    expected = rate * pictures
    assert 0.4 * expected < maxima < expected


@given(st.integers(600, 10**8), st.floats(1e-6, 1.0))
def test_the_threshold_solves_the_expected_number_of_maxima(pixels, rate):
    """n / 2 lam / (2 pi) (2 t - 1) exp(-t), lam = 4 pi^2 / 12: Worsley 1994, from memory."""
    t = detection_threshold(pixels, rate)
    expected = pixels / 2 * (4 * np.pi**2 / 12) / (2 * np.pi) * (2 * t - 1) * np.exp(-t)
    assert expected == pytest.approx(0.67 * rate)
    assert detection_threshold(2 * pixels, rate) > t
    assert t > 3


# --- candidates ------------------------------------------------------------------------------------------------------

PICTURES = [
    pytest.param((128, 128), False, id="square"),
    pytest.param((101, 203), False, id="odd rectangle"),
    pytest.param((150, 130), True, id="ellipse"),
    pytest.param((40, 40), False, id="small"),
]


@pytest.mark.parametrize(("shape", "masked"), PICTURES)
def test_a_clear_fringe_is_one_candidate_at_its_place_with_its_strength(shape, masked):
    mask = ellipse_mask(shape) if masked else None
    rng = np.random.default_rng(3)
    ratios = []
    for _ in range(25):
        g = random_g(rng, shape)
        amplitude = 2 * np.sqrt(80 / np.prod(shape))
        picture = prepared(noise(rng, shape) + fringes(shape, [Wave(g, amplitude, rng.uniform(0, 6))]), mask)
        found = candidates(picture)
        near = away(found.frequency, g, shape) < 1.5
        assert near.sum() == 1
        assert away(found.frequency[near], g, shape)[0] < 0.6
        assert found.samples[near][0] > 8
        # the filter sees the tapered bins: their power over that of a perfect filter, which has T = A^2 N / 4 S
        ratios.append(found.ratio[near][0] * found.density[near][0] / (amplitude**2 * picture.footprint.count / 4))
    # of seven by seven tapered bins the filter wins back most, not all; the noise in it adds one part in 80
    assert 0.8 < np.mean(ratios) < 1.1


@pytest.mark.parametrize(
    "g", [(0.2, 0.0), (-0.2, 0.0), (0.2, 0.0007), (-0.2, 0.0007), (0.0, 0.3), (0.001, 0.3), (0.3, 0.497)]
)
def test_a_fringe_along_an_axis_or_near_the_finest_is_found_once(g):
    picture = prepared(noise(np.random.default_rng(4), SHAPE) + fringes(SHAPE, [Wave(g, 1.0)]))
    found = candidates(picture)
    alias = np.array(g) - (0, 1)
    near = np.minimum(away(found.frequency, g, SHAPE), away(found.frequency, alias, SHAPE)) < 1.5
    assert near.sum() == 1


def test_nothing_is_looked_for_nearer_to_the_origin_than_asked():
    picture = prepared(noise(np.random.default_rng(5), SHAPE) + fringes(SHAPE, [Wave((0.03, 0.04), 1.0)]))
    # 6.4 bins from the origin
    assert len(candidates(picture, smallest_distance=4.0).ratio) == 1
    assert len(candidates(picture, smallest_distance=8.0).ratio) == 0


# --- the noise at a place --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("density", [white, falling, steeply_falling, blurred, transfer_rings])
@pytest.mark.parametrize("masked", [False, True])
def test_the_density_at_a_place_is_that_of_the_noise_put_in(density, masked):
    shape = (160, 160)
    mask = ellipse_mask(shape) if masked else None
    rng = np.random.default_rng(6)
    ratio, claimed = [], []
    for _ in range(25):
        picture = prepared(noise(rng, shape, density), mask)
        g = np.array([random_g(rng, shape) for _ in range(8)])
        got, samples = density_at(picture.spectrum, picture.background, g)
        ratio.append(got / density(np.hypot(*g.T)))
        claimed.append(1 / samples)
    assert np.mean(ratio) == pytest.approx(1, abs=0.08)
    if density is not transfer_rings:
        # its scatter is no more than twice what its number of samples claims; steep rings blur the scatter
        assert np.var(ratio) < 4 * np.mean(claimed)


def test_strong_fringes_nearby_do_not_raise_the_density():
    rng = np.random.default_rng(7)
    plain = noise(rng, SHAPE)
    g = np.array([[0.2, 0.2]])
    others = [Wave((0.2 + 12 / 128, 0.27), 1.0), Wave((0.13, 0.2 - 14 / 128), 1.0), Wave((0.2, 0.2), 1.0)]
    before, with_fringes = prepared(plain), prepared(plain + fringes(SHAPE, others))
    expected = density_at(before.spectrum, before.background, g)[0]
    assert density_at(with_fringes.spectrum, with_fringes.background, g)[0] == pytest.approx(expected, rel=0.25)


def test_scan_rows_of_uneven_brightness_raise_the_density_on_the_axis_only():
    rng = np.random.default_rng(8)
    rows = 1.0 * rng.standard_normal((SHAPE[0], 1))
    picture = prepared(noise(rng, SHAPE) + rows)
    on_axis, off_axis = np.array([[0.21, 0.001], [-0.33, 0.0]]), np.array([[0.21, 0.2], [-0.33, 0.15]])
    assert (density_at(picture.spectrum, picture.background, on_axis)[0] > 5).all()
    assert density_at(picture.spectrum, picture.background, off_axis)[0] == pytest.approx(np.ones(2), rel=0.3)


def test_the_matched_filter_at_a_known_place_gives_the_power_there():
    rng = np.random.default_rng(9)
    powers = []
    for _ in range(40):
        g = np.array([random_g(rng, SHAPE)])
        picture = prepared(noise(rng, SHAPE) + fringes(SHAPE, [Wave(tuple(g[0]), 0.2, rng.uniform(0, 6))]))
        powers.append(matched_ratio_at(picture.spectrum, picture.footprint, g)[0])
    # T = A^2 N / 4 = 164 of the wave, less the filter's loss, and 1 of the noise
    assert 0.85 < np.mean(powers) / 164 < 1.05


def test_noise_passes_the_matched_filter_with_its_own_density():
    rng = np.random.default_rng(10)
    powers = []
    for _ in range(30):
        picture = prepared(noise(rng, SHAPE, falling))
        g = np.array([random_g(rng, SHAPE) for _ in range(30)])
        powers.append(matched_ratio_at(picture.spectrum, picture.footprint, g) / falling(np.hypot(*g.T)))
    assert np.mean(powers) == pytest.approx(1, abs=0.12)


# --- fringes taken out -----------------------------------------------------------------------------------------------

REMOVED = [
    pytest.param((128, 128), False, id="square"),
    pytest.param((90, 141), False, id="odd rectangle"),
    pytest.param((128, 128), True, id="ellipse"),
]


@pytest.mark.parametrize(("shape", "masked"), REMOVED)
def test_known_waves_can_be_taken_out_for_a_while(shape, masked):
    rng = np.random.default_rng(11)
    mask = ellipse_mask(shape) if masked else None
    waves = [Wave((0.2, 0.11), 1.5, 0.3), Wave((-0.31, 0.02), 2.5, 1.0), Wave((0.1, 0.47), 1.0, 2.0)]
    plain = noise(rng, shape)
    picture, only_noise = prepared(plain + fringes(shape, waves), mask), prepared(plain, mask)
    before = picture.spectrum.power.copy(), picture.spectrum.transform.copy(), picture.spectrum.block_maxima.copy()
    frequency = np.array([w.g for w in waves])
    # half the real amplitude, phase at the middle
    amplitude = np.array([w.amplitude / 2 * np.exp(1j * w.phase) for w in waves])
    with waves_removed(picture.spectrum, picture.footprint, frequency, amplitude) as rest:
        for g in frequency:
            i, j = np.rint(g * rest.shape).astype(int)
            near = np.s_[max(i - 4, -rest.shape[0]) : i + 5] if i - 4 > 0 or i + 5 < 0 else np.s_[i - 4 : i + 5]
            left, was = rest.power[near, max(j - 4, 0) : j + 5], only_noise.spectrum.power[near, max(j - 4, 0) : j + 5]
            assert np.abs(left - was).max() < 0.3
    assert (picture.spectrum.transform == before[1]).all()
    assert picture.spectrum.power == pytest.approx(before[0], rel=1e-6)
    assert (picture.spectrum.block_maxima == before[2]).all()


@pytest.mark.parametrize(("shape", "masked"), REMOVED)
def test_the_block_maxima_are_those_of_what_is_left(shape, masked):
    rng = np.random.default_rng(11)
    waves = [Wave((0.2, 0.11), 1.5), Wave((-0.31, 0.02), 2.5), Wave((0.1, 0.47), 1.0)]
    picture = prepared(noise(rng, shape) + fringes(shape, waves), ellipse_mask(shape) if masked else None)
    g, amplitude = np.array([w.g for w in waves]), np.array([w.amplitude / 2 + 0j for w in waves])
    with waves_removed(picture.spectrum, picture.footprint, g, amplitude) as rest:
        blocks = [[rest.power[8 * i : 8 * i + 8, 8 * j : 8 * j + 8].max() for j in range(len(row))]
                  for i, row in enumerate(rest.block_maxima)]  # fmt: skip
        assert rest.block_maxima == pytest.approx(np.array(blocks))


class InterruptionError(Exception):
    """Something that goes wrong in between."""


def test_waves_come_back_also_when_something_goes_wrong_in_between():
    picture = prepared(noise(np.random.default_rng(12), SHAPE) + fringes(SHAPE, [Wave((0.2, 0.1), 2.0)]))
    before = picture.spectrum.transform.copy()

    def interrupted():
        with waves_removed(picture.spectrum, picture.footprint, np.array([(0.2, 0.1)]), np.array([1.0 + 0j])):
            raise InterruptionError

    with pytest.raises(InterruptionError):
        interrupted()
    assert (picture.spectrum.transform == before).all()


def with_guards(spectrum):
    """Return the spectrum in front of rows that nobody may write to, and those rows."""
    guarded, guards = {}, []
    for name in ("transform", "power", "block_maxima"):
        values = getattr(spectrum, name)
        large = np.full((len(values) + 60, values.shape[1]), 7, values.dtype)
        large[: len(values)] = values
        guarded[name] = large[: len(values)]
        guards.append(large[len(values) :])
    return replace(spectrum, **guarded), guards


@settings(max_examples=40)
@given(
    ny=st.integers(24, 60), nx=st.integers(24, 60),
    g=st.tuples(st.floats(-0.49, 0.49), st.floats(0, 0.49)),
)  # fmt: skip
def test_waves_anywhere_in_a_small_spectrum_come_out_and_back(ny, nx, g):
    plain, wave = noise(np.random.default_rng(13), (ny, nx)), fringes((ny, nx), [Wave(g, 2.0, 0.5)])
    picture, without = prepared(plain + wave), prepared(plain)
    spectrum, guards = with_guards(picture.spectrum)
    with waves_removed(spectrum, picture.footprint, np.array([g]), np.array([np.exp(0.5j)])) as rest:
        near = np.abs(np.fft.fftfreq(rest.shape[0]) - g[0])[:, None] * ny < 3
        near = near & (np.abs(np.fft.rfftfreq(rest.shape[1]) - g[1])[None] * nx < 3)
        far_from_origin = min(abs(g[0]), abs(g[1])) > 0.12
        if far_from_origin and max(abs(g[0]), abs(g[1])) < 0.4:
            # beyond reach of the wave's own opposite and of the slow trend
            assert rest.power[near] == pytest.approx(without.spectrum.power[near], abs=1.0)
    assert (spectrum.transform == picture.spectrum.transform).all()
    assert all((guard == 7).all() for guard in guards)
