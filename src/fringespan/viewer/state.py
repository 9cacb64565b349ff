"""What is open, drawn, measured and chosen in one viewer. No Qt and no napari: docks are views of this.

The state asks for measurements by handing out jobs, and takes their results; who carries them out, and in which thread,
is not its business. All methods are called in one thread.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from psygnal import Signal

from fringespan.exceptions import FringespanError
from fringespan.measurement import Measurement, measure, recalibrated
from fringespan.micrograph import Micrograph
from fringespan.region import Region, RegionKind
from fringespan.viewer.line_angles import Line

__all__ = ["Calibration", "DrawnRegion", "Job", "MeasuredRegion", "MeasuringState", "Outcome", "Unit", "carry_out"]

Unit = Literal["nm", "angstrom", "pm"]

_SAME_PEAK_BINS = 1.0
"""A peak that moves by less than this many bins from one measurement to the next is taken for the same."""


@dataclass(frozen=True, slots=True)
class DrawnRegion:
    """An outline as it was drawn, measurable or not.

    Parameters
    ----------
    id : int
        Stays the same when others are removed.
    name : str
    vertices_px : tuple of (float, float)
        (row, column) in pixels of the picture.
    kind : {"polygon", "rectangle", "ellipse", "whole picture"}
    """

    id: int
    name: str
    vertices_px: tuple[tuple[float, float], ...]
    kind: RegionKind = "polygon"


@dataclass(frozen=True, slots=True, eq=False)
class MeasuredRegion:
    """A region with the last good measurement of it.

    Parameters
    ----------
    drawn : DrawnRegion
    measurement : Measurement or None
        The last good one.
    problem : str or None
        Why the outline as it is now could not be measured.
    rows : tuple of int
        Position of each shown peak among those of the measurement: while a region is dragged, peaks keep their rows.
    wanted, shown : int
        Number of the newest outline or calibration, and of the one that measurement and problem belong to.
    """

    drawn: DrawnRegion
    measurement: Measurement | None = None
    problem: str | None = None
    rows: tuple[int, ...] = ()
    wanted: int = 0
    shown: int = 0

    @property
    def is_pending(self) -> bool:
        """Whether a newer result is on its way."""
        return self.wanted > self.shown

    @property
    def is_stale(self) -> bool:
        """Whether the measurement is older than the outline."""
        return self.measurement is not None and (self.problem is not None or self.is_pending)


@dataclass(frozen=True, slots=True, eq=False)
class Job:
    """One measurement to be carried out, on values that nothing changes meanwhile."""

    picture: str
    region_id: int
    number: int
    micrograph: Micrograph
    drawn: DrawnRegion
    last: Measurement | None


@dataclass(frozen=True, slots=True, eq=False)
class Outcome:
    """What came of a job: a measurement, or the reason why there is none."""

    measurement: Measurement | None
    problem: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Calibration:
    """What is known beside the pixels and may be changed at the desk.

    Attributes
    ----------
    pixel_size_nm, pixel_size_relative_uncertainty, pixel_size_source, voltage_kv
        As in `Micrograph`.
    """

    pixel_size_nm: tuple[float, float] | None
    pixel_size_relative_uncertainty: float | tuple[float, float] | None
    pixel_size_source: str
    voltage_kv: float | None

    @classmethod
    def of(cls, micrograph: Micrograph) -> Calibration:
        """Return that of a picture."""
        return cls(**{f.name: getattr(micrograph, f.name) for f in dataclasses.fields(cls)})

    def beside(self, micrograph: Micrograph) -> Micrograph:
        """Return the same pixels with these values.

        Raises
        ------
        CalibrationError
            If a value is impossible.
        """
        return replace(micrograph, **{f.name: getattr(self, f.name) for f in dataclasses.fields(self)})


def carry_out(job: Job) -> Outcome:
    """Measure the region of a job; what the library refuses becomes a problem in words."""
    drawn = job.drawn
    try:
        region = Region(drawn.name, drawn.vertices_px, drawn.kind)
        if job.last is not None and job.last.region == region and job.last.micrograph.pixels is job.micrograph.pixels:
            return Outcome(recalibrated(job.last, job.micrograph))
        return Outcome(measure(job.micrograph, region))
    except FringespanError as problem:
        return Outcome(None, str(problem))
    except MemoryError:
        return Outcome(None, f"region {drawn.name!r}: not enough memory; draw it smaller")
    except OSError as problem:
        return Outcome(None, f"{job.micrograph.name} can no longer be read ({problem}); open the picture again")


@dataclass(slots=True, eq=False)
class _Sheet:
    """One picture with what was drawn on it."""

    micrograph: Micrograph
    regions: dict[int, MeasuredRegion] = field(default_factory=dict)
    current: int | None = None
    peak: int | None = None
    line: Line | None = None


class MeasuringState:
    """The one truth of a viewer.

    Signals
    -------
    picture_changed
        Another picture or frame is shown, or something beside its pixels changed.
    regions_changed
        Regions were added, removed or renamed, or another one is current.
    region_measured(id)
        A region has a new outline, result or problem.
    peak_selected
        Another peak of the current region is selected.
    line_changed
        The line that angles are measured to was drawn, moved or removed.
    unit_changed
    work_wanted
        `next_job` has something to do.
    complained(text)
        Something went wrong that the user should be told even where no dock is open.
    """

    picture_changed = Signal()
    regions_changed = Signal()
    region_measured = Signal(int)
    peak_selected = Signal()
    line_changed = Signal()
    unit_changed = Signal()
    work_wanted = Signal()
    complained = Signal(str)

    def __init__(self, unit: Unit = "nm") -> None:
        self._sheets: dict[str, _Sheet] = {}
        self._shown: str | None = None
        self._unit: Unit = unit
        self._number = 0
        self._dragged = False
        self._undo: list[tuple[str, Callable[[], None]]] = []

    # --- the picture ------------------------------------------------------------------------------------------------

    @property
    def picture(self) -> str | None:
        """Key of the picture shown."""
        return self._shown

    @property
    def micrograph(self) -> Micrograph | None:
        """The picture shown."""
        return None if self._sheet is None else self._sheet.micrograph

    @property
    def _sheet(self) -> _Sheet | None:
        return None if self._shown is None else self._sheets[self._shown]

    def show_picture(self, key: str, micrograph: Micrograph) -> None:
        """Show a picture, or another frame of it; values typed beside an earlier frame of it stay."""
        sheet = self._sheets.get(key)
        if sheet is None:
            sheet = self._sheets[key] = _Sheet(micrograph)
        elif sheet.micrograph.frame != micrograph.frame or sheet.micrograph.pixels is not micrograph.pixels:
            sheet.micrograph = Calibration.of(sheet.micrograph).beside(micrograph)
            self._measure_all(sheet)
        self._shown = key
        self.picture_changed.emit()
        self.regions_changed.emit()
        self.peak_selected.emit()

    def forget_picture(self, key: str) -> None:
        """Forget a picture that was closed, with its measurements; results still on their way are dropped."""
        if self._sheets.pop(key, None) is None:
            return
        if self._shown == key:
            self._shown = None
            self._undo.clear()
            self.picture_changed.emit()
            self.regions_changed.emit()
            self.peak_selected.emit()

    def recalibrate(self, calibration: Calibration) -> None:
        """Change what stands beside the pixels of the shown picture; every result follows. Can be undone.

        Raises
        ------
        CalibrationError
            If a value is impossible; nothing has changed then.
        """
        sheet, key = self._sheet, self._shown
        if sheet is None or key is None:
            return
        before = Calibration.of(sheet.micrograph)
        if calibration == before:
            return
        self._calibrate(key, calibration)
        self._undo.append(("calibration", lambda: self._calibrate(key, before)))

    def take_scale(self, micrograph: Micrograph) -> None:
        """Take over the pixel size that the layer of the shown picture has got from elsewhere. Can be undone."""
        sheet, key = self._sheet, self._shown
        if sheet is None or key is None:
            return
        before = sheet.micrograph
        scale = {f: getattr(micrograph, f) for f in ("pixel_size_nm", "pixel_size_source", "shear")}
        # an uncertainty belongs to the pixel size that it was stated for
        sheet.micrograph = replace(before, **scale, pixel_size_relative_uncertainty=None)
        self._undo.append(("calibration", lambda: self._calibrate(key, Calibration.of(before))))
        self._measure_all(sheet)
        self.picture_changed.emit()

    def _calibrate(self, key: str, calibration: Calibration) -> None:
        sheet = self._sheets.get(key)
        if sheet is None:
            return
        sheet.micrograph = calibration.beside(sheet.micrograph)
        self._measure_all(sheet)
        if key == self._shown:
            self.picture_changed.emit()

    @property
    def undo_text(self) -> str | None:
        """What would be undone."""
        return self._undo[-1][0] if self._undo else None

    def undo(self) -> None:
        """Undo the last change of the calibration."""
        if self._undo:
            self._undo.pop()[1]()

    # --- regions ----------------------------------------------------------------------------------------------------

    @property
    def regions(self) -> tuple[MeasuredRegion, ...]:
        """Those of the shown picture, in the order they were drawn."""
        return () if self._sheet is None else tuple(self._sheet.regions.values())

    @property
    def current(self) -> MeasuredRegion | None:
        """The region that the docks show."""
        sheet = self._sheet
        return None if sheet is None or sheet.current is None else sheet.regions[sheet.current]

    @property
    def is_dragged(self) -> bool:
        """Whether an outline is being drawn or moved just now."""
        return self._dragged

    def set_regions(self, drawn: Iterable[DrawnRegion], *, dragged: bool = False) -> None:
        """Take over what is drawn on the shown picture.

        Outlines that changed are measured again, others keep their result; the newest that changed becomes current.

        Parameters
        ----------
        drawn : iterable of DrawnRegion
        dragged : bool
            Whether an outline is still in the hand: problems are shown, but not complained of yet.
        """
        sheet = self._sheet
        if sheet is None:
            return
        settled = self._dragged and not dragged
        self._dragged = dragged
        before, after = sheet.regions, {region.id: region for region in drawn}
        regions: dict[int, MeasuredRegion] = {}
        changed: list[int] = []
        listed = list(before) != list(after)
        for key, region in after.items():
            old = before.get(key)
            if old is None:
                regions[key] = MeasuredRegion(region)
                changed.append(key)
            elif old.drawn == region:
                regions[key] = old
            else:
                listed |= old.drawn.name != region.name
                regions[key] = replace(old, drawn=region)
                changed.append(key)
        sheet.regions = regions
        for key in changed:
            self._want(sheet, key)
        if changed and sheet.current != changed[-1]:
            sheet.current, sheet.peak = changed[-1], None
            listed = True
        elif sheet.current not in regions:
            sheet.current, sheet.peak = (next(reversed(regions)) if regions else None), None
            listed = True
        if listed:
            self.regions_changed.emit()
            self.peak_selected.emit()
        for key in changed:
            self.region_measured.emit(key)
        if settled:
            self._settle(sheet)
        if changed:
            self.work_wanted.emit()

    def _settle(self, sheet: _Sheet) -> None:
        """Give peaks numbers by their strength again, now that nothing moves, and complain of what went wrong."""
        for key, region in sheet.regions.items():
            if region.measurement is not None and list(region.rows) != sorted(region.rows):
                sheet.regions[key] = replace(region, rows=tuple(range(len(region.measurement.peaks))))
                self.region_measured.emit(key)
            if region.problem is not None and not region.is_pending:
                self.complained.emit(region.problem)

    def select_region(self, region_id: int | None) -> None:
        """Make a region the current one."""
        sheet = self._sheet
        if sheet is None or region_id == sheet.current or region_id not in sheet.regions:
            return
        sheet.current, sheet.peak = region_id, None
        self.regions_changed.emit()
        self.peak_selected.emit()

    def step_region(self, step: int) -> None:
        """Make the next (1) or the one before (-1) current."""
        sheet = self._sheet
        if sheet is None or not sheet.regions:
            return
        keys = list(sheet.regions)
        place = keys.index(sheet.current) if sheet.current in keys else -1
        self.select_region(keys[(place + step) % len(keys)])

    @property
    def line(self) -> Line | None:
        """The line on the shown picture that angles are measured to."""
        return None if self._sheet is None else self._sheet.line

    def set_line(self, line: Line | None) -> None:
        """Measure angles to another line, or to none."""
        if self._sheet is not None and line != self._sheet.line:
            self._sheet.line = line
            self.line_changed.emit()

    # --- peaks ------------------------------------------------------------------------------------------------------

    @property
    def peak(self) -> int | None:
        """Position of the selected peak among those of the current region's measurement."""
        return None if self._sheet is None else self._sheet.peak

    def select_peak(self, peak: int | None) -> None:
        """Select a peak of the current region."""
        current, sheet = self.current, self._sheet
        if sheet is None or peak == sheet.peak:
            return
        count = 0 if current is None or current.measurement is None else len(current.measurement.peaks)
        if peak is not None and not 0 <= peak < count:
            return
        sheet.peak = peak
        self.peak_selected.emit()

    # --- unit -------------------------------------------------------------------------------------------------------

    @property
    def unit(self) -> Unit:
        """In which spacings are shown."""
        return self._unit

    @unit.setter
    def unit(self, unit: Unit) -> None:
        if unit != self._unit:
            self._unit = unit
            self.unit_changed.emit()

    # --- work -------------------------------------------------------------------------------------------------------

    def _measure_all(self, sheet: _Sheet) -> None:
        for key in sheet.regions:
            self._want(sheet, key)
        if sheet.regions:
            self.work_wanted.emit()

    def _want(self, sheet: _Sheet, region_id: int) -> None:
        self._number += 1
        sheet.regions[region_id] = replace(sheet.regions[region_id], wanted=self._number)

    def next_job(self) -> Job | None:
        """Return what should be measured next: the newest outline of the current region, then of the others."""
        sheet = self._sheet
        if sheet is None or self._shown is None:
            return None
        waiting = [key for key, region in sheet.regions.items() if region.is_pending]
        if not waiting:
            return None
        key = sheet.current if sheet.current in waiting else waiting[0]
        region = sheet.regions[key]
        return Job(self._shown, key, region.wanted, sheet.micrograph, region.drawn, region.measurement)

    def finish(self, job: Job, outcome: Outcome) -> None:
        """Take the result of a job; that of a region or picture that is gone is dropped."""
        sheet = self._sheets.get(job.picture)
        region = None if sheet is None else sheet.regions.get(job.region_id)
        if sheet is None or region is None or job.number <= region.shown:
            return
        if outcome.measurement is None:
            done = replace(region, problem=outcome.problem, shown=job.number)
        else:
            rows = tuple(range(len(outcome.measurement.peaks)))
            if region.measurement is not None:
                match = _same_peaks(region.measurement, outcome.measurement)
                if self._dragged:
                    kept = [match[i] for i in region.rows if i in match]
                    rows = (*kept, *(i for i in rows if i not in kept))
                if job.region_id == sheet.current and sheet.peak is not None:
                    sheet.peak = match.get(sheet.peak)
            done = replace(region, measurement=outcome.measurement, problem=None, rows=rows, shown=job.number)
        sheet.regions[job.region_id] = done
        if job.picture != self._shown:
            return
        self.region_measured.emit(job.region_id)
        if job.region_id == sheet.current:
            self.peak_selected.emit()
        if outcome.problem is not None and not self._dragged and not done.is_pending:
            self.complained.emit(outcome.problem)


def _same_peaks(before: Measurement, after: Measurement) -> dict[int, int]:
    """Return which peak of a measurement is which of the next one: nearest first, each once."""
    if not before.peaks or not after.peaks:
        return {}
    old = np.array([peak.g_per_px for peak in before.peaks])
    new = np.array([peak.g_per_px for peak in after.peaks])
    bins = np.minimum(before.spectrum.shape, after.spectrum.shape)
    distance = np.minimum(
        np.hypot(*((old[:, None] - new[None]) * bins).transpose(2, 0, 1)),
        # at the edge of the half plane a peak changes sides
        np.hypot(*((old[:, None] + new[None]) * bins).transpose(2, 0, 1)),
    )
    match: dict[int, int] = {}
    taken: set[int] = set()
    for flat in np.argsort(distance, axis=None).tolist():
        i, j = divmod(flat, len(new))
        if distance[i, j] > _SAME_PEAK_BINS or not math.isfinite(distance[i, j]):
            break
        if i not in match and j not in taken:
            match[i] = j
            taken.add(j)
    return match
