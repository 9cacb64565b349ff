"""Misfit: noise is taken for noise, and what is no single plane wave is seen and, where it is two, split."""

import numpy as np
import pytest

from fringespan.peaks.demodulation import demodulate
from fringespan.peaks.joint_fit import fit_jointly
from fringespan.peaks.misfit import MISFIT_LIMIT, cell_residuals, split_wave
from simulated_fringes import Wave, ellipse_mask, fringes, noise, places, prepared, random_g

SHAPE = (128, 128)


def residuals_of(values, start, mask=None):
    picture = prepared(values, mask)
    n = len(start)
    fit, kept = fit_jointly(picture.pixels, demodulate(picture.pixels, np.array(start)), np.ones(n), np.full(n, 10.0))
    assert len(kept) == n
    return picture, fit, cell_residuals(picture.footprint, fit, np.ones(n))


# --- one wave --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("shape", "masked"), [((128, 128), False), ((90, 141), False), ((120, 120), True)])
@pytest.mark.parametrize("amplitude", [0.5, 5.0])
def test_a_plane_wave_leaves_the_noise_only(shape, masked, amplitude):
    mask = ellipse_mask(shape) if masked else None
    rng = np.random.default_rng(1)
    misfits = []
    for _ in range(200):
        wave = Wave(random_g(rng, shape), amplitude, rng.uniform(0, 6))
        misfits.append(residuals_of(noise(rng, shape) + fringes(shape, [wave]), [wave.g], mask)[2].misfit[0])
    # the mean of 12 squared projections of unit mean: standard error 0.02
    assert np.mean(misfits) == pytest.approx(1, abs=0.1)
    # exceeded once in 1000: twice or more in 200 with a probability of 2 %
    assert np.sum(np.array(misfits) > MISFIT_LIMIT) <= 2


def test_strong_neighbours_leave_the_noise_only():
    rng = np.random.default_rng(2)
    misfits = []
    for _ in range(60):
        g = np.array(random_g(rng, SHAPE, 0.35))
        waves = [
            Wave(tuple(g), 1.0, rng.uniform(0, 6)),
            Wave((g[0] + 4 / 128, g[1] - 3 / 128), 20.0, rng.uniform(0, 6)),
        ]
        misfits.append(residuals_of(noise(rng, SHAPE) + fringes(SHAPE, waves), [w.g for w in waves])[2].misfit)
    assert np.mean(misfits, axis=0) == pytest.approx([1, 1], abs=0.2)


def test_the_residual_of_the_cells_adds_up_to_little():
    rng = np.random.default_rng(3)
    wave = Wave((0.21, 0.13), 3.0, 0.4)
    _, fit, cells = residuals_of(noise(rng, SHAPE) + fringes(SHAPE, [wave]), [wave.g])
    assert cells.counts.sum() == 128 * 128
    # least squares leaves nothing of the wave itself
    assert abs(cells.residual[0].sum()) < 0.05 * 128
    assert abs(fit.amplitude[0]) == pytest.approx(1.5, abs=0.05)


# --- no plane wave ---------------------------------------------------------------------------------------------------


def bent(cycles):
    def make(wave):
        y, x = places(SHAPE)
        return wave.amplitude * np.cos(2 * np.pi * (wave.g[0] * y + wave.g[1] * x + cycles * (2 * x / 128) ** 2))

    return make


def ending(share):
    def make(wave):
        return fringes(SHAPE, [wave]) * ellipse_mask(SHAPE, share)

    return make


def reversing(wave):
    y, x = places(SHAPE)
    return fringes(SHAPE, [wave]) * np.sign(x + 0.1 * y)


@pytest.mark.parametrize(
    "make",
    [
        pytest.param(bent(0.3), id="bent by a third of a period"),
        pytest.param(ending(0.5), id="only in the middle"),
        pytest.param(reversing, id="contrast reversing"),
    ],
)
def test_fringes_that_are_no_plane_wave_are_seen(make):
    rng = np.random.default_rng(4)
    for _ in range(10):
        wave = Wave(random_g(rng, SHAPE), 1.0, 0.0)
        picture = prepared(noise(rng, SHAPE) + make(wave))
        # a reversed half leaves nothing at the frequency itself: what detection would find lies beside it
        start = np.array([wave.g]) + np.array([0.0, 0.8 / 128 if make is reversing else 0.0])
        fit, _ = fit_jointly(picture.pixels, demodulate(picture.pixels, start), np.ones(1), np.full(1, 5.0))
        assert cell_residuals(picture.footprint, fit, np.ones(1)).misfit[0] > 2 * MISFIT_LIMIT


# --- two waves in place of one ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("masked", [False, True])
@pytest.mark.parametrize("separation_bins", [1.8, 2.5])
def test_two_close_waves_are_told_apart(separation_bins, masked):
    mask = ellipse_mask(SHAPE) if masked else None
    rng = np.random.default_rng(5)
    found = 0
    for _ in range(40):
        g = np.array(random_g(rng, SHAPE, 0.35))
        angle = rng.uniform(0, 2 * np.pi)
        other = g + separation_bins / 128 * np.array([np.sin(angle), np.cos(angle)])
        waves = [Wave(tuple(g), 0.5, rng.uniform(0, 6)), Wave(tuple(other), 0.5, rng.uniform(0, 6))]
        start = g if rng.random() < 0.5 else other
        picture, fit, cells = residuals_of(noise(rng, SHAPE) + fringes(SHAPE, waves), [start], mask)
        assert cells.misfit[0] > MISFIT_LIMIT
        shifts = split_wave(picture.footprint, cells, 0, complex(fit.amplitude[0]), 1.0)
        if shifts is not None:
            at = fit.frequency[0] + shifts
            # in either order
            wrong = min(np.abs(at - [g, other]).max(), np.abs(at[::-1] - [g, other]).max())
            found += wrong * 128 < 0.35
    assert found >= 38


@pytest.mark.parametrize(
    "make", [pytest.param(bent(1.0), id="bent by a period"), pytest.param(ending(0.4), id="only in the middle")]
)
def test_a_broad_peak_is_not_taken_for_two_waves(make):
    rng = np.random.default_rng(6)
    taken = 0
    for _ in range(10):
        wave = Wave(random_g(rng, SHAPE), 2.0, 0.0)
        picture, fit, cells = residuals_of(noise(rng, SHAPE) + make(wave), [wave.g])
        taken += split_wave(picture.footprint, cells, 0, complex(fit.amplitude[0]), 1.0) is not None
    assert taken == 0
