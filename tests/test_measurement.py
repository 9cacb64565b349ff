"""The whole measurement: what must not change it, what must move it exactly, how right it is, what it refuses."""

import dataclasses
import json
import math
import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from skimage.draw import polygon2mask
from skimage.feature import peak_local_max

from fringespan.exceptions import FringespanError, RegionError
from fringespan.measurement import measure
from fringespan.micrograph import Micrograph
from fringespan.reading import read
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from simulated_fringes import (
    Trials,
    Wave,
    blurred,
    ellipse_mask,
    falling,
    fringes,
    matching_peak,
    noise,
    places,
    random_g,
    steeply_falling,
    transfer_rings,
    trials,
    white,
)

HERE = Path(__file__).parent
SHAPE = (120, 144)
WAVES = [Wave((-0.11, 0.23), 1.0, 0.4), Wave((0.21, 0.09), 0.8, 1.3), Wave((0.1, 0.32), 0.5, -2.0)]
"""Two sets of fringes and their sum."""


def picture(seed=0, shape=SHAPE, waves=WAVES, density=white):
    return noise(np.random.default_rng(seed), shape, density) + fringes(shape, waves) + 20


def vectors(measurement):
    return np.array([peak.g_per_px for peak in measurement.peaks])


def same_vectors(first, second, abs_=1e-6):
    """Say whether two lists of vectors are the same, in any order and either of the two opposite directions."""
    first, second = np.asarray(first), np.asarray(second)
    if len(first) != len(second):
        return False
    return all(min(np.abs(second - g).max(axis=1).min(), np.abs(second + g).max(axis=1).min()) < abs_ for g in first)


# --- what must not change it -----------------------------------------------------------------------------------------


def test_the_same_picture_gives_the_same_result():
    first, second = measure(Micrograph(picture())), measure(Micrograph(picture()))
    assert (vectors(first) == vectors(second)).all()
    assert [p.signal_to_noise for p in first.peaks] == [p.signal_to_noise for p in second.peaks]


@given(offset=st.floats(-1e4, 1e4), factor=st.floats(1e-6, 1e6), sign=st.sampled_from([-1, 1]))
@settings(max_examples=25)
def test_a_constant_or_a_factor_on_the_pixel_values_changes_nothing(offset, factor, sign):
    plain = measure(Micrograph(picture()))
    changed = measure(Micrograph(sign * factor * (picture() + offset)))
    assert same_vectors(vectors(plain), vectors(changed), 3e-5)
    for before, after in zip(plain.peaks, changed.peaks, strict=True):
        assert after.signal_to_noise == pytest.approx(before.signal_to_noise, rel=0.02)
        assert after.amplitude == pytest.approx(before.amplitude * factor, rel=0.02)
        assert after.g_covariance_per_px2 == pytest.approx(before.g_covariance_per_px2, rel=0.05, abs=1e-9)


@pytest.mark.parametrize("factor", [1e-30, 1e-18, 1e15, 1e25])
def test_pixel_values_of_any_size_are_measured_alike(factor):
    """Detectors state amperes or scaled counts; single precision ends near 1e-38 and 1e38, and squares sooner."""
    assert same_vectors(vectors(measure(Micrograph(picture()))), vectors(measure(Micrograph(picture() * factor))), 3e-5)


TYPES = ["u1", "u2", ">u2", "i2", ">i2", "i4", "u4", "i8", "u8", "f2", "f4", ">f4", "f8", ">f8"]


@pytest.mark.parametrize("dtype", TYPES)
def test_whole_numbers_are_measured_alike_in_every_type(dtype):
    counts = np.rint(picture() * 5 + 20)
    assert counts.min() >= 0
    assert counts.max() < 255
    expected, got = measure(Micrograph(counts.astype(np.float64))), measure(Micrograph(counts.astype(dtype)))
    assert vectors(got) == pytest.approx(vectors(expected), abs=1e-6)
    assert [p.d_nm for p in got.peaks] == [p.d_nm for p in expected.peaks]


@pytest.mark.parametrize(
    "stored",
    [
        pytest.param(np.asfortranarray, id="columns first"),
        pytest.param(lambda a: np.pad(a, 5)[5:-5, 5:-5], id="a view into a larger picture"),
        pytest.param(lambda a: np.repeat(np.repeat(a, 2, 0), 2, 1)[::2, ::2], id="every second pixel of another"),
        pytest.param(lambda a: a.tolist(), id="lists"),
    ],
)
def test_how_the_pixels_lie_in_memory_does_not_matter(stored):
    assert (vectors(measure(Micrograph(stored(picture())))) == vectors(measure(Micrograph(picture())))).all()


def test_the_pixels_are_left_as_they_are():
    pixels = picture()
    pixels[3, 4], pixels[50, 60] = np.nan, 1e6
    kept = pixels.copy()
    pixels.setflags(write=False)
    measure(Micrograph(pixels))
    measure(Micrograph(pixels), Region.ellipse("grain", (60, 70), (50, 60)))
    assert np.array_equal(pixels, kept, equal_nan=True)


# --- what must move it exactly ---------------------------------------------------------------------------------------

TURNS = [
    pytest.param(lambda a: a[::-1], lambda g: g * [-1, 1], id="upside down"),
    pytest.param(lambda a: a[:, ::-1], lambda g: g * [1, -1], id="mirrored"),
    pytest.param(lambda a: a.T, lambda g: g[:, ::-1], id="rows for columns"),
    pytest.param(lambda a: np.rot90(a), lambda g: np.stack([-g[:, 1], g[:, 0]], 1), id="a quarter counter-clockwise"),
    pytest.param(lambda a: np.rot90(a, 2), lambda g: g, id="half a turn"),
]


@pytest.mark.parametrize(("turn", "moved"), TURNS)
@pytest.mark.parametrize("shape", [(120, 144), (97, 101)])
def test_turning_the_picture_turns_the_vectors(turn, moved, shape):
    plain = measure(Micrograph(picture(shape=shape)))
    turned = measure(Micrograph(np.ascontiguousarray(turn(picture(shape=shape)))))
    assert len(plain.peaks) == 3
    # the same pixels; noise is judged from other samples of the same spectrum, which moves nothing but the last digits
    assert same_vectors(moved(vectors(plain)), vectors(turned), 2e-5)


