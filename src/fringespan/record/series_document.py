"""A focal series as a JSON document: what was combined, and the records of the single pictures."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, cast

from fringespan.focal_series import FocalSeries
from fringespan.record.document import document_of, plain_values
from fringespan.record.values import Record

__all__ = ["SERIES_SCHEMA", "series_document"]

SERIES_SCHEMA = "fringespan.focal_series/1"


def series_document(series: Sequence[tuple[str, FocalSeries]], records: Sequence[Record]) -> dict[str, Any]:
    """Return a focal series as nested dictionaries and lists.

    Parameters
    ----------
    series : sequence of (str, FocalSeries)
        Name of the region and what was combined there.
    records : sequence of Record
        Of the pictures, in their order.

    Returns
    -------
    dict
        `schema`; `regions`, each with `name` and the fields of its `FocalSeries`; `records`, one a picture.

    Raises
    ------
    RecordError
        If a number is not finite.
    """
    regions = [
        {"name": name} | cast("dict[str, object]", plain_values(one, f"focal series of {name!r}"))
        for name, one in series
    ]
    return {"schema": SERIES_SCHEMA, "regions": regions, "records": [document_of(record) for record in records]}
