from __future__ import annotations

import itertools
import math
import tomllib
from dataclasses import FrozenInstanceError
from pathlib import Path

import numpy as np
import pytest
import scipy.constants
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from fringespan.beam import (
    Lens,
    aberration_phase_rad,
    beam_summary,
    bragg_angle_mrad,
    delocalisation_nm,
    electron_wavelength_pm,
    envelopes,
    excitation_error_per_nm,
    focus_without_delocalisation_nm,
    information_limit_nm,
    interaction_constant_per_v_nm,
    nonrelativistic_wavelength_pm,
    parabolic_excitation_error_per_nm,
    phase_contrast_transfer,
    point_resolution_nm,
    scattering_angle_mrad,
    scherzer_underfocus_nm,
    signed_delocalisation_nm,
    speed_over_light,
    transfer_zeros_per_nm,
)
from fringespan.exceptions import CalibrationError

KNOWN = tomllib.loads((Path(__file__).parent / "known" / "beam.toml").read_text(encoding="utf-8"))

VOLTAGES_KV = st.floats(1, 3000)
LENSES = st.builds(
    Lens,
    voltage_kv=st.floats(20, 1250),
    cs_mm=st.floats(-5, 5),
    defocus_nm=st.floats(-500, 500),
    focal_spread_nm=st.floats(0, 20),
    convergence_mrad=st.floats(0, 2),
    image_spread_nm=st.floats(0, 0.1),
)


class TestWavelength:
    @pytest.mark.parametrize(
        ("voltage_kv", "wavelength_pm", "rounded_to"),
        [
            pytest.param(kv, pm, table["rounded_to_pm"], id=f"{kv}kV-{table['status']}")
            for table in KNOWN["wavelength"]
            for kv, pm in zip(table["kv"], table["pm"], strict=True)
        ],
    )
    def test_agrees_with_published_tables(self, voltage_kv: float, wavelength_pm: float, rounded_to: float) -> None:
        assert electron_wavelength_pm(voltage_kv) == pytest.approx(wavelength_pm, abs=rounded_to / 2)

    @pytest.mark.parametrize("table", [t for t in KNOWN["wavelength"] if "nonrelativistic_pm" in t])
    def test_without_relativity_is_too_long(self, table: dict[str, list[float]]) -> None:
        (kv,), (pm,) = table["kv"], table["nonrelativistic_pm"]
        assert nonrelativistic_wavelength_pm(kv) == pytest.approx(pm, abs=0.005)

    def test_of_the_resolution_record(self) -> None:
        record = KNOWN["resolution_record"]
        quotient = record["resolution_pm"] / electron_wavelength_pm(record["kv"])
        assert quotient == pytest.approx(record["wavelengths"], abs=0.5)

    @given(VOLTAGES_KV)
    def test_is_that_of_the_relativistic_momentum(self, voltage_kv: float) -> None:
        # by the textbook's form with m, and by Compton's wavelength, which CODATA adjusts on its own
        x = voltage_kv / (scipy.constants.value("electron mass energy equivalent in MeV") * 1e3)
        compton_pm = scipy.constants.value("Compton wavelength") * 1e12
        assert electron_wavelength_pm(voltage_kv) == pytest.approx(compton_pm / math.sqrt(x * (x + 2)), rel=1e-8)
        gamma = 1 + x
        assert speed_over_light(voltage_kv) == pytest.approx(math.sqrt(1 - 1 / gamma**2), rel=1e-6)

    @given(VOLTAGES_KV)
    def test_relativity_shortens_it_by_the_known_factor(self, voltage_kv: float) -> None:
        x = voltage_kv / (scipy.constants.value("electron mass energy equivalent in MeV") * 1e3)
        ratio = nonrelativistic_wavelength_pm(voltage_kv) / electron_wavelength_pm(voltage_kv)
        assert ratio == pytest.approx(math.sqrt(1 + x / 2), rel=1e-8)

    @pytest.mark.parametrize("voltage_kv", [0, 0.999, 3000.1, 300_000, -300, math.nan, math.inf, "fast", None])
    def test_refuses_impossible_voltages(self, voltage_kv: float) -> None:
        for of_voltage in (electron_wavelength_pm, nonrelativistic_wavelength_pm, interaction_constant_per_v_nm):
            with pytest.raises(CalibrationError, match=r"voltage_kv must .* got .*; give the accelerating voltage"):
                of_voltage(voltage_kv)