def test_a_quarter_turn_counter_clockwise_adds_ninety_degrees():
    plain, turned = (measure(Micrograph(np.ascontiguousarray(p))) for p in (picture(), np.rot90(picture())))
    for before, after in zip(plain.peaks, turned.peaks, strict=True):
        away = (after.direction_deg - before.direction_deg - 90) % 180
        assert min(away, 180 - away) < 0.02


@pytest.mark.parametrize(
    ("g", "direction"),
    [
        pytest.param((0.0, 0.2), 0, id="upright fringes"),
        pytest.param((0.2, 0.0), 90, id="level fringes"),
        pytest.param((-0.15, 0.15), 45, id="g up and to the right"),
        pytest.param((0.15, 0.15), 135, id="g down and to the right, so also up and to the left"),
    ],
)
def test_the_direction_is_counter_clockwise_from_the_right_of_the_screen(g, direction):
    (peak,) = measure(Micrograph(picture(waves=[Wave(g)]))).peaks
    away = (peak.direction_deg - direction) % 180
    assert min(away, 180 - away) < 0.2
    row, column = peak.g_per_px
    assert column > 0 or (column == 0 and row < 0)


@given(row_nm=st.floats(0.005, 0.1), column_nm=st.floats(0.005, 0.1), shear=st.floats(-0.4, 0.4))
@settings(max_examples=25)
def test_pixel_size_and_shear_transform_the_vectors_exactly(row_nm, column_nm, shear):
    micrograph = Micrograph(picture(), pixel_size_nm=(row_nm, column_nm), shear=shear)
    measurement = measure(micrograph)
    transform = np.linalg.inv(micrograph.geometry_nm_per_px)
    assert len(measurement.peaks) >= 3
    for peak in measurement.peaks:
        # (y, x) = M (row, column), so g . r is kept by g_per_nm = M^-T g_per_px
        assert peak.g_per_nm == pytest.approx(transform.T @ peak.g_per_px)
        assert peak.g_covariance_per_nm2 == pytest.approx(transform.T @ peak.g_covariance_per_px2 @ transform)
        assert peak.d_nm == pytest.approx(1 / np.hypot(*peak.g_per_nm))
        assert peak.period_px == pytest.approx(1 / np.hypot(*peak.g_per_px))
        y, x = peak.g_per_nm
        assert peak.direction_deg == pytest.approx(math.degrees(math.atan2(-y, x)) % 180, abs=1e-6)


@given(scale=st.floats(0.1, 50))
@settings(max_examples=15)
def test_the_pixel_size_scales_every_length_and_turns_nothing(scale):
    def at(size):
        return measure(Micrograph(picture(), pixel_size_nm=size, pixel_size_relative_uncertainty=0.01))

    one, other = at(0.02), at(0.02 * scale)
    for before, after in zip(one.peaks, other.peaks, strict=True):
        for name in ("d_nm", "d_fit_uncertainty_nm", "d_crystal_uncertainty_nm", "d_uncertainty_nm", "d_lattice_nm"):
            assert getattr(after, name) == pytest.approx(scale * getattr(before, name), rel=1e-6)
        assert after.direction_deg == pytest.approx(before.direction_deg)
        assert (after.g_per_px == before.g_per_px).all()
        assert after.lattice_index == before.lattice_index
    assert other.lattice.lengths_nm == pytest.approx(np.array(one.lattice.lengths_nm) * scale)
    assert [a.angle_deg for a in other.angles] == pytest.approx([a.angle_deg for a in one.angles])


def test_a_stretched_and_sheared_picture_shows_the_specimen_as_it_is():
    """The same lattice, sampled on other pixels: in nm all is the same within the fit's uncertainty."""
    truth = np.array([(-3.1, 2.9), (2.8, 3.3)])
    reference = None
    for row_nm, column_nm, shear in [(0.02, 0.02, 0.0), (0.02, 0.03, 0.0), (0.025, 0.02, 0.15)]:
        geometry = np.array([[row_nm, 0.0], [shear * column_nm, column_nm]])
        waves = [Wave(tuple(geometry.T @ g), 1.0, 0.5) for g in truth]
        pixels = picture(shape=(160, 160), waves=waves)
        got = measure(Micrograph(pixels, pixel_size_nm=(row_nm, column_nm), shear=shear))
        spacings = sorted(p.d_nm for p in got.peaks)
        reference = reference or sorted((1 / np.hypot(*truth.T)).tolist())
        assert spacings == pytest.approx(reference, rel=1e-3)
        between = math.degrees(math.acos(abs(truth[0] @ truth[1]) / math.prod(np.hypot(*truth.T))))
        assert min(got.angles[0].angle_deg, 180 - got.angles[0].angle_deg) == pytest.approx(between, abs=0.2)


# --- the region ------------------------------------------------------------------------------------------------------

PLACES = [
    pytest.param((0, 0), id="top left"),
    pytest.param((0, 80), id="top right"),
    pytest.param((60, 0), id="bottom left"),
    pytest.param((60, 80), id="bottom right"),
    pytest.param((31, 17), id="inside"),
]


@pytest.mark.parametrize("corner", PLACES)
@pytest.mark.parametrize("dtype", [np.float64, np.uint8])
def test_a_region_is_measured_like_a_picture_of_its_pixels_alone(corner, dtype):
    pixels = (picture() * 5 + 20).astype(dtype)
    top, left = corner
    part = Region.rectangle("part", top, left, top + 59, left + 63)
    whole = measure(Micrograph(np.ascontiguousarray(pixels[top : top + 60, left : left + 64])))
    got = measure(Micrograph(pixels), part)
    assert len(got.peaks) >= 2
    assert (vectors(got) == vectors(whole)).all()
    assert got.region is part
    inside = got.crystal_outline_px - corner
    assert inside.min() >= -0.5
    assert inside.max() <= 64


