"""The simulated sample pictures as napari samples."""

from __future__ import annotations

from fringespan.sample_pictures import sample_file
from fringespan.viewer.reader import LayerData, layers_of_file

__all__ = ["faint_ceria", "graphitic_stacks", "heating_gold", "two_grains"]


def two_grains() -> list[LayerData]:
    """Return a gold and a ceria particle on carbon, simulated."""
    return _sample("two_grains")


def graphitic_stacks() -> list[LayerData]:
    """Return two stacks of carbon layers, one of them bent, simulated."""
    return _sample("graphitic_stacks")


def faint_ceria() -> list[LayerData]:
    """Return a ceria particle at the edge of detection, simulated."""
    return _sample("faint_ceria")


def heating_gold() -> list[LayerData]:
    """Return eight frames of a gold particle being heated, simulated."""
    return _sample("heating_gold")


def _sample(name: str) -> list[LayerData]:
    return [
        (pixels, {**options, "name": f"{name} (simulated)"}, kind)
        for pixels, options, kind in layers_of_file(str(sample_file(f"{name}.ome.tif")))
    ]
