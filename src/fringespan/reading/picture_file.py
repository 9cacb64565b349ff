"""A file of any known format becomes a micrograph."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from pathlib import Path

from fringespan.exceptions import UnreadablePictureError
from fringespan.micrograph import Micrograph
from fringespan.reading.pixel_size import BelievedPixelSize, believe
from fringespan.reading.refusal import refusing
from fringespan.reading.stored_picture import StoredPicture

__all__ = ["read"]

_KNOWN_FORMATS = "TIFF, MRC, PNG, JPEG, NumPy .npy and OME-Zarr"

_TIFF_STARTS = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
_MRC_IDENTIFIER = slice(208, 211)
_HEAD_BYTES = 256

_OTHER_KINDS = {
    b"\x1f\x8b": "is compressed with gzip; unpack it first",
    b"BZh": "is compressed with bzip2; unpack it first",
    b"\xfd7zXZ\0": "is compressed with xz; unpack it first",
    b"PK\x03\x04": "is a zip archive; unpack it first (of an .npz, save each array as .npy)",
    b"\x89HDF\r\n\x1a\n": "is an HDF5 file; export the picture as TIFF or MRC",
    b"%PDF": "is a PDF document; use the picture as the microscope saved it",
    b"GIF8": "is a GIF, which holds too few shades; use the picture as the microscope saved it",
}

_Opener = Callable[[Path, int], StoredPicture]


def read(
    path: str | os.PathLike[str],
    *,
    frame: int = 0,
    pixel_size_nm: float | Sequence[float] | None = None,
    pixel_size_relative_uncertainty: float | tuple[float, float] | None = None,
    voltage_kv: float | None = None,
    cs_mm: float | None = None,
    defocus_nm: float | None = None,
    dark_level: float | None = None,
) -> Micrograph:
    """Open a picture.

    TIFF, MRC2014, PNG, JPEG, NumPy (.npy) and OME-Zarr are told apart by their content, not their name. Pixels of
    TIFF, MRC, NumPy and Zarr are read when they are needed: opening a large picture or a long stack costs next to
    nothing, and measuring a small region reads only that. The file must stay where it is meanwhile.

    Parameters
    ----------
    path : path-like
        The file, or the folder of an OME-Zarr.
    frame : int, optional
        Which picture of a stack, counted from 0 in the order of the file.
    pixel_size_nm : float or (float, float), optional
        nm per pixel along (row, column), instead of what the file says. Without it, a size of 0, a size without a unit,
        one in inches and one outside `fringespan.micrograph.PIXEL_SIZE_LIMITS_NM` count as not stated, with a caution.
    pixel_size_relative_uncertainty, voltage_kv, cs_mm, defocus_nm, dark_level : optional
        As in `Micrograph`; files seldom hold them.

    Returns
    -------
    Micrograph

    Raises
    ------
    UnreadablePictureError
        If the file is missing, damaged, of an unknown format, no picture of real numbers, or a diffraction pattern.
        Damage in the middle of a compressed picture is found when that part is read.
    SettingsError
        If the file has no such frame.
    CalibrationError
        If a given value is impossible.
    """
    file = Path(path)
    with refusing(file, "cannot be read"):
        opener = _opener_for(file)
    with refusing(file, "is damaged or not what it claims to be"):
        stored = opener(file, frame)
    # a diffraction pattern is refused even if the user gives a pixel size: it is not a picture
    believed = believe(stored.pixel_sizes, file)
    if pixel_size_nm is not None:
        believed = BelievedPixelSize(None, "", ())
    size = believed.nm if pixel_size_nm is None else pixel_size_nm
    return Micrograph(
        stored.pixels,
        pixel_size_nm=size,  # type: ignore[arg-type]  # one number is turned into a pair
        pixel_size_relative_uncertainty=pixel_size_relative_uncertainty,
        pixel_size_source=believed.source,
        voltage_kv=voltage_kv,
        cs_mm=cs_mm,
        defocus_nm=defocus_nm,
        dark_level=dark_level,
        name=file.name or str(file),
        path=file,
        frame=int(frame),
        frame_count=stored.frame_count,
        cautions=(*stored.cautions, *believed.cautions),
    )


def _opener_for(path: Path) -> _Opener:
    """Find the format by the first bytes; each is imported only when a file needs it."""
    if not path.exists():
        raise UnreadablePictureError(f"{path}: no such file; check the name and the folder")
    if path.is_dir():
        if any((path / name).is_file() for name in ("zarr.json", ".zgroup", ".zarray", ".zattrs")):
            from fringespan.reading import ome_zarr

            return ome_zarr.open_picture
        raise UnreadablePictureError(f"{path}: is a folder and not an OME-Zarr; name a picture in it")
    if not path.is_file():
        # a pipe or a device would wait or never end
        raise UnreadablePictureError(f"{path}: is not an ordinary file; copy its content into one")
    with path.open("rb") as file:
        head = file.read(_HEAD_BYTES)
    if not head:
        raise UnreadablePictureError(f"{path}: is empty; copy it again from the microscope")
    if head.startswith(_TIFF_STARTS):
        from fringespan.reading import tiff

        return tiff.open_picture
    if head.startswith(b"\x93NUMPY"):
        from fringespan.reading import numpy_file

        return numpy_file.open_picture
    if head.startswith((b"\x89PNG\r\n\x1a\n", b"\xff\xd8\xff")):
        from fringespan.reading import png_jpeg

        return png_jpeg.open_picture
    if head[_MRC_IDENTIFIER] == b"MAP":
        from fringespan.reading import mrc

        return mrc.open_picture
    for start, what in _OTHER_KINDS.items():
        if head.startswith(start):
            raise UnreadablePictureError(f"{path}: {what}")
    raise UnreadablePictureError(f"{path}: is none of the picture formats {_KNOWN_FORMATS}; export it as TIFF or MRC")
