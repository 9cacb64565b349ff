"""The joint fit: at the Cramer-Rao bound, for one wave and for several at once, with the covariance it claims."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fringespan.peaks.demodulation import demodulate
from fringespan.peaks.joint_fit import fit_jointly
from simulated_fringes import Wave, cramer_rao_bound, ellipse_mask, fringes, noise, places, prepared, random_g


def fitted(picture, start, density=1.0, threshold=10.0):
    start = np.asarray(start, float)
    n = len(start)
    return fit_jointly(picture.pixels, demodulate(picture.pixels, start), np.full(n, density), np.full(n, threshold))


def faint(shape):
    """Return noise far below what counts; without it, crests at one and the same value would pass for saturated."""
    return 1e-6 * noise(np.random.default_rng(0), shape)


def complex_amplitude(wave):
    """Half the real amplitude, with the phase at the middle."""
    return wave.amplitude / 2 * np.exp(1j * wave.phase)


# --- without noise ---------------------------------------------------------------------------------------------------


@settings(max_examples=60)
@given(
    g=st.tuples(st.floats(-0.45, 0.45), st.floats(0.06, 0.45)), phase=st.floats(-3, 3),
    offset=st.tuples(st.floats(-0.4, 0.4), st.floats(-0.4, 0.4)), masked=st.booleans(),
)  # fmt: skip
def test_a_wave_without_noise_is_found_exactly_from_half_a_bin_away(g, phase, offset, masked):
    shape = (70, 95)
    wave = Wave(g, 3.0, phase)
    picture = prepared(fringes(shape, [wave]) + faint(shape), ellipse_mask(shape) if masked else None)
    # the trend was fitted to the bare wave, so the wave must not be taken for a trend: known here to be zero
    picture.pixels.trend[:] = 0
    fit, kept = fitted(picture, [np.array(g) + np.array(offset) / shape], density=1e-6)
    assert list(kept) == [0]
    assert np.abs(fit.frequency[0] - g) * shape == pytest.approx([0, 0], abs=2e-3)
    assert fit.amplitude[0] == pytest.approx(complex_amplitude(wave), abs=0.01)


@settings(max_examples=30)
@given(data=st.data())
def test_several_waves_without_noise_are_all_found_exactly(data):
    shape = (90, 80)
    seeds = data.draw(st.integers(0, 10**6))
    rng = np.random.default_rng(seeds)
    waves = []
    while len(waves) < 5:
        g = random_g(rng, shape)
        if all(min(np.hypot(*((np.array(g) - s * np.array(w.g)) * shape)) for s in (1, -1)) > 2 for w in waves):
            waves.append(Wave(g, rng.uniform(0.5, 5), rng.uniform(-3, 3)))
    picture = prepared(fringes(shape, waves) + faint(shape))
    picture.pixels.trend[:] = 0
    start = np.array([w.g for w in waves]) + rng.uniform(-0.25, 0.25, (5, 2)) / shape
    fit, kept = fitted(picture, start, density=1e-6)
    assert list(kept) == [0, 1, 2, 3, 4]
    assert np.abs(fit.frequency - [w.g for w in waves]).max() * 90 < 0.01
    assert fit.amplitude == pytest.approx(np.array([complex_amplitude(w) for w in waves]), abs=0.05)


# --- in noise --------------------------------------------------------------------------------------------------------

ONE = [
    pytest.param((64, 64), False, id="square"),
    pytest.param((45, 130), False, id="odd rectangle"),
    pytest.param((96, 96), True, id="ellipse"),
]


@pytest.mark.parametrize(("shape", "masked"), ONE)
def test_one_wave_is_at_the_cramer_rao_bound_and_says_so(shape, masked):
    mask = ellipse_mask(shape) if masked else None
    rng = np.random.default_rng(1)
    errors, claimed, bounds = [], [], []
    for _ in range(300):
        wave = Wave(random_g(rng, shape), 0.7, rng.uniform(0, 6))
        picture = prepared(noise(rng, shape) + fringes(shape, [wave]), mask)
        fit, _ = fitted(picture, [wave.g + rng.uniform(-0.3, 0.3, 2) / shape])
        errors.append(fit.frequency[0] - wave.g)
        claimed.append(np.diag(fit.covariance))
        bounds.append(np.diag(cramer_rao_bound(shape, 0.7, 1.0, mask)))
    # 300 pictures: the standard error of an RMS is 4 % per axis
    ratio = np.sqrt(np.mean(np.square(errors), axis=0) / np.mean(bounds, axis=0))
    assert ratio == pytest.approx([1, 1], abs=0.12)
    assert np.sqrt(np.mean(claimed, axis=0) / np.mean(bounds, axis=0)) == pytest.approx([1, 1], abs=0.06)
    assert (np.abs(np.mean(errors, axis=0)) < 4 * np.sqrt(np.mean(bounds, axis=0) / 300)).all()


def numerical_covariance(shape, waves, mask):
    """Return the inverse Fisher matrix of frequencies, from differences of the model by its sixteen parameters."""
    y, x = places(shape)

    def model(p):
        parts = p.reshape(-1, 4)
        picture = sum(2 * np.real((a + 1j * b) * np.exp(2j * np.pi * (v * y + u * x))) for a, b, v, u in parts)
        return (picture * (1 if mask is None else mask)).ravel()

    parameters = np.array([(complex_amplitude(w).real, complex_amplitude(w).imag, *w.g) for w in waves]).ravel()
    columns = []
    for k in range(len(parameters)):
        step = np.zeros(len(parameters))
        step[k] = 1e-6
        columns.append((model(parameters + step) - model(parameters - step)) / 2e-6)
    jacobian = np.array(columns)
    covariance = np.linalg.inv(jacobian @ jacobian.T)
    keep = np.concatenate([[4 * k + 2, 4 * k + 3] for k in range(len(waves))])
    return covariance[np.ix_(keep, keep)]


@pytest.mark.parametrize("masked", [False, True])
def test_the_covariance_of_close_waves_is_the_inverse_fisher_matrix(masked):
    """The Fisher information of Gaussian noise by numerical derivatives of the model: an outside road to the same."""
    shape = (60, 72)
    mask = ellipse_mask(shape) if masked else None
    waves = [
        Wave((0.2, 0.11), 2.0, 0.3), Wave((0.2 + 1.8 / 60, 0.11), 2.0, 1.0), Wave((-0.31, 0.02), 1.0, 2.0),
        Wave((-0.31, 0.02 + 2.5 / 72), 3.0, -1.0),
    ]  # fmt: skip
    picture = prepared(noise(np.random.default_rng(2), shape) * 1e-3 + fringes(shape, waves), mask)
    picture.pixels.trend[:] = 0
    fit, _ = fitted(picture, [w.g for w in waves])
    expected = numerical_covariance(shape, waves, mask)
    sigma = np.sqrt(np.diag(expected))
    assert fit.covariance / np.outer(sigma, sigma) == pytest.approx(expected / np.outer(sigma, sigma), abs=0.03)


@pytest.mark.parametrize("separation_bins", [1.8, 3.0])
def test_close_waves_scatter_as_their_joint_covariance_says(separation_bins):
    shape = (64, 64)
    rng = np.random.default_rng(3)
    normalised = []
    for _ in range(200):
        g = np.array(random_g(rng, shape, 0.35))
        angle = rng.uniform(0, 2 * np.pi)
        other = g + separation_bins / 64 * np.array([np.sin(angle), np.cos(angle)])
        waves = [Wave(tuple(g), 1.0, rng.uniform(0, 6)), Wave(tuple(other), 1.0, rng.uniform(0, 6))]
        picture = prepared(noise(rng, shape) + fringes(shape, waves))
        fit, kept = fitted(picture, [g, other])
        assert len(kept) == 2
        error = (fit.frequency - [g, other]).ravel()
        normalised.append(error @ np.linalg.solve(fit.covariance, error))
    # chi squared of four degrees of freedom: mean 4, standard error 0.2
    assert np.mean(normalised) == pytest.approx(4, abs=0.8)


def test_the_covariance_follows_the_noise_at_each_wave():
    shape = (64, 64)
    waves = [Wave((0.2, 0.11), 1.0), Wave((-0.3, 0.3), 1.0)]
    picture = prepared(noise(np.random.default_rng(4), shape) + fringes(shape, waves))
    start = demodulate(picture.pixels, np.array([w.g for w in waves]))
    fit, _ = fit_jointly(picture.pixels, start, np.array([1.0, 4.0]), np.array([5.0, 5.0]))
    sigma = np.sqrt(np.diag(fit.covariance))
    assert sigma[2:] / sigma[:2] == pytest.approx([2, 2], rel=0.2)


def test_the_power_ratio_is_the_fitted_power_over_the_noise():
    shape = (80, 80)
    wave = Wave((0.2, 0.11), 1.0, 0.5)
    picture = prepared(noise(np.random.default_rng(5), shape) + fringes(shape, [wave]))
    fit, _ = fitted(picture, [wave.g], density=2.0)
    assert fit.power_ratio[0] == pytest.approx(np.abs(fit.amplitude[0]) ** 2 * 6400 / 2.0)
    # T = A^2 N / 4 S = 800; a standard error of 57
    assert fit.power_ratio[0] == pytest.approx(800, abs=170)


def test_waves_below_their_threshold_go_and_the_others_are_fitted_without_them():
    shape = (80, 80)
    strong, weak = Wave((0.2, 0.11), 2.0), Wave((-0.3, 0.3), 0.02)
    picture = prepared(noise(np.random.default_rng(6), shape) + fringes(shape, [strong, weak]))
    fit, kept = fitted(picture, [weak.g, strong.g], threshold=15.0)
    assert list(kept) == [1]
    alone, _ = fitted(picture, [strong.g])
    assert fit.frequency == pytest.approx(alone.frequency, abs=1e-6)


def test_nothing_to_fit_is_no_error():
    picture = prepared(noise(np.random.default_rng(7), (64, 64)))
    for start in (np.empty((0, 2)), np.array([[0.2, 0.2]])):
        fit, kept = fitted(picture, start, threshold=50.0)
        assert len(kept) == len(fit.frequency) == len(fit.power_ratio) == 0
        assert fit.covariance.shape == (0, 0)
