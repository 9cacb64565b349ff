"""All fringes of a region at once: pairs, weak beside strong, lattices, no ghosts, one broad peak stays one."""

import numpy as np
import pytest

from fringespan.peaks.fringes import find_fringes
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

SHAPE = (128, 128)


def found_in(values, mask=None, rate=0.01):
    picture = prepared(values, mask)
    return find_fringes(
        picture.pixels, picture.spectrum, picture.background, false_peaks_per_region=rate, smallest_distance_bins=4.0
    )


def places_of(waves, found, shape=SHAPE, tolerance_bins=0.9):
    """Return for each wave how many found peaks lie near it."""
    g = np.array([w.g for w in waves])[:, None]
    at = found.fit.frequency[None]
    near = [(np.abs(at - s * g) * shape < tolerance_bins).all(axis=2) for s in (1, -1)]
    return (near[0] | near[1]).sum(axis=1)


def turned(g, separation_bins, rng, shape=SHAPE):
    """Return a vector that many bins away in a random direction."""
    angle = rng.uniform(0, 2 * np.pi)
    return tuple(np.array(g) + separation_bins / min(shape) * np.array([np.sin(angle), np.cos(angle)]))


# --- several fringes -------------------------------------------------------------------------------------------------


def equal_pair(separation, amplitude=0.5):
    def draw(rng):
        g = random_g(rng, SHAPE, 0.36)
        other = turned(g, separation, rng)
        return [Wave(g, amplitude, rng.uniform(0, 6)), Wave(other, amplitude, rng.uniform(0, 6))]

    return draw


def weak_beside_strong(ratio, separation):
    def draw(rng):
        g = random_g(rng, SHAPE, 0.36)
        return [Wave(g, 0.3 * ratio, rng.uniform(0, 6)), Wave(turned(g, separation, rng), 0.3, rng.uniform(0, 6))]

    return draw


def with_harmonic(rng):
    g = random_g(rng, SHAPE, 0.2)
    return [Wave(g, 1.0, rng.uniform(0, 6)), Wave((2 * g[0], 2 * g[1]), 0.3, rng.uniform(0, 6))]


def net(rng):
    """Two vectors, their sum and their difference."""
    turn, length = rng.uniform(-np.pi / 2, np.pi / 2), rng.uniform(0.12, 0.2)
    a = length * np.array([np.sin(turn), np.cos(turn)])
    turn += rng.uniform(1.0, 1.6)
    b = length * rng.uniform(0.8, 1.2) * np.array([np.sin(turn), np.cos(turn)])
    return [
        Wave(tuple(g), m, rng.uniform(0, 6)) for g, m in zip((a, b, a + b, a - b), (0.8, 0.7, 0.5, 0.4), strict=True)
    ]


def many(rng):
    waves = []
    while len(waves) < 40:
        g = random_g(rng, SHAPE, 0.45)
        if all(min(np.hypot(*((np.array(g) - s * np.array(w.g)) * SHAPE)) for s in (1, -1)) > 8 for w in waves):
            waves.append(Wave(g, rng.uniform(0.3, 2.0), rng.uniform(0, 6)))
    return waves


SCENES = [
    pytest.param(equal_pair(1.8), white, 40, id="equal pair 1.8 bins apart"),
    pytest.param(equal_pair(2.5), white, 40, id="equal pair 2.5 bins apart"),
    pytest.param(equal_pair(5.0), white, 40, id="equal pair 5 bins apart"),
    pytest.param(equal_pair(2.5, 5.0), white, 80, id="strong equal pair 2.5 bins apart"),
    pytest.param(weak_beside_strong(20, 6), white, 40, id="1 beside 20, 6 bins away"),
    pytest.param(weak_beside_strong(100, 12), white, 40, id="1 beside 100, 12 bins away"),
    pytest.param(with_harmonic, white, 40, id="second order"),
    pytest.param(net, falling, 40, id="lattice on film"),
    pytest.param(many, white, 5, id="forty at once"),
]


@pytest.mark.parametrize(("draw", "density", "pictures"), SCENES)
def test_every_fringe_is_found_once_and_nothing_else(draw, density, pictures):
    rng = np.random.default_rng(1)
    wanted, once, extra = 0, 0, 0
    for _ in range(pictures):
        waves = draw(rng)
        found = found_in(noise(rng, SHAPE, density) + fringes(SHAPE, waves))
        counts = places_of(waves, found)
        wanted += len(waves)
        once += (counts == 1).sum()
        extra += len(found.density) - counts.sum()
    assert once >= 0.985 * wanted
    # one in a hundred regions is allowed: two or more in forty with a probability of 6 %, three of 1 %
    assert extra <= 2


