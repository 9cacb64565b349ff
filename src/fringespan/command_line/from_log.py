"""The pixel size of a picture from the log of magnification checks: the option `--from-log`."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fringespan.exceptions import CalibrationError

if TYPE_CHECKING:
    from fringespan.magnification.log import LogEntry
    from fringespan.micrograph import Micrograph

__all__ = ["LogChoice", "from_log_option", "log_choice"]

_NEWEST = "newest"
_SAME_NOMINAL = 1e-4


@dataclass(frozen=True, slots=True)
class LogChoice:
    """Which entry of which log.

    Attributes
    ----------
    path : str or None
        None: the user's own.
    number : int or None
        None: the newest that is fit for the picture.
    """

    path: str | None
    number: int | None

    def applied(self, micrograph: Micrograph) -> Micrograph:
        """Return the picture with the pixel size of the entry.

        Raises
        ------
        CalibrationError
            If the picture has no pixel size, the log no check of it, or checks of it under different conditions.
        RecordError
            If the log cannot be read or has no such entry.
        """
        size = micrograph.pixel_size_nm
        if size is None:
            raise CalibrationError(
                f"{micrograph.name}: --from-log corrects the nominal pixel size, and the picture has none; give it with "
                "--pixel-size NM"
            )
        entry = self._entry(micrograph)
        row, column = (
            true / nominal for true, nominal in zip(entry.pixel_size_nm, entry.nominal_pixel_size_nm, strict=True)
        )
        uncertainty = entry.relative_uncertainty
        return replace(
            micrograph,
            pixel_size_nm=(size[0] * row, size[1] * column),
            pixel_size_relative_uncertainty=(
                max(uncertainty) if uncertainty is not None and entry.shared_error else uncertainty
            ),
            shear=entry.micrograph_shear,
            pixel_size_source=(
                f"magnification check no. {entry.number} of {entry.checked_at[:10]} on {entry.reference}, nominal "
                f"{size[0]:.6g} x {size[1]:.6g} nm"
            ),
        )

    def _entry(self, micrograph: Micrograph) -> LogEntry:
        from fringespan.export.log_text import conditions_text
        from fringespan.magnification.log import CheckLog, LogFilter, log_path

        path = log_path() if self.path is None else Path(self.path)
        if not path.is_file():
            raise CalibrationError(
                f"{path}: there is no log of magnification checks yet; make one with fringespan check IMAGE --reference "
                "PHASE --log own"
            )
        with CheckLog(path) as log:
            if self.number is not None:
                entry = log.entry(self.number)
                if entry.withdrawn_at:
                    raise CalibrationError(
                        f"{path}: entry {self.number} was withdrawn ({entry.withdrawn_because}); choose another"
                    )
                if not _fits(entry, micrograph):
                    raise CalibrationError(
                        f"{micrograph.name}: entry {self.number} checked the nominal pixel size {entry.nominal_pixel_size_nm}, "
                        f"the picture has {micrograph.pixel_size_nm}; choose a check of the same magnification"
                    )
                return entry
            fit = [e for e in log.entries(LogFilter()) if _fits(e, micrograph)]
        if not fit:
            raise CalibrationError(
                f"{path}: no check of the nominal pixel size {micrograph.pixel_size_nm} nm"
                f"{'' if micrograph.voltage_kv is None else f' at {micrograph.voltage_kv:g} kV'}; see fringespan log list"
            )
        newest: dict[str, LogEntry] = {}
        for entry in fit:
            newest.setdefault(conditions_text(entry.conditions), entry)
        if len(newest) > 1:
            choices = "; ".join(f"{e.number} ({words})" for words, e in newest.items())
            raise CalibrationError(
                f"{micrograph.name}: this nominal pixel size was checked under different conditions; choose one with "
                f"--from-log NUMBER: {choices}"
            )
        return fit[0]


def _fits(entry: LogEntry, micrograph: Micrograph) -> bool:
    size = micrograph.pixel_size_nm
    same = size is not None and all(
        abs(a / b - 1) <= _SAME_NOMINAL for a, b in zip(size, entry.nominal_pixel_size_nm, strict=True)
    )
    checked = entry.conditions.voltage_kv
    return same and (
        checked is None or micrograph.voltage_kv is None or abs(checked / micrograph.voltage_kv - 1) < 0.01
    )


def log_choice(_context: click.Context, _option: click.Parameter, value: str | None) -> LogChoice | None:
    """Return what `--from-log` asks for: nothing, the newest fit entry, a number, or another file."""
    if value is None:
        return None
    if value == _NEWEST:
        return LogChoice(None, None)
    if value.isdecimal():
        return LogChoice(None, int(value))
    file, _, number = value.rpartition(":")
    if file and number.isdecimal() and not Path(value).exists():
        return LogChoice(file, int(number))
    if not _may_be_log(Path(value)):
        raise click.BadParameter(
            f"{value!r} is no log; write --from-log after the pictures, or --from-log {_NEWEST}, a number, or a log's file"
        )
    return LogChoice(value, None)


def _may_be_log(path: Path) -> bool:
    """Say whether a file is a database, or not there yet."""
    if not path.is_file():
        return True
    with path.open("rb") as file:
        return file.read(15) == b"SQLite format 3"


def from_log_option() -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Return the option."""
    return click.option(
        "--from-log",
        callback=log_choice,
        is_flag=False,
        flag_value=_NEWEST,
        metavar="[newest|NUMBER|FILE|FILE:NUMBER]",
        help="Take the pixel size from the log of magnification checks: the newest one of the picture's nominal pixel size, "
        "or the entry of a number, of your own log or of another FILE. Write it after the pictures.",
    )
