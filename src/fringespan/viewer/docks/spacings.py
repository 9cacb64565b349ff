"""The dock of the spacings: the table, what it says in a sentence, and the cautions."""

from __future__ import annotations

import html
from typing import TYPE_CHECKING, cast, get_args

from qtpy.QtCore import QItemSelectionModel, QModelIndex, QSize, QSortFilterProxyModel, Qt
from qtpy.QtGui import QAction, QColor, QGuiApplication, QKeySequence, QPainter, QPalette, QShortcut
from qtpy.QtWidgets import (
    QAbstractItemView,
    QComboBox,
    QHBoxLayout,
    QHeaderView,
    QLabel,
    QMenu,
    QPushButton,
    QScrollArea,
    QSizePolicy,
    QStyledItemDelegate,
    QStyleOptionViewItem,
    QTableView,
    QVBoxLayout,
)

from fringespan.viewer.docks.dock import Dock
from fringespan.viewer.docks.spacings_model import COLUMNS, PARTS_ROLE, SORT_ROLE, SpacingsModel
from fringespan.viewer.docks.wrapped_label import WrappedLabel
from fringespan.viewer.state import MeasuredRegion, Unit
from fringespan.viewer.wording import (
    GRAVITY_WORDS,
    UNIT_SYMBOLS,
    UncertaintyParts,
    caution_words,
    result_words,
    table_text,
)

if TYPE_CHECKING:
    import napari.viewer

__all__ = ["SpacingsDock"]

_CAUTIONS_SHOWN = 3
_PART_COLOURS = ("#E69F00", "#56B4E9", "#009E73")
_HIDDEN_AT_FIRST = ("S/N", "lattice", "d lattice", "visibility")


