"""What all docks have in common: they follow the state of their viewer for as long as they are in its window."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QEvent
from qtpy.QtWidgets import QWidget

from fringespan.viewer.workplace import Workplace, workplace_of

if TYPE_CHECKING:
    import napari.viewer

__all__ = ["Dock"]


class Dock(QWidget):
    """A dock of a viewer.

    napari may keep a dock that was taken out of the window for a while; it stops following then, and not when it is
    destroyed.
    """

    def __init__(self, viewer: napari.viewer.Viewer) -> None:
        super().__init__()
        self.workplace: Workplace = workplace_of(viewer)
        self._followed: tuple[tuple[Any, Callable[..., Any]], ...] = ()
        self._is_in = False
        self.setMinimumWidth(260)

    def follow(self, *followed: tuple[Any, Callable[..., Any]]) -> None:
        """Call methods of this dock upon signals of the state, from now on.

        Parameters
        ----------
        *followed : (signal, method)
        """
        self._followed = followed
        self._enter()

    def _enter(self) -> None:
        if not self._is_in:
            self._is_in = True
            for signal, method in self._followed:
                signal.connect(method)
            self.workplace.enter(self)

    def _leave(self) -> None:
        if self._is_in:
            self._is_in = False
            for signal, method in self._followed:
                signal.disconnect(method)
            self.workplace.leave(self)

    def event(self, event: QEvent) -> bool:
        if event.type() == QEvent.Type.ParentChange:
            if self.parent() is None:
                self._leave()
            elif self._followed:
                self._enter()
        return bool(super().event(event))
