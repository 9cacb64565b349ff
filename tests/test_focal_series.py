"""Combining a focal series, and what it gains.

The pictures of `tests/focal_series_pictures` come from a general multislice simulator (ase and abtem).
"""

from __future__ import annotations

import dataclasses
import json
import math
from pathlib import Path

import numpy as np
import pytest
import tifffile

from fringespan.exceptions import CalibrationError, SettingsError
from fringespan.focal_series import combine_focal_series, focal_series_gain, series_forecast
from fringespan.measurement import measure
from fringespan.micrograph import Micrograph
from fringespan.region import Region

PICTURES = Path(__file__).parent / "focal_series_pictures"


@pytest.fixture
def picture(make_measurement):
    """Return a maker of the measurement of one picture of a series, with these peaks and this defocus."""

    def make(*peaks, defocus_nm=None, **known):
        facts = {"pixel_size_nm": 0.02, "pixel_size_relative_uncertainty": 0.015, "voltage_kv": 300.0} | known
        micrograph = Micrograph(np.ones((300, 300)), defocus_nm=defocus_nm, **facts)
        return make_measurement(micrograph, peaks=peaks, cautions=())

    return make


# --- the gain ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("count", "gain"), [(1, 1.0), (2, 0.812), (3, 0.719), (5, 0.617), (10, 0.501)])
def test_the_gain_is_that_of_errors_that_are_partly_common(count, gain):
    assert focal_series_gain(count) == pytest.approx(gain, abs=5e-4)
    assert focal_series_gain(count) >= 1 / math.sqrt(count)


@pytest.mark.parametrize("count", [0, -1, 0.5, math.nan])
def test_less_than_one_picture_is_refused(count):
    with pytest.raises(SettingsError, match="count must be at least 1"):
        focal_series_gain(count)


# --- combining -----------------------------------------------------------------------------------------------------


def test_each_part_of_the_uncertainty_gains_in_its_own_way(picture, make_peak):
    spacings = [0.2350, 0.2352, 0.2354, 0.2356]
    series = combine_focal_series([picture(make_peak(d, 30), defocus_nm=10.0 * i) for i, d in enumerate(spacings)])
    (reflection,) = series.reflections
    single = make_peak(0.2353, 30)
    assert reflection.used == 4
    assert reflection.effective_count == pytest.approx(4)
    assert reflection.d_nm == pytest.approx(0.2353)
    assert reflection.d_fit_uncertainty_nm == pytest.approx(single.d_fit_uncertainty_nm / 2, rel=1e-3)
    assert reflection.single_crystal_uncertainty_nm == pytest.approx(single.d_crystal_uncertainty_nm, rel=1e-3)
    assert reflection.d_crystal_uncertainty_nm == pytest.approx(single.d_crystal_uncertainty_nm * 4**-0.3, rel=1e-3)
    pixel_part = 0.2353 * 0.015
    assert reflection.d_uncertainty_nm == pytest.approx(
        math.hypot(reflection.d_fit_uncertainty_nm, reflection.d_crystal_uncertainty_nm, pixel_part), rel=1e-6
    )
    assert reflection.spread_nm == pytest.approx(np.std(spacings, ddof=1))


def test_stronger_fringes_weigh_by_the_square_of_their_amplitude(picture, make_peak):
    strong, weak = make_peak(0.2350, 30, visibility=0.3), make_peak(0.2360, 30, visibility=0.1)
    (reflection,) = combine_focal_series([picture(strong, defocus_nm=0.0), picture(weak, defocus_nm=20.0)]).reflections
    assert reflection.d_nm == pytest.approx(0.9 * 0.2350 + 0.1 * 0.2360)
    # (sum w)^2 / sum w^2 with weights 0.9 and 0.1
    assert reflection.effective_count == pytest.approx(1 / (0.81 + 0.01))


def test_without_visibilities_amplitudes_weigh(picture, make_peak):
    peaks = (make_peak(0.2350, 30, visibility=None, amplitude=30.0), make_peak(0.2360, 30, amplitude=10.0))
    (reflection,) = combine_focal_series([picture(p) for p in peaks]).reflections
    assert reflection.d_nm == pytest.approx(0.9 * 0.2350 + 0.1 * 0.2360)


def test_pictures_of_one_defocus_gain_nothing_on_the_crystals_part(picture, make_peak):
    series = combine_focal_series([picture(make_peak(0.2355, 30), defocus_nm=40.0) for _ in range(3)])
    (reflection,) = series.reflections
    assert reflection.effective_count == 1
    assert reflection.d_crystal_uncertainty_nm == pytest.approx(reflection.single_crystal_uncertainty_nm)
    assert [c.code for c in series.cautions] == ["series-defocus-repeated"]


