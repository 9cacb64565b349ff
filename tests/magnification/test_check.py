"""The magnification comes back as it was put in: along rows, along columns, sheared, from crystals, grains and one spacing."""

import dataclasses
import json
import math

import numpy as np
import pytest

from fringespan.crystal.library import load_phase
from fringespan.exceptions import CalibrationError, SettingsError
from fringespan.magnification.check import check_magnification
from fringespan.magnification.internal_standard import calibrate_within_picture
from fringespan.magnification.reference import Expansion, ReferenceSpacing
from fringespan.measurement import measure
from fringespan.reading import read
from fringespan.sample_pictures import sample_file
from simulated_reference import (
    crystal_peaks,
    geometry,
    measured_peak,
    picture,
    region_measurement,
    vectors,
)

GOLD = load_phase("gold")
SILICON = load_phase("silicon")
AT_25 = {"temperature_c": 25.0, "temperature_uncertainty_c": 0.0, "tilt_deg": 0.0}


def crystal(
    true, *, phase=GOLD, zone=(1, 1, 0), seed=0, reflections=6, noise=1e-4, micrograph=None, rotation=0.4, **other
):
    rng = np.random.default_rng(seed)
    peaks, _ = crystal_peaks(rng, phase, zone, true, rotation=rotation, reflections=reflections, noise=noise, **other)
    return region_measurement(micrograph or picture(), peaks, f"region {seed}")


def assert_recovers(check, true, factor=4.0):
    """Assert that rows, columns and shear lie within some standard uncertainties of the truth."""
    off = [check.scale[0] - true[0, 0], check.scale[1] - true[1, 1], check.shear - true[1, 0]]
    stated = [*check.scale_uncertainty, check.shear_uncertainty]
    assert np.all(np.abs(off) < factor * np.array(stated)), (off, stated)


# --- one crystal ----------------------------------------------------------------------------------------------------

GEOMETRIES = [
    pytest.param(geometry(1.004, 1.013), id="rows and columns"),
    pytest.param(geometry(1.0, 1.0, 0.02), id="shear alone"),
    pytest.param(geometry(0.93, 0.94, -0.015), id="7 % off, sheared"),
    pytest.param(geometry(1.09, 1.085, 0.004), id="9 % off"),
    pytest.param(geometry(1.0, 1.03), id="3 % stretched"),
]


@pytest.mark.parametrize("zone", [(1, 0, 0), (1, 1, 0), (1, 1, 1)])
@pytest.mark.parametrize("true", GEOMETRIES)
def test_geometry_comes_back(true, zone):
    check = check_magnification(crystal(true, zone=zone), GOLD, reference_relative_uncertainty=0.0, **AT_25)
    assert_recovers(check, true)
    assert max(check.scale_uncertainty) < 3e-4


@pytest.mark.parametrize("true", GEOMETRIES)
def test_geometry_by_its_own_definition(true):
    """One column further is scale[1] nominal pixels along x; one row further scale[0] along y and shear along x."""
    check = check_magnification(crystal(true, noise=1e-7), GOLD, reference_relative_uncertainty=0.0, **AT_25)
    nominal = 0.025
    column_step = np.array([0.0, check.scale[1] * nominal])
    row_step = np.array([check.scale[0] * nominal, check.shear * nominal])
    # (y, x) of these steps, put into the true waves, must give the phase that the peaks give per pixel
    _, g, _ = vectors(GOLD, (1, 1, 0), 0.4, 0.1)
    for peak in crystal(true, noise=1e-7).peaks:
        per_pixel = [g @ row_step, g @ column_step]
        off = np.minimum(
            np.hypot(per_pixel[0] - peak.g_per_px[0], per_pixel[1] - peak.g_per_px[1]),
            np.hypot(per_pixel[0] + peak.g_per_px[0], per_pixel[1] + peak.g_per_px[1]),
        )
        assert off.min() < 1e-6


