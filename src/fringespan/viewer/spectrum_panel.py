"""The spectrum of a region with its numbered peaks, to look at, zoom and click in."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from qtpy.QtCore import QPointF, QRectF, Qt, Signal
from qtpy.QtGui import (
    QColor,
    QFont,
    QFontMetricsF,
    QImage,
    QPainter,
    QPainterPath,
    QPen,
    QPixmap,
    QPolygonF,
    QTransform,
)
from qtpy.QtWidgets import QGraphicsItem, QGraphicsPixmapItem, QGraphicsScene, QGraphicsView, QSizePolicy, QWidget

from fringespan.measurement import Measurement
from fringespan.spacings import Peak, Scale
from fringespan.viewer.spectrum_image import SpectrumImage, spectrum_image
from fringespan.viewer.state import Unit
from fringespan.viewer.wording import UNIT_SYMBOLS, spacing

__all__ = ["PeakKind", "SpectrumPanel", "peak_kind"]

PeakKind = Literal["found", "lattice point", "added by hand", "off the lattice", "withheld"]

# the form of a mark tells the kind, its colour only helps; the ground is always a dark spectrum
_COLOURS: dict[PeakKind, str] = {
    "found": "#E69F00",
    "lattice point": "#56B4E9",
    "added by hand": "#CC79A7",
    "off the lattice": "#F0E442",
    "withheld": "#D55E00",
}

_NYQUIST = 100.0
"""Scene units from the origin to the finest fringes that the columns can show."""

_RADII = (1.0, 0.75, 0.5, 0.35, 0.25, 0.18, 0.12)
"""How much of the spectrum is shown by itself, as shares of `_NYQUIST`: in steps, so that the view does not creep."""

_RING_SPACINGS = (0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0)
_RING_LABELS = math.radians(235)
"""Where the circles' labels stand: on the left, where the marks have no numbers."""

_MARK_RADIUS = 6.0
_CLICK_RADIUS = 11.0


def peak_kind(peak: Peak, measurement: Measurement) -> PeakKind:
    """Return what a peak is to be shown as."""
    if peak.withheld is not None:
        return "withheld"
    if peak.origin == "found" and measurement.lattice is not None and peak.lattice_index is None:
        return "off the lattice"
    return peak.origin


@dataclass(frozen=True, eq=False, slots=True)
class _Plane:
    """How cycles per pixel lie in the scene: angles and ratios of lengths as in the specimen."""

    to_scene: NDArray[np.float64]
    per_nm: float | None

    @classmethod
    def of(cls, measurement: Measurement) -> _Plane:
        scale = Scale.of(measurement.micrograph)
        unit = float(scale.to_per_nm[1, 1])
        return cls(2 * _NYQUIST * scale.to_per_nm / unit, None if scale.geometry is None else unit)

    def point(self, g_per_px: NDArray[np.float64]) -> QPointF:
        row, column = g_per_px @ self.to_scene
        return QPointF(float(column), float(row))

    def frequency(self, point: QPointF) -> NDArray[np.float64]:
        return np.asarray(np.array([point.y(), point.x()]) @ np.linalg.inv(self.to_scene))

    def radius(self, spacing: float) -> float:
        """Return the radius of the circle of a spacing in nm, or in pixels without a pixel size."""
        return 2 * _NYQUIST / (spacing * (self.per_nm or 1.0))


class _Mark(QGraphicsItem):
    """One peak: a mark of constant size with its number, and a faint twin at the opposite vector."""

    def __init__(self, index: int, number: int, kind: PeakKind, outwards: tuple[float, float], twin: bool) -> None:
        super().__init__()
        self.index = index
        self.kind = kind
        self._number = number
        self._outwards = outwards
        self._twin = twin
        self._chosen = False
        self.setFlag(QGraphicsItem.GraphicsItemFlag.ItemIgnoresTransformations)
        self.setZValue(1 if twin else 2)

    def choose(self, chosen: bool) -> None:
        if chosen != self._chosen:
            self._chosen = chosen
            self.setZValue(3 if chosen else 1 if self._twin else 2)
            self.update()

    def boundingRect(self) -> QRectF:
        return QRectF(-30, -30, 60, 60)

    def shape(self) -> QPainterPath:
        path = QPainterPath()
        path.addEllipse(QPointF(0, 0), _CLICK_RADIUS, _CLICK_RADIUS)
        return path

    def paint(self, painter: QPainter, option: object, widget: QWidget | None = None) -> None:
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.setOpacity(0.55 if self._twin and not self._chosen else 1.0)
        outline = _mark_path(self.kind)
        for colour, width in ((QColor(0, 0, 0, 190), 3.4), (QColor(_COLOURS[self.kind]), 1.6)):
            painter.setPen(QPen(colour, width + (1.4 if self._chosen else 0.0)))
            painter.drawPath(outline)
        if self._chosen:
            painter.setPen(QPen(QColor("white"), 1.0))
            painter.drawEllipse(QPointF(0, 0), _MARK_RADIUS + 4, _MARK_RADIUS + 4)
        if self._twin:
            return
        font = QFont(painter.font())
        font.setPointSizeF(8.5)
        font.setBold(self._chosen)
        text = str(self._number)
        box = QFontMetricsF(font).tightBoundingRect(text)
        x, y = 17 * self._outwards[0], 17 * self._outwards[1]
        path = QPainterPath()
        path.addText(x - box.center().x(), y - box.center().y(), font, text)
        painter.setPen(QPen(QColor(0, 0, 0, 220), 3.0))
        painter.drawPath(path)
        painter.fillPath(path, QColor("white"))


