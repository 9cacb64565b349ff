"""Opening the docks in one column at the right."""

from __future__ import annotations

import itertools
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Qt, QTimer

from fringespan.viewer.reader import layer_of, layers_of_file
from fringespan.viewer.workplace import workplace_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    import napari.viewer

    from fringespan.micrograph import Micrograph
    from fringespan.region import Region

__all__ = ["DOCKS", "open_docks", "open_viewer", "run_viewer"]

DOCKS = ("Picture and regions", "Spectrum", "Spacings")
_COLUMN_PX = 380
_HEIGHTS_PX = (190, 350, 360)


def open_docks(viewer: napari.viewer.Viewer) -> None:
    """Open all docks, one beneath the other."""
    docks: list[Any] = [viewer.window.add_plugin_dock_widget("fringespan", name)[0] for name in DOCKS]
    main = docks[0].parent()
    for dock in docks:
        main.removeDockWidget(dock)
    main.addDockWidget(Qt.DockWidgetArea.RightDockWidgetArea, docks[0])
    for above, below in itertools.pairwise(docks):
        main.splitDockWidget(above, below, Qt.Orientation.Vertical)
    for dock in docks:
        # a dock that was closed comes back hidden
        dock.show()
    main.resizeDocks(docks, list(_HEIGHTS_PX), Qt.Orientation.Vertical)
    main.resizeDocks(docks, [_COLUMN_PX] * len(docks), Qt.Orientation.Horizontal)


def open_viewer(
    micrograph: Micrograph | None = None, regions: Sequence[Region] = (), *, path: str | None = None
) -> napari.viewer.Viewer:
    """Open napari with the docks, and a picture with regions if given.

    Parameters
    ----------
    micrograph : Micrograph, optional
        What is known of the picture; of a stack, the frame to show first.
    regions : sequence of Region, optional
        To be measured at once.
    path : str, optional
        The file, from which all frames of a stack are read.
    """
    import napari

    viewer = napari.Viewer(title="fringespan")
    if micrograph is not None:
        stack = None
        if micrograph.frame_count > 1 and path is not None:
            stack = layers_of_file(path)[0][0]
        pixels, options, _ = layer_of(micrograph, stack)
        viewer.add_image(pixels, **options)
        if stack is not None:
            viewer.dims.set_current_step(0, micrograph.frame)
        viewer.canvas.overlays.scale_bar.visible = micrograph.pixel_size_nm is not None
    open_docks(viewer)
    # the docks have taken part of the width
    QTimer.singleShot(0, viewer.reset_view)
    if regions:
        workplace_of(viewer).desk.add_regions(regions)
    return viewer


def run_viewer(
    micrograph: Micrograph | None = None, regions: Sequence[Region] = (), *, path: str | None = None
) -> None:
    """Open napari as `open_viewer` does, and return when it is closed."""
    import napari

    open_viewer(micrograph, regions, path=path)
    napari.run()