def test_a_picture_of_unequal_pixels_that_is_sheared_already():
    rows, columns, sheared = 0.02, 0.03, 0.01
    micrograph = dataclasses.replace(picture(), pixel_size_nm=(rows, columns), shear=sheared)
    nominal = micrograph.geometry_nm_per_px
    factor = geometry(1.02, 0.98, 0.01)
    measurement = crystal(factor, micrograph=micrograph, noise=1e-6)
    check = check_magnification(measurement, GOLD, reference_relative_uncertainty=0.0, **AT_25)
    corrected = check.corrected(micrograph)
    assert corrected.geometry_nm_per_px == pytest.approx(factor @ nominal, abs=1e-7)
    assert check.shear * columns == pytest.approx((factor @ nominal)[1, 0], abs=1e-7)


def test_the_corrected_picture_gives_the_reference_its_spacings_and_says_where_they_come_from():
    true = geometry(1.02, 0.99, 0.01)
    micrograph = picture()
    check = check_magnification(crystal(true, micrograph=micrograph), GOLD, temperature_c=25.0)
    corrected = check.corrected(micrograph)
    assert corrected.pixel_size_nm == pytest.approx((0.0255, 0.02475), rel=1e-3)
    assert "Gold" in corrected.pixel_size_source
    assert "0.025" in corrected.pixel_size_source
    assert micrograph.pixel_size_nm == (0.025, 0.025)
    inverse = np.linalg.inv(corrected.geometry_nm_per_px)
    for peak, reflection in zip(crystal(true).peaks, check.reflections, strict=True):
        assert 1 / math.hypot(*(peak.g_per_px @ inverse)) == pytest.approx(reflection.expected_d_nm, rel=1e-3)
    with pytest.raises(CalibrationError, match="not the nominal one"):
        check.corrected(picture(pixel_size_nm=0.03))


def test_the_reference_rules_a_common_uncertainty_and_rows_and_columns_share_it():
    check = check_magnification(crystal(geometry(1, 1)), GOLD, temperature_c=25.0)
    assert check.pixel_size_relative_uncertainty == pytest.approx(1e-3, rel=0.05)
    assert check.budgets[0].largest.source == "reference spacing"
    own = check_magnification(
        crystal(geometry(1, 1), noise=2e-3), GOLD, reference_relative_uncertainty=1e-5, temperature_c=25.0
    )
    assert len(own.pixel_size_relative_uncertainty) == 2


def test_the_turn_of_the_crystal_is_told():
    check = check_magnification(crystal(geometry(1, 1), rotation=math.radians(33), zone=(1, 0, 0)), GOLD)
    # the pattern of a cube's face repeats itself every quarter turn
    assert check.regions[0].rotation_deg % 90 == pytest.approx(33, abs=0.05)
    assert sorted(map(abs, check.regions[0].zone)) == [0, 0, 1]


# --- outliers, other crystals ---------------------------------------------------------------------------------------


def test_a_reflection_that_lies_off_is_shown_and_left_out():
    true = geometry(1.004, 1.013)
    measurement = crystal(true, reflections=8)
    peaks = list(measurement.peaks)
    covariance = np.asarray(peaks[3].g_covariance_per_nm2)
    peaks[3] = measured_peak(np.asarray(peaks[3].g_per_nm) * 1.006, covariance, 0.025)
    check = check_magnification(
        dataclasses.replace(measurement, peaks=tuple(peaks)), GOLD, reference_relative_uncertainty=0.0, **AT_25
    )
    assert_recovers(check, true)
    outlier = check.reflections[3]
    assert not outlier.used
    assert outlier.hkl is not None
    assert outlier.deviation_percent == pytest.approx(-0.6, abs=0.1)
    assert "off the fit" in outlier.reason
    assert all(r.used for k, r in enumerate(check.reflections) if k != 3)
    assert "outlying-reflections" in [c.code for c in check.cautions]


def test_peaks_of_something_else_are_listed_with_the_reason():
    measurement = crystal(geometry(1.0, 1.0))
    foreign = measured_peak(np.array([1.1, 2.3]), np.eye(2) * 1e-6, 0.025, 8.0)
    check = check_magnification(
        dataclasses.replace(measurement, peaks=(*measurement.peaks, foreign)), GOLD, temperature_c=25.0
    )
    assert check.reflections[-1].reason == "on no reflection of the reference"
    assert check.reflections[-1].hkl is None
    assert len(check.reflections) == len(measurement.peaks) + 1


