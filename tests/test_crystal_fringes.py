"""The fringes of one crystal: its extent in the region, its lattice and the points of it, neighbours, broken fringes."""

import numpy as np
import pytest

from fringespan.crystal_fringes import find_crystal_fringes
from fringespan.settings import MeasurementSettings
from simulated_fringes import Wave, ellipse_mask, falling, fringes, noise, places, prepared, white

SHAPE = (224, 224)
BASIS = np.array([(-0.062, 0.118), (0.117, 0.071)])
INDEX = [(1, 0), (0, 1), (1, 1), (1, -1), (2, 0)]
STRENGTH = [1.0, 0.9, 0.6, 0.7, 0.35]


def net(rng, basis=BASIS, index=INDEX, strength=STRENGTH, scale=1.0):
    """Return the waves of a lattice, phases at random."""
    return [
        Wave(tuple(np.array(i) @ basis), scale * s, rng.uniform(0, 2 * np.pi))
        for i, s in zip(index, strength, strict=True)
    ]


def disc(radius, centre=(0.0, 0.0), shape=SHAPE):
    y, x = places(shape)
    return np.hypot(y - centre[0], x - centre[1]) < radius


def found_in(values, mask=None, pixel_size=(1.0, 1.0), lens=None, settings=None):
    picture = prepared(values, mask)
    return find_crystal_fringes(picture.pixels, picture.spectrum, settings or MeasurementSettings(), pixel_size, lens)


def nearest(found, g, shape=SHAPE):
    """Return the position of the peak nearest to g or its opposite, its error, and how many bins that is."""
    best = min(
        (
            (np.hypot(*((sign * f - g) * shape)), k, sign * f - g)
            for k, f in enumerate(found.frequency)
            for sign in (1, -1)
        ),
        key=lambda item: item[0],
    )
    return best[1], best[2], best[0]


# --- a crystal that fills its region ---------------------------------------------------------------------------------


@pytest.mark.parametrize("masked", [False, True])
def test_a_crystal_that_fills_its_region_is_measured_at_the_noise_limit(masked):
    mask = ellipse_mask(SHAPE) if masked else None
    for seed in range(8):
        rng = np.random.default_rng(seed)
        waves = net(rng)
        found = found_in(noise(rng, SHAPE) + fringes(SHAPE, waves), mask)
        assert not found.uneven
        assert found.share == 1.0
        assert found.withheld == (None,) * len(found.power_ratio)
        assert len(found.others) == 0
        # what the lens may still do is bounded by what the noise lets see
        fit = np.sqrt(np.diag(found.covariance).reshape(-1, 2).sum(axis=1))
        assert (found.crystal_along <= 2.5 * fit).all()
        assert np.ptp(found.outline, axis=0) == pytest.approx(SHAPE, abs=6)
        assert found.extent == pytest.approx((224 * np.sqrt(2), 224) if mask is None else (224 * 0.98,) * 2, rel=0.03)


def test_peaks_come_strongest_first_with_all_that_belongs_to_them():
    rng = np.random.default_rng(1)
    waves = net(rng)
    found = found_in(noise(rng, SHAPE) + fringes(SHAPE, waves))
    n = len(found.power_ratio)
    assert n == 5
    assert (np.diff(found.power_ratio) <= 0).all()
    assert found.covariance.shape == (2 * n, 2 * n)
    middle = np.array(found.phase_origin)
    assert middle == pytest.approx((np.array(SHAPE) - 1) / 2)
    for wave in waves:
        k, _, bins = nearest(found, np.array(wave.g))
        assert bins < 0.1
        assert 2 * abs(found.amplitude[k]) == pytest.approx(wave.amplitude, abs=0.05)
        sign = 1 if np.abs(found.frequency[k] - wave.g).max() < 0.01 else -1
        assert np.angle(found.amplitude[k] * np.exp(-1j * sign * wave.phase)) == pytest.approx(0, abs=0.1)
        # T = A^2 N / 4 S
        assert found.power_ratio[k] == pytest.approx(wave.amplitude**2 * 224**2 / 4, rel=0.2)


def test_a_region_of_noise_has_no_fringes_and_no_crystal():
    found = found_in(noise(np.random.default_rng(2), SHAPE, falling))
    assert len(found.power_ratio) == 0
    assert found.frequency.shape == (0, 2)
    assert found.outline is None
    assert found.extent is None
    assert found.lattice is None
    assert found.second_lattice is None


# --- a crystal in part of its region ---------------------------------------------------------------------------------

PARTS = [
    pytest.param(80, (0, 0), id="four tenths, in the middle"),
    pytest.param(88, (10, -15), id="nearly half, off the middle"),
    pytest.param(55, (-40, 45), id="a fifth, in a corner"),
]


@pytest.mark.parametrize(("radius", "centre"), PARTS)
def test_the_extent_of_a_crystal_in_part_of_its_region_is_found(radius, centre):
    for seed in range(3):
        rng = np.random.default_rng(seed)
        crystal = disc(radius, centre)
        found = found_in(noise(rng, SHAPE) + fringes(SHAPE, net(rng)) * crystal)
        assert found.uneven
        assert found.extent == pytest.approx((2 * radius, 2 * radius), rel=0.1)
        middle = (found.outline.max(axis=0) + found.outline.min(axis=0)) / 2 - (np.array(SHAPE) - 1) / 2
        assert middle == pytest.approx(centre, abs=10)


