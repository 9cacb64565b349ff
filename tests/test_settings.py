"""What a user may choose, and what is refused."""

from dataclasses import FrozenInstanceError, replace

import pytest

from fringespan.exceptions import FringespanError, SettingsError
from fringespan.settings import MeasurementSettings


def test_defaults_are_one_false_peak_in_a_hundred_regions_and_four_bins():
    settings = MeasurementSettings()
    assert settings.false_peaks_per_region == 0.01
    assert settings.smallest_distance_bins == 4.0


@pytest.mark.parametrize("value", [1e-6, 0.01, 1, 1.0])
def test_a_rate_of_false_peaks_in_its_range_is_kept(value):
    assert MeasurementSettings(false_peaks_per_region=value).false_peaks_per_region == value


REFUSED = [
    pytest.param("false_peaks_per_region", 0, id="no false peak ever"),
    pytest.param("false_peaks_per_region", 9e-7, id="rarer than can be promised"),
    pytest.param("false_peaks_per_region", 1.1, id="more than one a region"),
    pytest.param("false_peaks_per_region", float("nan"), id="rate not a number"),
    pytest.param("false_peaks_per_region", "0.01", id="rate as text"),
    pytest.param("false_peaks_per_region", None, id="rate left empty"),
    pytest.param("smallest_distance_bins", 1.9, id="on top of the origin"),
    pytest.param("smallest_distance_bins", 101, id="absurdly far"),
    pytest.param("smallest_distance_bins", float("inf"), id="infinitely far"),
    pytest.param("smallest_distance_bins", [4.0, 4.0], id="a pair"),
]


@pytest.mark.parametrize(("name", "value"), REFUSED)
def test_a_refusal_names_the_setting_its_range_and_what_came(name, value):
    with pytest.raises(SettingsError, match=rf"{name} must lie between .* and .*, got ") as refusal:
        MeasurementSettings(**{name: value})
    assert repr(value) in str(refusal.value)
    assert isinstance(refusal.value, FringespanError)


def test_settings_are_immutable_and_checked_again_when_replaced():
    settings = MeasurementSettings()
    with pytest.raises(FrozenInstanceError):
        settings.smallest_distance_bins = 5.0
    assert replace(settings, smallest_distance_bins=6.0).smallest_distance_bins == 6.0
    with pytest.raises(SettingsError):
        replace(settings, smallest_distance_bins=0.0)


def test_settings_are_given_by_name():
    with pytest.raises(TypeError):
        MeasurementSettings(0.01)
