"""Where the sample pictures are; all of them are simulated."""

from __future__ import annotations

from pathlib import Path

from fringespan.exceptions import UnreadablePictureError

__all__ = ["sample_file"]

_PACKAGE = Path(__file__).resolve().parent
# an installed package carries them inside; a checkout that is used in place has them at its top
_FOLDERS = (_PACKAGE / "sample_images", _PACKAGE.parents[1] / "sample_images")


def sample_file(name: str) -> Path:
    """Return the path of a sample picture or of the file that says what is true of it.

    Parameters
    ----------
    name : str
        Such as "two_grains.ome.tif" or "two_grains.json".

    Raises
    ------
    UnreadablePictureError
        If it is in neither place.
    """
    for folder in _FOLDERS:
        if (folder / name).is_file():
            return folder / name
    raise UnreadablePictureError(f"{name}: no such sample picture in this installation; install fringespan again")