def test_what_lies_outside_the_region_does_not_matter():
    pixels = picture()
    corners = [(10, 20), (20, 120), (90, 130), (110, 60), (70, 10)]
    region = Region("grain", corners)
    mask = polygon2mask(SHAPE, np.array(corners, float))
    # a margin of two pixels, so that no definition of the outline matters
    edge = np.zeros_like(mask)
    edge[2:-2, 2:-2] = True
    spoilt = pixels.copy()
    far = ~(mask | np.roll(mask, 2, 0) | np.roll(mask, -2, 0) | np.roll(mask, 2, 1) | np.roll(mask, -2, 1))
    spoilt[far] = np.random.default_rng(1).uniform(-1e4, 1e4, far.sum())
    spoilt[far & edge & (np.arange(SHAPE[1]) % 7 == 0)] = np.nan
    plain, other = measure(Micrograph(pixels), region), measure(Micrograph(spoilt), region)
    assert len(plain.peaks) >= 2
    assert (vectors(plain) == vectors(other)).all()


@pytest.mark.parametrize("corner", [(0, 0), (30, 40)])
def test_phase_and_amplitude_rebuild_the_fringes_in_the_picture(corner):
    pixels = picture()
    region = Region.rectangle("part", *corner, corner[0] + 80, corner[1] + 90)
    row, column = np.indices(SHAPE)
    for peak in measure(Micrograph(pixels), region).peaks:
        r0, c0 = peak.phase_origin_px
        rebuilt = peak.amplitude * np.cos(
            2 * np.pi * (peak.g_per_px[0] * (row - r0) + peak.g_per_px[1] * (column - c0)) + peak.phase_rad
        )
        wave = min(WAVES, key=lambda w: min(np.abs(peak.g_per_px - w.g).max(), np.abs(peak.g_per_px + w.g).max()))
        inside = np.s_[corner[0] : corner[0] + 81, corner[1] : corner[1] + 91]
        assert np.abs(rebuilt - fringes(SHAPE, [wave]))[inside].max() < 0.25 * wave.amplitude


# --- how right it is: the Cramer-Rao bound ---------------------------------------------------------------------------


def one_wave(shape, amplitude):
    return lambda rng: [Wave(random_g(rng, shape), amplitude, rng.uniform(0, 2 * np.pi))]


ACCURACY = [
    pytest.param((64, 64), 0.6, white, 250, id="white, 64 px, weak"),
    pytest.param((64, 64), 5.0, white, 250, id="white, 64 px, strong"),
    pytest.param((96, 160), 0.4, white, 200, id="white, oblong"),
    pytest.param((101, 77), 1.0, white, 200, id="white, odd"),
    pytest.param((128, 128), 0.35, falling, 150, id="falling"),
    pytest.param((128, 128), 0.5, steeply_falling, 150, id="steeply falling"),
    pytest.param((128, 128), 0.3, blurred, 150, id="blurred by the detector"),
    pytest.param((160, 160), 0.4, transfer_rings, 100, id="rings of the lens"),
]


def is_at_the_bound(outcome: Trials) -> None:
    """Both errors per axis: 1 / sqrt(4 n) relative for the RMS, sqrt(0.05 * 0.95 / 2 n) for the coverage."""
    n = len(outcome.errors)
    assert outcome.found >= 0.99
    assert outcome.rms_over_bound == pytest.approx(1.02, abs=0.03 + 3.3 / math.sqrt(4 * n))
    assert outcome.coverage == pytest.approx(0.95, abs=0.01 + 3.3 * math.sqrt(0.0475 / 2 / n))
    # 0.01 a picture is meant
    assert outcome.extra <= 2 + 0.03 * outcome.pictures


@pytest.mark.parametrize(("shape", "amplitude", "density", "pictures"), ACCURACY)
def test_errors_are_at_the_cramer_rao_bound_and_intervals_hold(shape, amplitude, density, pictures):
    """RMS error over the bound of Rife & Boorstyn 1974 and Kay 1993 (`simulated_fringes.cramer_rao_bound`)."""
    is_at_the_bound(trials(pictures, shape, one_wave(shape, amplitude), density=density, seed=1))


@pytest.mark.parametrize(("electrons", "contrast"), [(2.0, 0.4), (40.0, 0.1)])
def test_counted_electrons_are_measured_at_the_bound(electrons, contrast):
    is_at_the_bound(trials(150, (112, 112), one_wave((112, 112), contrast), electrons=electrons, seed=2))


def outlined(corners):
    """Return a region and the mask of its pixels by scikit-image."""
    return Region("grain", corners), polygon2mask((128, 128), np.array(corners, float))


@pytest.mark.parametrize(
    "corners",
    [
        pytest.param(Region.ellipse("e", (63.3, 64.1), (58, 50), 20).vertices_px, id="ellipse"),
        pytest.param([(9.3, 25.2), (12.1, 92.4), (63.7, 122.3), (118.6, 79.9), (102.2, 10.4)], id="five corners"),
    ],
)
@pytest.mark.parametrize("density", [white, falling])
def test_regions_that_are_no_rectangle_are_measured_at_their_own_bound(corners, density):
    region, mask = outlined(corners)
    is_at_the_bound(
        trials(120, (128, 128), one_wave((128, 128), 0.6), density=density, region=region, mask=mask, seed=3)
    )


def test_two_waves_close_together_are_each_measured_at_the_bound():
    """Pairs 1.8 bins apart of random phase: the bound of one alone grows little when averaged over the phase."""

    def draw(rng):
        g = random_g(rng, (128, 128), 0.36)
        turn = rng.uniform(0, 2 * np.pi)
        other = g[0] + 1.8 / 128 * math.sin(turn), g[1] + 1.8 / 128 * math.cos(turn)
        return [Wave(g, 0.6, rng.uniform(0, 6)), Wave(other, 0.6, rng.uniform(0, 6))]

    outcome = trials(80, (128, 128), draw, seed=4)
    assert outcome.found >= 0.98
    assert outcome.coverage == pytest.approx(0.95, abs=0.045)
    assert outcome.rms_over_bound < 1.2


def test_a_weak_wave_beside_a_strong_one_is_measured_at_the_bound():
    def draw(rng):
        g = random_g(rng, (128, 128), 0.36)
        turn = rng.uniform(0, 2 * np.pi)
        return [
            Wave((g[0] + 6 / 128 * math.sin(turn), g[1] + 6 / 128 * math.cos(turn)), 0.3, rng.uniform(0, 6)),
            Wave(g, 6.0, rng.uniform(0, 6)),
        ]

    is_at_the_bound(trials(100, (128, 128), draw, seed=5))


