"""Files are written beside their target and renamed into place: whole, or not at all."""

from __future__ import annotations

import errno
import os
import secrets
import stat
from contextlib import suppress
from pathlib import Path

from fringespan.exceptions import RecordError

__all__ = ["write_whole_file"]


def write_whole_file(path: str | os.PathLike[str], content: bytes) -> Path:
    """Write a file so that a crash leaves the old content or the new, never half of it.

    A link is followed and stays a link; the permissions of a file that is replaced are kept. What is not an ordinary
    file (a device, a pipe) is written to directly.

    Parameters
    ----------
    path : path-like
    content : bytes

    Returns
    -------
    Path
        The path given.

    Raises
    ------
    RecordError
        If it cannot be written: the folder is missing or read-only, the disk is full, ... An old file is left as it is.
    """
    path = Path(path)
    try:
        target = Path(os.path.realpath(path))
        mode = _mode_of(target)
        if mode is not None and stat.S_ISDIR(mode):
            raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
        if mode is not None and not stat.S_ISREG(mode):
            with target.open("wb") as device:
                device.write(content)
            return path
        if mode is not None and not os.access(target, os.W_OK):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))
        _write_beside_and_rename(target, content, None if mode is None else stat.S_IMODE(mode))
    except BrokenPipeError:
        raise
    except (OSError, ValueError) as problem:  # ValueError: a null character in the name
        raise RecordError(_in_words(path, problem)) from problem
    return path


def _mode_of(target: Path) -> int | None:
    try:
        return target.stat().st_mode
    except FileNotFoundError:
        return None


def _write_beside_and_rename(target: Path, content: bytes, permissions: int | None) -> None:
    # a short name of its own: the target's may already be as long as the file system allows
    beside = target.with_name(f".{secrets.token_hex(8)}.part")
    descriptor = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0), 0o666)
    try:
        with os.fdopen(descriptor, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        if permissions is not None:
            beside.chmod(permissions)
        beside.replace(target)
    except BaseException:  # also when interrupted: nothing half-written is left behind
        with suppress(OSError):
            beside.unlink()
        raise
    _make_renaming_last(target.parent)


def _make_renaming_last(folder: Path) -> None:
    """Ask the file system to keep the new name through a power cut; not every system can."""
    with suppress(OSError):
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def _in_words(path: Path, problem: OSError | ValueError) -> str:
    code = problem.errno if isinstance(problem, OSError) else None
    if code in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        reason = "the disk is full or your share of it is used up; make room, or write to another disk"
    elif code == errno.EROFS:
        reason = "it lies on a read-only disk; write to another folder"
    elif code in (errno.EACCES, errno.EPERM):
        reason = "the file or its folder is read-only for you; write to another folder, or ask for the right to write"
    elif code in (errno.ENOENT, errno.ENOTDIR):
        reason = f"there is no folder {str(path.parent)!r}; make it first, or write to another one"
    elif code == errno.EISDIR:
        reason = "it is a folder; give the name of a file"
    elif code == errno.ENAMETOOLONG:
        reason = "the name is too long; choose a shorter one"
    else:
        words = (problem.strerror if isinstance(problem, OSError) else None) or str(problem)
        reason = f"{words}; write to another place"
    kept = "; the old file is kept as it was" if code != errno.EISDIR and _exists(path) else ""
    return f"{path}: cannot be written: {reason}{kept}"


def _exists(path: Path) -> bool:
    try:
        return path.exists()
    except (OSError, ValueError):
        return False