def test_a_withheld_spacing_takes_no_part():
    measurement = crystal(geometry(1.0, 1.0))
    broken = dataclasses.replace(measurement.peaks[0], withheld="the fringes bend")
    check = check_magnification(
        dataclasses.replace(measurement, peaks=(broken, *measurement.peaks[1:])), GOLD, temperature_c=25.0
    )
    assert not check.reflections[0].used
    assert "withheld" in check.reflections[0].reason


def test_reflections_that_scatter_more_than_stated_raise_the_uncertainty():
    rng = np.random.default_rng(5)
    calm = crystal(geometry(1, 1), reflections=8, noise=1e-5)
    peaks = [
        measured_peak(
            np.asarray(p.g_per_nm) + 3e-5 * math.hypot(*p.g_per_nm) * rng.standard_normal(2),
            np.asarray(p.g_covariance_per_nm2),
            0.025,
        )
        for p in calm.peaks
    ]
    rough = dataclasses.replace(calm, peaks=tuple(peaks))
    before, after = (check_magnification(m, GOLD, reference_relative_uncertainty=0.0, **AT_25) for m in (calm, rough))
    fit_before, fit_after = (c.budgets[0].lines[0] for c in (before, after))
    assert math.isinf(fit_before.degrees_of_freedom)
    assert fit_after.degrees_of_freedom < 16
    assert fit_after.contribution > 1.5 * fit_before.contribution
    assert "reflections-scatter" in [c.code for c in after.cautions]


# --- many grains, one spacing ---------------------------------------------------------------------------------------


def grains(true, d_nm, directions_deg, *, noise=2e-4, seed=1, micrograph=None):
    """Return regions that show one set of fringes each."""
    rng = np.random.default_rng(seed)
    micrograph = micrograph or picture("grains.tif")
    regions = []
    for k, (d, direction) in enumerate(zip(np.broadcast_to(d_nm, len(directions_deg)), directions_deg, strict=True)):
        angle = math.radians(direction)
        seen = np.array([-math.sin(angle), math.cos(angle)]) / d @ true
        sigma = noise * math.hypot(*seen)
        peak = measured_peak(seen + sigma * rng.standard_normal(2), np.eye(2) * sigma**2, 0.025)
        regions.append(region_measurement(micrograph, [peak], f"grain {k}"))
    return regions


def test_an_ellipse_through_the_fringes_of_many_grains():
    true = geometry(1.01, 0.985, 0.012)
    directions = np.arange(0, 180, 15)
    check = check_magnification(
        grains(true, 0.235478, directions),
        ReferenceSpacing(0.235478, 0.0),
        tilt_deg=0.0,
        temperature_c=22.5,
        temperature_uncertainty_c=0.0,
    )
    assert_recovers(check, true)
    assert check.shear is not None
    ellipse = check.ellipse_per_nm(0.235478, 3601)
    for region in grains(true, 0.235478, directions, noise=0.0):
        g = region.peaks[0].g_per_nm
        assert np.hypot(*(ellipse - g).T).min() < 0.006


def test_grains_of_a_phase_find_their_place_on_its_ladder_of_spacings():
    true = geometry(1.06, 1.07)
    spacings = [GOLD.lengths_nm[0] / math.sqrt(n) for n in (3, 4, 8, 11, 3, 4, 8, 3)]
    check = check_magnification(
        grains(true, spacings, [10, 40, 75, 100, 120, 150, 165, 60]), GOLD, reference_relative_uncertainty=0.0, **AT_25
    )
    assert_recovers(check, true)
    families = [sum(i * i for i in r.hkl) for r in check.reflections]
    assert families == [3, 4, 8, 11, 3, 4, 8, 3]


@pytest.mark.parametrize("seed", range(6))
def test_many_grains_in_one_region(seed):
    """The whole of a polycrystalline picture as one region: spots of many crystals on the rings of the reference."""
    rng = np.random.default_rng(seed)
    true = geometry(1.03, 1.05, 0.01)
    lengths = [GOLD.lengths_nm[0] / math.sqrt(n) for n in (3, 4, 8)]
    regions = grains(true, rng.choice(lengths, 12), rng.uniform(0, 180, 12), seed=seed)
    one = region_measurement(picture(), [m.peaks[0] for m in regions], "all")
    check = check_magnification(one, GOLD, reference_relative_uncertainty=0.0, **AT_25)
    assert_recovers(check, true)
    assert sum(r.used for r in check.reflections) >= 10


