"""The desk: keeps the layers of one viewer and the state in step. Knows napari, but no Qt.

What is drawn on the layers goes into the state; what is measured comes back as labels and lines on the picture.
"""

from __future__ import annotations

import weakref
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import FringespanError
from fringespan.measurement import Measurement
from fringespan.micrograph import Micrograph
from fringespan.viewer.fringe_lines import dashes, fringe_lines
from fringespan.viewer.layers import (
    METADATA_KEY,
    drawn_line,
    drawn_regions,
    is_picture,
    is_regions_layer_of,
    name_regions,
    new_lines_layer,
    new_regions_layer,
    place_of_region,
    region_number,
    set_pixel_size,
    show_lines,
    shown_picture,
)
from fringespan.viewer.state import Calibration, MeasuringState
from fringespan.viewer.wording import main_spacing

if TYPE_CHECKING:
    from napari.components import ViewerModel
    from napari.layers import Image, Shapes, Vectors

__all__ = ["Desk", "Tool"]

Tool = Literal["rectangle", "ellipse", "polygon", "line"]

_CRYSTAL = "crystal extent"
_FRINGES = "fringes of the selected spacing"
_LINE_COLOURS = {_CRYSTAL: "#FFFFFF", _FRINGES: "#F0E442"}
_LINE_WIDTHS = {_CRYSTAL: 0.6, _FRINGES: 0.5}
_DASH_SHARE = 0.012


