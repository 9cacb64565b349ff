"""The table of spacings as a Qt model over the state."""

from __future__ import annotations

from typing import Any

from qtpy.QtCore import QAbstractTableModel, QModelIndex, QObject, Qt

from fringespan.measurement import Measurement
from fringespan.spacings import Peak
from fringespan.viewer.line_angles import planes_to_line_deg
from fringespan.viewer.state import MeasuringState
from fringespan.viewer.wording import (
    GRAVITY_WORDS,
    angle_text,
    lattice_spacing,
    spacing,
    uncertainty_parts,
    unit_symbol,
)

__all__ = ["COLUMNS", "PARTS_ROLE", "SORT_ROLE", "SpacingsModel"]

COLUMNS = (
    "number",
    "d",
    "parts",
    "direction",
    "angle",
    "line",
    "S/N",
    "lattice",
    "d lattice",
    "visibility",
    "cautions",
)

SORT_ROLE = int(Qt.ItemDataRole.UserRole) + 1
PARTS_ROLE = int(Qt.ItemDataRole.UserRole) + 2
"""The parts of a spacing's uncertainty; in the first column the longest relative part of all rows."""

_CAUTION_MARKS = {"grave": "!!", "warning": "!", "note": "i"}
_ORDER = {"grave": 0, "warning": 1, "note": 2}


