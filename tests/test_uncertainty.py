"""Values are written with their standard uncertainty in parentheses."""

import math
import re
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fringespan.exceptions import SettingsError
from fringespan.uncertainty import relative_length_uncertainty, value_text

WRITTEN = [
    # CODATA 2018 as printed by NIST: m_p/m_e = 1836.152 673 43(11), vacuum permittivity 8.854 187 8128(13)e-12 F/m,
    # electron mass 9.109 383 7015(28)e-31 kg (one digit here)
    pytest.param(1836.15267343, 0.00000011, "1836.15267343(11)", id="CODATA proton-electron mass ratio"),
    pytest.param(8.8541878128e-12, 0.0000000013e-12, "8.8541878128(13)e-12", id="CODATA vacuum permittivity"),
    pytest.param(9.1093837015e-31, 0.0000000028e-31, "9.109383702(3)e-31", id="CODATA electron mass"),
    pytest.param(0.2355, 0.00042, "0.2355(4)", id="one digit"),
    pytest.param(0.23548, 0.00014, "0.23548(14)", id="two digits after a leading 1"),
    pytest.param(0.23548, 0.00196, "0.235(2)", id="leading 1 that rounds to 2"),
    pytest.param(0.23561, 0.00096, "0.2356(10)", id="nine that rounds up to ten"),
    pytest.param(0.2, 0.0004, "0.2000(4)", id="trailing zeros are kept"),
    pytest.param(9.99996, 0.0004, "10.0000(4)", id="value that rounds up to another digit"),
    pytest.param(54.7, 0.3, "54.7(3)", id="angle"),
    pytest.param(54.72, 1.23, "54.7(1.2)", id="uncertainty above one"),
    pytest.param(54.72, 3.4, "55(3)", id="uncertainty above one, one digit"),
    pytest.param(1234.0, 45.0, "1234(45)", id="never rounded before the decimal point"),
    pytest.param(0.2, 3.4, "0(3)", id="uncertainty larger than the value"),
    pytest.param(0.21, 0.7, "0.2(7)", id="uncertainty larger than a small value"),
    pytest.param(0.0, 0.3, "0.0(3)", id="zero"),
    pytest.param(-0.2355, 0.0004, "-0.2355(4)", id="negative"),
    pytest.param(0.2355, 0.0, "0.2355(0)", id="exact"),
    pytest.param(0.23548, None, "0.2355", id="uncertainty not known"),
    pytest.param(None, None, "-", id="no value"),
    pytest.param(None, 0.1, "-", id="no value, whatever its uncertainty"),
    pytest.param(2e22, 3e20, "2.00(3)e+22", id="power of ten for the very large"),
    pytest.param(2e-9, 3e-11, "2.00(3)e-09", id="power of ten for the very small"),
]


@pytest.mark.parametrize(("value", "uncertainty", "text"), WRITTEN)
def test_a_value_is_written_with_its_uncertainty_in_the_last_digits(value, uncertainty, text):
    assert value_text(value, uncertainty) == text


@given(value=st.floats(-1e3, 1e3), uncertainty=st.floats(1e-4, 0.94))
def test_the_text_read_back_agrees_within_the_last_digit(value, uncertainty):
    digits, in_parentheses = re.fullmatch(r"(-?[\d.]+)\((\d+)\)", value_text(value, uncertainty)).groups()
    last_place = Decimal(digits).as_tuple().exponent
    assert abs(float(digits) - value) <= 0.51 * 10.0**last_place
    # one digit kept of 0.2 ... 0.94 is at most a quarter off (0.25 written as 0.2 or 0.3)
    assert float(Decimal(in_parentheses).scaleb(last_place)) == pytest.approx(uncertainty, rel=0.26)


@pytest.mark.parametrize(
    ("value", "uncertainty"), [(float("nan"), 0.1), (float("inf"), 0.1), (1.0, -0.1), (1.0, float("nan"))]
)
def test_nonsense_is_refused(value, uncertainty):
    with pytest.raises(SettingsError, match="finite"):
        value_text(value, uncertainty)


def test_the_number_of_digits_without_uncertainty_can_be_chosen():
    assert value_text(1.96875, None, digits=3) == "1.97"


@pytest.mark.parametrize(
    ("uncertainty", "y", "x", "relative"),
    [
        (0.01, 3.0, 4.0, 0.01),
        ((0.01, 0.02), 1.0, 0.0, 0.01),
        ((0.01, 0.02), 0.0, -2.5, 0.02),
        ((0.01, 0.01), 1.0, 1.0, 0.01 / math.sqrt(2)),
    ],
)
def test_a_length_takes_its_uncertainty_from_the_pixel_size_along_it(uncertainty, y, x, relative):
    assert relative_length_uncertainty(uncertainty, y, x) == pytest.approx(relative)


def test_independent_errors_of_rows_and_columns_agree_with_a_simulation():
    rng = np.random.default_rng(0)
    rows, columns = 1 + rng.normal(0, [[0.01], [0.02]], (2, 200_000))
    lengths = np.hypot(3 * rows, 4 * columns)
    assert lengths.std() / 5 == pytest.approx(relative_length_uncertainty((0.01, 0.02), 3, 4), rel=0.01)