def test_signal_to_noise_is_the_root_of_the_matched_filter_power():
    """T = A^2 N / (4 S)."""
    values = []
    for seed in range(40):
        (peak,) = measure(Micrograph(picture(seed, (128, 128), [Wave((0.13, 0.2), 0.5)]))).peaks[:1]
        values.append(peak.signal_to_noise)
    assert np.mean(values) == pytest.approx(math.sqrt(0.25 * 128 * 128 / 4), rel=0.03)


def test_pair_angles_scatter_as_they_say():
    errors = []
    for seed in range(120):
        got = measure(Micrograph(picture(seed, (96, 96), WAVES[:2])))
        first, second = (np.array(w.g) for w in WAVES[:2])
        truth = math.degrees(math.acos(first @ second / np.hypot(*first) / np.hypot(*second)))
        (angle,) = [a for a in got.angles if a.peaks == (0, 1)]
        off = min(abs(angle.angle_deg - truth), abs(180 - angle.angle_deg - truth))
        errors.append(off / angle.angle_uncertainty_deg)
    assert np.mean(np.square(errors)) == pytest.approx(1, abs=0.45)


# --- false alarms ----------------------------------------------------------------------------------------------------


def test_a_choice_of_more_false_peaks_is_kept_on_noise():
    """One false peak per region asked for, so that a hundred regions can tell; never many more, and not far fewer."""
    loose = MeasurementSettings(false_peaks_per_region=1.0)
    pictures_ = [Micrograph(noise(np.random.default_rng(seed), (96, 96)) + 20) for seed in range(150)]
    found = sum(len(measure(micrograph, settings=loose).peaks) for micrograph in pictures_)
    assert 40 < found < 150 + 3 * math.sqrt(150)


def test_the_default_shows_next_to_nothing_on_noise():
    found = 0
    for seed in range(150):
        density = (white, falling, blurred)[seed % 3]
        found += len(measure(Micrograph(noise(np.random.default_rng(seed), (80, 80), density) + 20)).peaks)
    # 1.5 are meant; six or more with a probability below 0.5 %
    assert found <= 5


# --- bad pixels ------------------------------------------------------------------------------------------------------

BAD = [
    pytest.param(np.float32, np.nan, 30, id="not a number"),
    pytest.param(np.float64, np.inf, 30, id="infinite"),
    pytest.param(np.float64, -np.inf, 1, id="one infinitely negative"),
    pytest.param(np.float32, 1e7, 12, id="hot"),
    pytest.param(np.uint16, 0, 30, id="dead"),
    pytest.param(np.uint16, 65535, 30, id="at the end of the range"),
]


@pytest.mark.parametrize(("dtype", "value", "count"), BAD)
@pytest.mark.parametrize("outline", ["whole", "ellipse"])
def test_bad_pixels_are_masked_and_said(dtype, value, count, outline):
    region = None if outline == "whole" else Region.ellipse("grain", (60, 70), (58, 68))
    clean = (picture() * 30 + 2000).astype(dtype)
    spoilt = clean.copy()
    rows, columns = np.random.default_rng(5).integers(20, 100, (2, count))
    spoilt[rows, columns] = value
    expected, got = measure(Micrograph(clean), region), measure(Micrograph(spoilt), region)
    assert same_vectors(vectors(expected), vectors(got), 3e-4)
    for before, after in zip(expected.peaks, got.peaks, strict=True):
        assert after.signal_to_noise == pytest.approx(before.signal_to_noise, rel=0.1)
    said = {c.text for c in got.cautions} - {c.text for c in expected.cautions}
    wrong = len({(r, c) for r, c in zip(rows.tolist(), columns.tolist(), strict=True)})
    assert any(text.startswith("One pixel" if wrong == 1 else f"{wrong} ") for text in said)


# --- refusals --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("dtype", [np.uint8, np.int32, np.float32, np.float64])
@pytest.mark.parametrize("value", [0, 7, 100])
def test_a_constant_picture_is_refused_by_the_name_of_the_region(dtype, value):
    constant = Micrograph(np.full((60, 70), value, dtype))
    with pytest.raises(RegionError, match="region 'whole picture': all its pixels are equal"):
        measure(constant)
    with pytest.raises(RegionError, match="region 'grain B': all its pixels are equal"):
        measure(constant, Region.ellipse("grain B", (30, 35), (25, 30)))


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_a_picture_without_any_pixel_is_refused(value):
    with pytest.raises(RegionError, match="whole picture"):
        measure(Micrograph(np.full((60, 70), value)))


def test_a_constant_part_of_a_picture_is_refused():
    pixels = picture()
    pixels[:60] = 3.0
    with pytest.raises(RegionError, match="region 'vacuum': all its pixels are equal"):
        measure(Micrograph(pixels), Region.rectangle("vacuum", 0, 0, 59, 143))
    measure(Micrograph(pixels), Region.rectangle("grain", 60, 0, 119, 143))


def test_a_region_outside_or_too_small_is_refused_by_name():
    with pytest.raises(RegionError, match="region 'far away': no pixel"):
        measure(Micrograph(picture()), Region.rectangle("far away", 500, 500, 600, 600))
    with pytest.raises(RegionError, match="region 'speck': 11 px across, at least 24 px"):
        measure(Micrograph(picture()), Region.rectangle("speck", 10, 10, 20, 20))


# --- bad input of every kind -----------------------------------------------------------------------------------------

NUMBERS = (
    "g_per_px", "g_covariance_per_px2", "period_px", "direction_deg", "direction_uncertainty_deg", "signal_to_noise",
    "amplitude", "phase_rad", "phase_origin_px",
)  # fmt: skip
NUMBERS_OR_NONE = (
    "g_per_nm", "g_covariance_per_nm2", "d_nm", "d_fit_uncertainty_nm", "d_crystal_uncertainty_nm", "d_uncertainty_nm",
    "d_lattice_nm", "d_lattice_uncertainty_nm", "visibility", "two_theta_mrad",
)  # fmt: skip


