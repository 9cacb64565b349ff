"""The picture: its pixels, their size, the beam that made it, and where all of it came from."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Sequence
from dataclasses import KW_ONLY, dataclass, field
from pathlib import Path
from typing import Protocol, cast

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.exceptions import CalibrationError, UnreadablePictureError

__all__ = ["PIXEL_SIZE_LIMITS_NM", "Micrograph", "PixelSource"]

PIXEL_SIZE_LIMITS_NM = (1e-4, 1e3)
"""Pixel sizes outside these are no lattice picture's: 0.1 pm is far below any lens, 1 um shows no lattice."""

_VOLTAGE_LIMITS_KV = (1.0, 3000.0)


class PixelSource(Protocol):
    """A two-dimensional picture that is read piece by piece, such as a memory map or one frame of a file."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Rows and columns."""

    @property
    def dtype(self) -> np.dtype[np.generic]:
        """Type of one pixel."""

    def __getitem__(self, key: tuple[slice, slice], /) -> NDArray[np.generic]:
        """Return the pixels of a rectangle."""


def _pair(value: float | Sequence[float] | None, name: str) -> tuple[float, float] | None:
    if value is None:
        return None
    try:
        numbers = [float(v) for v in np.atleast_1d(np.asarray(value, dtype=float))]
    except (TypeError, ValueError):
        raise CalibrationError(f"{name} must be a number or a (row, column) pair, got {value!r}") from None
    if len(numbers) == 1:
        numbers *= 2
    if len(numbers) != 2:
        raise CalibrationError(f"{name} must be one number or a (row, column) pair, got {len(numbers)} numbers")
    return numbers[0], numbers[1]


def _finite(value: float | None, name: str) -> float | None:
    if value is None:
        return None
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise CalibrationError(f"{name} must be a number or None, got {value!r}") from None
    if not math.isfinite(number):
        raise CalibrationError(f"{name} must be finite, got {number!r}; leave it out if it is not known")
    return number


