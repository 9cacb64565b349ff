"""`fringespan view`: the same measurement with the mouse, in napari."""

from __future__ import annotations

from importlib.util import find_spec
from typing import TYPE_CHECKING

import click

from fringespan.command_line.picture_options import PictureOptions, takes_picture_options
from fringespan.exceptions import SettingsError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from fringespan.micrograph import Micrograph
    from fringespan.region import Region

__all__ = ["refuse_without_viewer", "show", "view"]

_HELP = """Open napari with the docks in place, and IMAGE in it.

Draw a region inside one grain and drag it: spectrum and spacings follow. Pixel size, its uncertainty and the voltage
can be given here or typed there. Needs the viewer: pip install "fringespan[all]".

\b
Examples:
  fringespan view
  fringespan view particle.tif --pixel-size-uncertainty 1.5 --voltage 300
  fringespan view particle.tif --regions earlier_record.json
"""


@click.command(help=_HELP)
@click.argument("image", required=False, metavar="[IMAGE]")
@takes_picture_options
def view(image: str | None, picture: PictureOptions) -> None:
    """Open the viewer until it is closed."""
    refuse_without_viewer()
    micrograph = None if image is None else picture.open(image)
    show(micrograph, picture.regions, image)


def refuse_without_viewer() -> None:
    """Say what to install where there is no napari.

    Raises
    ------
    SettingsError
        If napari cannot be imported.
    """
    for name in ("napari", "qtpy"):
        if find_spec(name) is None:
            raise SettingsError(
                f'the viewer needs {name}, which is not installed; run  pip install "fringespan[all]"  first'
            )


def show(micrograph: Micrograph | None, regions: Sequence[Region], path: str | None) -> None:
    """Open the viewer with a picture and regions, and return when it is closed."""
    from fringespan.viewer.open import run_viewer

    run_viewer(micrograph, regions, path=path)
