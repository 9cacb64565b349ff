"""The record as a JSON document, in the form that `record.schema.json` beside this module describes."""

from __future__ import annotations

import dataclasses
import json
import math
import re
from collections.abc import Mapping
from functools import cache
from importlib import resources
from typing import Any, TypeVar, cast

import numpy as np
from numpy.typing import NDArray

from fringespan.cautions import Caution
from fringespan.exceptions import FringespanError, RecordError
from fringespan.lattice import PlaneLattice
from fringespan.record.values import Identification, Match, Record, RecordedPicture, RecordedRegion
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak

__all__ = ["SCHEMA", "document_of", "plain_values", "record_from", "record_schema"]

SCHEMA = "fringespan.record/1"
"""Name and number of the form that this version writes and reads."""

Document = dict[str, Any]
_Value = TypeVar("_Value", Peak, PairAngle, PlaneLattice, Match)


@cache
def record_schema() -> Document:
    """Return the JSON Schema (draft 2020-12) of a record."""
    text = resources.files("fringespan.record").joinpath("record.schema.json").read_text(encoding="utf-8")
    return cast("Document", json.loads(text))


def document_of(record: Record) -> Document:
    """Return the record as nested dictionaries and lists, in the form of the schema.

    Raises
    ------
    RecordError
        If a number in it is not finite.
    """
    picture = record.picture
    uncertainty = picture.pixel_size_relative_uncertainty
    shared = isinstance(uncertainty, float)
    document = {
        "schema": SCHEMA,
        "program_version": record.program_version,
        "picture": {
            name: getattr(picture, name) for name in ("name", "sha256", "shape", "frame", "frame_count", "dark_level")
        },
        "pixel_size": {
            "nm": picture.pixel_size_nm,
            "relative_uncertainty": (uncertainty, uncertainty) if shared else uncertainty,
            "shared_by_both_axes": shared,
            "shear": picture.shear,
            "source": picture.pixel_size_source,
        },
        "beam": {name: getattr(picture, name) for name in ("voltage_kv", "cs_mm", "defocus_nm")},
        "settings": record.settings,
        "regions": [
            {
                "name": region.region.name,
                "kind": region.region.kind,
                "vertices_px": region.region.vertices_px,
                "crystal_outline_px": region.crystal_outline_px,
                "crystal_extent_nm": region.crystal_extent_nm,
                "peaks": region.peaks,
                "angles": region.angles,
                "lattice": region.lattice,
                "matches": region.identification.matches,
                "verdict": region.identification.verdict,
                "sentence": region.identification.sentence,
                "cautions": region.cautions,
            }
            for region in record.regions
        ],
        "magnification": record.magnification,
        "cautions": record.cautions,
    }
    return cast("Document", plain_values(document, "record"))