# --- the noise beside them -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("density", [white, falling, blurred])
def test_density_limit_and_misfit_go_with_each_fringe(density):
    rng = np.random.default_rng(2)
    ratio = []
    for _ in range(30):
        wave = Wave(random_g(rng, SHAPE), 0.6, rng.uniform(0, 6))
        found = found_in(noise(rng, SHAPE, density) + fringes(SHAPE, [wave]))
        (k,) = np.flatnonzero(found.fit.power_ratio == found.fit.power_ratio.max())
        ratio.append(found.density[k] / density(np.hypot(*wave.g)))
        assert (found.fit.power_ratio >= found.limit).all()
        assert len(found.residuals.misfit) == len(found.density) == len(found.limit)
    assert np.mean(ratio) == pytest.approx(1, abs=0.08)


def noise_with(shape, **also):
    """Return a maker of noise with something in it that is no fringe."""
    y, x = places(shape)

    def make(rng):
        values = noise(rng, shape, also.get("density", white))
        if "bowl" in also:
            values += also["bowl"] * (y / shape[0] + (x / shape[1]) ** 2)
        if "rows" in also:
            values += also["rows"] * rng.standard_normal((shape[0], 1))
        if "columns" in also:
            values += also["columns"] * rng.standard_normal((1, shape[1]))
        if "edge" in also:
            values += also["edge"] * (x + rng.uniform(0.05, 0.3) * y > rng.uniform(-10, 10))
        if "electrons" in also:
            values = rng.poisson(also["electrons"], shape).astype(float)
        return values

    return make


QUIET = [
    pytest.param(noise_with((64, 64)), None, 300, id="white, 64 px"),
    pytest.param(noise_with((48, 72), density=falling), None, 250, id="falling, 48 x 72 px"),
    pytest.param(noise_with((160, 160), density=steeply_falling), None, 80, id="steeply falling"),
    pytest.param(noise_with((160, 160), density=blurred), None, 80, id="blurred"),
    pytest.param(noise_with((200, 200), density=transfer_rings), None, 60, id="rings of the lens"),
    pytest.param(noise_with((128, 128), electrons=1.0), None, 100, id="one electron a pixel"),
    pytest.param(noise_with((128, 128), bowl=50.0), None, 100, id="uneven illumination"),
    pytest.param(noise_with((160, 160), rows=1.0), None, 80, id="uneven scan rows"),
    pytest.param(noise_with((160, 160), columns=1.0), None, 80, id="uneven columns"),
    pytest.param(noise_with((160, 160), edge=5.0), None, 80, id="a sharp edge"),
    pytest.param(noise_with((160, 160), density=falling), ellipse_mask((160, 160)), 80, id="falling, ellipse"),
]


@pytest.mark.parametrize(("make", "mask", "pictures"), QUIET)
def test_noise_alone_shows_no_fringe(make, mask, pictures):
    """Asked for 0.05 false peaks a region, so that a short run can count; never more than its 99 % Poisson limit."""
    rng = np.random.default_rng(3)
    false = sum(len(found_in(make(rng), mask, rate=0.05).density) for _ in range(pictures))
    expected = 0.05 * pictures
    assert false <= expected + 2.33 * np.sqrt(expected) + 0.5


# --- fringes that are no plane wave ----------------------------------------------------------------------------------


def bent(wave, shape, cycles):
    y, x = places(shape)
    return wave.amplitude * np.cos(
        2 * np.pi * (wave.g[0] * y + wave.g[1] * x + cycles * (2 * x / shape[1]) ** 2) + wave.phase
    )


@pytest.mark.parametrize("cycles", [0.1, 0.3, 1.0])
def test_a_bent_fringe_stays_one_peak(cycles):
    shape = (192, 192)
    rng = np.random.default_rng(4)
    peaks = []
    for _ in range(20):
        wave = Wave(random_g(rng, shape), 0.5, rng.uniform(0, 6))
        found = found_in(noise(rng, shape) + bent(wave, shape, cycles))
        peaks.append(len(found.density))
        # the mean of the bent vector is that of the middle
        assert places_of([wave], found, shape, 1.5)[0] == 1
    assert np.mean(peaks) < 1.2


@pytest.mark.parametrize("share", [0.4, 0.6])
def test_a_crystal_in_the_middle_of_the_region_stays_one_peak(share):
    shape = (192, 192)
    rng = np.random.default_rng(5)
    peaks = []
    for _ in range(20):
        wave = Wave(random_g(rng, shape), 0.5, rng.uniform(0, 6))
        found = found_in(noise(rng, shape) + fringes(shape, [wave]) * ellipse_mask(shape, share))
        peaks.append(len(found.density))
        assert places_of([wave], found, shape, 1.5)[0] == 1
    assert np.mean(peaks) < 1.3


def test_of_two_opposite_vectors_only_one_is_reported():
    rng = np.random.default_rng(6)
    for g in [(0.25, 0.0), (0.25, 0.001), (0.0, 0.3), (0.001, 0.3)]:
        assert len(found_in(noise(rng, SHAPE) + fringes(SHAPE, [Wave(g, 1.0, 1.0)])).density) == 1
