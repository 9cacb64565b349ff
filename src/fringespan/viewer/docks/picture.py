"""The dock of the picture and its regions: what is measured, at which scale, and where."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partial
from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtGui import QKeySequence, QShortcut
from qtpy.QtWidgets import (
    QFormLayout,
    QGridLayout,
    QHBoxLayout,
    QLabel,
    QLineEdit,
    QPushButton,
    QSizePolicy,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from fringespan.exceptions import FringespanError
from fringespan.export.plain_text import one_line, shortened
from fringespan.viewer.docks.dock import Dock
from fringespan.viewer.docks.wrapped_label import WrappedLabel
from fringespan.viewer.state import Calibration
from fringespan.viewer.wording import picture_words, region_words

if TYPE_CHECKING:
    import napari.viewer

__all__ = ["PictureDock"]

_NOTHING_OPEN = "Open a picture (File > Open, or drop it on the window), or try File > Open Sample > Fringe spacings."
_NO_PIXEL_SIZE = (
    "Without a pixel size everything is in pixels. Type it below, set the scale and units of the layer, or open the "
    "file as the microscope saved it."
)
_NO_REGION = "1. Choose a shape.  2. Draw it inside one grain, never across two.  3. Drag it and watch the spacings."


class PictureDock(Dock):
    """Picture line, calibration form, region line and shape tools."""

    def __init__(self, viewer: napari.viewer.Viewer) -> None:
        super().__init__(viewer)
        self._state, self._desk = self.workplace.state, self.workplace.desk
        layout = QVBoxLayout(self)
        layout.setContentsMargins(6, 4, 6, 4)
        layout.setSpacing(4)
        layout.addLayout(self._picture_line())
        layout.addWidget(self._form())
        layout.addLayout(self._region_line())
        layout.addLayout(self._tools())
        layout.addStretch(1)
        # what this dock does not need is the table's
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Maximum)
        self._add_shortcuts()
        state = self._state
        self.follow(
            (state.picture_changed, self._show_picture),
            (state.regions_changed, self._show_region),
            (state.region_measured, self._on_measured),
        )
        self._show_picture()
        self._show_region()

    # --- parts ------------------------------------------------------------------------------------------------------

    def _picture_line(self) -> QVBoxLayout:
        self.picture_name = WrappedLabel()
        self.picture_name.setStyleSheet("font-weight: bold")
        self.calibrate = QToolButton()
        self.calibrate.setText("Calibrate")
        self.calibrate.setCheckable(True)
        self.calibrate.setToolTip("Pixel size, its uncertainty, and the voltage")
        self.calibrate.toggled.connect(self._open_form)
        line = QHBoxLayout()
        line.addWidget(self.picture_name, 1)
        line.addWidget(self.calibrate, 0, Qt.AlignmentFlag.AlignTop)
        self.picture_facts = WrappedLabel()
        both = QVBoxLayout()
        both.setSpacing(2)
        both.addLayout(line)
        both.addWidget(self.picture_facts)
        return both

    def _form(self) -> QWidget:
        self.pixel_size = _field("Pixel size", "nm per pixel; two numbers with a comma: along rows' axis (down), right")
        self.pixel_size.setPlaceholderText("not stated")
        self.uncertainty = _field("Uncertainty of the pixel size", "standard uncertainty in per cent; two: down, right")
        self.uncertainty.setPlaceholderText("not stated")
        self.voltage = _field("Beam voltage", "in kV; gives scattering angles")
        self.voltage.setPlaceholderText("not stated")
        self.form_problem = WrappedLabel()
        self.form_problem.setVisible(False)
        self.undo = QPushButton("Undo")
        self.undo.setToolTip("Take back the last change of the calibration (Ctrl+Z in this dock)")
        self.undo.clicked.connect(self._on_undo)
        self.form = QWidget()
        rows = QFormLayout(self.form)
        rows.setContentsMargins(0, 0, 0, 0)
        rows.setSpacing(3)
        rows.addRow("Pixel size (nm)", self.pixel_size)
        rows.addRow("± (%)", self.uncertainty)
        rows.addRow("Voltage (kV)", self.voltage)
        rows.addRow(self.form_problem)
        rows.addRow(self.undo)
        for field in (self.pixel_size, self.uncertainty, self.voltage):
            field.editingFinished.connect(self._take_form)
        self.form.setVisible(False)
        return self.form

    def _region_line(self) -> QVBoxLayout:
        self.previous, self.following = (
            _small_button("<", "Previous region (Page Up)"),
            _small_button(">", "Next region (Page Down)"),
        )
        self.previous.clicked.connect(partial(_ignoring_checked, partial(self._state.step_region, -1)))
        self.following.clicked.connect(partial(_ignoring_checked, partial(self._state.step_region, 1)))
        self.region_name = QLineEdit()
        self.region_name.setAccessibleName("Name of the region")
        self.region_name.setToolTip("Name of the region; type to change it")
        self.region_name.editingFinished.connect(self._rename)
        self.region_place = QLabel()
        # the mark of a running measurement must not move what is beside it
        self.region_place.setMinimumWidth(self.fontMetrics().horizontalAdvance("00 of 00 …"))
        line = QHBoxLayout()
        line.setSpacing(3)
        for widget, stretch in (
            (self.previous, 0),
            (self.region_name, 1),
            (self.region_place, 0),
            (self.following, 0),
        ):
            line.addWidget(widget, stretch)
        self.region_facts = WrappedLabel()
        both = QVBoxLayout()
        both.setSpacing(2)
        both.addLayout(line)
        both.addWidget(self.region_facts)
        return both

    def _tools(self) -> QGridLayout:
        # no function here holds the dock itself, which would then never end
        desk = self._desk
        self.tools: dict[str, QPushButton] = {}
        grid = QGridLayout()
        grid.setSpacing(3)
        commands: dict[str, tuple[Callable[[], None], str]] = {
            "Rectangle": (partial(desk.draw, "rectangle"), "Draw a rectangle inside one grain"),
            "Ellipse": (partial(desk.draw, "ellipse"), "Draw an ellipse inside one grain"),
            "Polygon": (partial(desk.draw, "polygon"), "Draw a polygon: click its corners, double click the last"),
            "Whole": (desk.add_whole_picture, "Measure the whole picture"),
            "Line": (
                partial(desk.draw, "line"),
                "Draw an interface, a facet, a direction: the table shows angles to it",
            ),
            "Move": (desk.select_and_move, "Move, resize and turn regions"),
            "Remove": (desk.remove_current, "Remove the current region"),
        }
        for place, (name, (command, tip)) in enumerate(commands.items()):
            button = QPushButton(name)
            button.setToolTip(tip)
            button.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)
            button.clicked.connect(partial(_ignoring_checked, command))
            grid.addWidget(button, place // 4, place % 4)
            self.tools[name] = button
        return grid

    def _add_shortcuts(self) -> None:
        for keys, command in (
            ("PgUp", partial(self._state.step_region, -1)),
            ("PgDown", partial(self._state.step_region, 1)),
            ("Ctrl+Z", self._on_undo),
        ):
            shortcut = QShortcut(QKeySequence(keys), self)
            shortcut.setContext(Qt.ShortcutContext.WidgetWithChildrenShortcut)
            shortcut.activated.connect(command)

    # --- commands ---------------------------------------------------------------------------------------------------

    def _rename(self) -> None:
        current = self._state.current
        if current is not None and self.region_name.text() != current.drawn.name:
            self._desk.rename_current(self.region_name.text())
            self._show_region()

    def _on_undo(self) -> None:
        self._desk.undo()

    def _open_form(self, opened: bool) -> None:
        self.form.setVisible(opened)

    def _take_form(self) -> None:
        micrograph = self._state.micrograph
        if micrograph is None or (self.pixel_size.text(), self.uncertainty.text(), self.voltage.text()) == self._filled:
            return
        try:
            calibration = self._typed(Calibration.of(micrograph))
            self._desk.recalibrate(calibration)
        except FringespanError as problem:
            self._complain(str(problem))
            return
        except _NotANumberError as problem:
            self._complain(str(problem))
            return
        self._complain("")
        self._fill_form()

    def _typed(self, before: Calibration) -> Calibration:
        size = _one_or_two(self.pixel_size.text(), "the pixel size")
        uncertainty = _one_or_two(self.uncertainty.text(), "the uncertainty")
        voltage = _one_or_two(self.voltage.text(), "the voltage")
        if voltage is not None and len(voltage) > 1:
            raise _NotANumberError("the voltage is one number in kV")
        pair = None if size is None else (size[0], size[-1])
        shares = None if uncertainty is None else tuple(v / 100 for v in uncertainty)
        typed = replace(
            before,
            pixel_size_relative_uncertainty=None
            if shares is None
            else (shares[0] if len(shares) == 1 else (shares[0], shares[1])),
            voltage_kv=None if voltage is None else voltage[0],
        )
        if self.pixel_size.text() == self._filled[0]:
            return typed
        return replace(typed, pixel_size_nm=pair, pixel_size_source="typed" if pair is not None else "")

    def _complain(self, problem: str) -> None:
        self.form_problem.setText(problem)
        self.form_problem.setVisible(bool(problem))

    # --- what is shown ----------------------------------------------------------------------------------------------

    def _show_picture(self) -> None:
        micrograph = self._state.micrograph
        self.calibrate.setEnabled(micrograph is not None)
        for name, button in self.tools.items():
            button.setEnabled(micrograph is not None and name not in ("Move", "Remove"))
        if micrograph is None:
            self.picture_name.setText("No picture")
            self.picture_facts.setText(_NOTHING_OPEN)
            self.calibrate.setChecked(False)
            return
        self.picture_name.setText(shortened(micrograph.name, 60))
        self.picture_name.setToolTip(one_line(micrograph.name))
        facts = picture_words(micrograph)
        self.picture_facts.setText(facts if micrograph.pixel_size_nm is not None else f"{facts}. {_NO_PIXEL_SIZE}")
        if micrograph.pixel_size_nm is None and not self.calibrate.isChecked():
            self.calibrate.setChecked(True)
        self._fill_form()
        self._complain("")
        self._show_region()

    def _fill_form(self) -> None:
        micrograph = self._state.micrograph
        if micrograph is None:
            return
        size, uncertainty = micrograph.pixel_size_nm, micrograph.pixel_size_relative_uncertainty
        shares = None
        if uncertainty is not None:
            pair = uncertainty if isinstance(uncertainty, tuple) else (uncertainty,)
            shares = tuple(100 * v for v in pair)
        if size is not None and size[0] == size[1]:
            size = size[:1]  # type: ignore[assignment]
        texts = [_numbers_text(size), _numbers_text(shares), _numbers_text(_single(micrograph.voltage_kv))]
        for field, text in zip((self.pixel_size, self.uncertainty, self.voltage), texts, strict=True):
            field.setText(text)
        self._filled = (texts[0], texts[1], texts[2])
        what = self._state.undo_text
        self.undo.setEnabled(what is not None)

    _filled: tuple[str, str, str] = ("", "", "")

    def _on_measured(self, region_id: int) -> None:
        current = self._state.current
        if current is not None and current.drawn.id == region_id:
            self._show_region()

    def _show_region(self) -> None:
        state = self._state
        current, regions, micrograph = state.current, state.regions, state.micrograph
        several = len(regions) > 1
        self.previous.setEnabled(several)
        self.following.setEnabled(several)
        self.region_name.setEnabled(current is not None)
        for name in ("Move", "Remove"):
            self.tools[name].setEnabled(current is not None)
        if current is None or micrograph is None:
            self.region_name.setText("")
            self.region_place.setText("")
            self.region_facts.setText(_NO_REGION if micrograph is not None else "")
            return
        if not self.region_name.hasFocus():
            self.region_name.setText(current.drawn.name)
        place = [region.drawn.id for region in regions].index(current.drawn.id) + 1
        self.region_place.setText(f"{place} of {len(regions)} {'…' if current.is_pending else ''}")
        self.region_place.setToolTip("A newer outline is being measured." if current.is_pending else "")
        self.region_facts.setText(region_words(current, micrograph))


def _ignoring_checked(command: Callable[[], None], _checked: bool = False) -> None:
    command()


class _NotANumberError(ValueError):
    """A field holds something else than numbers."""


def _one_or_two(text: str, name: str) -> tuple[float, ...] | None:
    if not text.strip():
        return None
    try:
        numbers = tuple(float(part) for part in text.replace(";", ",").split(","))
    except ValueError:
        raise _NotANumberError(f"{name}: {text!r} is not a number; write it with a point, as 0.021") from None
    if len(numbers) > 2:
        raise _NotANumberError(f"{name}: {len(numbers)} numbers; give one, or two with a comma between (down, right)")
    return numbers


def _numbers_text(numbers: tuple[float, ...] | None) -> str:
    return "" if numbers is None else ", ".join(f"{v:.6g}" for v in numbers)


def _single(number: float | None) -> tuple[float, ...] | None:
    return None if number is None else (number,)


def _field(name: str, tip: str) -> QLineEdit:
    field = QLineEdit()
    field.setAccessibleName(name)
    field.setToolTip(tip)
    return field


def _small_button(text: str, tip: str) -> QToolButton:
    button = QToolButton()
    button.setText(text)
    button.setToolTip(tip)
    button.setAccessibleName(tip)
    return button
