"""Fringes along a line: simulated truth, the Cramer-Rao bound, and agreement with published spacings."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
import scipy.stats

from fringespan.exceptions import RegionError
from fringespan.measurement import measure
from fringespan.micrograph import Micrograph
from fringespan.profile import measure_profile
from fringespan.reading import read

SHAPE = (220, 220)
CENTRE = np.array([109.5, 109.5])


def unit(angle_deg):
    """Return the (row, column) unit vector of a direction on the screen."""
    angle = math.radians(angle_deg)
    return np.array([-math.sin(angle), math.cos(angle)])


def picture(period_px, angle_deg, *, amplitude=0.5, noise=1.0, seed=0, red=0.0, second_order=0.0, shape=SHAPE):
    """Return fringes of random phase in noise of standard deviation `noise` (spectrum falling as f^-red)."""
    rng = np.random.default_rng(seed)
    row, column = np.indices(shape)
    g = unit(angle_deg) / period_px
    phase = 2 * np.pi * (g[0] * row + g[1] * column) + rng.uniform(0, 2 * np.pi)
    values = amplitude * np.cos(phase) + second_order * amplitude * np.cos(2 * phase + 0.4)
    speckle = rng.normal(size=shape)
    if red:
        f = np.hypot(np.fft.fftfreq(shape[0])[:, None], np.fft.rfftfreq(shape[1]))
        f[0, 0] = f[0, 1]
        speckle = np.fft.irfft2(np.fft.rfft2(speckle) * (f / 0.1) ** (-red / 2), shape)
    return values + noise * speckle


def line(angle_deg, length=128.0, centre=CENTRE):
    half = unit(angle_deg) * length / 2
    return centre - half, centre + half


# --- the spacing ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("angle_deg", [0, 7, 37, 45, 90, 133])
@pytest.mark.parametrize("period_px", [2.6, 8.3, 14.7])
def test_the_period_of_clean_fringes_is_found_at_any_angle(period_px, angle_deg):
    pixels = picture(period_px, angle_deg, noise=0.01)
    profile = measure_profile(Micrograph(pixels), line(angle_deg), width_px=15)
    assert profile.period_px == pytest.approx(period_px, rel=3e-4)
    assert abs(profile.period_px - period_px) < 4 * profile.period_uncertainty_px
    assert profile.fringe_count == pytest.approx(128 / period_px, rel=3e-4)
    assert profile.direction_deg == pytest.approx(angle_deg)
    assert profile.spacing_nm is None
    assert profile.cautions == ()


CONDITIONS = [
    pytest.param({"period_px": 8.0}, 128.0, 16, id="white noise"),
    pytest.param({"period_px": 2.6, "amplitude": 0.7}, 128.0, 12, id="near the finest fringes"),
    pytest.param({"period_px": 8.0, "amplitude": 1.5}, 150.0, 1, id="single line"),
    pytest.param({"period_px": 6.0, "amplitude": 1.0}, 44.0, 10, id="short line"),
    pytest.param({"period_px": 9.0, "second_order": 0.3}, 128.0, 16, id="with its second order"),
]


@pytest.mark.parametrize(("fringes", "length", "width"), CONDITIONS)
def test_the_error_is_near_the_bound_and_the_interval_holds(fringes, length, width):
    """RMS over the bound of the strip, and 95 % intervals by Student's t, over 120 pictures of odd angles.

    Bound of a real wave of amplitude A in white noise s over N = length x width pixels:
    var(f) = 6 s^2 / (pi^2 A^2 N (length^2 - 1)); S. M. Kay, Fundamentals of Statistical Signal Processing I (1993),
    from memory. The statistical error of the ratio is 6 %, that of the share 2 %.
    """
    angles = np.random.default_rng(11).uniform(0, 180, 120)
    errors, sigmas, limits = [], [], []
    for seed, angle in enumerate(angles):
        profile = measure_profile(
            Micrograph(picture(angle_deg=angle, seed=seed, **fringes)), line(angle, length), width_px=width
        )
        errors.append(1 / profile.period_px - 1 / fringes["period_px"])
        sigmas.append(profile.period_uncertainty_px / profile.period_px**2)
        limits.append(scipy.stats.t.ppf(0.975, profile.degrees_of_freedom))
    amplitude = fringes.get("amplitude", 0.5)
    bound = math.sqrt(6 / (math.pi**2 * amplitude**2 * length * width * (length**2 - 1)))
    errors = np.array(errors)
    assert math.sqrt(np.mean(errors**2)) / bound < 1.18
    assert np.mean(np.abs(errors) < np.array(limits) * sigmas) > 0.90


def test_the_interval_holds_in_noise_that_falls_with_frequency():
    inside = []
    for seed, angle in enumerate(np.random.default_rng(12).uniform(0, 180, 120)):
        pixels = picture(8.0, angle, noise=0.5, red=2.0, seed=seed)
        profile = measure_profile(Micrograph(pixels), line(angle), width_px=16)
        limit = scipy.stats.t.ppf(0.975, profile.degrees_of_freedom)
        inside.append(abs(profile.period_px - 8) < limit * profile.period_uncertainty_px)
    assert np.mean(inside) > 0.90


@pytest.mark.parametrize("red", [0.0, 2.0])
@pytest.mark.parametrize("width", [1, 16])
def test_noise_alone_seldom_shows_a_fringe(red, width):
    found = 0
    for seed in range(150):
        pixels = picture(8.0, 0, amplitude=0.0, red=red, seed=seed)
        found += measure_profile(Micrograph(pixels), ((40, 40), (150, 160)), width_px=width).period_px is not None
    # one per cent is meant: 1.5 in 150, and 6 or more with a probability below 0.5 %
    assert found <= 5


def test_a_second_set_of_fringes_does_not_pull_the_first():
    rng = np.random.default_rng(3)
    pulls = []
    for seed in range(40):
        row, column = np.indices(SHAPE)
        other = 0.5 * np.cos(2 * np.pi * (0.05 * row + 0.09 * column) + rng.uniform(0, 6.28))
        profile = measure_profile(Micrograph(picture(8.0, 20, seed=seed) + other), line(20), width_px=16)
        pulls.append((profile.period_px - 8.0) / profile.period_uncertainty_px)
    assert np.mean(np.square(pulls)) < 2


# --- in nm ----------------------------------------------------------------------------------------------------------


def test_pixels_that_are_not_square_are_taken_into_account():
    size = np.array([0.02, 0.03])
    d_nm, direction_deg = 0.31, 33.0
    g_px = unit(direction_deg) / d_nm * size
    row, column = np.indices(SHAPE)
    pixels = np.cos(2 * np.pi * (g_px[0] * row + g_px[1] * column))
    pixels += 0.05 * np.random.default_rng(0).normal(size=SHAPE)
    half = unit(direction_deg) / size
    half *= 64 / np.hypot(*half)
    micrograph = Micrograph(pixels, pixel_size_nm=tuple(size))
    profile = measure_profile(micrograph, (CENTRE - half, CENTRE + half), width_px=12)
    assert profile.direction_deg == pytest.approx(direction_deg)
    assert profile.spacing_nm == pytest.approx(d_nm, rel=3e-4)
    assert profile.d_nm == pytest.approx(d_nm, rel=3e-4)
    assert profile.off_normal_deg < 3 * profile.off_normal_uncertainty_deg
    assert profile.spacing_uncertainty_nm is None


@pytest.mark.parametrize(
    ("uncertainty", "along_line"),
    [
        (0.01, 0.01),
        # independent errors of the two axes: a length along 30 degrees changes by sin^2 and cos^2 of them
        ((0.01, 0.02), math.hypot(0.25 * 0.01, 0.75 * 0.02)),
    ],
)
def test_the_pixel_sizes_uncertainty_is_added(uncertainty, along_line):
    micrograph = Micrograph(picture(8.0, 30), pixel_size_nm=0.02, pixel_size_relative_uncertainty=uncertainty)
    profile = measure_profile(micrograph, line(30), width_px=16)
    expected = math.hypot(profile.spacing_fit_uncertainty_nm, along_line * profile.spacing_nm)
    assert profile.spacing_uncertainty_nm == pytest.approx(expected)
    assert profile.d_uncertainty_nm > profile.d_fit_uncertainty_nm


@pytest.mark.parametrize("off_deg", [2.0, 6.0, 12.0])
def test_off_the_normal_the_line_reads_d_over_cosine_and_the_strip_tells_by_how_much(off_deg):
    angle = 50.0
    micrograph = Micrograph(picture(8.0, angle, noise=0.05), pixel_size_nm=0.02)
    profile = measure_profile(micrograph, line(angle + off_deg), width_px=16)
    assert profile.spacing_nm == pytest.approx(0.16 / math.cos(math.radians(off_deg)), rel=4e-4)
    assert profile.off_normal_deg == pytest.approx(off_deg, abs=max(0.1, 4 * profile.off_normal_uncertainty_deg))
    assert profile.d_nm == pytest.approx(0.16, abs=4 * profile.d_fit_uncertainty_nm)
    assert [c.code for c in profile.cautions] == ["line-off-normal"]


def test_the_uncertainty_of_the_spacing_across_holds():
    pulls = []
    for seed, off in enumerate(np.random.default_rng(4).uniform(-8, 8, 100)):
        micrograph = Micrograph(picture(8.0, 50, seed=seed), pixel_size_nm=0.02)
        profile = measure_profile(micrograph, line(50 + off), width_px=16)
        if profile.d_nm is not None:
            pulls.append((profile.d_nm - 0.16) / profile.d_fit_uncertainty_nm)
    assert len(pulls) >= 97  # noise is seldom taken for other fringes that cross the strip
    assert 0.6 < np.mean(np.square(pulls)) < 1.7


def test_a_strip_too_narrow_to_tell_gives_no_spacing_across():
    profile = measure_profile(Micrograph(picture(8.0, 0, amplitude=2), pixel_size_nm=0.02), line(0), width_px=2)
    assert profile.off_normal_deg is None
    assert profile.d_nm is None
    assert profile.spacing_nm is not None


# --- what a careful person would say --------------------------------------------------------------------------------


def codes(pixels, ends, **options):
    return [caution.code for caution in measure_profile(Micrograph(pixels), ends, **options).cautions]


def test_few_fringes_are_said():
    assert codes(picture(20.0, 0, noise=0.1), line(0)) == ["few-fringes"]


def test_no_fringe_is_said_with_every_number_left_out():
    profile = measure_profile(Micrograph(picture(8.0, 0, amplitude=0)), line(0))
    assert profile.period_px is profile.fringe_count is profile.fitted_values is profile.signal_to_noise is None
    assert [caution.code for caution in profile.cautions] == ["no-fringe-along-line"]
    assert len(profile.values) == len(profile.positions_px)


@pytest.mark.parametrize("periods", [0.4, 1.0, 1.5])
def test_less_than_two_fringes_are_not_taken_for_some(periods):
    assert codes(picture(128 / periods, 0, noise=0.2), line(0)) == ["no-fringe-along-line"]


def test_a_width_that_averages_the_fringes_away_is_said():
    # the mean over a width w of fringes turned by e vanishes at w sin(e) = d
    assert codes(picture(8.0, 0), line(30), width_px=16) == ["width-averages-fringes-away"]


def test_other_sets_of_the_lattice_that_cross_the_strip_do_not_turn_the_first():
    # the sets (1, 1) and (1, -1) of a square lattice have the period of (1, 0) along its normal
    row, column = np.indices(SHAPE)
    pixels = np.cos(2 * np.pi * column / 9) + 0.05 * np.random.default_rng(0).normal(size=SHAPE)
    pixels += np.cos(2 * np.pi * (column + row) / 9 + 1) + 0.7 * np.cos(2 * np.pi * (column - row) / 9 + 2)
    wide = measure_profile(Micrograph(pixels, pixel_size_nm=0.02), line(0), width_px=27)
    assert wide.period_px == pytest.approx(9.0, rel=2e-4)
    assert wide.off_normal_deg < 0.2
    narrow = measure_profile(Micrograph(pixels, pixel_size_nm=0.02), line(0), width_px=5)
    assert narrow.spacing_nm == pytest.approx(0.18, rel=2e-4)
    assert narrow.d_nm is None
    assert [caution.code for caution in narrow.cautions] == ["other-fringes-cross"]


def test_bent_fringes_widen_the_uncertainty():
    column = np.indices(SHAPE)[1]
    bent = np.cos(2 * np.pi * (column / 8 + 1.2 * ((column - 110) / 64) ** 2))
    straight = np.cos(2 * np.pi * column / 8)
    noise = 0.1 * np.random.default_rng(0).normal(size=SHAPE)
    profile = measure_profile(Micrograph(bent + noise), line(0))
    assert "fringes-uneven" in [caution.code for caution in profile.cautions]
    assert (
        profile.period_uncertainty_px > 3 * measure_profile(Micrograph(straight + noise), line(0)).period_uncertainty_px
    )


def test_pixels_without_a_value_are_replaced_and_counted():
    pixels = picture(8.0, 0, noise=0.1)
    pixels[110, 90] = np.nan
    pixels[111, 95] = np.inf
    profile = measure_profile(Micrograph(pixels), line(0))
    assert profile.period_px == pytest.approx(8.0, rel=2e-3)
    assert [caution.code for caution in profile.cautions] == ["profile-defects"]
    assert profile.cautions[0].text.startswith("2 pixels")


def test_a_slow_trend_does_no_harm():
    row, column = np.indices(SHAPE)
    pixels = picture(8.0, 0, noise=0.05) + 20 * (column / 220) ** 2 + 5 * row / 220
    assert measure_profile(Micrograph(pixels), line(0)).period_px == pytest.approx(8.0, rel=1e-3)


@pytest.mark.parametrize("dtype", [np.uint8, np.int16, np.float32])
def test_any_type_of_pixel_is_measured(dtype):
    pixels = (100 + 40 * picture(8.0, 20, noise=0.1, amplitude=1)).astype(dtype)
    assert measure_profile(Micrograph(pixels), line(20)).period_px == pytest.approx(8.0, rel=1e-3)


def test_the_result_does_not_depend_on_scale_and_offset_of_the_pixels():
    pixels = picture(8.0, 20)
    one, other = (measure_profile(Micrograph(p), line(20)) for p in (pixels, 1e-6 * pixels + 3))
    assert other.period_px == pytest.approx(one.period_px, rel=1e-9)
    assert other.amplitude == pytest.approx(1e-6 * one.amplitude, rel=1e-6)


def test_a_long_oblique_line_reads_only_what_lies_beside_it():
    class Large:
        shape, dtype, read = (20_000, 20_000), np.dtype(np.float32), 0

        def __getitem__(self, key):
            rows, columns = (np.arange(20_000)[k] for k in key)
            Large.read += rows.size * columns.size
            return np.cos(2 * np.pi * (0.08 * rows[:, None] + 0.06 * columns)).astype(np.float32)

    t = np.array([0.8, 0.6])
    profile = measure_profile(Micrograph(Large()), ((100, 100), 100 + 12_000 * t), width_px=8)
    assert profile.period_px == pytest.approx(10.0, rel=1e-7)
    # of the rectangle around the line, 69 million pixels, a few per cent
    assert Large.read < 4_000_000


# --- what is refused ------------------------------------------------------------------------------------------------

REFUSED = [
    pytest.param(((10, 10), (10, 20)), 5, r"10\.0 px long, at least 24", id="too short"),
    pytest.param(((10, 10), (10, 400)), 5, "beyond the picture of 220 x 220", id="leaves the picture"),
    pytest.param(((-50, -50), (-10, -10)), 5, "beyond the picture", id="outside"),
    pytest.param(((1, 10), (1, 100)), 11, "beyond the picture", id="strip leaves the picture"),
    pytest.param(((100, 10), (100, 100)), 0.5, "width_px must be at least 1", id="too narrow"),
    pytest.param(((100, 10), (100, 100)), math.nan, "width_px must be at least 1", id="width not a number"),
    pytest.param(((100, 10), (100, math.nan)), 5, "two .row, column. points", id="end not a number"),
    pytest.param(((100, 10),), 5, "two .row, column. points", id="one end"),
    pytest.param("abc", 5, "two .row, column. points", id="text"),
]


@pytest.mark.parametrize(("ends", "width", "words"), REFUSED)
def test_lines_that_cannot_be_measured_are_refused(ends, width, words):
    with pytest.raises(RegionError, match=words):
        measure_profile(Micrograph(picture(8.0, 0)), ends, width_px=width)


def test_a_constant_picture_is_refused():
    with pytest.raises(RegionError, match="are the same"):
        measure_profile(Micrograph(np.full(SHAPE, 7, np.uint8)), line(0))


def test_a_line_beside_no_finite_pixel_is_refused():
    with pytest.raises(RegionError, match="no pixel near the line"):
        measure_profile(Micrograph(np.full(SHAPE, np.nan)), line(0))


# --- on pictures from a general multislice simulator ----------------------------------------------------------------

FIELDS = ["cu_100", "ge_110", "nio_110", "rutile_001", "srtio3_100", "zno_100"]


@pytest.mark.parametrize("field", FIELDS)
def test_profile_spectrum_and_the_published_cell_agree(field):
    """The two roads agree within their joint uncertainty, and with the cell that the picture was made of.

    The pictures come from ase and abtem (`tests/pictures/README.md`); nothing of this package was used to make them.
    """
    folder = Path(__file__).parent / "pictures"
    truth = json.loads((folder / f"field_{field}.json").read_text())
    micrograph = read(folder / f"field_{field}.tif")
    spectrum = measure(micrograph).peaks
    visible = [r for r in truth["regions"][0]["reflections"] if r["seen"] == "visible"]
    strongest = sorted(visible, key=lambda r: -r["peak_over_background"])[:3]
    measured = 0
    for reflection in strongest:
        g = np.array(reflection["g_per_nm"])
        half = g / np.hypot(*g) * 100
        centre = (np.array(micrograph.shape) - 1) / 2
        profile = measure_profile(micrograph, (centre - half, centre + half), width_px=40)
        if profile.d_nm is None or abs(profile.d_nm / reflection["d_nm"] - 1) > 0.1:
            continue  # along this line another set is stronger
        measured += 1
        peak = min(spectrum, key=lambda p: min(np.hypot(*(p.g_per_nm - g)), np.hypot(*(p.g_per_nm + g))))
        joint = math.hypot(profile.d_fit_uncertainty_nm, peak.d_fit_uncertainty_nm)
        assert abs(profile.d_nm - peak.d_nm) < 3.5 * joint
        assert profile.d_nm == pytest.approx(reflection["d_nm"], rel=2e-3)
    assert measured >= 1