@pytest.mark.parametrize(("radius", "centre"), PARTS)
def test_the_share_of_the_region_that_the_crystal_covers_is_found(radius, centre, request):
    if request.node.callspec.id.startswith("a fifth"):
        reason = "smoothing widens the smallest crystals: 0.26 is found for 0.19"
        request.node.add_marker(pytest.mark.xfail(strict=True, reason=reason))
    rng = np.random.default_rng(10)
    crystal = disc(radius, centre)
    found = found_in(noise(rng, SHAPE) + fringes(SHAPE, net(rng)) * crystal)
    assert found.share == pytest.approx(crystal.mean(), rel=0.2)


@pytest.mark.parametrize(("radius", "centre"), PARTS)
def test_its_peaks_are_found_once_each_and_right_within_their_uncertainties(radius, centre):
    normalised, extra = [], 0
    for seed in range(8):
        rng = np.random.default_rng(seed)
        waves = net(rng)
        found = found_in(noise(rng, SHAPE) + fringes(SHAPE, waves) * disc(radius, centre))
        extra += len(found.power_ratio) - len(waves)
        for wave in waves:
            k, error, bins = nearest(found, np.array(wave.g))
            assert bins < 1
            unit = np.array(wave.g) / np.hypot(*wave.g)
            block = found.covariance[2 * k : 2 * k + 2, 2 * k : 2 * k + 2]
            normalised.append((error @ unit) / np.sqrt(unit @ block @ unit + found.crystal_along[k] ** 2))
    assert extra <= 1
    # an even disc is less uncertain than a real particle, so the stated uncertainty is on the wide side
    assert 0.05 < np.mean(np.square(normalised)) < 1.5
    assert np.mean(np.abs(normalised) < 2) > 0.93


def test_a_strong_crystal_leaves_no_side_lobes():
    rng = np.random.default_rng(3)
    found = found_in(noise(rng, SHAPE) + fringes(SHAPE, net(rng, scale=8.0)) * disc(70))
    assert len(found.power_ratio) <= 6
    assert len(found.others) == 0


# --- neighbours ------------------------------------------------------------------------------------------------------


def test_of_two_crystals_the_larger_is_measured_and_the_other_named():
    rng = np.random.default_rng(4)
    other = BASIS @ np.array([(0.87, 0.49), (-0.49, 0.87)]) * 1.11
    large, small = disc(75, (20, -30)), disc(40, (-60, 65))
    values = (
        noise(rng, SHAPE)
        + fringes(SHAPE, net(rng, scale=1.5)) * large
        + fringes(SHAPE, net(rng, other, scale=1.5)) * small
    )
    found = found_in(values)
    for wave in net(rng):
        assert nearest(found, np.array(wave.g))[2] < 1
    for index in INDEX[:2]:
        g = np.array(index) @ other
        assert nearest(found, g)[2] > 2
        bins = np.minimum(np.hypot(*((found.others - g) * SHAPE).T), np.hypot(*((found.others + g) * SHAPE).T))
        assert bins.min() < 3
    assert found.extent[0] < 2 * 75 * 1.15


def test_two_lattices_on_top_of_each_other_are_both_found():
    rng = np.random.default_rng(5)
    other = BASIS @ np.array([(0.87, 0.49), (-0.49, 0.87)]) * 1.11
    waves = net(rng, scale=1.0) + net(rng, other, scale=0.8)
    found = found_in(noise(rng, SHAPE) + fringes(SHAPE, waves))
    assert found.lattice.member.sum() == 5
    assert found.second_lattice is not None
    assert found.second_lattice.member.sum() == 5
    assert not (found.lattice.member & found.second_lattice.member).any()


def test_a_single_stray_wave_is_off_the_lattice():
    rng = np.random.default_rng(6)
    stray = Wave((0.231, 0.037), 0.5)
    found = found_in(noise(rng, SHAPE) + fringes(SHAPE, [*net(rng), stray]))
    k, _, bins = nearest(found, np.array(stray.g))
    assert bins < 0.5
    assert not found.lattice.member[k]
    assert found.lattice.member.sum() == 5
    assert found.second_lattice is None


# --- points of the lattice -------------------------------------------------------------------------------------------


def test_a_point_of_the_lattice_is_found_at_a_lower_threshold():
    """T = 17 on 224 px: blind search needs 18.5; at a place that is known, some 10 do."""
    amplitude = 2 * np.sqrt(17 / 224**2)
    with_lattice, alone = 0, 0
    weak = np.array([2, 1]) @ BASIS
    for seed in range(40):
        rng = np.random.default_rng(seed)
        faint = Wave(tuple(weak), amplitude, rng.uniform(0, 6))
        plain = noise(rng, SHAPE)
        found = found_in(plain + fringes(SHAPE, [*net(rng), faint]))
        near = nearest(found, weak)
        with_lattice += near[2] < 1
        if near[2] < 1:
            assert found.lattice.member[near[0]]
        by_itself = found_in(plain + fringes(SHAPE, [faint]))
        alone += len(by_itself.power_ratio) > 0 and nearest(by_itself, weak)[2] < 1
    assert with_lattice >= 33
    assert alone <= 22