class SpacingsModel(QAbstractTableModel):
    """Rows are the peaks of the current region; they keep their places while the region is dragged."""

    def __init__(self, state: MeasuringState, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._state = state
        self._measurement: Measurement | None = None
        self._rows: tuple[int, ...] = ()
        self._longest = 0.0

    def refresh(self) -> None:
        """Take over the current region's measurement; rows stay selected where their number is the same."""
        current = self._state.current
        measurement = None if current is None else current.measurement
        rows = () if current is None or measurement is None else current.rows
        if len(rows) != len(self._rows):
            self.beginResetModel()
            self._take(measurement, rows)
            self.endResetModel()
        else:
            self._take(measurement, rows)
            if rows:
                self.dataChanged.emit(self.index(0, 0), self.index(len(rows) - 1, len(COLUMNS) - 1))
        self.headerDataChanged.emit(Qt.Orientation.Horizontal, 0, len(COLUMNS) - 1)

    def _take(self, measurement: Measurement | None, rows: tuple[int, ...]) -> None:
        self._measurement, self._rows = measurement, rows
        parts = [] if measurement is None else [uncertainty_parts(peak) for peak in measurement.peaks]
        self._longest = max(
            (max(p.noise_nm, p.crystal_nm, p.pixel_size_nm) / p.spacing_nm for p in parts if p is not None), default=0.0
        )

    def refresh_angles(self) -> None:
        """Show the angles to the peak that is selected now."""
        column = COLUMNS.index("angle")
        if self._rows:
            self.dataChanged.emit(self.index(0, column), self.index(len(self._rows) - 1, column))
        self.headerDataChanged.emit(Qt.Orientation.Horizontal, column, column)

    def peak_of(self, row: int) -> int | None:
        """Return the position in the measurement of the peak in a row."""
        return self._rows[row] if 0 <= row < len(self._rows) else None

    def row_of(self, peak: int | None) -> int | None:
        """Return the row of a peak."""
        return self._rows.index(peak) if peak in self._rows else None

    # --- what Qt asks for -------------------------------------------------------------------------------------------

    def rowCount(self, parent: QModelIndex | None = None) -> int:
        return 0 if parent is not None and parent.isValid() else len(self._rows)

    def columnCount(self, parent: QModelIndex | None = None) -> int:
        return 0 if parent is not None and parent.isValid() else len(COLUMNS)

    def column_words(self, column: int) -> str:
        """Return what a column shows, for the menu and its tip."""
        return {
            "number": "Number",
            "d": "Spacing with its standard uncertainty (k = 1)",
            "parts": "What the uncertainty consists of: noise, crystal, pixel size",
            "direction": "Direction of the spacing, counter-clockwise from the right",
            "angle": "Angle to the selected (else the strongest) set of fringes",
            "line": "Angle of the planes (0: the fringes run along it) to the drawn line, itself taken as exact",
            "S/N": "Signal to noise",
            "lattice": "Indices in the common lattice",
            "d lattice": "Spacing from the common lattice",
            "visibility": "Visibility, a lower limit",
            "cautions": "Cautions",
        }[COLUMNS[column]]

    def headerData(self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole) -> Any:
        if orientation != Qt.Orientation.Horizontal:
            return None
        if role == Qt.ItemDataRole.ToolTipRole:
            return self.column_words(section)
        if role != Qt.ItemDataRole.DisplayRole:
            return None
        symbol = unit_symbol(self._state.micrograph, self._state.unit)
        return {
            "number": "",
            "d": f"d ({symbol})",
            "parts": "u",
            "direction": "dir. (°)",
            "angle": f"to {self._reference_row() + 1} (°)" if self._rows else "angle (°)",
            "line": "to line (°)",
            "S/N": "S/N",
            "lattice": "lattice",
            "d lattice": f"d lattice ({symbol})",
            "visibility": "vis.",
            "cautions": "",
        }[COLUMNS[section]]

    def _reference_row(self) -> int:
        chosen = self.row_of(self._state.peak)
        return 0 if chosen is None else chosen

    def data(self, index: QModelIndex, role: int = Qt.ItemDataRole.DisplayRole) -> Any:
        if not index.isValid() or self._measurement is None or index.row() >= len(self._rows):
            return None
        row, name = index.row(), COLUMNS[index.column()]
        peak = self._measurement.peaks[self._rows[row]]
        if role == Qt.ItemDataRole.DisplayRole:
            return self._text(row, peak, name)
        if role == SORT_ROLE:
            return self._sort_value(row, peak, name)
        if role == PARTS_ROLE:
            return self._longest if name == "number" else uncertainty_parts(peak)
        if role == Qt.ItemDataRole.ToolTipRole:
            return self._tip(peak, name)
        if role == Qt.ItemDataRole.AccessibleTextRole and name == "parts":
            return self._tip(peak, name)
        if role == Qt.ItemDataRole.TextAlignmentRole and name in ("number", "S/N"):
            return Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter
        return None

    def _angle(self, row: int) -> tuple[float, float] | None:
        assert self._measurement is not None
        pair = {self._rows[row], self._rows[self._reference_row()]}
        found = [a for a in self._measurement.angles if set(a.peaks) == pair]
        return (found[0].angle_deg, found[0].angle_uncertainty_deg) if found and len(pair) == 2 else None

    def _line_angle(self, peak: Peak) -> tuple[float, float] | None:
        assert self._measurement is not None
        line = self._state.line
        return None if line is None else planes_to_line_deg(peak, line, self._measurement.micrograph)

    def _text(self, row: int, peak: Peak, name: str) -> str:
        unit = self._state.unit
        if name == "number":
            return str(row + 1)
        if name == "d":
            return spacing(peak, unit)
        if name == "direction":
            return angle_text(peak.direction_deg, peak.direction_uncertainty_deg)
        if name == "angle":
            angle = self._angle(row)
            return "" if angle is None else angle_text(*angle)
        if name == "line":
            angle = self._line_angle(peak)
            return "" if angle is None else angle_text(*angle)
        if name == "S/N":
            return f"{peak.signal_to_noise:.0f}"
        if name == "lattice":
            return "" if peak.lattice_index is None else "{} {}".format(*peak.lattice_index)
        if name == "d lattice":
            return lattice_spacing(peak, unit)
        if name == "visibility":
            return "" if peak.visibility is None else f"{peak.visibility:.2f}"
        if name == "cautions" and peak.cautions:
            return _CAUTION_MARKS[min((c.gravity for c in peak.cautions), key=lambda g: _ORDER[g])]
        return ""

    def _sort_value(self, row: int, peak: Peak, name: str) -> float:
        angle = self._angle(row)
        value: float | None = {
            "number": float(row),
            "d": peak.d_nm if peak.d_nm is not None else peak.period_px,
            "parts": _relative(peak),
            "direction": peak.direction_deg,
            "angle": -1.0 if angle is None else angle[0],
            "line": None if (to_line := self._line_angle(peak)) is None else to_line[0],
            "S/N": peak.signal_to_noise,
            "lattice": None if peak.lattice_index is None else 100.0 * peak.lattice_index[0] + peak.lattice_index[1],
            "d lattice": peak.d_lattice_nm,
            "visibility": peak.visibility,
            "cautions": float(len(peak.cautions)),
        }[name]
        return -1e9 if value is None else value

    def _tip(self, peak: Peak, name: str) -> str | None:
        if name == "cautions" or (name == "d" and peak.withheld is not None):
            said = [] if peak.withheld is None else [f"No spacing is given: {peak.withheld}."]
            said += [f"{GRAVITY_WORDS[c.gravity]}: {c.text} {c.remedy}" for c in peak.cautions]
            return "\n".join(said) or None
        if name in ("d", "parts"):
            parts = uncertainty_parts(peak)
            return None if parts is None else parts.advice()
        return None


def _relative(peak: Peak) -> float | None:
    parts = uncertainty_parts(peak)
    return None if parts is None else parts.total_nm / parts.spacing_nm