def test_one_set_of_fringes_gives_one_factor_and_says_so():
    check = check_magnification(
        grains(geometry(1.02, 1.02), 0.3400, [25.0]), ReferenceSpacing(0.34, 0.005), temperature_c=22.5
    )
    assert check.scale[0] == check.scale[1] == pytest.approx(1.02, abs=1e-3)
    assert check.shear is None
    assert check.shear_uncertainty is None
    assert check.scale_uncertainty[0] == pytest.approx(0.0051, rel=0.02)
    assert "one-factor-only" in [c.code for c in check.cautions]
    assert "one factor" in check.sentence
    assert len(check.budgets) == 1
    assert check.corrected(picture("grains.tif")).pixel_size_relative_uncertainty == pytest.approx(0.005, rel=0.02)


def test_one_spacing_of_a_phase_is_asked_about_where_two_reflections_could_be_it():
    """0.2192 nm is gold 111 seen 7.4 % too small, or gold 200 seen 7 % too large."""
    with pytest.raises(CalibrationError, match=r"off and also with it.*at least three reflections"):
        check_magnification(grains(geometry(1, 1), 0.2192, [30.0]), GOLD)
    alone = check_magnification(grains(geometry(1, 1), 0.2350, [30.0]), GOLD)
    assert alone.reflections[0].hkl == (1, 1, 1)


def test_fringes_of_another_spacing_than_the_certificate_s_are_refused():
    with pytest.raises(CalibrationError, match=r"within 10 % of the reference spacing 0.34 nm.*0.2350"):
        check_magnification(grains(geometry(1, 1), 0.235, [30.0]), ReferenceSpacing(0.34, 0.001))


# --- several regions and pictures -----------------------------------------------------------------------------------


def test_regions_and_pictures_are_combined_and_their_spread_stands_in_the_budget():
    rng = np.random.default_rng(11)
    true = geometry(1.004, 1.013)
    measurements = []
    for p in range(6):
        micrograph = picture(f"picture {p}")
        moved = true + np.diag(rng.normal(0, 1e-3, 2))
        measurements += [
            crystal(moved + np.diag(rng.normal(0, 5e-4, 2)), seed=10 * p + r, micrograph=micrograph) for r in range(4)
        ]
    check = check_magnification(measurements, GOLD, reference_relative_uncertainty=1e-4, **AT_25)
    assert_recovers(check, true)
    assert len(check.regions) == 24
    lines = {line.source: line for line in check.budgets[0].lines}
    assert lines["spread between pictures"].degrees_of_freedom == 5
    assert lines["spread between regions"].degrees_of_freedom == 18
    assert lines["spread between pictures"].contribution == pytest.approx(1e-3 / math.sqrt(6), rel=0.6)
    assert lines["spread between regions"].contribution == pytest.approx(5e-4 / math.sqrt(24), rel=0.5)
    assert check.budgets[0].largest.source == "spread between pictures"
    assert "one-picture" not in [c.code for c in check.cautions]
    by_t = check_magnification(measurements, GOLD, reference_relative_uncertainty=1e-4, coverage="from t", **AT_25)
    assert by_t.coverage_factor > 2.1
    assert by_t.expanded_uncertainty[0] > check.expanded_uncertainty[0]


def test_pictures_of_different_magnification_are_not_mixed():
    other = crystal(geometry(1, 1), micrograph=picture("other.tif", 0.03), pixel_size_nm=0.03)
    with pytest.raises(CalibrationError, match=r"other.tif.*differs"):
        check_magnification([crystal(geometry(1, 1)), other], GOLD)


def test_a_picture_without_a_pixel_size_has_nothing_to_check():
    with pytest.raises(CalibrationError, match="the picture has none"):
        check_magnification(region_measurement(picture(pixel_size_nm=None), []), GOLD)
    with pytest.raises(CalibrationError, match="at least one measured region"):
        check_magnification([], GOLD)
    with pytest.raises(CalibrationError, match="no fringe that can be used"):
        check_magnification(region_measurement(picture(), []), GOLD)


# --- temperature, reference -----------------------------------------------------------------------------------------


