"""The defocus that disturbs a wanted spacing least."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.beam import Lens, phase_contrast_transfer, signed_delocalisation_nm
from fringespan.exceptions import CalibrationError, SettingsError
from fringespan.judgement.focus_advice import focus_advice


def test_at_the_calmest_defocus_fringes_are_not_shifted():
    advice = focus_advice(0.2355, 200, 1.0)
    lens = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=advice.calmest_defocus_nm)
    assert signed_delocalisation_nm(1 / 0.2355, lens) == pytest.approx(0, abs=1e-9)
    # there chi = -pi Cs lambda^3 g^4 / 2
    assert advice.calmest_transfer == pytest.approx(math.sin(-math.pi * 1e6 * 2.50793e-3**3 / 0.2355**4 / 2), rel=1e-3)
    assert advice.defocus_nm == advice.calmest_defocus_nm
    assert advice.delocalisation_nm == 0


def test_without_spherical_aberration_contrast_vanishes_at_the_calmest_defocus_and_a_little_underfocus_brings_it_back():
    advice = focus_advice(0.2, 300, 0.0)
    assert advice.calmest_defocus_nm == 0
    assert advice.calmest_transfer == 0
    # sin(pi lambda df / d^2) = 1/2 at df = d^2 / (6 lambda)
    assert advice.defocus_nm == pytest.approx(0.2**2 / (6 * 1.96875e-3), rel=1e-4)
    assert abs(advice.transfer) == pytest.approx(0.5)
    # lambda g df = d / 6
    assert advice.delocalisation_nm == pytest.approx(0.2 / 6, rel=1e-6)


@given(
    st.floats(0.08, 0.5),
    st.sampled_from([60.0, 200.0, 300.0]),
    st.floats(-0.05, 3.0),
    st.floats(0, 0.95),
)
def test_the_advised_defocus_is_the_nearest_with_the_wanted_transfer(d, voltage, cs, least):
    advice = focus_advice(d, voltage, cs, least_transfer=least)
    assert abs(advice.transfer) >= least - 1e-6
    apart = abs(advice.defocus_nm - advice.calmest_defocus_nm)
    for nearer in np.linspace(-0.99, 0.99, 41) * apart:
        lens = Lens(voltage_kv=voltage, cs_mm=cs, defocus_nm=advice.calmest_defocus_nm + nearer)
        if apart > 1e-6:
            assert abs(float(phase_contrast_transfer(1 / d, lens))) < least + 1e-6


def test_the_advice_compares_with_the_present_defocus():
    far, near = (focus_advice(0.2355, 200, 1.0, defocus_nm=d).error_ratio for d in (0.0, 110.0))
    assert far == pytest.approx(0.05 / math.hypot(0.05, 0.15), rel=1e-3)  # shifted by more than 1 nm
    assert near == pytest.approx(1, abs=0.02)
    assert focus_advice(0.2355, 200, 1.0).error_ratio is None


@pytest.mark.parametrize(
    ("arguments", "error"),
    [
        ({"least_transfer": 1.0}, SettingsError),
        ({"least_transfer": -0.1}, SettingsError),
        ({"d_nm": 0.0}, CalibrationError),
        ({"d_nm": math.nan}, CalibrationError),
        ({"voltage_kv": 0.1}, CalibrationError),
        ({"cs_mm": 99.0}, CalibrationError),
    ],
)
def test_impossible_wishes_are_refused(arguments, error):
    with pytest.raises(error):
        focus_advice(**({"d_nm": 0.2, "voltage_kv": 200.0, "cs_mm": 1.0} | arguments))