def plain_values(value: object, place: str) -> object:
    """Return a value made of dictionaries, lists, numbers and strings only, as JSON wants it.

    Parameters
    ----------
    value : object
        Dataclasses, mappings, arrays, lists, tuples, numbers, strings, None, inside each other.
    place : str
        What to call it where a number in it is not finite.

    Raises
    ------
    RecordError
        If a number is not finite.
    """
    if dataclasses.is_dataclass(value):
        return {f.name: plain_values(getattr(value, f.name), f"{place}.{f.name}") for f in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain_values(item, f"{place}.{key}") for key, item in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        return plain_values(value.tolist(), place)
    if isinstance(value, list | tuple):
        return [plain_values(item, f"{place}[{i}]") for i, item in enumerate(value)]
    if isinstance(value, float) and not math.isfinite(value):
        raise RecordError(f"{place} must be finite or null to be recorded, got {value!r}")
    return value


def record_from(document: Mapping[str, Any]) -> Record:
    """Return the record that a document in the form of the schema describes.

    Raises
    ------
    RecordError
        If the document is of another kind or a newer form, or something in it is missing or makes no sense.
    """
    schema = document.get("schema") if isinstance(document, Mapping) else None
    form = re.fullmatch(r"fringespan\.record/(\d{1,9})", schema) if isinstance(schema, str) else None
    if form is None:
        raise RecordError('not a fringespan record: it has no entry "schema": "fringespan.record/..."')
    if schema != SCHEMA:
        raise RecordError(f"written in the form {schema}, this version reads {SCHEMA}; install a newer fringespan")
    _check_form(document)
    size, beam, picture = document["pixel_size"], document["beam"], document["picture"]
    uncertainty = size["relative_uncertainty"]
    try:
        return Record(
            program_version=document["program_version"],
            picture=RecordedPicture(
                name=picture["name"],
                sha256=picture["sha256"],
                shape=_tuples(picture["shape"]),
                frame=picture["frame"],
                frame_count=picture.get("frame_count", 1),
                pixel_size_nm=_tuples(size["nm"]),
                pixel_size_relative_uncertainty=(
                    uncertainty[0] if uncertainty and size.get("shared_by_both_axes") else _tuples(uncertainty)
                ),
                pixel_size_source=size["source"],
                shear=size.get("shear", 0.0),
                voltage_kv=beam["voltage_kv"],
                cs_mm=beam["cs_mm"],
                defocus_nm=beam["defocus_nm"],
                dark_level=picture.get("dark_level"),
            ),
            settings=_settings_from(document["settings"]),
            regions=tuple(_region_from(region) for region in document["regions"]),
            magnification=document["magnification"],
            cautions=_cautions_from(document["cautions"]),
        )
    except RecordError:
        raise
    except FringespanError as problem:
        raise RecordError(str(problem)) from problem


def _settings_from(document: Document) -> MeasurementSettings:
    known = {f.name for f in dataclasses.fields(MeasurementSettings)}
    if unknown := sorted(set(document) - known):
        raise RecordError(f"settings: {', '.join(unknown)} not known to this version; install a newer fringespan")
    for name, value in document.items():
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise RecordError(f"settings.{name} must be a number, got {value!r}")
    return MeasurementSettings(**document)


def _region_from(document: Document) -> RecordedRegion:
    lattice = document["lattice"]
    return RecordedRegion(
        region=Region(document["name"], _tuples(document["vertices_px"]), document["kind"]),
        crystal_outline_px=_array(document["crystal_outline_px"]),
        crystal_extent_nm=_tuples(document["crystal_extent_nm"]),
        peaks=tuple(_value_from(Peak, peak) for peak in document["peaks"]),
        angles=tuple(_value_from(PairAngle, angle) for angle in document["angles"]),
        lattice=None if lattice is None else _value_from(PlaneLattice, lattice),
        identification=Identification(
            verdict=document["verdict"],
            matches=tuple(_value_from(Match, match) for match in document["matches"]),
            sentence=document.get("sentence", ""),
        ),
        cautions=_cautions_from(document["cautions"]),
    )


def _value_from(kind: type[_Value], document: Document) -> _Value:
    content = {f.name: document[f.name] for f in dataclasses.fields(kind)}
    for name, item in content.items():
        if name == "cautions":
            content[name] = _cautions_from(item)
        elif name.startswith(_ARRAYS):
            content[name] = _array(item)
        else:
            content[name] = _tuples(item)
    return kind(**content)


_ARRAYS = ("g_", "reciprocal_", "real_")
"""How the names of the fields begin that hold arrays; other lists become tuples."""


def _cautions_from(document: list[Document]) -> tuple[Caution, ...]:
    return tuple(Caution(**{f.name: caution[f.name] for f in dataclasses.fields(Caution)}) for caution in document)


def _array(value: list[Any] | None) -> NDArray[np.float64] | None:
    return None if value is None else np.array(value, dtype=np.float64)


def _tuples(value: Any) -> Any:
    return tuple(_tuples(item) for item in value) if isinstance(value, list) else value


def _check_form(document: Mapping[str, Any]) -> None:
    from jsonschema import Draft202012Validator
    from jsonschema.exceptions import best_match

    problem = best_match(Draft202012Validator(record_schema()).iter_errors(document))
    if problem is not None:
        place = problem.json_path.removeprefix("$").removeprefix(".") or "the record"
        message = problem.message if len(problem.message) <= 200 else f"{problem.message[:200]} ..."
        raise RecordError(f"{place}: {message}")