@pytest.mark.parametrize(
    ("voltage_kv", "per_v_nm"),
    [
        pytest.param(*row, id=f"{row[0]}kV")
        for table in KNOWN["interaction_constant"]
        for row in zip(table["kv"], table["per_v_nm"], strict=True)
    ],
)
def test_interaction_constant_agrees_with_the_published_table(voltage_kv: float, per_v_nm: float) -> None:
    assert interaction_constant_per_v_nm(voltage_kv) == pytest.approx(per_v_nm, abs=0.5e-5)


@given(VOLTAGES_KV)
def test_interaction_constant_in_its_other_form(voltage_kv: float) -> None:
    x = voltage_kv / (scipy.constants.value("electron mass energy equivalent in MeV") * 1e3)
    other = 2 * math.pi / (electron_wavelength_pm(voltage_kv) * 1e-3 * voltage_kv * 1e3) * (1 + x) / (2 + x)
    assert interaction_constant_per_v_nm(voltage_kv) == pytest.approx(other, rel=1e-8)


class TestScattering:
    def test_bragg_law_holds(self) -> None:
        d = np.array([[0.1, 0.2], [0.3, 0.4]])
        theta = bragg_angle_mrad(d, 200.0) * 1e-3
        assert theta.shape == d.shape
        np.testing.assert_allclose(2 * d * np.sin(theta), electron_wavelength_pm(200.0) * 1e-3, rtol=1e-12)

    def test_scattering_angle_is_twice_braggs(self) -> None:
        np.testing.assert_allclose(scattering_angle_mrad([0.1, 0.2], 80.0), 2 * bragg_angle_mrad([0.1, 0.2], 80.0))

    def test_reaches_backscattering_at_half_the_wavelength(self) -> None:
        half_nm = electron_wavelength_pm(1.0) / 2000
        assert float(scattering_angle_mrad(half_nm * (1 + 1e-12), 1.0)) == pytest.approx(1000 * math.pi, rel=1e-5)
        with pytest.raises(CalibrationError, match=r"d_nm must be at least half the wavelength, 19\.4 pm at 1 kV"):
            scattering_angle_mrad([0.2, half_nm * 0.999], 1.0)

    @pytest.mark.parametrize("d_nm", [0.0, -0.2, math.nan, math.inf, "wide"])
    def test_refuses_impossible_spacings(self, d_nm: float) -> None:
        with pytest.raises(CalibrationError, match="d_nm must be"):
            bragg_angle_mrad(d_nm, 200.0)

    @given(st.floats(20, 3000), st.floats(0, 20))
    def test_excitation_error_puts_the_wave_vector_on_the_ewald_sphere(self, voltage_kv: float, g: float) -> None:
        radius = 1000 / electron_wavelength_pm(voltage_kv)
        s = float(excitation_error_per_nm(g, voltage_kv))
        assert s <= 0
        assert math.hypot(g, radius + s) == pytest.approx(radius, rel=1e-12)

    @given(st.floats(60, 3000), st.floats(0.1, 10))
    def test_small_angle_form_is_its_parabola(self, voltage_kv: float, g: float) -> None:
        exact, parabola = excitation_error_per_nm(g, voltage_kv), parabolic_excitation_error_per_nm(g, voltage_kv)
        small = (g * electron_wavelength_pm(voltage_kv) * 1e-3) ** 2
        assert abs(exact / parabola - 1) <= small / 3
        assert abs(exact) >= abs(parabola)

    def test_beyond_the_sphere_there_is_no_excitation_error(self) -> None:
        with pytest.raises(CalibrationError, match="must not exceed the radius of the Ewald sphere"):
            excitation_error_per_nm(26.0, 1.0)


