"""The dock of the spectrum: the panel, contrast, and what lies under the pointer."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtWidgets import QHBoxLayout, QLabel, QSizePolicy, QSlider, QVBoxLayout

from fringespan.viewer.docks.dock import Dock
from fringespan.viewer.spectrum_panel import SpectrumPanel

if TYPE_CHECKING:
    import napari.viewer

__all__ = ["SpectrumDock"]

_HINT = "Point at the spectrum to read a spacing."


class SpectrumDock(Dock):
    """The spectrum of the current region."""

    def __init__(self, viewer: napari.viewer.Viewer) -> None:
        super().__init__(viewer)
        self._state = self.workplace.state
        self.panel = SpectrumPanel()
        self.panel.peak_picked.connect(self._state.select_peak)
        self.panel.pointed.connect(self._show_pointer)
        self.pointer = QLabel(_HINT)
        self.pointer.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self.contrast = QSlider(Qt.Orientation.Horizontal)
        self.contrast.setRange(-50, 100)
        self.contrast.setToolTip("Contrast: to the right only strong peaks remain, to the left weak ones appear")
        self.contrast.setAccessibleName("Contrast of the spectrum")
        self.contrast.setMaximumWidth(90)
        self.contrast.valueChanged.connect(self._set_contrast)
        line = QHBoxLayout()
        line.addWidget(self.pointer, 1)
        line.addWidget(self.contrast)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(6, 2, 6, 2)
        layout.setSpacing(3)
        layout.addWidget(self.panel, 1)
        layout.addLayout(line)
        state = self._state
        self.follow(
            (state.picture_changed, self._show),
            (state.regions_changed, self._show),
            (state.region_measured, self._on_measured),
            (state.peak_selected, self._choose),
            (state.unit_changed, self._show),
        )
        self._show()

    def _set_contrast(self, value: int) -> None:
        low = value / 100
        self.panel.set_contrast(low, 1 + max(0.0, low) / 2)

    def _show_pointer(self, words: str) -> None:
        self.pointer.setText(words or _HINT)

    def _on_measured(self, region_id: int) -> None:
        current = self._state.current
        if current is not None and current.drawn.id == region_id:
            self._show()

    def _show(self) -> None:
        current = self._state.current
        measurement = None if current is None else current.measurement
        rows = () if current is None else current.rows
        shown = (measurement, rows, self._state.unit)
        if shown != self._shown:
            self._shown = shown
            self.panel.show_measurement(measurement, rows, self._state.unit)
        self._choose()

    _shown: object = None

    def _choose(self) -> None:
        self.panel.choose(self._state.peak)