def test_a_hot_reference_has_larger_spacings():
    """Gold 14.2e-6 per kelvin (handbook value, from memory): 300 K make 0.43 %."""
    cold, hot = (
        check_magnification(crystal(geometry(1, 1), noise=1e-6), GOLD, temperature_c=t, tilt_deg=0.0)
        for t in (25.0, 325.0)
    )
    assert hot.scale[0] / cold.scale[0] - 1 == pytest.approx(300 * 14.2e-6, rel=1e-3)
    coefficient = next(line for line in hot.budgets[0].lines if line.source == "thermal expansion: coefficient")
    assert coefficient.contribution == pytest.approx(300 * 14.2e-6 * 0.03, rel=0.01)


def test_without_a_temperature_a_room_s_is_assumed_and_stands_in_the_budget():
    check = check_magnification(crystal(geometry(1, 1)), GOLD)
    assert not check.temperature_stated
    line = next(line for line in check.budgets[0].lines if line.source == "thermal expansion: temperature")
    # 22.5 degrees with half a width of 5: 5 / sqrt(3) times 14.2e-6
    assert line.contribution == pytest.approx(2.9 * 14.2e-6, rel=0.01)


def test_graphite_expands_along_its_axis_only():
    graphite = load_phase("graphite")
    check = [
        check_magnification(grains(geometry(1, 1), 0.3354, [20.0], noise=1e-6), graphite, temperature_c=t, tilt_deg=0.0)
        for t in (25.0, 125.0)
    ]
    assert check[1].scale[0] / check[0].scale[0] - 1 == pytest.approx(100 * 26.5e-6, rel=0.01)


def test_an_expansion_of_the_user_s_own():
    stated = Expansion(per_k=(5e-6, 5e-6), relative_uncertainty=0.1, reference_c=20.0)
    reference = ReferenceSpacing(0.34, 0.001, "batch 7", stated)
    check = check_magnification(
        grains(geometry(1, 1), 0.34, [20.0], noise=1e-7), reference, temperature_c=120.0, tilt_deg=0.0
    )
    assert check.scale[0] - 1 == pytest.approx(5e-4, rel=1e-3)
    assert check.reference == "batch 7"
    assert "expansion-not-known" not in [c.code for c in check.cautions]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"temperature_c": -400.0}, "temperature_c"),
        ({"tilt_deg": -1.0}, "tilt_deg"),
        ({"tolerance": 0.0}, "tolerance"),
        ({"acceptance": "kind"}, "acceptance"),
        ({"coverage": "k = 1"}, "coverage"),
        ({"reference_relative_uncertainty": 1.0}, "reference's relative uncertainty"),
        ({"temperature_uncertainty_c": -1.0}, "temperature_uncertainty_c"),
    ],
)
def test_nonsense_is_refused(arguments, words):
    with pytest.raises(SettingsError, match=words):
        check_magnification(crystal(geometry(1, 1)), GOLD, **arguments)
    with pytest.raises(SettingsError, match="d_nm"):
        ReferenceSpacing(0.0, 0.001)
    with pytest.raises(SettingsError, match="relative_uncertainty"):
        ReferenceSpacing(0.3, -0.001)


@pytest.mark.parametrize(
    ("true", "tolerance", "acceptance", "verdict"),
    [
        (geometry(1.004, 1.013), 0.02, "simple", "within tolerance"),
        (geometry(1.004, 1.013), 0.01, "simple", "outside tolerance"),
        (geometry(1.004, 1.013), 0.014, "guarded", "not decided"),
        (geometry(1.0, 1.0, 0.03), 0.01, "simple", "outside tolerance"),
        (geometry(1.0, 1.0, 0.015), 0.01, "simple", "within tolerance"),
    ],
)
def test_verdict(true, tolerance, acceptance, verdict):
    """A shear makes lengths along the diagonals wrong by half of it, which the tolerance is for too."""
    check = check_magnification(crystal(true), GOLD, tolerance=tolerance, acceptance=acceptance, temperature_c=25.0)
    assert check.verdict == verdict
    assert f"{100 * tolerance:g} %" in check.sentence


# --- the sample picture ---------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def sample():
    micrograph = read(sample_file("gold_reference.ome.tif"))
    truth = json.loads(sample_file("gold_reference.json").read_text(encoding="utf-8"))
    return measure(micrograph), truth