def test_points_of_a_lattice_without_fringes_stay_empty():
    points = 0
    for seed in range(60):
        rng = np.random.default_rng(seed)
        found = found_in(noise(rng, SHAPE, falling if seed % 2 else white) + fringes(SHAPE, net(rng)))
        points += len(found.power_ratio) - 5
        assert found.at_lattice_point.sum() == len(found.power_ratio) - 5
    # 0.01 a region is meant; three or more in sixty with a probability of 2 %
    assert points <= 2


# --- fringes that bend or break --------------------------------------------------------------------------------------


def bent(wave, cycles):
    y, x = places(SHAPE)
    return wave.amplitude * np.cos(
        2 * np.pi * (wave.g[0] * y + wave.g[1] * x + cycles * (2 * x / 224) ** 2) + wave.phase
    )


@pytest.mark.parametrize("cycles", [0.1, 0.3, 1.0])
def test_bent_fringes_are_broken_or_honestly_uncertain(cycles):
    covered, withheld = [], 0
    for seed in range(20):
        rng = np.random.default_rng(seed)
        wave = Wave((0.11, 0.17), 0.5, rng.uniform(0, 6))
        found = found_in(noise(rng, SHAPE) + bent(wave, cycles))
        k, error, bins = nearest(found, np.array(wave.g))
        assert bins < 3
        if found.withheld[k] is not None:
            withheld += 1
            continue
        unit = np.array(wave.g) / np.hypot(*wave.g)
        block = found.covariance[2 * k : 2 * k + 2, 2 * k : 2 * k + 2]
        covered.append(abs(error @ unit) < 2 * np.sqrt(unit @ block @ unit + found.crystal_along[k] ** 2))
    assert np.mean([*covered, *[True] * withheld]) >= 0.9


@pytest.mark.parametrize(
    "share",
    [
        0.5,
        # the region splits into two peaks beside the true one, each a fair plane wave of its part
        pytest.param(
            0.35, marks=pytest.mark.xfail(strict=True, reason="8 of 10 such discs give a wrong spacing unflagged")
        ),
    ],
)
def test_contrast_that_reverses_towards_the_rim_gives_no_spacing_or_an_honest_one(share):
    """Half of the disc reversed: the two parts cancel at the very frequency of the fringes."""
    wrong = 0
    for seed in range(10):
        rng = np.random.default_rng(seed)
        inner = np.where(disc(90 * np.sqrt(share)), -1.0, 1.0)
        found = found_in(noise(rng, SHAPE) * 0.3 + fringes(SHAPE, [Wave((0.11, 0.17), 1.0)]) * disc(90) * inner)
        for k, reason in enumerate(found.withheld):
            error = found.frequency[k] - (0.11, 0.17)
            unit = np.array([0.11, 0.17]) / np.hypot(0.11, 0.17)
            block = found.covariance[2 * k : 2 * k + 2, 2 * k : 2 * k + 2]
            wrong += reason is None and abs(error @ unit) > 2.5 * np.sqrt(
                unit @ block @ unit + found.crystal_along[k] ** 2
            )
    assert wrong <= 1


# --- the lens and the pixel size -------------------------------------------------------------------------------------


def test_the_known_lens_sets_the_size_of_what_the_picture_cannot_show():
    rng = np.random.default_rng(8)
    y, x = places(SHAPE)
    dome = np.sqrt(np.maximum(1 - (y**2 + x**2) / 90**2, 0))
    values = noise(rng, SHAPE) * 0.5 + fringes(SHAPE, net(rng)) * dome
    unknown = found_in(values, pixel_size=(0.02, 0.02))
    calm = found_in(values, pixel_size=(0.02, 0.02), lens=lambda g: np.zeros_like(g))
    strong = found_in(values, pixel_size=(0.02, 0.02), lens=lambda g: np.full_like(g, 1.5))
    assert calm.crystal_along.sum() < unknown.crystal_along.sum() < strong.crystal_along.sum()
    assert unknown.crystal_along.min() > 0


@pytest.mark.parametrize("pixel_size", [(0.02, 0.02), (0.02, 0.03), (7.0, 7.0)])
def test_extent_is_in_the_unit_of_the_pixel_size_and_frequencies_in_pixels(pixel_size):
    rng = np.random.default_rng(9)
    values = noise(rng, SHAPE) + fringes(SHAPE, net(rng)) * disc(80)
    found = found_in(values, pixel_size=pixel_size)
    assert found.extent == pytest.approx((160 * max(pixel_size), 160 * min(pixel_size)), rel=0.12)
    for index in INDEX:
        assert nearest(found, np.array(index) @ BASIS)[2] < 0.5
    # the lattice is in pixels too
    spanned = found.lattice.basis @ np.linalg.inv(BASIS)
    assert np.abs(spanned - np.rint(spanned)).max() < 0.02
