"""Make pictures of the viewer in its states, to be looked at, and those of the README.

usage: python tests/screenshots/make_viewer_pictures.py [FOLDER]

Needs the extra `all`; without a screen also Xvfb and the package pyvirtualdisplay, which the extra `test` brings. Without
FOLDER only `viewer.png`, the picture of the README, is written beside this script; with it, every state goes there.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

import fringespan as fs
from fringespan.sample_pictures import sample_file

HERE = Path(__file__).resolve().parent
SIZE = 1400, 900
LONGEST_S = 120.0


def picture(name: str, **known: Any) -> fs.Micrograph:
    """Return a sample picture, named as what it is."""
    return replace(fs.read(sample_file(f"{name}.ome.tif"), **known), name=f"{name} (simulated)")


def process_events(until: Callable[[], bool]) -> None:
    """Let the window work until something holds."""
    from qtpy.QtWidgets import QApplication

    begin = time.monotonic()
    while not until():
        QApplication.processEvents()
        time.sleep(0.005)
        if time.monotonic() - begin > LONGEST_S:
            raise TimeoutError("the viewer did not get ready")


@contextmanager
def viewer_with(
    micrograph: fs.Micrograph | None, regions: Any = (), theme: str = "dark", **options: Any
) -> Iterator[Any]:
    """Open a viewer for one picture, and close it."""
    from fringespan.viewer.open import open_viewer
    from fringespan.viewer.workplace import workplace_of

    viewer = open_viewer(micrograph, regions, **options)
    viewer.theme = theme
    viewer.window.resize(*SIZE)
    try:
        settle(viewer, workplace_of(viewer))
        yield viewer, workplace_of(viewer)
    finally:
        viewer.close()


def settle(viewer: Any, workplace: Any) -> None:
    """Wait until everything is measured and drawn."""
    begin = time.monotonic()
    process_events(lambda: workplace.measurer.is_idle and time.monotonic() - begin > 1.0)
    viewer.reset_view()
    begin = time.monotonic()
    process_events(lambda: time.monotonic() - begin > 0.5)


def save(viewer: Any, path: Path) -> None:
    """Write what is on the screen."""
    viewer.window.screenshot(str(path), canvas_only=False, flash=False)
    print(path)


def two_grains(theme: str, path: Path) -> None:
    """Two grains measured, the second spacing of the first selected."""
    micrograph = picture("two_grains", pixel_size_relative_uncertainty=0.0075, voltage_kv=300)
    with viewer_with(micrograph, fs.read_regions(sample_file("two_grains.json")), theme) as (viewer, workplace):
        workplace.state.select_region(1)
        workplace.state.select_peak(1)
        settle(viewer, workplace)
        save(viewer, path)


def every_state(folder: Path) -> None:
    """Write each state that a user can come into."""
    with viewer_with(None) as (viewer, _):
        save(viewer, folder / "nothing_open.png")
    with viewer_with(replace(picture("faint_ceria"), pixel_size_nm=None, pixel_size_source="")) as (viewer, workplace):
        save(viewer, folder / "no_pixel_size.png")
        workplace.desk.add_whole_picture()
        settle(viewer, workplace)
        save(viewer, folder / "in_pixels.png")
    with viewer_with(picture("two_grains"), theme="light") as (viewer, workplace):
        save(viewer, folder / "no_region.png")
        bottom = np.array([(480, 40), (480, 160), (560, 160), (560, 40)])
        workplace.desk.add_regions([fs.Region("film", bottom)])
        settle(viewer, workplace)
        save(viewer, folder / "no_fringe.png")
    gold = fs.read_regions(sample_file("two_grains.json"))[:1]
    name = (
        "a picture with a very long name as microscopes like to give them 2026-03-14 15h09m26s 300kV 600kx 0001.ome.tif"
    )
    with viewer_with(replace(picture("two_grains"), name=name), gold) as (viewer, workplace):
        data = np.array(workplace.desk.regions_layer.data[0])
        workplace.desk.regions_layer.data = [(data[0] + (data - data[0]) * 0.05, "polygon")]
        settle(viewer, workplace)
        save(viewer, folder / "too_small.png")
    stack = sample_file("heating_gold.ome.tif")
    regions = fs.read_regions(sample_file("heating_gold.json"))
    with viewer_with(picture("heating_gold"), regions, path=str(stack)) as (viewer, workplace):
        workplace.state.select_peak(0)
        settle(viewer, workplace)
        save(viewer, folder / "stack.png")
    two_grains("light", folder / "two_grains_light.png")
    two_grains("dark", folder / "two_grains_dark.png")


def main() -> None:
    """Make the pictures, on a screen of its own where there is none."""
    display = None
    if sys.platform == "linux" and not os.environ.get("DISPLAY"):
        from pyvirtualdisplay import Display

        display = Display(size=(1600, 1100))
        display.start()
    try:
        if len(sys.argv) > 1:
            folder = Path(sys.argv[1])
            folder.mkdir(parents=True, exist_ok=True)
            every_state(folder)
        else:
            two_grains("dark", HERE / "viewer.png")
    finally:
        if display is not None:
            display.stop()


if __name__ == "__main__":
    main()