class Desk:
    """Keeps a viewer and its state in step.

    Parameters
    ----------
    viewer : napari.components.ViewerModel
        Held weakly.
    state : MeasuringState
    """

    def __init__(self, viewer: ViewerModel, state: MeasuringState) -> None:
        self.state = state
        self._viewer = weakref.ref(viewer)
        self._picture: Image | None = None
        self._regions: Shapes | None = None
        self._lines: dict[str, Vectors] = {}
        self._drawn: dict[str, tuple[Vectors, list[Any]]] = {}
        self._pixels: tuple[Any, int, Micrograph] | None = None
        self._writing = False
        self._connected = False
        self._problem: str | None = None

    # --- opening and closing ----------------------------------------------------------------------------------------

    def open(self) -> None:
        """Follow the viewer from now on."""
        viewer = self._viewer()
        if self._connected or viewer is None:
            return
        self._connected = True
        viewer.layers.events.inserted.connect(self._on_layers)
        viewer.layers.events.removed.connect(self._on_removed)
        viewer.layers.selection.events.active.connect(self._on_layers)
        viewer.dims.events.current_step.connect(self._on_frame)
        viewer.dims.events.order.connect(self._on_frame)
        self.state.region_measured.connect(self._on_measured)
        self.state.regions_changed.connect(self._draw_results)
        self.state.peak_selected.connect(self._draw_fringes)
        self.state.unit_changed.connect(self._draw_results)
        self._on_layers()

    def close(self) -> None:
        """Follow the viewer no longer; what is in the state stays there."""
        viewer = self._viewer()
        if not self._connected:
            return
        self._connected = False
        self._leave_picture()
        if viewer is not None:
            viewer.layers.events.inserted.disconnect(self._on_layers)
            viewer.layers.events.removed.disconnect(self._on_removed)
            viewer.layers.selection.events.active.disconnect(self._on_layers)
            viewer.dims.events.current_step.disconnect(self._on_frame)
            viewer.dims.events.order.disconnect(self._on_frame)
        self.state.region_measured.disconnect(self._on_measured)
        self.state.regions_changed.disconnect(self._draw_results)
        self.state.peak_selected.disconnect(self._draw_fringes)
        self.state.unit_changed.disconnect(self._draw_results)

    # --- commands ---------------------------------------------------------------------------------------------------

    @property
    def picture(self) -> Image | None:
        """Layer that is measured."""
        return self._picture

    @property
    def regions_layer(self) -> Shapes | None:
        """Layer that the regions of the picture are drawn on, once there is one."""
        return self._regions

    @property
    def problem(self) -> str | None:
        """Why the active picture cannot be measured."""
        return self._problem

    def draw(self, tool: Tool) -> None:
        """Let the user draw a region, or a line that angles are measured to, with one of napari's own tools."""
        layer = self._ready_regions_layer()
        if layer is not None:
            layer.mode = f"add_{tool}"

    def select_and_move(self) -> None:
        """Let the user move and resize regions."""
        layer = self._ready_regions_layer()
        if layer is not None:
            layer.mode = "select"

    def add_whole_picture(self) -> None:
        """Add a region of the whole picture."""
        micrograph = self.state.micrograph
        layer = self._ready_regions_layer()
        if layer is None or micrograph is None:
            return
        bottom, right = micrograph.shape[0] - 0.5, micrograph.shape[1] - 0.5
        layer.add_rectangles(np.array([[-0.5, -0.5], [-0.5, right], [bottom, right], [bottom, -0.5]]))

    def add_regions(self, regions: Any) -> None:
        """Add regions (of a record, say) with their names."""
        layer = self._ready_regions_layer()
        if layer is None or self._picture is None:
            return
        for region in regions:
            layer.add_polygons(np.array(region.vertices_px))
            drawn = drawn_regions(layer, self._picture)
            self._write_names([*drawn[:-1], replace(drawn[-1], name=region.name)])
        self._read_regions()

    def rename_current(self, name: str) -> None:
        """Give the current region another name."""
        current = self.state.current
        if current is None or self._regions is None or self._picture is None or not name.strip():
            return
        drawn = drawn_regions(self._regions, self._picture)
        self._write_names([replace(r, name=name.strip()) if r.id == current.drawn.id else r for r in drawn])
        self._read_regions()

    def remove_current(self) -> None:
        """Remove the current region."""
        current = self.state.current
        if current is None or self._regions is None or self._picture is None:
            return
        place = place_of_region(self._regions, current.drawn.id)
        self._regions.selected_data = {place}
        self._regions.remove_selected()

    def recalibrate(self, calibration: Calibration) -> None:
        """Change what stands beside the pixels, and the scale of the picture's layers with it.

        Raises
        ------
        CalibrationError
            If a value is impossible; nothing has changed then.
        """
        self.state.recalibrate(calibration)
        self._scale_layers()

    def undo(self) -> None:
        """Undo the last change of the calibration."""
        self.state.undo()
        self._scale_layers()

    def _scale_layers(self) -> None:
        micrograph = self.state.micrograph
        if self._picture is None or micrograph is None:
            return
        layers = [self._picture, *([self._regions] if self._regions is not None else []), *self._lines.values()]
        with self._quietly():
            set_pixel_size(layers, micrograph.pixel_size_nm)

    # --- the picture ------------------------------------------------------------------------------------------------

    def _on_layers(self, event: Any = None) -> None:
        viewer = self._viewer()
        if viewer is None or self._writing:
            return
        active = viewer.layers.selection.active
        if active is not None and is_picture(active):
            self._take_picture(active)
        elif self._picture is None:
            pictures = [layer for layer in viewer.layers if is_picture(layer)]
            if pictures:
                self._take_picture(pictures[-1])
        elif self._regions is None:
            self._take_overlays()

    def _on_removed(self, event: Any) -> None:
        removed = event.value
        if is_picture(removed):
            if removed is self._picture:
                self._leave_picture()
            self.state.forget_picture(str(removed.unique_id))
            if self._pixels is not None and self._pixels[0] is _stored(removed):
                self._pixels = None
            self._on_layers()
        elif removed is self._regions:
            self._release_regions()
            self.state.set_regions([])
            self.state.set_line(None)
        else:
            self._lines = {name: layer for name, layer in self._lines.items() if layer is not removed}

    def _take_picture(self, layer: Image) -> None:
        if layer is not self._picture:
            self._leave_picture()
            self._picture = layer
            for emitter in (layer.events.scale, layer.events.units, layer.events.name, layer.events.data):
                emitter.connect(self._on_frame)
            layer.events.affine.connect(self._on_frame)
        if self._show_frame():
            self._take_overlays()

    def _leave_picture(self) -> None:
        if self._picture is not None:
            events = self._picture.events
            for emitter in (events.scale, events.units, events.name, events.data, events.affine):
                emitter.disconnect(self._on_frame)
        self._release_regions()
        self._picture, self._lines, self._drawn = None, {}, {}

    def _on_frame(self, event: Any = None) -> None:
        if not self._writing and self._picture is not None:
            self._show_frame()

    def _show_frame(self) -> bool:
        viewer, layer = self._viewer(), self._picture
        if viewer is None or layer is None:
            return False
        try:
            micrograph = shown_picture(layer, viewer.dims)
        except FringespanError as problem:
            if str(problem) != self._problem:
                self._problem = str(problem)
                self.state.complained.emit(self._problem)
            return False
        self._problem = None
        key = str(layer.unique_id)
        stored, last = _stored(layer), self._pixels
        if last is not None and last[0] is stored and last[1] == micrograph.frame:
            # the same pixels stay the same object: only then can a measurement be told in other units
            micrograph = replace(micrograph, pixels=last[2].pixels)
        self._pixels = (stored, micrograph.frame, micrograph)
        known = self.state.micrograph if self.state.picture == key else None
        self.state.show_picture(key, micrograph)
        if known is not None and (known.pixel_size_nm, known.shear) != (micrograph.pixel_size_nm, micrograph.shear):
            # somebody changed the layer's scale or units
            self.state.take_scale(micrograph)
        return True

    # --- regions ----------------------------------------------------------------------------------------------------

    def _ready_regions_layer(self) -> Shapes | None:
        """Return the regions layer, made if need be, as the active layer."""
        viewer, picture = self._viewer(), self._picture
        if viewer is None or picture is None or self._problem is not None:
            return None
        with self._quietly():
            for name, colour in _LINE_COLOURS.items():
                if name not in self._lines:
                    layer = new_lines_layer(picture, name, colour, _LINE_WIDTHS[name])
                    layer.metadata[METADATA_KEY]["picture"] = str(picture.unique_id)
                    self._lines[name] = viewer.layers[viewer.layers.index(viewer.add_layer(layer))]
            if self._regions is None:
                self._follow_regions(viewer.add_layer(new_regions_layer(picture)))
            viewer.layers.selection.active = self._regions
        self._draw_results()
        return self._regions

    def _take_overlays(self) -> None:
        """Find the layers that were made for this picture earlier."""
        viewer, picture = self._viewer(), self._picture
        if viewer is None or picture is None:
            return
        for layer in viewer.layers:
            if self._regions is None and is_regions_layer_of(layer, picture):
                self._follow_regions(layer)
            known = layer.metadata.get(METADATA_KEY, {})
            if isinstance(known, dict) and known.get("picture") == str(picture.unique_id):
                self._lines[known["shows"]] = layer
        self._read_regions()

    def _follow_regions(self, layer: Shapes) -> None:
        self._regions = layer
        layer.events.set_data.connect(self._on_moved)
        layer.events.data.connect(self._on_drawn)
        layer.selected_data.events.items_changed.connect(self._on_selected)

    def _release_regions(self) -> None:
        if self._regions is not None:
            self._regions.events.set_data.disconnect(self._on_moved)
            self._regions.events.data.disconnect(self._on_drawn)
            self._regions.selected_data.events.items_changed.disconnect(self._on_selected)
        self._regions = None

    def _on_moved(self, event: Any = None) -> None:
        if not self._writing:
            self._read_regions(dragged=self.state.is_dragged)

    def _on_drawn(self, event: Any) -> None:
        if self._writing or self._regions is None or self._picture is None:
            return
        # napari tells of the beginning of a drag ("adding", "changing") and of its end
        begins = str(getattr(event.action, "value", event.action)) in ("adding", "changing", "removing")
        if not begins:
            self._write_names(drawn_regions(self._regions, self._picture))
        self._read_regions(dragged=begins)

    def _on_selected(self, event: Any = None) -> None:
        layer, picture = self._regions, self._picture
        if layer is None or picture is None or self._writing or len(layer.selected_data) != 1:
            return
        (place,) = layer.selected_data
        number = region_number(layer, place)
        if number:
            self.state.select_region(number)

    def _read_regions(self, *, dragged: bool = False) -> None:
        if self._regions is not None and self._picture is not None and self._problem is None:
            self.state.set_regions(drawn_regions(self._regions, self._picture), dragged=dragged)
            self.state.set_line(drawn_line(self._regions, self._picture))

    def _write_names(self, drawn: Any) -> None:
        if self._regions is None:
            return
        unit = self.state.unit
        labels = {region.drawn.id: main_spacing(region, unit) for region in self.state.regions}
        texts = {r.id: f"{r.name}\n{labels[r.id]}" if labels.get(r.id) else r.name for r in drawn}
        with self._quietly():
            name_regions(self._regions, drawn, texts)

    # --- results on the picture -------------------------------------------------------------------------------------

    def _on_measured(self, region_id: int) -> None:
        self._draw_results()

    def _draw_results(self) -> None:
        if self._writing or self._picture is None:
            return
        if not self.state.is_dragged and self._regions is not None:
            self._write_names([region.drawn for region in self.state.regions])
        micrograph = self.state.micrograph
        if micrograph is not None:
            extents = [_own_extent(region.measurement) for region in self.state.regions]
            outlines = [extent for extent in extents if extent is not None]
            dash = _DASH_SHARE * max(micrograph.shape)
            self._show_lines(_CRYSTAL, outlines, lambda: [dashes(outline, dash) for outline in outlines])
        self._draw_fringes()

    def _draw_fringes(self) -> None:
        if self._writing:
            return
        region, index = self.state.current, self.state.peak
        if region is None or region.measurement is None or index is None:
            self._show_lines(_FRINGES, [], list)
            return
        measurement = region.measurement
        outline, peak = measurement.crystal_outline_px, measurement.peaks[index]
        corners = np.array(measurement.region.vertices_px) if outline is None else outline
        self._show_lines(_FRINGES, [peak], lambda: [fringe_lines(peak, corners)])

    def _show_lines(self, name: str, shown: list[Any], lines: Callable[[], list[NDArray[np.float64]]]) -> None:
        """Draw lines, unless those of the same objects are there: setting a layer's data costs napari tens of ms."""
        layer = self._lines.get(name)
        if layer is None:
            return
        before = self._drawn.get(name)
        if before is not None and before[0] is layer and _are_the_same(before[1], shown):
            return
        self._drawn[name] = (layer, shown)
        if shown or len(layer.data):
            show_lines(layer, np.concatenate(lines()) if shown else np.empty((0, 2, 2)))

    @contextmanager
    def _quietly(self) -> Iterator[None]:
        """Change layers without taking the change for the user's."""
        before, self._writing = self._writing, True
        try:
            yield
        finally:
            self._writing = before


def _own_extent(measurement: Measurement | None) -> NDArray[np.float64] | None:
    """Return where the crystal of a region ends; None where it fills the region, whose outline is there already."""
    if measurement is None or measurement.in_pixels is None or not measurement.in_pixels.found.uneven:
        return None
    return measurement.crystal_outline_px


def _are_the_same(some: list[Any], others: list[Any]) -> bool:
    return len(some) == len(others) and all(one is other for one, other in zip(some, others, strict=True))


def _stored(layer: Image) -> Any:
    """Return the array that a layer was made from, of a pyramid its finest."""
    return layer.data[0] if layer.multiscale else layer.data