class SpacingsDock(Dock):
    """Spacings of the current region."""

    def __init__(self, viewer: napari.viewer.Viewer) -> None:
        super().__init__(viewer)
        self._state = self.workplace.state
        self._all_cautions = False
        self._make_table()
        self._make_words()
        self.unit = QComboBox()
        self.unit.addItems([UNIT_SYMBOLS[unit] for unit in get_args(Unit)])
        self.unit.setToolTip("Unit of the spacings")
        self.unit.setAccessibleName("Unit of the spacings")
        self.unit.setCurrentIndex(get_args(Unit).index(self._state.unit))
        self.unit.currentIndexChanged.connect(self._set_unit)
        self.copy = QPushButton("Copy table")
        self.copy.setToolTip("Copy spacings and angles as text that a spreadsheet takes (Ctrl+C)")
        self.copy.clicked.connect(self.copy_table)
        line = QHBoxLayout()
        line.addWidget(self.unit)
        line.addStretch(1)
        line.addWidget(self.copy)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(6, 2, 6, 4)
        layout.setSpacing(3)
        layout.addWidget(self.sentence)
        layout.addWidget(self.banner)
        layout.addWidget(self.table, 3)
        layout.addLayout(line)
        layout.addWidget(self.caution_area, 2)
        state = self._state
        self.follow(
            (state.picture_changed, self._show),
            (state.regions_changed, self._show),
            (state.region_measured, self._on_measured),
            (state.peak_selected, self._choose),
            (state.unit_changed, self._on_unit),
            (state.line_changed, self._on_line),
        )
        self._show()

    # --- parts ------------------------------------------------------------------------------------------------------

    def _make_table(self) -> None:
        self.model = SpacingsModel(self._state, self)
        self.sorted = QSortFilterProxyModel(self)
        self.sorted.setSourceModel(self.model)
        self.sorted.setSortRole(SORT_ROLE)
        self.table = QTableView()
        self.table.setModel(self.sorted)
        self.table.setSortingEnabled(True)
        self.table.horizontalHeader().setSortIndicatorClearable(True)
        self.table.sortByColumn(-1, Qt.SortOrder.AscendingOrder)
        self.table.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.table.setSelectionMode(QAbstractItemView.SelectionMode.SingleSelection)
        self.table.setItemDelegateForColumn(COLUMNS.index("parts"), _PartsDelegate(self.table))
        self.table.verticalHeader().setVisible(False)
        self.table.verticalHeader().setDefaultSectionSize(self.fontMetrics().height() + 5)
        self.table.setShowGrid(False)
        self.table.setWordWrap(False)
        self.table.setAccessibleName("Spacings of the region")
        header = self.table.horizontalHeader()
        header.setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)
        header.setMinimumSectionSize(20)
        header.setContextMenuPolicy(Qt.ContextMenuPolicy.CustomContextMenu)
        header.customContextMenuRequested.connect(self._choose_columns)
        for name in _HIDDEN_AT_FIRST:
            self.table.setColumnHidden(COLUMNS.index(name), True)
        self.table.setColumnHidden(COLUMNS.index("line"), self._state.line is None)
        self.table.selectionModel().currentRowChanged.connect(self._on_row)
        shortcut = QShortcut(QKeySequence(QKeySequence.StandardKey.Copy), self)
        shortcut.setContext(Qt.ShortcutContext.WidgetWithChildrenShortcut)
        shortcut.activated.connect(self.copy_table)

    def _make_words(self) -> None:
        self.sentence = WrappedLabel()
        self.sentence.setStyleSheet("font-weight: bold")
        self.banner = WrappedLabel()
        self.banner.setAccessibleName("Problem")
        self.banner.setObjectName("banner")
        self.cautions = _words_label()
        self.cautions.setTextFormat(Qt.TextFormat.RichText)
        self.cautions.setAlignment(Qt.AlignmentFlag.AlignTop)
        self.cautions.linkActivated.connect(self._toggle_cautions)
        self.cautions.setTextInteractionFlags(Qt.TextInteractionFlag.TextBrowserInteraction)
        self.caution_area = QScrollArea()
        self.caution_area.setWidgetResizable(True)
        self.caution_area.setFrameShape(QScrollArea.Shape.NoFrame)
        self.caution_area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.caution_area.setWidget(self.cautions)

    # --- commands ---------------------------------------------------------------------------------------------------

    def copy_table(self) -> None:
        """Put spacings and angles of the current region on the clipboard."""
        current = self._state.current
        if current is not None and current.measurement is not None:
            QGuiApplication.clipboard().setText(table_text(current, self._state.unit, self._state.line))

    def _set_unit(self, index: int) -> None:
        self._state.unit = cast("Unit", get_args(Unit)[index])

    def _choose_columns(self, place: object) -> None:
        menu = QMenu(self)
        for column, name in enumerate(COLUMNS):
            action = QAction(self.model.column_words(column), menu)
            action.setCheckable(True)
            action.setChecked(not self.table.isColumnHidden(column))
            action.setEnabled(name != "number")
            action.setData(column)
            menu.addAction(action)
        chosen = menu.exec(self.table.horizontalHeader().mapToGlobal(place))
        if chosen is not None:
            self.table.setColumnHidden(chosen.data(), not chosen.isChecked())
        menu.deleteLater()

    def _toggle_cautions(self, _link: str = "") -> None:
        self._all_cautions = not self._all_cautions
        self._show_words()

    def _on_row(self, now: QModelIndex, _before: QModelIndex) -> None:
        if self._choosing:
            return
        self._state.select_peak(self.model.peak_of(self.sorted.mapToSource(now).row()) if now.isValid() else None)

    _choosing = False

    # --- what is shown ----------------------------------------------------------------------------------------------

    def _on_unit(self) -> None:
        self.unit.setCurrentIndex(get_args(Unit).index(self._state.unit))
        self._show()

    def _on_line(self) -> None:
        self.table.setColumnHidden(COLUMNS.index("line"), self._state.line is None)
        self.model.refresh()

    def _on_measured(self, region_id: int) -> None:
        current = self._state.current
        if current is not None and current.drawn.id == region_id and self._is_new(current):
            self._show()

    def _is_new(self, region: MeasuredRegion) -> bool:
        """Whether a region shows other values than those on the screen: an outline that only waits does not."""
        now = (region.measurement, region.problem, region.rows)
        return any(one is not other for one, other in zip(now, self._shown, strict=True))

    _shown: tuple[object, object, object] = (None, None, ())

    def _show(self) -> None:
        current = self._state.current
        self._shown = (None, None, ()) if current is None else (current.measurement, current.problem, current.rows)
        self._choosing = True
        self.model.refresh()
        self._choosing = False
        self._choose()
        self._show_words()

    def _choose(self) -> None:
        self._choosing = True
        row = self.model.row_of(self._state.peak)
        selection = self.table.selectionModel()
        if row is None:
            selection.clear()
        else:
            index = self.sorted.mapFromSource(self.model.index(row, 0))
            if selection.currentIndex().row() != index.row() or not selection.hasSelection():
                flags = QItemSelectionModel.SelectionFlag
                selection.setCurrentIndex(index, flags.ClearAndSelect | flags.Rows)
        self.model.refresh_angles()
        self._choosing = False

    def _show_words(self) -> None:
        state = self._state
        current = state.current
        problem = None if current is None else current.problem
        measurement = None if current is None else current.measurement
        self.copy.setEnabled(measurement is not None)
        self.banner.setVisible(problem is not None)
        if problem is not None:
            kept = " The last good result stays below, of an earlier outline." if measurement is not None else ""
            self.banner.setText(f"Not measured: {problem}.{kept}")
        self.table.setEnabled(problem is None)
        if measurement is None:
            self.sentence.setText(_waiting_words(current) if state.micrograph is not None else "")
            self.cautions.setText("")
            return
        self.sentence.setText(result_words(measurement, state.unit))
        said = caution_words(measurement)
        shown = said if self._all_cautions else said[:_CAUTIONS_SHOWN]
        lines = [
            f"<p style='margin:0 0 4px 0'><b>{GRAVITY_WORDS[caution.gravity]}:</b> "
            f"{html.escape(about + caution.text)} <i>{html.escape(caution.remedy)}</i></p>"
            for caution, about in shown
        ]
        if len(said) > _CAUTIONS_SHOWN:
            rest = "Fewer" if self._all_cautions else f"{len(said) - _CAUTIONS_SHOWN} more"
            colour = self.palette().color(QPalette.ColorRole.WindowText).name()
            lines.append(f"<a href='more' style='color:{colour}'>{rest}</a>")
        self.cautions.setText("".join(lines))


