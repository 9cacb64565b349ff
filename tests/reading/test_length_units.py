from __future__ import annotations

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fringespan.reading.length_units import is_inch, is_no_unit, is_reciprocal_or_angle, nm_per_unit


@pytest.mark.parametrize(
    ("unit", "nm"),
    [
        ("nm", 1.0),
        (" nm ", 1.0),
        ("nm\0", 1.0),
        ("[nm]", 1.0),
        ("nanometer", 1.0),
        ("Nanometres", 1.0),
        ("nm/px", 1.0),
        ("nm per pixel", 1.0),
        ("pm", 1e-3),
        ("picometre", 1e-3),
        ("A", 0.1),
        ("\u00c5", 0.1),  # A with ring
        ("\u212b", 0.1),  # angstrom sign
        ("Angstrom", 0.1),
        ("angstroms", 0.1),
        ("ångström", 0.1),
        ("um", 1e3),
        ("\u00b5m", 1e3),  # micro sign
        ("\u03bcm", 1e3),  # Greek mu
        (r"\u00B5m", 1e3),  # escaped, as some programs write it
        ("micron", 1e3),
        ("microns", 1e3),
        ("micrometer", 1e3),
        ("mm", 1e6),
        ("cm", 1e7),
        ("m", 1e9),
        ("metre", 1e9),
    ],
)
def test_lengths_in_all_their_spellings(unit: str, nm: float) -> None:
    assert nm_per_unit(unit) == pytest.approx(nm, rel=1e-12)
    assert not is_no_unit(unit)
    assert not is_inch(unit)
    assert not is_reciprocal_or_angle(unit)


@pytest.mark.parametrize(
    "unit", ["fm", "pm", "nm", "um", "mm", "cm", "m", "angstrom", "micron", "dm", "km", "bohr", "yard"]
)
def test_agree_with_a_general_library_of_units(unit: str) -> None:
    # reference: pint's own definitions
    expected = pint.UnitRegistry().Quantity(1.0, unit).to("nm").magnitude
    assert nm_per_unit(unit) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(
    "unit",
    [
        "1/nm",
        "1 / nm",
        "/nm",
        "nm-1",
        "nm^-1",
        "nm⁻¹",
        "nm**-1",
        "1/A",
        "1/Å",
        "A^-1",
        "1/um",
        "per nm",
        "reciprocal nm",
    ],
)
def test_reciprocal_lengths_tell_a_diffraction_pattern(unit: str) -> None:
    assert is_reciprocal_or_angle(unit)
    assert nm_per_unit(unit) is None


@pytest.mark.parametrize("unit", ["mrad", "rad", "µrad", "deg", "°"])
def test_angles_tell_a_diffraction_pattern(unit: str) -> None:
    assert is_reciprocal_or_angle(unit)


@pytest.mark.parametrize("unit", [None, "", " ", "\0", "pixel", "pixels", "px", "None"])
def test_pixels_are_no_unit(unit: str | None) -> None:
    assert is_no_unit(unit)


@pytest.mark.parametrize("unit", ["in", "inch", "inches", "INCH", '"', "dpi"])
def test_inches(unit: str) -> None:
    assert is_inch(unit)


@pytest.mark.parametrize(
    "unit", ["s", "eV", "kg", "degC", "2 nm", "nm*nm", "nm^2", "1/px", "9**9**9", "import os", "1/s"]
)
def test_other_things_are_no_lengths(unit: str) -> None:
    assert nm_per_unit(unit) is None
    assert not is_reciprocal_or_angle(unit)


@settings(max_examples=300, deadline=None)
@given(st.one_of(st.text(max_size=40), st.text("nmAÅµu1/-^*() pxradin", max_size=12)))
def test_any_text_gets_an_answer(text: str) -> None:
    nm = nm_per_unit(text)
    assert nm is None or nm > 0
    assert is_reciprocal_or_angle(text) in (True, False)
    assert is_no_unit(text) in (True, False)
    assert is_inch(text) in (True, False)