class TestScherzersConditions:
    @pytest.mark.parametrize(
        ("kv", "cs_mm", "nm"), [pytest.param(*r, id=f"{r[0]}kV-{r[1]}mm") for r in KNOWN["point_resolution"][0]["rows"]]
    )
    def test_point_resolution_agrees_with_what_makers_state(self, kv: float, cs_mm: float, nm: float) -> None:
        assert point_resolution_nm(kv, cs_mm) == pytest.approx(nm, abs=0.01)

    @pytest.mark.parametrize("kv", [80.0, 200.0, 300.0])
    @pytest.mark.parametrize("cs_mm", [-0.02, 0.5, 1.2, 3.0])
    def test_textbook_factors(self, kv: float, cs_mm: float) -> None:
        cs, wavelength = abs(cs_mm) * 1e6, electron_wavelength_pm(kv) * 1e-3
        resolution, underfocus = KNOWN["point_resolution_factor"], KNOWN["underfocus_factor"]
        factor = point_resolution_nm(kv, cs_mm) / (cs**0.25 * wavelength**0.75)
        assert factor == pytest.approx(resolution["factor"], abs=resolution["rounded_to"])
        factor = abs(scherzer_underfocus_nm(kv, cs_mm)) / math.sqrt(cs * wavelength)
        assert factor == pytest.approx(underfocus["factor"], abs=underfocus["rounded_to"])

    def test_underfocus_is_positive_and_overfocus_negative(self) -> None:
        assert scherzer_underfocus_nm(300.0, 1.2) > 0
        assert scherzer_underfocus_nm(300.0, -0.015) < 0
        assert scherzer_underfocus_nm(300.0, 0.0) == 0

    @pytest.mark.parametrize("cs_mm", [1.0, -0.02])
    def test_first_zero_at_this_focus_is_the_point_resolution(self, cs_mm: float) -> None:
        lens = Lens(voltage_kv=200, cs_mm=cs_mm, defocus_nm=scherzer_underfocus_nm(200, cs_mm))
        resolution = point_resolution_nm(200, cs_mm)
        first = transfer_zeros_per_nm(lens, 1.01 / resolution)[0]
        assert 1 / first == pytest.approx(resolution, rel=1e-12)

    def test_aberration_phase_turns_at_two_thirds_of_pi(self) -> None:
        # what makes the band so wide: the phase stays within a quarter turn of -90 degrees
        lens = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=scherzer_underfocus_nm(200, 1.0))
        g = np.linspace(0, 1 / point_resolution_nm(200, 1.0), 4001)
        phase = aberration_phase_rad(g, lens)
        assert phase.min() == pytest.approx(-2 * math.pi / 3, rel=1e-6)
        assert (phase_contrast_transfer(g[1:-1], lens) < 0).all()

    def test_point_resolution_needs_an_aberration(self) -> None:
        with pytest.raises(CalibrationError, match="cs_mm must not be 0"):
            point_resolution_nm(300.0, 0.0)


class TestLens:
    @pytest.mark.parametrize(
        "wrong",
        [
            {"voltage_kv": 0.5},
            {"cs_mm": 1200.0},
            {"cs_mm": math.nan},
            {"defocus_nm": 1e6},
            {"defocus_nm": math.inf},
            {"focal_spread_nm": -1.0},
            {"convergence_mrad": 101.0},
            {"image_spread_nm": -0.1},
        ],
        ids=lambda wrong: "-".join(f"{k}={v}" for k, v in wrong.items()),
    )
    def test_refuses_impossible_values(self, wrong: dict[str, float]) -> None:
        right = {"voltage_kv": 200.0, "cs_mm": 1.0, "defocus_nm": 60.0}
        (name,) = wrong
        with pytest.raises(CalibrationError, match=rf"{name} must lie between .*, got .*; give"):
            Lens(**{**right, **wrong})

    def test_cannot_be_changed(self) -> None:
        lens = Lens(voltage_kv=200, cs_mm=1, defocus_nm=60)
        with pytest.raises(FrozenInstanceError):
            lens.cs_mm = 2.0  # type: ignore[misc]