def is_sound(measurement):
    """Every number is finite and possible."""
    for peak in measurement.peaks:
        for name in NUMBERS:
            assert np.isfinite(getattr(peak, name)).all(), name
        for name in NUMBERS_OR_NONE:
            value = getattr(peak, name)
            assert value is None or np.isfinite(value).all(), name
        assert 0 <= peak.direction_deg < 180
        assert (np.abs(peak.g_per_px) <= 0.55).all()
        assert np.linalg.eigvalsh(peak.g_covariance_per_px2).min() > -1e-18
        assert peak.signal_to_noise > 0
        assert peak.withheld is None or peak.d_nm is None
    n = len(measurement.peaks)
    assert len(measurement.angles) == n * (n - 1) // 2
    for angle in measurement.angles:
        assert 0 <= angle.angle_deg <= 180
        assert math.isfinite(angle.angle_uncertainty_deg)
    assert (np.diff([p.signal_to_noise for p in measurement.peaks]) <= 1e-9).all()


def only_a_refusal_comes_out(make):
    try:
        measurement = make()
    except FringespanError:
        return
    is_sound(measurement)


@st.composite
def pictures(draw, smallest):
    """Pictures of fringes, noise, patterns and constants, in any type, with holes in them."""
    shape = draw(st.tuples(st.integers(smallest, 90), st.integers(smallest, 90)))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    y, x = np.indices(shape)
    g = rng.uniform(-0.5, 0.5, 2)
    wave = np.cos(2 * np.pi * (g[0] * y + g[1] * x))
    kinds = {
        "fringes": lambda: wave + rng.standard_normal(shape),
        "clean fringes": lambda: wave,
        "noise": lambda: rng.standard_normal(shape),
        "spike": lambda: (y == shape[0] // 2) * (x == shape[1] // 3) * 1.0,
        "stripes": lambda: (x % rng.integers(2, 9) < 2) * 1.0,
        "ramp": lambda: y * 1.0 + x,
        "heavy tails": lambda: rng.standard_cauchy(shape),
        "board": lambda: ((y // 4 + x // 4) % 2) * 1.0,
    }
    values = kinds[draw(st.sampled_from(list(kinds)))]() * 10 ** draw(st.floats(-6, 6)) + draw(
        st.sampled_from([0.0, 1.0, 1000.0, -1e6])
    )
    dtype = np.dtype(draw(st.sampled_from([*TYPES, "i1", ">i4", ">u8", ">f2"])))
    if dtype.kind in "ui":
        values = np.clip(values, np.iinfo(dtype).min / 2, np.iinfo(dtype).max / 2)
    with np.errstate(all="ignore"):
        values = values.astype(dtype)
    if dtype.kind == "f" and draw(st.booleans()):
        holes = rng.random(shape) < draw(st.sampled_from([0.001, 0.02, 0.5, 1.0]))
        values[holes] = draw(st.sampled_from([np.nan, np.inf, -np.inf]))
    return values


@st.composite
def regions(draw):
    """Outlines in, around and beyond such a picture, or none."""
    if draw(st.booleans()):
        return None
    corner = st.tuples(st.floats(-30, 120), st.floats(-30, 120))
    try:
        return Region("drawn", draw(st.lists(corner, min_size=3, max_size=7)))
    except FringespanError:
        return None


@st.composite
def calibrations(draw):
    size, aspect = draw(st.none() | st.floats(0.005, 0.5)), draw(st.floats(0.4, 2.5))
    return {
        "pixel_size_nm": None if size is None else (size, size * aspect),
        "pixel_size_relative_uncertainty": draw(st.sampled_from([None, 0.01, (0.01, 0.02), 0.0])),
        "shear": draw(st.sampled_from([0.0, 0.2])),
        "voltage_kv": draw(st.sampled_from([None, 80.0, 300.0])),
        "cs_mm": draw(st.sampled_from([None, 0.0, 1.2])),
        "defocus_nm": draw(st.sampled_from([None, -10.0, 60.0])),
        "dark_level": draw(st.sampled_from([None, 0.0, 1e5])),
    }


@settings(max_examples=250, suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large])
@given(pixels=pictures(smallest=24), region=regions(), calibration=calibrations())
def test_whatever_the_picture_only_a_refusal_or_a_sound_result_comes_out(pixels, region, calibration):
    only_a_refusal_comes_out(lambda: measure(Micrograph(pixels, **calibration), region))


@settings(max_examples=60)
@given(
    pixels=arrays(
        st.sampled_from([np.float32, np.float64, np.uint8, np.int16, np.uint16]),
        st.tuples(st.integers(1, 50), st.integers(1, 50)),
    )
)
def test_whatever_the_pixel_values_only_a_refusal_or_a_sound_result_comes_out(pixels):
    only_a_refusal_comes_out(lambda: measure(Micrograph(pixels)))


@pytest.mark.parametrize("pixel_size", [(0.08, 0.01), (0.01, 0.08)])
def test_pixels_may_be_very_oblong(pixel_size):
    is_sound(measure(Micrograph(noise(np.random.default_rng(6), (40, 40)) + 20, pixel_size_nm=pixel_size)))


def ramp(shape, slope, dtype):
    """Return a ramp without noise: all that it shows is how its values were rounded."""
    row, column = np.indices(shape)
    return ((row + column) * slope + 398429.4904181619).astype(dtype)


RAMPS = [
    pytest.param(
        27.6,
        np.float32,
        id="rounded by single precision",
        marks=pytest.mark.xfail(strict=True, reason="fits of what is no plane wave run beyond the finest fringes"),
    ),
    pytest.param(398.43, np.uint64, id="rounded to whole numbers"),
    pytest.param(0.31, np.float64, id="hardly rounded"),
]


@pytest.mark.parametrize(("slope", "dtype"), RAMPS)
def test_a_ramp_without_noise_is_no_error(slope, dtype):
    is_sound(measure(Micrograph(ramp((40, 24), slope, dtype), pixel_size_nm=0.02)))


@pytest.mark.xfail(strict=True, reason="fits of what is no plane wave run up to 1.6 bins beyond the finest fringes")
def test_no_fringes_are_finer_than_two_pixels():
    beyond = []
    for shape in ((40, 24), (64, 64), (100, 60)):
        for slope in (398.4294901814619, 0.31, 2.3):
            for aspect in (0.5, 1.0):
                pixels = ramp(shape, slope, np.uint64)
                got = measure(Micrograph(pixels, pixel_size_nm=(0.02, 0.02 * aspect)))
                beyond += [((np.abs(peak.g_per_px) - 0.5) * shape).max() for peak in got.peaks]
    assert max(beyond) < 0.5


@pytest.mark.parametrize("dtype", [bool, complex, "S3", object])
def test_pixels_that_are_no_real_numbers_are_refused(dtype):
    with pytest.raises(FringespanError):
        measure(Micrograph(np.ones((60, 60)).astype(dtype)))


@pytest.mark.parametrize("shape", [(1, 1), (1, 500), (500, 1), (23, 23), (23, 900)])
def test_a_picture_that_is_too_small_is_refused(shape):
    with pytest.raises(RegionError, match="at least 24 px"):
        measure(Micrograph(np.random.default_rng(0).normal(size=shape)))


# --- the parts of the result -----------------------------------------------------------------------------------------


def test_without_a_pixel_size_everything_is_in_pixels():
    got = measure(Micrograph(picture(), voltage_kv=300.0))
    assert len(got.peaks) >= 3
    for peak in got.peaks:
        for name in NUMBERS_OR_NONE:
            assert getattr(peak, name) is None
        assert peak.period_px > 2
    assert got.crystal_extent_nm is None
    assert got.lattice.lengths_nm is None
    assert got.lattice.real_px is not None
    assert len(got.angles) == math.comb(len(got.peaks), 2)


def test_the_parts_of_the_uncertainty_add_in_squares():
    got = measure(Micrograph(picture(), pixel_size_nm=0.02, pixel_size_relative_uncertainty=0.01))
    for peak in got.peaks:
        parts = peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm, 0.01 * peak.d_nm
        assert peak.d_uncertainty_nm == pytest.approx(math.sqrt(sum(u * u for u in parts)))
        n = peak.g_per_nm / np.hypot(*peak.g_per_nm)
        assert peak.d_fit_uncertainty_nm == pytest.approx(peak.d_nm**2 * math.sqrt(n @ peak.g_covariance_per_nm2 @ n))


def test_an_unstated_pixel_size_uncertainty_leaves_the_whole_one_open():
    got = measure(Micrograph(picture(), pixel_size_nm=0.02))
    for peak in got.peaks:
        assert peak.d_uncertainty_nm is None
        assert peak.d_lattice_uncertainty_nm is None
        assert peak.d_fit_uncertainty_nm > 0


def test_the_lattice_gives_every_peak_an_index_and_a_second_spacing():
    got = measure(Micrograph(picture(), pixel_size_nm=0.02, pixel_size_relative_uncertainty=0.001))
    assert got.lattice.members == (0, 1, 2)
    basis = got.lattice.reciprocal_per_nm
    for peak in got.peaks:
        exact = np.array(peak.lattice_index) @ basis
        assert exact == pytest.approx(peak.g_per_nm, abs=0.02)
        assert peak.d_lattice_nm == pytest.approx(1 / np.hypot(*exact))
        assert peak.d_lattice_nm == pytest.approx(peak.d_nm, rel=2e-3)
        assert peak.d_lattice_uncertainty_nm > 0.0009 * peak.d_nm
    # 0.1, 0.32 is the sum of the two stronger ones
    assert got.peaks[2].combination_of == (0, 1)
    assert got.peaks[0].combination_of is None


def test_spacings_from_the_lattice_scatter_no_more_than_they_say():
    errors = []
    for seed in range(50):
        exact = Micrograph(picture(seed), pixel_size_nm=0.02, pixel_size_relative_uncertainty=0.0)
        for peak in measure(exact).peaks:
            wave = min(WAVES, key=lambda w: min(np.abs(peak.g_per_px - w.g).max(), np.abs(peak.g_per_px + w.g).max()))
            if peak.d_lattice_nm is not None:
                errors.append((peak.d_lattice_nm - 0.02 / math.hypot(*wave.g)) / peak.d_lattice_uncertainty_nm)
    assert len(errors) >= 140
    # on the wide side: the lens may still do what a whole field does not show
    assert 0.1 < np.mean(np.square(errors)) < 1.4


def test_two_peaks_make_no_lattice():
    got = measure(Micrograph(picture(waves=WAVES[:2]), pixel_size_nm=0.02))
    assert got.lattice is None
    assert all(p.lattice_index is None and p.d_lattice_nm is None for p in got.peaks)


@pytest.mark.parametrize("dark_level", [0.0, 5.0, -10.0])
def test_visibility_is_amplitude_over_the_mean_above_the_dark_level(dark_level):
    (peak,) = measure(Micrograph(picture(waves=[Wave((0.13, 0.2), 2.0)]), dark_level=dark_level)).peaks
    assert peak.visibility == pytest.approx(2.0 / (20 - dark_level), rel=0.05)


def test_visibility_is_that_inside_the_crystal():
    """A crystal darker than the film around it: mean 12 inside, 20 outside."""
    shape = (224, 224)
    crystal = ellipse_mask(shape, 0.6)
    inside = 12 + fringes(shape, [Wave((0.13, 0.2), 4.0)])
    values = noise(np.random.default_rng(1), shape) + np.where(crystal, inside, 20)
    (peak, *_) = measure(Micrograph(values, dark_level=0.0)).peaks
    assert peak.visibility == pytest.approx(4 / 12, rel=0.15)


def test_the_amplitude_is_that_inside_the_crystal():
    shape = (224, 224)
    crystal = fringes(shape, [Wave((0.13, 0.2), 3.0)]) * ellipse_mask(shape, 0.6)
    values = noise(np.random.default_rng(1), shape) + 20 + crystal
    (peak, *_) = measure(Micrograph(values, dark_level=0.0)).peaks
    assert peak.amplitude == pytest.approx(3.0, rel=0.12)
    assert peak.visibility == pytest.approx(3 / 20, rel=0.12)


def test_visibility_needs_a_dark_level_below_the_mean():
    for dark_level in (None, 25.0):
        (peak,) = measure(Micrograph(picture(waves=[Wave((0.13, 0.2), 2.0)]), dark_level=dark_level)).peaks
        assert peak.visibility is None


def test_the_scattering_angle_is_wavelength_over_spacing_and_needs_a_voltage():
    """2 theta with lambda = 2 d sin(theta); 1.9687 pm at 300 kV (relativistic; common practice, from memory)."""
    with_voltage = measure(Micrograph(picture(), pixel_size_nm=0.02, voltage_kv=300.0))
    for peak in with_voltage.peaks:
        assert peak.two_theta_mrad == pytest.approx(2000 * math.asin(1.9687e-3 / (2 * peak.d_nm)), rel=1e-4)
    assert all(p.two_theta_mrad is None for p in measure(Micrograph(picture(), pixel_size_nm=0.02)).peaks)


def test_a_withheld_spacing_says_why_and_keeps_its_vector():
    y, x = places((200, 200))
    rng = np.random.default_rng(2)
    radius = np.hypot(y, x)
    # fringes pushed to and fro from ring to ring, as over a steep particle
    crystal = np.cos(2 * np.pi * (0.11 * y + 0.17 * x) + 1.5 * np.cos(radius / 20)) * (radius < 85)
    got = measure(Micrograph(crystal * 4 + noise(rng, (200, 200)) + 50, pixel_size_nm=0.02))
    withheld = [p for p in got.peaks if p.withheld is not None]
    assert withheld
    for peak in withheld:
        assert "fringe" in peak.withheld
        assert peak.d_nm is None
        assert peak.d_fit_uncertainty_nm is None
        assert peak.d_crystal_uncertainty_nm is None
        assert peak.d_uncertainty_nm is None
        assert np.isfinite(peak.g_per_nm).all()


def test_the_extent_of_a_crystal_in_part_of_its_region_is_in_nm():
    shape = (224, 224)
    y, x = places(shape)
    values = noise(np.random.default_rng(3), shape) + fringes(shape, WAVES) * (np.hypot(y, x) < 80) + 20
    got = measure(Micrograph(values, pixel_size_nm=0.02))
    # a disc of 3.2 nm
    assert got.crystal_extent_nm == pytest.approx((3.2, 3.2), rel=0.1)
    radius = np.hypot(*(got.crystal_outline_px - 111.5).T)
    assert radius == pytest.approx(np.full(len(radius), 80), abs=14)


def test_a_measurement_keeps_what_went_into_it_and_is_immutable():
    micrograph, chosen = Micrograph(picture()), MeasurementSettings(false_peaks_per_region=0.001)
    got = measure(micrograph, settings=chosen)
    assert got.micrograph is micrograph
    assert got.settings is chosen
    assert got.region.kind == "whole picture"
    with pytest.raises(dataclasses.FrozenInstanceError):
        got.peaks = ()
    with pytest.raises(dataclasses.FrozenInstanceError):
        got.peaks[0].d_nm = 1.0
    with pytest.raises(TypeError):
        measure(micrograph, None, chosen)


# --- crystals: published angles, simulated pictures, a recipe by hand ------------------------------------------------


def cubic_angles():
    table = tomllib.loads((HERE / "known" / "crystal_angles.toml").read_text(encoding="utf-8"))
    rows = [row for row in table["rows"] if row[6] < 90]
    return [pytest.param(row[:3], row[3:6], row[6], id="{}{}{} {}{}{}".format(*row[:6])) for row in rows]


@pytest.mark.parametrize(("first", "second", "angle_deg"), cubic_angles())
def test_two_planes_of_a_cubic_crystal_enclose_the_angle_of_the_tables(first, second, angle_deg):
    """Interplanar angles of cubic crystals as the handbooks print them (`known/crystal_angles.toml`, from memory).

    Both sets of fringes are drawn with spacings a / sqrt(h^2 + k^2 + l^2) at the angle of the cosine between the two
    planes' normals, on oblong pixels.
    """
    a, size = 0.4, (0.02, 0.025)
    lengths = [math.sqrt(sum(i * i for i in hkl)) / a for hkl in (first, second)]
    cosine = sum(i * j for i, j in zip(first, second, strict=True)) / (lengths[0] * lengths[1] * a * a)
    turn, start = math.acos(cosine), math.radians(17)
    waves = [
        Wave((-length * math.sin(at) * size[0], length * math.cos(at) * size[1]), 1.0, 0.3)
        for length, at in zip(lengths, (start, start + turn), strict=True)
    ]
    assert all(abs(v) < 0.45 for w in waves for v in w.g)
    got = measure(Micrograph(picture(shape=(192, 192), waves=waves), pixel_size_nm=size))
    (angle,) = [angle for angle in got.angles if angle.peaks == (0, 1)]
    measured = min(angle.angle_deg, 180 - angle.angle_deg)
    # the table has two decimals
    assert abs(measured - angle_deg) < 4 * angle.angle_uncertainty_deg + 0.01
    assert angle.angle_uncertainty_deg < 0.2


def truths(kind):
    """Return the regions of the simulated pictures with their truth: whole fields, or particles."""
    paths = sorted((HERE / "pictures").glob("*.json"))
    return [
        pytest.param(path, truth, region, id=f"{path.stem}-{region['phase']}")
        for path, truth in ((path, json.loads(path.read_text(encoding="utf-8"))) for path in paths)
        for region in truth["regions"]
        if (region["kind"] == "whole picture") == (kind == "field")
    ]


def compared(path, truth, region):
    """Measure one region of a simulated picture; return each visible reflection with its peak or None, and the rest."""
    outline = None
    if region["kind"] != "whole picture":
        outline = Region(region["name"], region["vertices_px"], region["kind"])
    measurement = measure(read(path.parent / truth["picture"]), outline)
    near = 1 / region["extent_nm"]
    left = list(measurement.peaks)
    pairs = []
    for reflection in sorted(region["reflections"], key=lambda r: (r["seen"] != "visible", -r["peak_over_background"])):
        g = np.array(reflection["g_per_nm"])
        away = [min(np.hypot(*(p.g_per_nm - g)), np.hypot(*(p.g_per_nm + g))) for p in left]
        peak = left.pop(int(np.argmin(away))) if left and min(away) < near else None
        if reflection["seen"] == "visible":
            pairs.append((reflection, peak))
    # the truth lists every lattice point down to 0.1 nm
    unexplained = [p for p in left if np.hypot(*p.g_per_nm) < 10 - near]
    return pairs, unexplained, measurement


def in_sigmas(reflection, peak):
    return (peak.d_nm - reflection["d_nm"]) / math.hypot(peak.d_fit_uncertainty_nm, peak.d_crystal_uncertainty_nm)


@pytest.mark.parametrize(("path", "truth", "region"), truths("field"))
def test_a_whole_field_shows_every_visible_reflection_right(path, truth, region):
    """Multislice pictures made by ase and abtem (`pictures/README.md`), spacings from the published cells."""
    pairs, _, _ = compared(path, truth, region)
    assert all(peak is not None for _, peak in pairs)
    errors = np.array([in_sigmas(reflection, peak) for reflection, peak in pairs])
    assert np.abs(errors).max() < 4
    assert np.mean(errors**2) < 2.5
    # whole fields are at the noise limit: the strongest reflections to some 1e-4
    strongest = max(pairs, key=lambda pair: pair[0]["peak_over_background"])
    assert strongest[1].d_nm == pytest.approx(strongest[0]["d_nm"], rel=3e-4)


@pytest.mark.parametrize(("path", "truth", "region"), truths("field"))
def test_the_common_lattice_of_a_whole_field_holds_every_visible_reflection(path, truth, region, request):
    if "field_nio_110" in str(path):
        # 001 and 110 are the ninth and tenth strongest; no basis is tried beyond the eighth, though this one has more
        # evidence and holds every peak
        request.node.add_marker(pytest.mark.xfail(strict=True, reason="bases come from the eight strongest peaks only"))
    pairs, _, measurement = compared(path, truth, region)
    assert measurement.lattice is not None
    for reflection, peak in pairs:
        assert peak.d_lattice_nm == pytest.approx(reflection["d_nm"], rel=3e-4)


@pytest.mark.parametrize(("path", "truth", "region"), truths("field"))
def test_on_a_whole_field_the_crystal_adds_no_more_than_twice_what_the_noise_does(path, truth, region):
    pairs, _, _ = compared(path, truth, region)
    share = [peak.d_crystal_uncertainty_nm / peak.d_fit_uncertainty_nm for _, peak in pairs]
    assert math.sqrt(np.mean(np.square(share))) <= 2


def test_whole_fields_show_next_to_nothing_else():
    # 0.06 are meant in six pictures; a weak one may be real, the truth calls invisible what a plain transform hides
    assert sum(len(compared(*case.values)[1]) for case in truths("field")) <= 1


def test_particles_show_their_reflections_and_know_how_wrong_they_are():
    strong, found, visible, seen, errors, unexplained, regions_, kept_back = 0, 0, 0, 0, [], 0, 0, 0
    for case in truths("particle"):
        pairs, rest, _ = compared(*case.values)
        regions_ += 1
        unexplained += len(rest)
        for reflection, peak in pairs:
            is_strong = reflection["peak_over_background"] >= 300
            visible += 1
            seen += peak is not None
            strong += is_strong
            found += is_strong and peak is not None
            if peak is not None and peak.d_nm is None:
                kept_back += 1
            elif peak is not None:
                errors.append(in_sigmas(reflection, peak))
    assert found >= 0.95 * strong
    assert seen >= 0.85 * visible
    assert unexplained <= regions_
    assert kept_back <= 0.15 * visible
    assert 0.3 < np.mean(np.square(errors)) < 2
    assert np.mean(np.abs(errors) < 3) > 0.97


def by_hand(pixels, size_nm, shortest_nm=0.1):
    """Return the reciprocal vectors that common practice reads off a picture: Hann window, FFT, maxima, parabola."""
    rows, columns = pixels.shape
    windowed = (pixels - pixels.mean()) * np.outer(np.hanning(rows), np.hanning(columns))
    power = np.log(np.abs(np.fft.fftshift(np.fft.fft2(windowed))) ** 2)
    found = []
    for i, j in peak_local_max(power, min_distance=4, num_peaks=60, exclude_border=2):
        beside = (power[i - 1, j], power[i + 1, j]), (power[i, j - 1], power[i, j + 1])
        at = [(before - after) / (2 * (before - 2 * power[i, j] + after)) for before, after in beside]
        g = np.array([(i + at[0] - rows // 2) / rows / size_nm[0], (j + at[1] - columns // 2) / columns / size_nm[1]])
        if 1 / shortest_nm > np.hypot(*g) > 1:
            found.append(g)
    return np.array(found)


def test_on_the_same_pictures_the_result_is_nearer_to_the_truth_than_a_recipe_by_hand():
    ours, theirs = [], []
    for case in truths("field"):
        path, truth, region = case.values
        pairs, _, measurement = compared(path, truth, region)
        pixels = measurement.micrograph.crop(slice(None), slice(None)).astype(float)
        hand = by_hand(pixels, measurement.micrograph.pixel_size_nm)
        for reflection, peak in pairs:
            g = np.array(reflection["g_per_nm"])
            away = np.hypot(*(hand - g).T)
            if away.min() < 0.5 / region["extent_nm"]:
                theirs.append(1 / np.hypot(*hand[away.argmin()]) / reflection["d_nm"] - 1)
                ours.append(peak.d_nm / reflection["d_nm"] - 1)
    assert len(theirs) > 50
    rms_ours, rms_theirs = (math.sqrt(np.mean(np.square(e))) for e in (ours, theirs))
    assert rms_ours < 0.5 * rms_theirs


@pytest.mark.parametrize("seed", range(3))
def test_in_white_noise_too(seed):
    shape = (96, 110)
    rng = np.random.default_rng(seed)
    ours, theirs = [], []
    for _ in range(60):
        wave = Wave(random_g(rng, shape, 0.35), 1.0, rng.uniform(0, 6))
        pixels = noise(rng, shape) + fringes(shape, [wave])
        _, error = matching_peak(measure(Micrograph(pixels)).peaks, wave.g, shape)
        ours.append(np.hypot(*error))
        hand = by_hand(pixels, (0.02, 0.02), 0.045)
        theirs.append(np.hypot(*(hand * 0.02 - wave.g).T).min())
    assert np.mean(np.square(ours)) < 0.5 * np.mean(np.square(theirs))
