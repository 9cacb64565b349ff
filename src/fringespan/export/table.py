"""Tables for other programs: every number in full, the unit in each heading."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import cast

from fringespan.record import Record, RecordedRegion

__all__ = ["Cell", "Table", "csv_text", "peak_table"]

Cell = str | float | int | None


@dataclass(frozen=True, slots=True)
class Table:
    """Named columns and rows of cells.

    Attributes
    ----------
    columns : tuple of str
        Names with units.
    rows : tuple of tuple
        Each with as many cells as there are columns; None where there is no value.

    Raises
    ------
    ValueError
        If a row is longer or shorter than the columns.
    """

    columns: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]

    def __post_init__(self) -> None:
        if any(len(row) != len(self.columns) for row in self.rows):
            raise ValueError(f"every row must have {len(self.columns)} cells")


def csv_text(table: Table) -> str:
    """Return a table as comma-separated values (RFC 4180), numbers with every digit, empty where there is no value."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(table.columns)
    writer.writerows(["" if cell is None else cell for cell in row] for row in table.rows)
    return text.getvalue()


def peak_table(records: Sequence[Record]) -> Table:
    """Return one row a peak, over all regions of all records.

    Peaks are counted from 1, as in figures and texts. The angle given is that to the strongest peak of the region.
    """
    rows = tuple(
        tuple(cell(record, region, index) for cell in _PEAK_COLUMNS.values())
        for record in records
        for region in record.regions
        for index in range(len(region.peaks))
    )
    return Table(tuple(_PEAK_COLUMNS), rows)


_CellOf = Callable[[Record, RecordedRegion, int], Cell]


def _field(name: str) -> _CellOf:
    def cell(_record: Record, region: RecordedRegion, index: int) -> Cell:
        return cast("Cell", getattr(region.peaks[index], name))

    return cell


def _entry(name: str, *place: int) -> _CellOf:
    """Return the cell of one entry of an array or a tuple, of which there may be none."""

    def cell(_record: Record, region: RecordedRegion, index: int) -> Cell:
        value = getattr(region.peaks[index], name)
        if value is None:
            return None
        for step in place:
            value = value[step]
        return int(value) if isinstance(value, int) else float(value)

    return cell


def _angle_to_strongest(name: str) -> _CellOf:
    def cell(_record: Record, region: RecordedRegion, index: int) -> Cell:
        found = [angle for angle in region.angles if set(angle.peaks) == {0, index} and index != 0]
        return cast("Cell", getattr(found[0], name)) if found else None

    return cell


def _combination(_record: Record, region: RecordedRegion, index: int) -> Cell:
    return " ".join(str(i + 1) for i in region.peaks[index].combination_of or ()) or None


def _caution_codes(_record: Record, region: RecordedRegion, index: int) -> Cell:
    return " ".join(caution.code for caution in region.peaks[index].cautions) or None


_PEAK_COLUMNS: dict[str, _CellOf] = {
    "picture": lambda record, _region, _index: record.picture.name,
    "frame": lambda record, _region, _index: record.picture.frame,
    "region": lambda _record, region, _index: region.region.name,
    "peak": lambda _record, _region, index: index + 1,
    **{
        name: _field(name)
        for name in (
            "d_nm",
            "d_uncertainty_nm",
            "d_fit_uncertainty_nm",
            "d_crystal_uncertainty_nm",
            "d_lattice_nm",
            "d_lattice_uncertainty_nm",
            "period_px",
            "direction_deg",
            "direction_uncertainty_deg",
        )
    },
    "angle_to_peak_1_deg": _angle_to_strongest("angle_deg"),
    "angle_to_peak_1_uncertainty_deg": _angle_to_strongest("angle_uncertainty_deg"),
    "g_row_per_nm": _entry("g_per_nm", 0),
    "g_column_per_nm": _entry("g_per_nm", 1),
    "g_variance_row_per_nm2": _entry("g_covariance_per_nm2", 0, 0),
    "g_variance_column_per_nm2": _entry("g_covariance_per_nm2", 1, 1),
    "g_covariance_row_column_per_nm2": _entry("g_covariance_per_nm2", 0, 1),
    "g_row_per_px": _entry("g_per_px", 0),
    "g_column_per_px": _entry("g_per_px", 1),
    "signal_to_noise": _field("signal_to_noise"),
    "visibility": _field("visibility"),
    "two_theta_mrad": _field("two_theta_mrad"),
    "lattice_m": _entry("lattice_index", 0),
    "lattice_n": _entry("lattice_index", 1),
    "combination_of_peaks": _combination,
    "origin": _field("origin"),
    "withheld": _field("withheld"),
    "cautions": _caution_codes,
}