class TestTransferZeros:
    @given(LENSES)
    def test_are_all_the_zeros_there_are(self, lens: Lens) -> None:
        g_max = 6.0
        zeros = transfer_zeros_per_nm(lens, g_max)
        assert (np.diff(zeros) > 0).all()
        assert ((zeros > 0) & (zeros <= g_max)).all()
        phase = aberration_phase_rad(zeros, lens)
        np.testing.assert_allclose(
            phase / math.pi, np.round(phase / math.pi), atol=1e-6 * (1 + abs(phase).max(initial=0))
        )
        # between two neighbours the phase stays within one half turn: none is left out
        between = np.concatenate([[0], zeros, [g_max]])
        for low, high in itertools.pairwise(between):
            turns = aberration_phase_rad(np.linspace(low, high, 41)[1:-1], lens) / math.pi
            assert turns.max() - turns.min() <= 1 + 1e-6

    @pytest.mark.parametrize(
        "lens",
        [
            Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=57.8),
            Lens(voltage_kv=300, cs_mm=-0.05, defocus_nm=-10.0),
            Lens(voltage_kv=80, cs_mm=0.0, defocus_nm=20.0),
            Lens(voltage_kv=300, cs_mm=0.0, defocus_nm=-20.0),
        ],
    )
    def test_agree_with_a_numerical_search(self, lens: Lens) -> None:
        def transfer(g: float) -> float:
            return float(phase_contrast_transfer(g, lens))

        grid = np.linspace(0.05, 12, 40_001)
        values = phase_contrast_transfer(grid, lens)
        crossings = np.flatnonzero(np.sign(values[:-1]) != np.sign(values[1:]))
        found = [brentq(transfer, grid[i], grid[i + 1], xtol=1e-12) for i in crossings]
        assert len(found) >= 2
        np.testing.assert_allclose(transfer_zeros_per_nm(lens, 12.0), found, rtol=1e-9)

    def test_a_lens_without_cs_and_defocus_has_none(self) -> None:
        lens = Lens(voltage_kv=300, cs_mm=0, defocus_nm=0)
        assert transfer_zeros_per_nm(lens, 10).size == 0
        assert not phase_contrast_transfer(np.linspace(0, 10, 11), lens).any()

    def test_refuses_to_list_without_end(self) -> None:
        with pytest.raises(CalibrationError, match="ten million zeros"):
            transfer_zeros_per_nm(Lens(voltage_kv=300, cs_mm=50, defocus_nm=0), 1000.0)


