"""A label that breaks its text into lines and is always as tall as they need."""

from __future__ import annotations

from qtpy.QtCore import Qt
from qtpy.QtGui import QResizeEvent
from qtpy.QtWidgets import QLabel, QSizePolicy

__all__ = ["WrappedLabel"]


class WrappedLabel(QLabel):
    """Plain text in as many lines as the width of the dock makes of it.

    Qt's layouts give a dock the height that its text would need at another width; this label claims its own.
    """

    def __init__(self) -> None:
        super().__init__()
        self.setWordWrap(True)
        self.setTextFormat(Qt.TextFormat.PlainText)
        self.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
        # a long word must not widen the dock
        self.setMinimumWidth(1)
        self.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)

    def setText(self, text: str) -> None:
        if text != self.text():
            super().setText(text)
            self._claim_height()

    def resizeEvent(self, event: QResizeEvent) -> None:
        super().resizeEvent(event)
        if event.oldSize().width() != event.size().width():
            self._claim_height()

    def _claim_height(self) -> None:
        # Qt never asks for less than the height that is claimed already
        self.setMinimumHeight(0)
        self.setFixedHeight(max(0, self.heightForWidth(self.width())) if self.text() else 0)
