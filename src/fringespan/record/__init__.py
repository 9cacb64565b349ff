"""The record of a measurement: one JSON file that holds all that is needed to repeat and defend it."""

from fringespan.record.document import SCHEMA, document_of, plain_values, record_from, record_schema
from fringespan.record.file import json_text, read_record, read_regions, write_record
from fringespan.record.identification import identifications_of
from fringespan.record.magnification import magnification_values
from fringespan.record.values import Identification, Match, Record, RecordedPicture, RecordedRegion, record_of

__all__ = [
    "SCHEMA",
    "Identification",
    "Match",
    "Record",
    "RecordedPicture",
    "RecordedRegion",
    "document_of",
    "identifications_of",
    "json_text",
    "magnification_values",
    "plain_values",
    "read_record",
    "read_regions",
    "record_from",
    "record_of",
    "record_schema",
    "write_record",
]