class TestSecondRoad:
    """What the formulas say, found again from a wave that is sent through the lens."""

    LENS = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=80.0)

    def test_contrast_of_a_weak_phase_grating(self) -> None:
        cycles, length_nm, weak = 40, 10.0, 1e-4
        x = np.arange(1024) * length_nm / 1024
        wave = np.exp(1j * weak * np.cos(2 * np.pi * cycles * x / length_nm))
        g = np.fft.fftfreq(1024, length_nm / 1024)
        image = abs(np.fft.ifft(np.fft.fft(wave) * np.exp(-1j * aberration_phase_rad(abs(g), self.LENS)))) ** 2
        contrast = 2 * np.fft.fft(image)[cycles].real / 1024 / (2 * weak)
        assert contrast == pytest.approx(float(phase_contrast_transfer(cycles / length_nm, self.LENS)), abs=1e-3)

    @pytest.mark.parametrize("defocus_nm", [-60.0, 0.0, 80.0, 300.0])
    def test_delocalisation_is_the_shift_of_a_wave_packet(self, defocus_nm: float) -> None:
        lens = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=defocus_nm)
        g0, width_nm, n, pixel_nm = 3.0, 6.0, 4096, 0.05
        x = (np.arange(n) - n / 2) * pixel_nm
        packet = np.exp(-((x / width_nm) ** 2) / 2 + 2j * np.pi * g0 * x)
        g = np.fft.fftfreq(n, pixel_nm)
        moved = abs(np.fft.ifft(np.fft.fft(packet) * np.exp(-1j * aberration_phase_rad(abs(g), lens)))) ** 2
        shift = (moved * x).sum() / moved.sum()
        assert shift == pytest.approx(float(signed_delocalisation_nm(g0, lens)), abs=0.01)
        assert abs(shift) == pytest.approx(float(delocalisation_nm(g0, lens)), abs=0.01)

    def test_focal_spread_is_the_mean_over_defocus(self) -> None:
        g = np.linspace(0, 5, 21)
        defocus = self.LENS.defocus_nm + np.random.default_rng(5).normal(0, 6.0, 40_000)
        lens = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=80.0, focal_spread_nm=6.0)
        phase = -math.pi * lens.wavelength_nm * g[:, None] ** 2 * (defocus - 80.0)
        np.testing.assert_allclose(abs(np.exp(1j * phase).mean(axis=1)), envelopes(g, lens).focal_spread, atol=0.02)

    def test_convergence_is_the_mean_over_beam_tilts(self) -> None:
        g, alpha = np.linspace(0.5, 6, 23), 0.1e-3
        lens = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=80.0, convergence_mrad=0.1)
        tilt = np.linspace(-5, 5, 2001) * alpha
        weight = np.exp(-((tilt / alpha) ** 2))

        def chi(k: np.ndarray) -> np.ndarray:
            return aberration_phase_rad(abs(k), lens)

        start = tilt / lens.wavelength_nm
        mean = (weight * np.exp(1j * (chi(g[:, None] + start) - chi(start)))).sum(axis=1) / weight.sum()
        np.testing.assert_allclose(abs(mean), envelopes(g, lens).convergence, atol=0.01)

    def test_image_spread_is_the_mean_over_shifts(self) -> None:
        g = np.linspace(0, 10, 21)
        lens = Lens(voltage_kv=300, cs_mm=0.0, defocus_nm=5.0, image_spread_nm=0.03)
        shift = np.random.default_rng(6).normal(0, 0.03, 40_000)
        mean = np.exp(2j * np.pi * g[:, None] * shift).mean(axis=1)
        np.testing.assert_allclose(abs(mean), envelopes(g, lens).image_spread, atol=0.02)


class TestEnvelopes:
    @given(LENSES)
    def test_only_weaken(self, lens: Lens) -> None:
        g = np.linspace(0, 20, 101)
        parts = envelopes(g, lens)
        for part in (parts.focal_spread, parts.convergence, parts.image_spread, parts.total):
            assert ((part >= 0) & (part <= 1)).all()
            assert part[0] == 1
        assert (abs(phase_contrast_transfer(g, lens)) <= parts.total).all()

    @given(LENSES)
    def test_information_limit_is_where_they_last_leave_the_square_of_1_over_e(self, lens: Lens) -> None:
        limit = information_limit_nm(lens)
        if limit is None:
            assert float(envelopes(2 / lens.wavelength_nm, lens).total) >= math.exp(-2)
            return
        assert float(envelopes(1 / limit, lens).total) == pytest.approx(math.exp(-2), rel=1e-4)
        assert (envelopes(np.linspace(1.0001, 5, 200) / limit, lens).total < math.exp(-2)).all()

    def test_information_limit_by_focal_spread_alone(self) -> None:
        # rho = (pi lambda Delta / 2)^(1/2), the textbook's information limit (from memory)
        lens = Lens(voltage_kv=300, cs_mm=1.2, defocus_nm=60, focal_spread_nm=4.0)
        assert information_limit_nm(lens) == pytest.approx(math.sqrt(math.pi * lens.wavelength_nm * 4 / 2), rel=1e-9)

    def test_a_perfectly_coherent_lens_has_no_information_limit(self) -> None:
        assert information_limit_nm(Lens(voltage_kv=300, cs_mm=1.2, defocus_nm=60)) is None


