"""Records and region lists as files."""

from __future__ import annotations

import json
import math
import os
import re
from pathlib import Path
from typing import Any, NoReturn

from fringespan.exceptions import FringespanError, RecordError
from fringespan.output_file import write_whole_file
from fringespan.record.document import document_of, record_from
from fringespan.record.values import Record
from fringespan.region import Region

__all__ = ["json_text", "read_record", "read_regions", "write_record"]

_LARGEST_FILE_BYTES = 256_000_000
# whole numbers beyond this are no longer told apart by the programs that read JSON numbers as doubles (RFC 8259, 6)
_LARGEST_WHOLE_NUMBER = 2**53


def write_record(record: Record, path: str | os.PathLike[str]) -> Path:
    """Write a record, whole or not at all.

    Parameters
    ----------
    record : Record
    path : path-like

    Returns
    -------
    Path

    Raises
    ------
    RecordError
        If it holds a number that is not finite or cannot be written; an old file is then left as it is.
    """
    return write_whole_file(path, json_text(document_of(record)).encode("ascii"))


def read_record(path: str | os.PathLike[str]) -> Record:
    """Read a record back; every number is the same, bit for bit.

    Parameters
    ----------
    path : path-like

    Returns
    -------
    Record

    Raises
    ------
    RecordError
        If the file cannot be read, is no record, is broken, or was written in a newer form. It is never changed.
    """
    document = _json_file(Path(path))
    try:
        return record_from(document)
    except RecordError as problem:
        raise RecordError(f"{path}: {problem}") from problem


def read_regions(path: str | os.PathLike[str]) -> tuple[Region, ...]:
    """Read regions from a record, or from any JSON file with a list `regions` of `name` and `vertices_px`.

    Parameters
    ----------
    path : path-like

    Returns
    -------
    tuple of Region
        At least one, in the order of the file.

    Raises
    ------
    RecordError
        If the file cannot be read, has no such list or an empty one, or one of the outlines makes no sense.
    """
    document = _json_file(Path(path))
    entries = document.get("regions") if isinstance(document, dict) else None
    if not isinstance(entries, list) or not entries:
        raise RecordError(f"{path}: no regions in it; a list `regions` of `name` and `vertices_px` is needed")
    regions = []
    for number, entry in enumerate(entries):
        if not isinstance(entry, dict) or "vertices_px" not in entry:
            raise RecordError(f"{path}: regions[{number}] has no `vertices_px`, a list of [row, column] corners")
        try:
            region = Region(
                str(entry.get("name", f"region {number + 1}")), entry["vertices_px"], entry.get("kind", "polygon")
            )
        except FringespanError as problem:
            raise RecordError(f"{path}: {problem}") from problem
        regions.append(region)
    return tuple(regions)


def json_text(document: object) -> str:
    """Return JSON with one entry a line, but lists of numbers on one line; ASCII only, to travel safely.

    Raises
    ------
    ValueError
        If a number is not finite.
    """
    text = json.dumps(document, indent=1, allow_nan=False)
    # line breaks inside strings are written \n, so that a real one always stands between two entries
    return re.sub(r'\[\n([^\[\]{}"]*?)\n\s*\]', lambda found: f"[{' '.join(found[1].split())}]", text) + "\n"


def _json_file(path: Path) -> Any:
    try:
        with path.open("rb") as file:
            content = file.read(_LARGEST_FILE_BYTES + 1)
    except (OSError, ValueError) as problem:  # ValueError: a null character in the name
        words = problem.strerror if isinstance(problem, OSError) else str(problem)
        raise RecordError(f"{path}: cannot be read: {words}; check the name") from problem
    if len(content) > _LARGEST_FILE_BYTES:
        raise RecordError(f"{path}: larger than {_LARGEST_FILE_BYTES / 1e6:.0f} MB, that is no record")
    try:
        text = content.decode("utf-8-sig")
        return json.loads(text, parse_constant=_refuse, parse_float=_finite, parse_int=_moderate)
    except UnicodeDecodeError:
        raise RecordError(f"{path}: not a text file; a record is JSON in UTF-8") from None
    except json.JSONDecodeError as problem:
        raise RecordError(
            f"{path}: broken: not JSON from line {problem.lineno}, column {problem.colno} on ({problem.msg}); "
            "take an earlier copy"
        ) from None
    except RecursionError:
        raise RecordError(f"{path}: lists nested too deeply for a record") from None
    except RecordError as problem:
        raise RecordError(f"{path}: {problem}") from None


def _refuse(text: str) -> NoReturn:
    raise RecordError(f"{text} is not a number that JSON allows")


def _finite(text: str) -> float:
    number = float(text)
    if not math.isfinite(number):
        raise RecordError(f"the number {text[:40]} is too large")
    return number


def _moderate(text: str) -> int:
    # the length is looked at first: turning thousands of digits into a number is slow or refused
    if len(text) > 17 or abs(int(text)) > _LARGEST_WHOLE_NUMBER:
        raise RecordError(f"the whole number {text[:40]} is too large")
    return int(text)