def test_while_the_pixel_size_is_not_known_well_enough_no_whole_uncertainty_is_given(picture, make_peak):
    peaks = [make_peak(0.2355, 30, stated_uncertainty=None) for _ in range(2)]
    (reflection,) = combine_focal_series([picture(p, pixel_size_relative_uncertainty=None) for p in peaks]).reflections
    assert reflection.d_uncertainty_nm is None
    assert reflection.d_crystal_uncertainty_nm > 0


def test_a_withheld_spacing_is_matched_but_not_used(picture, make_peak):
    nothing = dict.fromkeys(("d_nm", "d_fit_uncertainty_nm", "d_crystal_uncertainty_nm", "d_uncertainty_nm"))
    series = combine_focal_series(
        [
            picture(make_peak(0.2350, 30)),
            picture(make_peak(0.2400, 30, withheld="broken", **nothing)),
            picture(make_peak(0.2360, 30)),
        ]
    )
    (reflection,) = series.reflections
    assert reflection.peaks == (0, 0, 0)
    assert reflection.used == 2
    assert reflection.d_nm == pytest.approx(0.2355)


@pytest.mark.parametrize(("shift", "same"), [(0.4, True), (0.9, False), (2.0, False)])
def test_peaks_within_half_the_resolution_are_the_same_reflection(picture, shift, same, make_peak):
    extent = 4.0  # smallest width of the crystal of these measurements, nm
    other = 1 / (1 / 0.2355 + shift / extent)
    sharp = {"d_fit_uncertainty_nm": 1e-6, "d_crystal_uncertainty_nm": 1e-6}
    series = combine_focal_series([picture(make_peak(d, 30, **sharp)) for d in (0.2355, other)])
    assert bool(series.reflections) is same
    assert ("series-nothing-in-common" in [c.code for c in series.cautions]) is not same


def test_a_reflection_keeps_its_identity_where_the_reported_sign_of_g_changes(picture, make_peak):
    series = combine_focal_series([picture(make_peak(0.2355, 89.95)), picture(make_peak(0.2355, 90.05))])
    assert len(series.reflections) == 1
    across = combine_focal_series([picture(make_peak(0.2355, 0.1)), picture(make_peak(0.2355, 179.9))])
    (reflection,) = across.reflections
    assert min(reflection.direction_deg, 180 - reflection.direction_deg) == pytest.approx(0, abs=1e-6)


def test_reflections_are_told_apart_and_their_angle_is_the_pictures_mean(picture, make_peak):
    first = picture(make_peak(0.2355, 35.0), make_peak(0.2355, 144.8), make_peak(0.2039, 90))
    second = picture(make_peak(0.2039, 90.1), make_peak(0.2355, 35.2), make_peak(0.2355, 145.2))
    series = combine_focal_series([first, second])
    assert {r.peaks for r in series.reflections} == {(0, 1), (1, 2), (2, 0)}
    by_pair = {frozenset(series.reflections[i].peaks for i in angle.peaks): angle for angle in series.angles}
    angle = by_pair[frozenset({(0, 1), (1, 2)})]
    assert angle.angle_deg == pytest.approx((109.8 + 110.0) / 2)
    assert angle.angle_uncertainty_deg == pytest.approx(0.09 * 2**-0.3)


def test_what_is_seen_in_one_picture_only_is_left_out(picture, make_peak):
    series = combine_focal_series([picture(make_peak(0.2355, 35), make_peak(0.1, 80)), picture(make_peak(0.2355, 35))])
    assert [r.peaks for r in series.reflections] == [(0, 0)]


def test_the_lattices_spacings_are_averaged_and_keep_the_pixel_sizes_part(picture, make_peak):
    peaks = [
        make_peak(0.2355, 30, d_lattice_nm=d, d_lattice_uncertainty_nm=math.hypot(2e-4, 0.2355 * 0.015))
        for d in (0.2354, 0.2358)
    ]
    (reflection,) = combine_focal_series([picture(p) for p in peaks]).reflections
    assert reflection.d_lattice_nm == pytest.approx(0.2356)
    assert reflection.d_lattice_uncertainty_nm == pytest.approx(math.hypot(2e-4 * 2**-0.3, 0.2355 * 0.015), rel=1e-5)


def test_the_calmest_defocus_of_a_reflection_is_given_where_the_lens_is_known(picture, make_peak):
    peak = make_peak(0.2355, 30)
    known = {"cs_mm": 1.0, "voltage_kv": 200.0}
    (reflection,) = combine_focal_series([picture(peak, **known), picture(peak, **known)]).reflections
    # Cs lambda^2 / d^2 with the published wavelength 2.5079 pm
    assert reflection.calmest_defocus_nm == pytest.approx(1e6 * (2.5079e-3 / 0.2355) ** 2, rel=1e-4)
    (unknown,) = combine_focal_series([picture(peak), picture(peak)]).reflections
    assert unknown.calmest_defocus_nm is None


