"""What belongs to one viewer: its state, its desk, its measurer. Docks of the same viewer find the same."""

from __future__ import annotations

import weakref
from functools import partial
from typing import TYPE_CHECKING, Any

from qtpy.QtWidgets import QWidget

from fringespan.viewer.desk import Desk
from fringespan.viewer.remembered import remember_unit, remembered_unit
from fringespan.viewer.state import MeasuringState
from fringespan.viewer.worker import Measurer

if TYPE_CHECKING:
    import napari.viewer

__all__ = ["Workplace", "workplace_of"]

_workplaces: weakref.WeakKeyDictionary[Any, Workplace] = weakref.WeakKeyDictionary()


class Workplace:
    """State, desk and measurer of one viewer.

    The viewer is followed, and measuring goes on, as long as there is a dock; the state outlives them, so that a dock
    that is opened again shows what the last one showed.

    Attributes
    ----------
    state : MeasuringState
    desk : Desk
    measurer : Measurer or None
        None while no dock is open.
    """

    def __init__(self, viewer: napari.viewer.Viewer) -> None:
        self.state = MeasuringState(remembered_unit())
        self.desk = Desk(viewer, self.state)
        self.measurer: Measurer | None = None
        self._docks: set[int] = set()
        self.state.unit_changed.connect(self._remember)
        self.state.complained.connect(_notify)

    def enter(self, dock: QWidget) -> None:
        """Take in a dock."""
        if self.measurer is None:
            self.measurer = Measurer(self.state)
            self.desk.open()
        self._docks.add(id(dock))
        # a window that is closed destroys its docks without taking them out first
        dock.destroyed.connect(partial(self._leave, id(dock)))

    def leave(self, dock: QWidget) -> None:
        """Let a dock go; with the last one measuring ends."""
        self._leave(id(dock))

    def _leave(self, dock: int, _destroyed: object = None) -> None:
        self._docks.discard(dock)
        if not self._docks and self.measurer is not None:
            self.measurer.close()
            self.measurer = None
            self.desk.close()

    def _remember(self) -> None:
        remember_unit(self.state.unit)


def workplace_of(viewer: napari.viewer.Viewer) -> Workplace:
    """Return the workplace of a viewer; the same for each of its docks."""
    # each plugin widget gets a proxy of its own
    real = getattr(viewer, "__wrapped__", viewer)
    if real not in _workplaces:
        _workplaces[real] = Workplace(real)
    return _workplaces[real]


def _notify(problem: str) -> None:
    from napari.utils.notifications import show_warning

    show_warning(problem)