@given(st.floats(60, 1250), st.floats(-3, 3), st.floats(0.5, 12))
def test_fringes_stand_still_at_the_focus_without_delocalisation(kv: float, cs_mm: float, g: float) -> None:
    focus = float(focus_without_delocalisation_nm(g, kv, cs_mm))
    if abs(focus) <= 1e5:
        assert delocalisation_nm(g, Lens(voltage_kv=kv, cs_mm=cs_mm, defocus_nm=focus)) == pytest.approx(0, abs=1e-9)


class TestSummary:
    def test_without_a_lens_says_nothing_about_it(self) -> None:
        summary = beam_summary(300.0)
        assert summary.wavelength_pm == electron_wavelength_pm(300.0)
        assert summary.lens is summary.defocus_origin is summary.point_resolution_nm is None
        assert summary.scherzer_underfocus_nm is summary.information_limit_nm is None
        assert summary.transfer_zeros_nm == ()
        assert {r.transfer for r in summary.reflections} == {None}
        assert {r.delocalisation_nm for r in summary.reflections} == {None}

    def test_with_a_lens_tabulates_what_the_functions_say(self) -> None:
        summary = beam_summary(300.0, cs_mm=1.2, defocus_nm=60.0, focal_spread_nm=3.0, d_nm=[0.2, 0.4, 0.2])
        lens = Lens(voltage_kv=300.0, cs_mm=1.2, defocus_nm=60.0, focal_spread_nm=3.0)
        assert summary.lens == lens
        assert summary.defocus_origin == "given"
        assert [r.d_nm for r in summary.reflections] == [0.4, 0.2]
        for row in summary.reflections:
            assert row.g_per_nm == 1 / row.d_nm
            assert row.two_theta_mrad == scattering_angle_mrad(row.d_nm, 300.0)
            assert row.excitation_error_per_nm == excitation_error_per_nm(row.g_per_nm, 300.0)
            assert row.transfer == phase_contrast_transfer(row.g_per_nm, lens)
            assert row.envelope == envelopes(row.g_per_nm, lens).total
            assert row.delocalisation_nm == delocalisation_nm(row.g_per_nm, lens)
            assert row.focus_without_delocalisation_nm == focus_without_delocalisation_nm(row.g_per_nm, 300.0, 1.2)
        assert summary.transfer_zeros_nm == pytest.approx(1 / transfer_zeros_per_nm(lens, 5.0))

    def test_takes_scherzers_focus_when_none_is_given_and_says_so(self) -> None:
        summary = beam_summary(200.0, cs_mm=1.0)
        assert summary.defocus_origin == "Scherzer's underfocus"
        assert summary.lens is not None
        assert summary.lens.defocus_nm == scherzer_underfocus_nm(200.0, 1.0)
        assert summary.transfer_zeros_nm[0] == pytest.approx(summary.point_resolution_nm)

    def test_corrected_lens_has_no_point_resolution(self) -> None:
        summary = beam_summary(300.0, cs_mm=0.0, defocus_nm=5.0)
        assert summary.point_resolution_nm is None
        assert all(r.transfer is not None for r in summary.reflections)

    @pytest.mark.parametrize("lens_value", ["defocus_nm", "focal_spread_nm", "convergence_mrad", "image_spread_nm"])
    def test_refuses_lens_values_it_would_have_to_ignore(self, lens_value: str) -> None:
        with pytest.raises(CalibrationError, match="cs_mm must be given"):
            beam_summary(300.0, **{lens_value: 1.0})