def _waiting_words(current: MeasuredRegion | None) -> str:
    if current is None:
        return "No region yet."
    return "Measuring ..." if current.is_pending else ""


def _words_label() -> QLabel:
    label = QLabel()
    label.setWordWrap(True)
    label.setMinimumWidth(1)
    label.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
    return label


class _PartsDelegate(QStyledItemDelegate):
    """Draws what an uncertainty consists of: three lengths side by side, noise, crystal, pixel size."""

    def sizeHint(self, option: QStyleOptionViewItem, index: QModelIndex) -> QSize:
        return QSize(58, 16)

    def paint(self, painter: QPainter, option: QStyleOptionViewItem, index: QModelIndex) -> None:
        super().paint(painter, option, index)
        parts: UncertaintyParts | None = index.data(PARTS_ROLE)
        longest = index.model().data(index.siblingAtColumn(0), PARTS_ROLE)
        if parts is None or not longest:
            return
        room = option.rect.adjusted(4, 0, -4, 0)
        height = max(2, room.height() // 6)
        top = room.center().y() - (3 * height + 2) // 2
        painter.save()
        painter.setPen(Qt.PenStyle.NoPen)
        for place, (part, colour) in enumerate(
            zip((parts.noise_nm, parts.crystal_nm, parts.pixel_size_nm), _PART_COLOURS, strict=True)
        ):
            width = round(room.width() * (part / parts.spacing_nm) / longest)
            if part > 0:
                painter.setBrush(QColor(colour))
                painter.drawRect(room.left(), top + place * (height + 1), max(width, 1), height)
        painter.restore()