@pytest.mark.parametrize(
    ("second", "known", "code"),
    [
        (0.2355, {}, "series-defocus-not-stated"),
        (0.2355, {"defocus_nm": 30.0, "pixel_size_nm": 0.0202}, "series-pixel-sizes-differ"),
        (0.2369, {"defocus_nm": 30.0}, "series-spread"),
    ],
)
def test_what_is_said_of_a_doubtful_series(picture, second, known, code, make_peak):
    sharp = {"d_fit_uncertainty_nm": 1e-4, "d_crystal_uncertainty_nm": 2e-4}
    series = combine_focal_series(
        [
            picture(make_peak(0.2355, 30, **sharp), defocus_nm=0.0),
            picture(make_peak(second, 30, **sharp), **known),
        ]
    )
    assert [c.code for c in series.cautions] == [code]


def test_nothing_is_said_of_a_sound_series(picture, make_peak):
    series = combine_focal_series([picture(make_peak(0.2355, 30), defocus_nm=d) for d in (0.0, 20.0, 40.0)])
    assert series.cautions == ()


def test_a_series_needs_two_pictures_with_pixel_sizes(picture, make_measurement, make_peak):
    with pytest.raises(SettingsError, match="at least two"):
        combine_focal_series([picture(make_peak(0.2355, 30))])
    without = make_measurement(Micrograph(np.ones((300, 300)), name="b.tif"), peaks=())
    with pytest.raises(CalibrationError, match=r"b\.tif.*no pixel size"):
        combine_focal_series([picture(make_peak(0.2355, 30)), without])


# --- advice --------------------------------------------------------------------------------------------------------


def test_a_forecast_lowers_the_fit_faster_than_the_crystal(make_peak):
    peak = make_peak(0.2355, 30)
    forecast = series_forecast(peak, 9)
    assert forecast.d_fit_uncertainty_nm == pytest.approx(peak.d_fit_uncertainty_nm / 3)
    assert forecast.d_crystal_uncertainty_nm == pytest.approx(peak.d_crystal_uncertainty_nm * 9**-0.3)
    assert peak.d_nm * 0.015 < forecast.d_uncertainty_nm < peak.d_uncertainty_nm
    assert series_forecast(dataclasses.replace(peak, d_uncertainty_nm=None), 9).d_uncertainty_nm is None
    with pytest.raises(SettingsError, match="must have a spacing"):
        series_forecast(dataclasses.replace(peak, d_nm=None), 9)


# --- simulated particles with a known truth ------------------------------------------------------------------------


def outcome_of(name: str) -> tuple[list[list[float]], list[float], list[float]]:
    """Return errors of d of strong reflections in each picture, of the series, and these over their uncertainty.

    Errors are in cycles over the crystal, |g| error times extent, cut at 0.3.
    """
    truth = json.loads((PICTURES / f"{name}.json").read_text(encoding="utf-8"))
    frames = tifffile.imread(PICTURES / f"{name}.tif")
    region = Region(name, truth["vertices_px"])
    known = {key: truth[key] for key in ("voltage_kv", "cs_mm")} | {"pixel_size_nm": truth["pixel_nm"]}
    measurements = [
        measure(Micrograph(frame, defocus_nm=defocus, pixel_size_relative_uncertainty=0.0, **known), region)
        for frame, defocus in zip(frames, truth["defocus_nm"], strict=True)
    ]
    g = np.array(truth["g_per_nm"])
    extent = max(m.crystal_extent_nm[1] for m in measurements)
    singles, together, pulls = [], [], []
    strongest = max(m.peaks[0].signal_to_noise for m in measurements)
    for reflection in combine_focal_series(measurements).reflections:
        peaks = [m.peaks[k] for m, k in zip(measurements, reflection.peaks, strict=True) if k is not None]
        apart = np.hypot(*(g - peaks[0].g_per_nm).T)
        d_true = 1 / np.hypot(*g[apart.argmin()])
        if apart.min() > 1 / extent or max(p.signal_to_noise for p in peaks) < 0.1 * strongest or reflection.used < 5:
            continue

        def cycles(d: float, d_true: float = d_true) -> float:
            return float(np.clip((d / d_true - 1) / d_true * extent, -0.3, 0.3))

        singles.append([cycles(p.d_nm) for p in peaks])
        together.append(cycles(reflection.d_nm))
        pulls.append((reflection.d_nm - d_true) / reflection.d_uncertainty_nm)
    return singles, together, pulls


def test_on_simulated_particles_a_series_gains_at_least_what_is_stated():
    ratios, pulls = [], []
    for name in ("pt_dome", "ag_dome", "cu2o_dome", "zns_off_centre_dome"):
        singles, together, new = outcome_of(name)
        assert len(together) >= 4
        ratios.append(np.sqrt(np.mean(np.square(together)) / np.mean(np.square(singles))))
        pulls.extend(new)
    # the silver particle gains nothing, its error is the same at every defocus: hence the mean over particles
    assert np.exp(np.mean(np.log(ratios))) < focal_series_gain(5)
    assert 0.2 < np.mean(np.minimum(np.square(pulls), 25)) < 2.0
