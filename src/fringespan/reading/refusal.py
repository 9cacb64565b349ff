"""How a file is refused: one line that says which file, what is wrong, and what to do."""

from __future__ import annotations

import operator
import struct
import tokenize
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from fringespan.exceptions import FringespanError, SettingsError, UnreadablePictureError

__all__ = ["check_frame", "check_pixel_type", "check_unpacked_size", "refusing"]

# What decoders raise when the bytes they are given make no sense to them. They do not promise one kind of error for
# it: a damaged offset may end as an IndexError, a damaged length as an OverflowError or a failed assertion.
_DECODER_FAILURES = (
    ArithmeticError,
    AssertionError,
    AttributeError,
    BufferError,
    EOFError,
    LookupError,
    OSError,
    RuntimeError,
    SyntaxError,
    TypeError,
    ValueError,
    struct.error,
    tokenize.TokenError,
    zlib.error,
)

_LONGEST_REASON = 100

_UNPACKED_WITHOUT_QUESTION = 2**28
_MOST_COMPRESSED = 200


@contextmanager
def refusing(path: Path, what: str) -> Iterator[None]:
    """Turn whatever a decoder raises into an `UnreadablePictureError` about this file.

    Parameters
    ----------
    path : Path
        The file.
    what : str
        What is wrong with it if decoding fails, such as "is damaged".

    Raises
    ------
    UnreadablePictureError
        If the code inside raises one of the errors that decoders raise about bad bytes, or runs out of memory.
    """
    try:
        yield
    except FringespanError:
        raise
    except MemoryError:
        raise UnreadablePictureError(
            f"{path}: needs more memory than this computer has; measure a smaller region, or cut the picture"
        ) from None
    except _DECODER_FAILURES as problem:
        lines = str(problem).strip().splitlines()
        reason = lines[0].strip() if lines else type(problem).__name__
        if isinstance(problem, OSError) and problem.strerror:
            reason = problem.strerror
        if len(reason) > _LONGEST_REASON:
            reason = f"{reason[:_LONGEST_REASON]}..."
        raise UnreadablePictureError(
            f"{path}: {what} ({reason}); copy it again from the microscope, or export it as TIFF or MRC"
        ) from problem


def check_frame(frame: int, frame_count: int, path: Path) -> int:
    """Return the frame's number, or raise a `SettingsError` if the file has no such frame."""
    try:
        number = operator.index(frame)
    except TypeError:
        raise SettingsError(f"frame must be a whole number, got {frame!r}; the first frame is 0") from None
    if not 0 <= number < frame_count:
        held = "holds one picture, frame 0" if frame_count == 1 else f"holds frames 0 to {frame_count - 1}"
        raise SettingsError(f"frame must be one that the file has, got {number}; {path} {held}")
    return number


def check_pixel_type(dtype: np.dtype[np.generic], path: Path) -> None:
    """Raise an `UnreadablePictureError` unless the pixels are real numbers."""
    if dtype.kind == "c":
        raise UnreadablePictureError(
            f"{path}: its pixels are complex numbers, a wave or a transform and not a picture; save the picture itself"
        )
    if dtype.kind not in "uif":
        raise UnreadablePictureError(
            f"{path}: its pixels must be integer or float numbers, got {dtype}; save it with real numbers"
        )


def check_unpacked_size(unpacked_bytes: int, packed_bytes: int, path: Path) -> None:
    """Raise an `UnreadablePictureError` if so few bytes cannot hold so large a picture.

    Pixels with any noise never shrink that far; a file that claims it would only fill the memory.
    """
    if unpacked_bytes > max(_UNPACKED_WITHOUT_QUESTION, _MOST_COMPRESSED * packed_bytes):
        raise UnreadablePictureError(
            f"{path}: claims {unpacked_bytes / 1e6:.0f} MB of picture in {packed_bytes / 1e6:.3g} MB of file, which no "
            "real picture does; export it again without compression"
        )