@dataclass(frozen=True, eq=False)
class Micrograph:
    """One two-dimensional picture with what is known about its scale and its beam.

    Parameters
    ----------
    pixels : array_like, shape (rows, columns)
        Real numbers. An array-like object that is sliced on demand (memory map, lazily read frame) is kept as it is
        and only the parts that are measured are read. The pixels are not copied and must not be changed afterwards.
    pixel_size_nm : float or (float, float), optional
        nm per pixel along (row, column). None: everything is measured in pixels.
    pixel_size_relative_uncertainty : float or (float, float), optional
        Relative standard uncertainty as a fraction. One number: the two directions share the same error, so that angles
        are not touched by it. A pair: independent errors along (row, column). None: not stated.
    pixel_size_source : str, optional
        Where the pixel size came from, in words.
    shear : float, optional
        One row further is `pixel_size_nm[0]` along y and `shear * pixel_size_nm[1]` along x.
    voltage_kv, cs_mm, defocus_nm : float, optional
        Beam voltage, spherical aberration, defocus (positive: underfocus).
    dark_level : float, optional
        Pixel value without any electron. Without it no visibility is given.
    name : str, optional
        What to call the picture.
    path : Path, optional
        The file it was read from.
    frame, frame_count : int, optional
        Which frame of how many.
    cautions : tuple of Caution, optional
        What reading the file brought to light.

    Raises
    ------
    UnreadablePictureError
        If the pixels are not a two-dimensional array of real numbers.
    CalibrationError
        If a pixel size, its uncertainty, the voltage or a lens value is impossible.
    """

    pixels: PixelSource
    _: KW_ONLY
    pixel_size_nm: tuple[float, float] | None = None
    pixel_size_relative_uncertainty: float | tuple[float, float] | None = None
    pixel_size_source: str = ""
    shear: float = 0.0
    voltage_kv: float | None = None
    cs_mm: float | None = None
    defocus_nm: float | None = None
    dark_level: float | None = None
    name: str = "picture"
    path: Path | None = None
    frame: int = 0
    frame_count: int = 1
    cautions: tuple[Caution, ...] = field(default=())

    def __post_init__(self) -> None:
        def put(name: str, value: object) -> None:
            object.__setattr__(self, name, value)

        put("pixels", _two_dimensional(self.pixels))
        size = _pair(self.pixel_size_nm, "pixel_size_nm")
        low, high = PIXEL_SIZE_LIMITS_NM
        if size is not None and not all(low <= s <= high for s in size):
            raise CalibrationError(
                f"pixel_size_nm must lie between {low:g} and {high:g} nm per pixel, got {size}; check the unit, or "
                "leave it out to measure in pixels"
            )
        put("pixel_size_nm", size)
        uncertainty = self.pixel_size_relative_uncertainty
        if uncertainty is not None:
            pair = cast("tuple[float, float]", _pair(uncertainty, "pixel_size_relative_uncertainty"))
            if not all(math.isfinite(u) and 0 <= u < 1 for u in pair):
                raise CalibrationError(
                    "pixel_size_relative_uncertainty must be a fraction from 0 up to 1 (0.01 is 1 per cent), "
                    f"got {uncertainty!r}; leave it out if it is not known"
                )
            put("pixel_size_relative_uncertainty", pair[0] if np.ndim(uncertainty) == 0 else pair)
        if not self.pixel_size_source:
            put("pixel_size_source", "not stated" if size is None else "given by the user")
        shear = _finite(self.shear, "shear")
        if shear is None or abs(shear) >= 1:
            raise CalibrationError(f"shear must lie between -1 and 1, got {self.shear!r}")
        put("shear", shear)
        voltage = _finite(self.voltage_kv, "voltage_kv")
        low, high = _VOLTAGE_LIMITS_KV
        if voltage is not None and not low <= voltage <= high:
            raise CalibrationError(f"voltage_kv must lie between {low:g} and {high:g} kV, got {voltage:g}")
        put("voltage_kv", voltage)
        cs = _finite(self.cs_mm, "cs_mm")
        if cs is not None and abs(cs) > 50:
            raise CalibrationError(f"cs_mm must lie between -50 and 50 mm, got {cs:g}; check its unit")
        put("cs_mm", cs)
        defocus = _finite(self.defocus_nm, "defocus_nm")
        if defocus is not None and abs(defocus) > 1e5:
            raise CalibrationError(f"defocus_nm must lie between -1e5 and 1e5 nm, got {defocus:g}; check its unit")
        put("defocus_nm", defocus)
        put("dark_level", _finite(self.dark_level, "dark_level"))
        put("cautions", tuple(self.cautions))

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        rows, columns = self.pixels.shape
        return int(rows), int(columns)

    @property
    def geometry_nm_per_px(self) -> NDArray[np.float64] | None:
        """Matrix M, shape (2, 2), with (y, x) in nm = M @ (row, column); None without a pixel size."""
        if self.pixel_size_nm is None:
            return None
        row, column = self.pixel_size_nm
        return np.array([[row, 0.0], [self.shear * column, column]])

    def crop(self, rows: slice, columns: slice) -> NDArray[np.generic]:
        """Return the pixels of a rectangle, shape (rows, columns), read now; a view where the pixels are in memory."""
        return np.asarray(self.pixels[rows, columns])

    def sha256(self) -> str:
        """Return the SHA-256 checksum of the file, or of the pixels if there is no single file (C order, little-endian)."""
        if self.path is not None and self.path.is_file():
            with self.path.open("rb") as file:
                return hashlib.file_digest(file, "sha256").hexdigest()
        pixels = np.ascontiguousarray(np.asarray(self.pixels[:, :]))
        return hashlib.sha256(pixels.astype(pixels.dtype.newbyteorder("<"), copy=False).tobytes()).hexdigest()


def _two_dimensional(pixels: object) -> PixelSource:
    if not (hasattr(pixels, "shape") and hasattr(pixels, "dtype") and hasattr(pixels, "__getitem__")):
        try:
            pixels = np.asarray(pixels)
        except ValueError as problem:
            raise UnreadablePictureError(f"pixels must form a rectangular array: {problem}") from None
    source = cast("PixelSource", pixels)
    if len(source.shape) != 2 or 0 in source.shape:
        raise UnreadablePictureError(
            f"pixels must be one two-dimensional picture (rows, columns), got shape {tuple(source.shape)}; choose one "
            "frame of a stack, and turn colours into one channel"
        )
    if np.dtype(source.dtype).kind not in "uif":
        raise UnreadablePictureError(
            f"pixels must be real numbers (integer or float), got {source.dtype}; a complex picture needs its modulus"
        )
    return source
