"""Dragging a region of 512 x 512 px in a real window: our docks against bare napari, in one run.

usage: python tests/benchmarks/viewer_drag.py [--moves N] [--rounds N]

Needs a screen (`xvfb-run -a` gives one). Prints the rate of mouse moves in bare napari (picture and shapes layer, no dock
of ours) and with all docks, round by round in turn; the handlers' own time in the window's thread; the time of one
measurement alone; and the time from a move to the table and spectrum that show it.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import fringespan as fs
from fringespan.viewer.desk import Desk
from fringespan.viewer.docks.spacings import SpacingsDock
from fringespan.viewer.docks.spectrum import SpectrumDock
from fringespan.viewer.open import open_docks
from viewer.conftest import Desktop, Mouse, two_fringes

SIDE = 512
CORNERS = np.array([[20, 20], [20, 531], [531, 531], [531, 20]], float)


class Waiter:
    """Lets the window work, as pytest-qt's bot does in the tests."""

    def wait(self, milliseconds: float) -> None:
        from qtpy.QtWidgets import QApplication

        end = time.perf_counter() + milliseconds / 1000
        while True:
            QApplication.processEvents()
            if time.perf_counter() >= end:
                return


def drag(mouse: Mouse, layer: Any, moves: int) -> float:
    """Drag the region to and fro by real mouse events; return moves per second."""
    start = mouse.at(270, 270, layer)
    mouse.press(start)
    begin = time.perf_counter()
    for k in range(moves):
        mouse.move(mouse.at(270 + 60 * np.sin(0.37 * k), 270 + 60 * np.sin(0.29 * k), layer))
    rate = moves / (time.perf_counter() - begin)
    mouse.release(start)
    return rate


class Stopwatch:
    """Sums the time spent in methods, and notes when they ended."""

    def __init__(self) -> None:
        self.seconds = 0.0
        self._inside = False

    def watch(self, owner: type, name: str) -> None:
        original = getattr(owner, name)

        def timed(*arguments: Any, **options: Any) -> Any:
            if self._inside:
                return original(*arguments, **options)
            self._inside = True
            begin = time.perf_counter()
            try:
                return original(*arguments, **options)
            finally:
                self.seconds += time.perf_counter() - begin
                self._inside = False

        setattr(owner, name, timed)


def main() -> None:
    """Run the rounds and print the figures."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--moves", type=int, default=40)
    parser.add_argument("--rounds", type=int, default=3)
    options = parser.parse_args()
    import napari

    watch = Stopwatch()
    for owner, name in (
        (Desk, "_on_moved"),
        (Desk, "_on_measured"),
        (SpacingsDock, "_on_measured"),
        (SpectrumDock, "_on_measured"),
    ):
        watch.watch(owner, name)
    pixels = two_fringes((600, 600))
    waiter = Waiter()

    bare = napari.Viewer()
    bare.window.resize(1300, 850)
    bare.add_image(pixels)
    shapes = bare.add_shapes([CORNERS], shape_type="rectangle")
    shapes.mode = "select"

    viewer = napari.Viewer()
    viewer.window.resize(1300, 850)
    open_docks(viewer)
    viewer.add_image(pixels, scale=(0.02, 0.02), units="nm")
    here = Desktop(viewer, waiter)
    here.desk.add_regions([fs.Region("dragged", CORNERS)])
    here.desk.select_and_move()
    for one in (bare, viewer):
        waiter.wait(500)
        one.reset_view()
    while not here.workplace.measurer.is_idle:
        waiter.wait(20)

    region = fs.Region("dragged", CORNERS)
    micrograph = fs.Micrograph(pixels, pixel_size_nm=0.02)
    alone = []
    for _ in range(5):
        begin = time.perf_counter()
        fs.measure(micrograph, region)
        alone.append(time.perf_counter() - begin)

    lag: list[float] = []
    moved: dict[Any, float] = {}
    here.state.work_wanted.connect(lambda: moved.setdefault(here.state.current.drawn.vertices_px, time.perf_counter()))
    here.state.region_measured.connect(
        lambda _id: (
            lag.append(time.perf_counter() - moved.pop(corners))
            if (corners := here.state.current.measurement.region.vertices_px) in moved
            else None
        )
    )
    rates: dict[str, list[float]] = {"bare": [], "docks": []}
    for _ in range(options.rounds):
        rates["bare"].append(drag(Mouse(bare, waiter), shapes, options.moves))
        rates["docks"].append(drag(here.mouse, here.desk.regions_layer, options.moves))
        while not here.workplace.measurer.is_idle:
            waiter.wait(20)
    last = here.state.current
    moves = options.rounds * options.moves
    print(f"bare napari      {statistics.median(rates['bare']):6.1f} moves/s")
    print(f"with our docks   {statistics.median(rates['docks']):6.1f} moves/s")
    print(f"ratio            {statistics.median(rates['docks']) / statistics.median(rates['bare']):6.2f}")
    print(f"handlers         {1000 * watch.seconds / moves:6.1f} ms a move in the window's thread")
    print(f"one measurement  {1000 * statistics.median(alone):6.1f} ms")
    print(f"move to result   {1000 * statistics.median(lag):6.1f} ms, median of {len(lag)} results for {moves} moves")
    print(f"last outline measured: {last.measurement.region.vertices_px == last.drawn.vertices_px}")
    for one in (bare, viewer):
        one.close()


if __name__ == "__main__":
    main()