def _mark_path(kind: PeakKind) -> QPainterPath:
    r = _MARK_RADIUS
    path = QPainterPath()
    if kind == "found":
        path.addEllipse(QPointF(0, 0), r, r)
    elif kind == "lattice point":
        path.addRect(QRectF(-r * 0.85, -r * 0.85, r * 1.7, r * 1.7))
    elif kind == "withheld":
        path.moveTo(-r * 0.8, -r * 0.8)
        path.lineTo(r * 0.8, r * 0.8)
        path.moveTo(-r * 0.8, r * 0.8)
        path.lineTo(r * 0.8, -r * 0.8)
    else:
        corners = [(0, -r * 1.2), (r * 1.1, r * 0.8), (-r * 1.1, r * 0.8)]
        if kind == "off the lattice":
            corners = [(0, -r * 1.2), (r * 1.2, 0), (0, r * 1.2), (-r * 1.2, 0)]
        path.addPolygon(QPolygonF([QPointF(x, y) for x, y in corners]))
        path.closeSubpath()
    return path


class SpectrumPanel(QGraphicsView):
    """The spectrum of a measurement.

    The wheel zooms, dragging moves, double click shows all again; a click on a mark picks the peak.
    """

    peak_picked = Signal(object)
    """Position of the clicked peak, or None for a click beside all marks."""

    pointed = Signal(str)
    """Words on where the pointer is; empty when it has left."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._scene = QGraphicsScene(self)
        self.setScene(self._scene)
        self.setSceneRect(-4 * _NYQUIST, -4 * _NYQUIST, 8 * _NYQUIST, 8 * _NYQUIST)
        self._pixmap = QGraphicsPixmapItem()
        self._pixmap.setTransformationMode(Qt.TransformationMode.FastTransformation)
        self._scene.addItem(self._pixmap)
        self._guides: list[QGraphicsItem] = []
        self._marks: list[_Mark] = []
        self._measurement: Measurement | None = None
        self._image: SpectrumImage | None = None
        self._plane: _Plane | None = None
        self._unit: Unit = "nm"
        self._contrast = (0.0, 1.0)
        self._radius = _NYQUIST
        self._zoomed = False
        self._drag: tuple[QPointF, bool] | None = None
        self.setBackgroundBrush(QColor("#101010"))
        self.setRenderHint(QPainter.RenderHint.Antialiasing)
        self.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.setVerticalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.setTransformationAnchor(QGraphicsView.ViewportAnchor.NoAnchor)
        self.setFrameShape(QGraphicsView.Shape.NoFrame)
        self.setMouseTracking(True)
        self.setMinimumSize(220, 200)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setAccessibleName("Power spectrum of the region")
        self.setAccessibleDescription("The spacings dock lists the same peaks as a table.")
        self.setToolTip("Wheel: zoom. Drag: move. Double click: show all. Click a mark: select the spacing.")

    # --- what is shown ----------------------------------------------------------------------------------------------

    @property
    def measurement(self) -> Measurement | None:
        """What is shown."""
        return self._measurement

    @property
    def marked(self) -> list[int]:
        """Positions of the peaks that bear a number, in the order of their numbers."""
        return [mark.index for mark in self._marks[::2]]

    def show_measurement(self, measurement: Measurement | None, rows: Sequence[int], unit: Unit) -> None:
        """Show another measurement; zoom and contrast stay.

        Parameters
        ----------
        measurement : Measurement or None
        rows : sequence of int
            Position of the peak that bears number 1, 2, ...
        unit : {"nm", "angstrom", "pm"}
        """
        same = (
            measurement is not None
            and self._measurement is not None
            and (measurement.spectrum is self._measurement.spectrum)
        )
        self._measurement, self._unit = measurement, unit
        for item in (*self._guides, *self._marks):
            self._scene.removeItem(item)
        self._guides, self._marks = [], []
        if measurement is None:
            self._image, self._plane = None, None
            self._pixmap.setPixmap(QPixmap())
            return
        self._plane = _Plane.of(measurement)
        if not same or self._image is None:
            self._image = spectrum_image(measurement.spectrum)
            self._paint_image()
        self._place_image()
        self._add_guides()
        for number, index in enumerate(rows, start=1):
            self._add_marks(number, index)
        if not self._zoomed:
            self._fit()

    def choose(self, peak: int | None) -> None:
        """Mark a peak as selected."""
        for mark in self._marks:
            mark.choose(mark.index == peak)

    def set_contrast(self, low: float, high: float) -> None:
        """Set which shares of the usual range of the logarithm are black and white."""
        self._contrast = (low, high)
        self._paint_image()

    def _paint_image(self) -> None:
        if self._image is None:
            return
        shades = np.ascontiguousarray(self._image.shades(*self._contrast))
        rows, columns = shades.shape
        image = QImage(shades.data, columns, rows, columns, QImage.Format.Format_Grayscale8)
        # the pixmap is a copy: the array may go
        self._pixmap.setPixmap(QPixmap.fromImage(image))

    def _place_image(self) -> None:
        image, plane = self._image, self._plane
        if image is None or plane is None:
            return
        row, column = (np.diag(image.step) @ plane.to_scene).tolist()
        # half a pixel, since a pixmap's coordinates count from the corner of its first pixel
        y, x = image.middle[0] + 0.5, image.middle[1] + 0.5
        self._pixmap.setTransform(
            QTransform(
                column[1],
                column[0],
                row[1],
                row[0],
                -(x * column[1] + y * row[1]),
                -(x * column[0] + y * row[0]),
            )
        )

    def _add_guides(self) -> None:
        plane, measurement = self._plane, self._measurement
        if plane is None or measurement is None:
            return
        pen = QPen(QColor(255, 255, 255, 75), 0)
        limit = float(np.abs(np.array([[0.5, 0.5], [0.5, -0.5]]) @ plane.to_scene).max())
        for distance in _RING_SPACINGS:
            radius = plane.radius(distance)
            if 0.06 * _NYQUIST < radius < limit:
                ring = self._scene.addEllipse(-radius, -radius, 2 * radius, 2 * radius, pen)
                text = f"{distance:g} px"
                if plane.per_nm is not None:
                    factor = {"nm": 1.0, "angstrom": 10.0, "pm": 1000.0}[self._unit]
                    text = f"{factor * distance:g} {UNIT_SYMBOLS[self._unit]}"
                label = self._scene.addSimpleText(text)
                label.setBrush(QColor(255, 255, 255, 170))
                font = QFont(label.font())
                font.setPointSizeF(7.5)
                label.setFont(font)
                label.setFlag(QGraphicsItem.GraphicsItemFlag.ItemIgnoresTransformations)
                label.setPos(radius * math.cos(_RING_LABELS), radius * math.sin(_RING_LABELS))
                self._guides += [ring, label]
        corners = [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)]
        pen = QPen(QColor(255, 255, 255, 110), 0, Qt.PenStyle.DashLine)
        nyquist = QPolygonF([plane.point(np.array(corner)) for corner in corners])
        self._guides.append(self._scene.addPolygon(nyquist, pen))

    def _add_marks(self, number: int, index: int) -> None:
        plane, measurement = self._plane, self._measurement
        if plane is None or measurement is None:
            return
        peak = measurement.peaks[index]
        kind = peak_kind(peak, measurement)
        place = plane.point(peak.g_per_px)
        length = math.hypot(place.x(), place.y()) or 1.0
        outwards = place.x() / length, place.y() / length
        for twin in (False, True):
            mark = _Mark(index, number, kind, outwards, twin)
            mark.setPos(-place if twin else place)
            mark.setToolTip(self._mark_words(number, peak, kind))
            self._scene.addItem(mark)
            self._marks.append(mark)

    def _mark_words(self, number: int, peak: Peak, kind: PeakKind) -> str:
        unit = "px" if peak.g_per_nm is None else UNIT_SYMBOLS[self._unit]
        said = [f"{number}: {spacing(peak, self._unit)} {unit}, {peak.direction_deg:.2f}°, {kind}"]
        if peak.withheld is not None:
            said.append(peak.withheld)
        said += [caution.text for caution in peak.cautions]
        return "\n".join(said)

    # --- view -------------------------------------------------------------------------------------------------------

    def restore(self) -> None:
        """Show the whole neighbourhood of the peaks again."""
        self._zoomed = False
        self._fit()

    def _fit(self) -> None:
        if self._measurement is not None and self._plane is not None:
            points = [self._plane.point(peak.g_per_px) for peak in self._measurement.peaks]
            farthest = max((max(abs(p.x()), abs(p.y())) for p in points), default=_NYQUIST)
            wanted = [share * _NYQUIST for share in _RADII if share * _NYQUIST > 1.12 * farthest]
            self._radius = min(wanted, default=max(_NYQUIST, 1.12 * farthest))
        scale = min(self.viewport().width(), self.viewport().height()) / (2.05 * self._radius)
        self.setTransform(QTransform.fromScale(scale, scale))
        self.centerOn(0, 0)

    def resizeEvent(self, event: object) -> None:
        super().resizeEvent(event)
        if not self._zoomed:
            self._fit()

    def wheelEvent(self, event: object) -> None:
        steps = event.angleDelta().y() / 120  # type: ignore[attr-defined]
        if steps == 0:
            return
        place = event.position()  # type: ignore[attr-defined]
        before = self.mapToScene(place.toPoint())
        factor = min(max(1.25**steps * self.transform().m11(), 0.2), 400) / self.transform().m11()
        self.scale(factor, factor)
        moved = self.mapToScene(place.toPoint()) - before
        self.translate(moved.x(), moved.y())
        self._zoomed = True
        event.accept()  # type: ignore[attr-defined]

    def mousePressEvent(self, event: object) -> None:
        if event.button() == Qt.MouseButton.LeftButton:  # type: ignore[attr-defined]
            self._drag = (event.position(), False)  # type: ignore[attr-defined]
            event.accept()  # type: ignore[attr-defined]

    def mouseMoveEvent(self, event: object) -> None:
        place = event.position()  # type: ignore[attr-defined]
        if self._drag is not None:
            start, moved = self._drag
            if moved or (place - start).manhattanLength() > 4:
                shift = self.mapToScene(place.toPoint()) - self.mapToScene(start.toPoint())
                self.translate(shift.x(), shift.y())
                self._drag = (place, True)
                self._zoomed = True
        self.pointed.emit(self._words_at(self.mapToScene(place.toPoint())))

    def mouseReleaseEvent(self, event: object) -> None:
        if self._drag is None:
            return
        _, moved = self._drag
        self._drag = None
        if not moved:
            item = self.itemAt(event.position().toPoint())  # type: ignore[attr-defined]
            self.peak_picked.emit(item.index if isinstance(item, _Mark) else None)

    def mouseDoubleClickEvent(self, event: object) -> None:
        self.restore()

    def leaveEvent(self, event: object) -> None:
        self.pointed.emit("")
        super().leaveEvent(event)

    def view_position(self, peak: int) -> QPointF:
        """Return where a peak's mark stands in the widget."""
        (mark,) = (m for m in self._marks[::2] if m.index == peak)
        return QPointF(self.mapFromScene(mark.pos()))

    def _words_at(self, point: QPointF) -> str:
        plane, measurement = self._plane, self._measurement
        if plane is None or measurement is None:
            return ""
        length = math.hypot(point.x(), point.y())
        if length < 0.01 * _NYQUIST:
            return ""
        frequency = plane.frequency(point)
        direction = math.degrees(math.atan2(-point.y(), point.x())) % 180
        if plane.per_nm is None:
            return f"period {1 / math.hypot(*frequency):.4g} px · {direction:.1f}°"
        g = length / (2 * _NYQUIST) * plane.per_nm
        factor = {"nm": 1.0, "angstrom": 10.0, "pm": 1000.0}[self._unit]
        said = f"d {factor / g:.4g} {UNIT_SYMBOLS[self._unit]} · {direction:.1f}°"
        voltage = measurement.micrograph.voltage_kv
        if voltage is not None:
            from fringespan.beam import scattering_angle_mrad

            said += f" · 2θ {float(scattering_angle_mrad(1 / g, voltage)):.2f} mrad"
        return said