def test_the_wrong_pixel_size_of_the_sample_is_corrected_within_its_uncertainty(sample):
    """Simulated with a general multislice program, from the cell of Swanson & Tatge that the phase has too."""
    measurement, truth = sample
    check = check_magnification(measurement, GOLD, reference_relative_uncertainty=0.0, temperature_c=25.0)
    wanted = truth["pixel_size"]["true_over_stated"]
    assert_recovers(check, geometry(*wanted), factor=2.0)
    assert check.scale == pytest.approx(wanted, abs=5e-4)
    assert check.pixel_size_nm == pytest.approx(truth["pixel_size"]["true_nm"], rel=5e-4)
    assert max(check.scale_uncertainty) < 2e-4
    assert check.shear == pytest.approx(0.0, abs=3e-4)
    corrected = check.corrected(measurement.micrograph)
    again = check_magnification(measure(corrected), GOLD, temperature_c=25.0, tilt_deg=0.0)
    assert again.scale == pytest.approx((1.0, 1.0), abs=2e-4)


# --- internal standard ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("true", [geometry(1.0, 1.0), geometry(1.06, 1.05, 0.01)])
def test_mismatch_does_not_depend_on_the_pixel_size(true):
    """A film of silicon's lattice, 1.2 % larger, on silicon: the mismatch is 1.2 % whatever the magnification."""
    micrograph = picture()
    standard = crystal(true, phase=SILICON, micrograph=micrograph, noise=5e-5)
    film = crystal(true, phase=SILICON, micrograph=micrograph, noise=5e-5, enlarged=1.012, seed=2)
    result = calibrate_within_picture(standard, SILICON, [film], temperature_c=22.5)
    assert len(result.mismatches) >= 4
    for mismatch in result.mismatches:
        assert mismatch.mismatch_percent == pytest.approx(1.2, abs=4 * mismatch.mismatch_uncertainty_percent)
        assert mismatch.mismatch_uncertainty_percent < 0.05
        assert mismatch.angle_deg < 0.5
        assert mismatch.d_nm == pytest.approx(1.012 * mismatch.standard_d_nm, rel=1e-3)


def test_the_reference_s_own_uncertainty_enters_the_spacing_but_not_the_mismatch():
    micrograph = picture()
    standard = crystal(geometry(1, 1), micrograph=micrograph)
    film = crystal(geometry(1, 1), micrograph=micrograph, enlarged=1.01, seed=2)
    for mismatch in calibrate_within_picture(standard, GOLD, [film], temperature_c=25.0).mismatches:
        assert mismatch.d_uncertainty_nm / mismatch.d_nm > 1e-3
        assert mismatch.mismatch_uncertainty_percent < 0.05


def test_an_internal_standard_is_one_of_the_same_picture():
    with pytest.raises(CalibrationError, match="its own picture"):
        calibrate_within_picture(crystal(geometry(1, 1)), GOLD, [crystal(geometry(1, 1))])


# --- trials ---------------------------------------------------------------------------------------------------------


def trials_module():
    import importlib.util
    from pathlib import Path

    path = Path(__file__).parent.parent / "benchmarks" / "magnification_trials.py"
    spec = importlib.util.spec_from_file_location("magnification_trials", path)
    module = importlib.util.module_from_spec(spec)
    import sys

    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def test_errors_are_as_large_as_stated():
    """The quick form of the benchmark: 120 trials that draw every term of the budget; sd has an own error of 6 %."""
    module = trials_module()
    case = module.Case("quick", pictures=3, regions=2, between_regions=2e-4, between_pictures=2e-4)
    ratios = module.run_case(case, 120, 7)
    assert np.all(np.abs(np.sqrt((ratios**2).mean(axis=0)) - 1) < 0.2)


@pytest.mark.slow
def test_errors_are_as_large_as_stated_over_many_trials():
    module = trials_module()
    for case in module.CASES[:3]:
        ratios = module.run_case(case, 500, 3)
        assert np.all(np.abs(np.sqrt((ratios**2).mean(axis=0)) - 1) < 0.15), case.name


@pytest.mark.slow
def test_indices_are_right_with_the_magnification_unknown():
    rms, sd, right = trials_module().index_trials(500, 3, 4, 1e-3)
    assert rms < 6e-4
    assert 0.9 < sd < 1.1
    assert right >= 0.99
