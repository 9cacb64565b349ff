"""The family of errors that fringespan raises about its input.

FringespanError
├── UnreadablePictureError    the file is not a picture that can be measured
├── CalibrationError          a pixel size, voltage, or lens value makes no sense
├── RegionError               a region cannot be measured
├── SettingsError             a setting or argument is outside its range
├── RecordError               a record cannot be read or written
└── PhaseError                a crystal structure cannot be used

Every message names the argument or file, the rule, the value received and the next step.
"""

__all__ = [
    "CalibrationError",
    "FringespanError",
    "PhaseError",
    "RecordError",
    "RegionError",
    "SettingsError",
    "UnreadablePictureError",
]


class FringespanError(ValueError):
    """Base of every error this library raises about its input."""


class UnreadablePictureError(FringespanError):
    """The file is not a picture that can be measured."""


class CalibrationError(FringespanError):
    """A pixel size, its uncertainty, a voltage, or a lens value makes no sense."""


class RegionError(FringespanError):
    """A region cannot be measured in this picture."""


class SettingsError(FringespanError):
    """A setting or argument is outside its range."""


class RecordError(FringespanError):
    """A record or another output file cannot be read or written."""


class PhaseError(FringespanError):
    """A crystal structure cannot be read or used."""
