"""What the viewer's tests share: quick pictures, a window with its docks, and a mouse."""

from __future__ import annotations

import gc
import importlib.util
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest

from fringespan.micrograph import Micrograph

NANOMETRES_PER_PX = 0.02

# napari and Qt are an extra: without them there is no viewer to test
collect_ignore_glob = [] if importlib.util.find_spec("napari") is not None else ["test_*.py"]


def two_fringes(shape: tuple[int, int] = (256, 256), *, seed: int = 4, period_px: float = 11.0) -> np.ndarray:
    """Return two sets of fringes, 60 degrees apart, in noise."""
    row, column = np.indices(shape)
    values = np.full(shape, 500.0)
    for degrees in (20.0, 80.0):
        g = np.array([-np.sin(np.radians(degrees)), np.cos(np.radians(degrees))]) / period_px
        values += 60 * np.cos(2 * np.pi * (g[0] * row + g[1] * column))
    return (values + np.random.default_rng(seed).normal(0, 40, shape)).astype(np.float32)


@pytest.fixture
def micrograph() -> Micrograph:
    return Micrograph(
        two_fringes(), pixel_size_nm=NANOMETRES_PER_PX, pixel_size_relative_uncertainty=0.01, name="two fringes"
    )


@pytest.fixture(autouse=True)
def settings_of_nobody(monkeypatch, tmp_path) -> None:
    """Keep the settings of whoever runs the tests out of them."""
    from napari import settings

    monkeypatch.setattr(settings, "_PLUGIN_SETTINGS", {})
    settings.get_plugin_settings(path_dir=tmp_path)


@dataclass
class Mouse:
    """Sends what a hand on a mouse sends, to the canvas of a viewer."""

    viewer: Any
    qtbot: Any

    @property
    def canvas(self) -> Any:
        return self.viewer.window._qt_viewer.canvas

    def at(self, row: float, column: float, layer: Any) -> Any:
        """Return the place on the canvas of a pixel of a layer."""
        from qtpy.QtCore import QPointF

        world = np.array(layer.data_to_world((*[0] * (layer.ndim - 2), row, column)))[-2:]
        camera = self.viewer.scene.camera
        middle = np.array(camera.center)[-2:]
        height, width = self.canvas.size
        y, x = (world - middle) * camera.zoom
        return QPointF(width / 2 + x, height / 2 + y)

    def _send(self, kind: str, place: Any, button: str, buttons: str, modifiers: Any = None) -> None:
        from qtpy.QtCore import QEvent, QPointF, Qt
        from qtpy.QtGui import QMouseEvent
        from qtpy.QtWidgets import QApplication

        native = self.canvas.native
        event = QMouseEvent(
            getattr(QEvent.Type, kind),
            place,
            QPointF(native.mapToGlobal(place.toPoint())),
            getattr(Qt.MouseButton, button),
            getattr(Qt.MouseButton, buttons),
            modifiers or Qt.KeyboardModifier.NoModifier,
        )
        QApplication.sendEvent(native, event)
        # napari drops moves that follow each other within 5 ms
        self.qtbot.wait(12)

    def press(self, place: Any) -> None:
        self._send("MouseMove", place, "NoButton", "NoButton")
        self._send("MouseButtonPress", place, "LeftButton", "LeftButton")

    def move(self, place: Any) -> None:
        self._send("MouseMove", place, "NoButton", "LeftButton")

    def release(self, place: Any) -> None:
        self._send("MouseButtonRelease", place, "LeftButton", "NoButton")

    def drag(self, start: Any, end: Any, steps: int = 5, on_step: Callable[[], None] | None = None) -> None:
        self.press(start)
        for step in range(1, steps + 1):
            self.move(start + (end - start) * (step / steps))
            if on_step is not None:
                on_step()
        self.release(end)


@dataclass
class Desktop:
    """A viewer with all docks open."""

    viewer: Any
    qtbot: Any

    def __post_init__(self) -> None:
        from fringespan.viewer.workplace import workplace_of

        self.mouse = Mouse(self.viewer, self.qtbot)
        self.workplace = workplace_of(self.viewer)

    @property
    def state(self) -> Any:
        return self.workplace.state

    @property
    def desk(self) -> Any:
        return self.workplace.desk

    def dock(self, name: str) -> Any:
        return self.viewer.window.dock_widgets[f"{name} (fringespan)"]

    def add_picture(self, pixels: np.ndarray, **options: Any) -> Any:
        size = options.pop("pixel_size_nm", NANOMETRES_PER_PX)
        leading = pixels.ndim - 2
        if size is not None:
            options |= {"scale": (*[1] * leading, size, size), "units": (*["pixel"] * leading, "nm", "nm")}
        layer = self.viewer.add_image(pixels, **({"name": "two fringes"} | options))
        self.viewer.reset_view()
        self.qtbot.wait(20)
        return layer

    def wait_until_measured(self) -> None:
        def done() -> bool:
            return self.workplace.measurer.is_idle and not any(r.is_pending for r in self.state.regions)

        self.qtbot.waitUntil(done, timeout=30_000)

    def draw_rectangle(
        self, layer: Any, corner: tuple[float, float], other: tuple[float, float], **options: Any
    ) -> None:
        from qtpy.QtCore import Qt

        button = self.dock("Picture and regions").tools["Rectangle"]
        self.qtbot.mouseClick(button, Qt.MouseButton.LeftButton)
        self.mouse.drag(self.mouse.at(*corner, layer), self.mouse.at(*other, layer), **options)


@pytest.fixture
def desktop(make_napari_viewer, qtbot) -> Iterator[Callable[[], Desktop]]:
    """Return a function that opens a viewer with all docks; afterwards nothing of ours may run on."""
    from fringespan.viewer.open import open_docks

    opened = []

    def open_one() -> Desktop:
        viewer = make_napari_viewer(show=True)
        viewer.window.resize(1200, 800)
        open_docks(viewer)
        desk = Desktop(viewer, qtbot)
        opened.append(desk.workplace)
        # the canvas has its size only after the window was laid out
        qtbot.waitUntil(lambda: viewer.window._qt_viewer.canvas.size[0] > 100)
        qtbot.wait(30)
        return desk

    yield open_one
    for workplace in opened:
        if workplace.measurer is not None:
            workplace.measurer.close()
    opened.clear()
    gc.collect()
    for thread in threading.enumerate():
        if thread.name == "fringespan measuring":
            thread.join(20)
            assert not thread.is_alive()
