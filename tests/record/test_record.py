"""A record holds all that is needed to repeat a measurement, and comes back the same."""

import contextlib
import dataclasses
import hashlib
import json
import math

import jsonschema
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fringespan.cautions import Caution
from fringespan.exceptions import RecordError
from fringespan.lattice import PlaneLattice
from fringespan.micrograph import Micrograph
from fringespan.record import (
    SCHEMA,
    Identification,
    Match,
    document_of,
    json_text,
    read_record,
    read_regions,
    record_from,
    record_of,
    record_schema,
    write_record,
)
from fringespan.region import Region
from fringespan.settings import MeasurementSettings
from fringespan.spacings import PairAngle, Peak

FIBROUS = Caution("fibrous-phase", "grave", "This phase can be fibrous.", "Follow the local rules.")
GOLD = Match(
    phase="au",
    zone=(1, 1, 0),
    probability=0.93,
    hkl=((1, -1, 1), (-1, 1, 1), None),
    rotation_deg=35.3,
    scale=1.002,
    scale_uncertainty=0.0004,
    fits=True,
    pulls=(0.3, -0.2, None),
    indistinguishable_from=(("ag", (1, 1, 0)),),
)


def nothing_but_what_the_schema_describes(schema):
    """Return the schema with every object closed, so that a field that it does not mention fails."""
    if isinstance(schema, dict):
        closed = {key: nothing_but_what_the_schema_describes(value) for key, value in schema.items()}
        if closed.get("type") == "object" and "properties" in closed:
            closed["additionalProperties"] = False
        return closed
    if isinstance(schema, list):
        return [nothing_but_what_the_schema_describes(item) for item in schema]
    return schema


def assert_valid(document):
    schema = nothing_but_what_the_schema_describes(record_schema())
    schema["properties"]["magnification"] = True  # its reference may be of several kinds
    jsonschema.Draft202012Validator(schema).validate(document)


@pytest.fixture
def record(make_measurement, square_lattice):
    first = make_measurement(lattice=square_lattice)
    second = make_measurement(first.micrograph, Region.ellipse("grain B", (100, 100), (60, 40)), peaks=(), cautions=())
    return record_of([first, second])


@pytest.fixture
def document(record):
    return json.loads(json_text(document_of(record)))


def test_the_schema_is_itself_a_valid_schema():
    jsonschema.Draft202012Validator.check_schema(record_schema())


@pytest.mark.parametrize(
    ("kind", "name", "elsewhere"),
    [
        (Peak, "peak", set()),
        (PairAngle, "angle", set()),
        (PlaneLattice, "lattice", set()),
        (Match, "match", set()),
        (Caution, "caution", set()),
    ],
)
def test_the_schema_describes_every_field_of_each_value(kind, name, elsewhere):
    described = record_schema()["$defs"][name]
    assert set(described["properties"]) == {f.name for f in dataclasses.fields(kind)} | elsewhere
    assert set(described["required"]) == set(described["properties"])


def test_a_record_of_two_regions_is_valid_and_says_what_was_measured(record, document):
    assert_valid(document)
    assert document["schema"] == "fringespan.record/1"
    assert document["picture"]["name"] == "particle.tif"
    assert document["picture"]["shape"] == [300, 280]
    assert document["pixel_size"]["nm"] == [0.02, 0.02]
    assert document["pixel_size"]["relative_uncertainty"] == [0.015, 0.015]
    assert document["beam"] == {"voltage_kv": 300.0, "cs_mm": None, "defocus_nm": None}
    assert document["settings"] == {"false_peaks_per_region": 0.01, "smallest_distance_bins": 4.0}
    assert [r["name"] for r in document["regions"]] == ["grain A", "grain B"]
    first = document["regions"][0]
    assert first["kind"] == "rectangle"
    assert first["vertices_px"] == [[20.0, 30.0], [20.0, 250.0], [275.5, 250.0], [275.5, 30.0]]
    assert first["peaks"][0]["d_nm"] == 0.2355
    assert first["peaks"][2]["combination_of"] == [0, 1]
    assert first["angles"][0]["peaks"] == [0, 1]
    assert first["matches"] == []
    assert first["verdict"] is None
    assert document["regions"][1]["peaks"] == []
    assert document["magnification"] is None


def test_the_checksum_is_that_of_the_file(make_measurement, tmp_path):
    path = tmp_path / "picture.npy"
    np.save(path, np.ones((300, 300)))
    micrograph = Micrograph(np.ones((300, 300)), path=path)
    assert record_of([make_measurement(micrograph)]).picture.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_a_picture_without_pixel_size_has_nulls_and_no_guess(make_measurement, make_peak):
    in_pixels = dict.fromkeys(
        (
            "g_per_nm",
            "g_covariance_per_nm2",
            "d_nm",
            "d_fit_uncertainty_nm",
            "d_crystal_uncertainty_nm",
            "d_uncertainty_nm",
            "two_theta_mrad",
        )
    )
    measurement = make_measurement(Micrograph(np.ones((300, 300))), peaks=(make_peak(0.2, 10, **in_pixels),))
    document = document_of(record_of([measurement]))
    assert_valid(document)
    assert document["pixel_size"]["nm"] is None
    assert document["pixel_size"]["source"] == "not stated"


def test_phases_compared_stand_in_the_region(make_measurement):
    found = Identification(verdict="ambiguous", matches=(GOLD,), cautions=(FIBROUS,))
    record = record_of([make_measurement()], [found])
    region = document_of(record)["regions"][0]
    assert_valid(document_of(record))
    assert region["verdict"] == "ambiguous"
    assert region["matches"][0]["indistinguishable_from"] == [["ag", [1, 1, 0]]]
    assert [c["code"] for c in region["cautions"]] == ["fibrous-phase", "few-fringes"]
    assert record_from(document_of(record)).regions[0].identification.matches == (GOLD,)


@pytest.mark.parametrize(
    ("uncertainty", "written", "shared"),
    [(0.015, [0.015, 0.015], True), ((0.01, 0.02), [0.01, 0.02], False), (None, None, False)],
)
def test_whether_rows_and_columns_share_their_error_survives(make_measurement, uncertainty, written, shared):
    pixels = np.ones((300, 300))
    micrograph = Micrograph(pixels, pixel_size_nm=0.02, pixel_size_relative_uncertainty=uncertainty, shear=0.003)
    record = record_of([make_measurement(micrograph)])
    size = document_of(record)["pixel_size"]
    assert size["relative_uncertainty"] == written
    assert size["shared_by_both_axes"] is shared
    back = record_from(document_of(record)).picture
    assert back == record.picture


def test_a_magnification_result_has_its_place(record):
    result = {
        "scale": [1.003, 1.012],
        "scale_uncertainty": [0.001, 0.001],
        "shear": None,
        "shear_uncertainty": None,
        "reference": "au",
        "reflections": [[1, 1, 1]],
        "budget": [
            {"source": "fit", "standard_uncertainty": 0.001, "sensitivity": 1.0, "degrees_of_freedom": 4},
        ],
        "coverage_factor": 2.0,
        "expanded_uncertainty": [0.002, 0.002],
        "verdict": "pass",
    }
    document = document_of(dataclasses.replace(record, magnification=result))
    jsonschema.Draft202012Validator(record_schema()).validate(document)
    assert record_from(document).magnification == result


# --- written and read back ------------------------------------------------------------------------------------------

finite = st.floats(allow_nan=False, allow_infinity=False)
positive = st.floats(min_value=1e-300, max_value=1e300)
not_negative = st.floats(min_value=0, max_value=1e300)
pairs = st.lists(finite, min_size=2, max_size=2).map(np.array)
matrices = st.lists(st.lists(finite, min_size=2, max_size=2), min_size=2, max_size=2).map(np.array)
maybe = lambda strategy: st.none() | strategy  # noqa: E731
names = st.text(max_size=30)
caution_values = st.builds(
    Caution, code=names, gravity=st.sampled_from(["grave", "warning", "note"]), text=names, remedy=names
)
peak_values = st.builds(
    Peak,
    g_per_px=pairs,
    g_covariance_per_px2=matrices,
    g_per_nm=maybe(pairs),
    g_covariance_per_nm2=maybe(matrices),
    period_px=positive,
    d_nm=maybe(positive),
    d_fit_uncertainty_nm=maybe(not_negative),
    d_crystal_uncertainty_nm=maybe(not_negative),
    d_uncertainty_nm=maybe(not_negative),
    d_lattice_nm=maybe(positive),
    d_lattice_uncertainty_nm=maybe(not_negative),
    direction_deg=st.floats(0, 180, exclude_max=True),
    direction_uncertainty_deg=not_negative,
    signal_to_noise=not_negative,
    visibility=maybe(not_negative),
    amplitude=finite,
    phase_rad=finite,
    phase_origin_px=st.tuples(finite, finite),
    two_theta_mrad=maybe(positive),
    lattice_index=maybe(st.tuples(st.integers(-99, 99), st.integers(-99, 99))),
    combination_of=maybe(st.just((0,))),
    origin=st.sampled_from(["found", "lattice point", "added by hand"]),
    withheld=maybe(names),
    cautions=st.lists(caution_values, max_size=2).map(tuple),
)


@given(
    peaks=st.lists(peak_values, min_size=1, max_size=4).map(tuple),
    name=names,
    cautions=st.lists(caution_values, max_size=3).map(tuple),
)
@settings(max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_a_record_read_back_is_the_same_bit_for_bit(tmp_path, make_measurement, peaks, name, cautions):
    measurement = make_measurement(
        region=Region(name, ((0, 0), (0, 99.125), (math.pi * 30, 1e-3))), peaks=peaks, cautions=cautions
    )
    measurement = dataclasses.replace(measurement, angles=())
    record = record_of([measurement])
    path = write_record(record, tmp_path / "record.json")
    assert_valid(json.loads(path.read_text(encoding="utf-8")))
    back = read_record(path)
    assert document_of(back) == document_of(record)
    for before, after in zip(record.regions[0].peaks, back.regions[0].peaks, strict=True):
        for field in dataclasses.fields(Peak):
            old, new = getattr(before, field.name), getattr(after, field.name)
            if isinstance(old, np.ndarray):
                assert new.dtype == old.dtype
                assert new.tobytes() == old.tobytes()  # also tells -0.0 from 0.0
            else:
                assert (new, type(new)) == (old, type(old))


def test_a_second_writing_gives_the_same_file(record, tmp_path):
    first = write_record(record, tmp_path / "first.json").read_bytes()
    assert write_record(read_record(tmp_path / "first.json"), tmp_path / "second.json").read_bytes() == first


def test_lists_of_numbers_stand_on_one_line(record, tmp_path):
    text = write_record(record, tmp_path / "record.json").read_text()
    assert '"shape": [300, 280]' in text
    assert max(len(line) for line in text.splitlines()) < 200


@pytest.mark.parametrize("name", ["grün [\n1,\n2\n]", "a\ud800b", '"', "\x00\x1b[31m", "晶粒"])
def test_any_name_survives(make_measurement, tmp_path, name):
    region = Region.rectangle(name, 0, 0, 100, 100)
    path = write_record(record_of([make_measurement(region=region)]), tmp_path / "record.json")
    assert read_record(path).regions[0].region.name == name
    assert read_regions(path)[0].name == name


def test_a_number_that_is_not_finite_is_refused_by_its_place(make_measurement, make_peak, tmp_path):
    record = record_of([make_measurement(peaks=(make_peak(0.2, 0, signal_to_noise=math.nan),))])
    with pytest.raises(RecordError, match=r"record\.regions\[0\]\.peaks\[0\]\.signal_to_noise must be finite"):
        write_record(record, tmp_path / "record.json")
    assert not list(tmp_path.iterdir())


# --- what is refused ------------------------------------------------------------------------------------------------


def test_a_record_needs_a_measurement():
    with pytest.raises(RecordError, match="at least one measurement"):
        record_of([])


def test_two_pictures_do_not_fit_into_one_record(make_measurement):
    with pytest.raises(RecordError, match="one picture"):
        record_of([make_measurement(), make_measurement()])


def test_two_settings_do_not_fit_into_one_record(make_measurement):
    first = make_measurement()
    other = make_measurement(first.micrograph, settings=MeasurementSettings(false_peaks_per_region=0.1))
    with pytest.raises(RecordError, match="one set of settings"):
        record_of([first, other])


def edited(document, *path, value):
    place = document
    for step in path[:-1]:
        place = place[step]
    place[path[-1]] = value
    return document


BROKEN = [
    pytest.param(("schema",), "fringespan.record/2", r"fringespan\.record/2.*install a newer", id="newer form"),
    pytest.param(("schema",), "fringespan.record/0", r"this version reads fringespan\.record/1", id="unknown form"),
    pytest.param(("schema",), "something else", "not a fringespan record", id="another program's"),
    pytest.param(("schema",), 1, "not a fringespan record", id="schema is a number"),
    pytest.param(("picture", "sha256"), "abc", r"picture\.sha256", id="checksum cut off"),
    pytest.param(("picture", "shape"), [300], r"picture\.shape", id="shape of one number"),
    pytest.param(("pixel_size", "nm"), [0.02, -0.02], r"pixel_size\.nm", id="negative pixel size"),
    pytest.param(("settings",), {"colour": 1.0}, "colour not known", id="setting of a later version"),
    pytest.param(("settings",), {"false_peaks_per_region": 7.0}, "between 1e-6 and 1", id="setting out of range"),
    pytest.param(("settings",), {"false_peaks_per_region": "a"}, "must be a number", id="setting of text"),
    pytest.param(("settings",), {"false_peaks_per_region": True}, "must be a number", id="setting of truth"),
    pytest.param(("regions",), None, "regions", id="no regions"),
    pytest.param(
        ("regions", 0, "vertices_px"),
        [[0, 0], [5, 5], [0, 5], [5, 0]],
        "crosses or touches itself",
        id="crossed outline",
    ),
    pytest.param(("regions", 0, "vertices_px"), [[0, 0], [5, 5]], "vertices_px", id="outline of two corners"),
    pytest.param(("regions", 0, "peaks", 0, "period_px"), "x", r"regions\[0\]\.peaks\[0\]\.period_px", id="text"),
    pytest.param(("regions", 0, "peaks", 0, "period_px"), True, r"peaks\[0\]\.period_px", id="truth for a number"),
    pytest.param(("regions", 0, "peaks", 0, "origin"), "guessed", r"peaks\[0\]\.origin", id="unknown origin"),
    pytest.param(("regions", 0, "peaks", 0, "combination_of"), [9], "counted from 0 to 2", id="combination of nothing"),
    pytest.param(("regions", 0, "angles", 0, "peaks"), [0, 3], "counted from 0 to 2", id="angle to no peak"),
    pytest.param(("regions", 0, "cautions", 0, "gravity"), "dire", "gravity", id="unknown gravity"),
    pytest.param(("regions", 0, "verdict"), "gold", "verdict", id="unknown verdict"),
    pytest.param(("cautions",), [{}], r"cautions\[0\]", id="empty caution"),
]


@pytest.mark.parametrize(("path", "value", "words"), BROKEN)
def test_a_record_that_makes_no_sense_is_refused_with_its_place_and_left_alone(document, tmp_path, path, value, words):
    content = json_text(edited(document, *path, value=value))
    file = tmp_path / "record.json"
    file.write_text(content)
    with pytest.raises(RecordError, match=f"record.json.*{words}"):
        read_record(file)
    assert file.read_text() == content


@pytest.mark.parametrize("missing", ["picture", "regions", "cautions", "beam"])
def test_a_missing_part_is_named(document, missing):
    del document[missing]
    with pytest.raises(RecordError, match=missing):
        record_from(document)


def test_fields_that_a_later_version_may_add_do_no_harm(document):
    document["regions"][0]["peaks"][0]["colour"] = "blue"
    document["remark"] = "by hand"
    assert record_from(document).regions[0].peaks[0].d_nm == 0.2355


NOT_JSON = [
    pytest.param(b"", "broken", id="empty"),
    pytest.param(b"\x89PNG\r\n\x1a\n\x00\xff", "not a text file", id="binary"),
    pytest.param(b'{"schema": "fringespan.record/1", ', "broken: not JSON from line 1", id="cut off"),
    pytest.param(b"[" * 200_000, "nested too deeply", id="nested"),
    pytest.param(b"[1, 2]", "not a fringespan record", id="list"),
    pytest.param(b'"text"', "not a fringespan record", id="text"),
    pytest.param(b"null", "not a fringespan record", id="nothing"),
    pytest.param(b'{"schema": NaN}', "NaN is not a number", id="NaN"),
    pytest.param(b'{"schema": 1e999}', "too large", id="overflow"),
    pytest.param(b'{"schema": ' + b"9" * 100_000 + b"}", "too large", id="endless number"),
]


@pytest.mark.parametrize(("content", "words"), NOT_JSON)
@pytest.mark.parametrize("read", [read_record, read_regions])
def test_a_file_that_is_no_record_is_refused_in_one_line(tmp_path, content, words, read):
    path = tmp_path / "record.json"
    path.write_bytes(content)
    with pytest.raises(RecordError) as refusal:
        read(path)
    assert words in str(refusal.value) or "no regions in it" in str(refusal.value)
    assert str(path) in str(refusal.value)
    assert "\n" not in str(refusal.value)
    assert path.read_bytes() == content


@pytest.mark.parametrize("name", ["missing.json", ".", "a\0b"])
def test_a_file_that_cannot_be_read_is_named(tmp_path, name):
    with pytest.raises(RecordError, match="cannot be read"):
        read_record(tmp_path / name)


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | finite | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=8,
)


@given(value=json_values, seed=st.integers(0, 2**32 - 1))
@settings(max_examples=200, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_value_in_any_place_is_accepted_or_refused_but_never_breaks(tmp_path, record, value, seed):
    document = document_of(record)
    chooser, place, key = np.random.default_rng(seed), document, None
    while True:  # walk down to a random depth
        keys = list(place) if isinstance(place, dict) else range(len(place)) if isinstance(place, list) else ()
        if not len(keys):
            break
        parent, key = place, keys[int(chooser.integers(len(keys)))]
        place = parent[key]
        if chooser.random() < 0.25:
            break
    parent[key] = value
    path = tmp_path / "record.json"
    path.write_text(json.dumps(document))
    for read in (read_record, read_regions):
        with contextlib.suppress(RecordError):
            read(path)


# --- regions from a file --------------------------------------------------------------------------------------------


def test_regions_are_read_from_any_list_of_names_and_corners(tmp_path):
    path = tmp_path / "regions.json"
    corners = [[1, 2], [1, 50], [40.5, 50]]
    path.write_text(
        json.dumps({"regions": [{"name": "A", "vertices_px": corners, "colour": 1}, {"vertices_px": corners}]})
    )
    first, second = read_regions(path)
    assert first == Region("A", ((1, 2), (1, 50), (40.5, 50)))
    assert second.name == "region 2"


def test_regions_of_a_record_are_those_that_were_measured(record, tmp_path):
    path = write_record(record, tmp_path / "record.json")
    assert read_regions(path) == tuple(r.region for r in record.regions)


@pytest.mark.parametrize(
    ("content", "words"),
    [
        ({}, "no regions in it"),
        ({"regions": []}, "no regions in it"),
        ({"regions": {"name": "A"}}, "no regions in it"),
        ({"regions": [{"name": "A"}]}, r"regions\[0\] has no"),
        ({"regions": [7]}, r"regions\[0\] has no"),
        ({"regions": [{"name": "A", "vertices_px": "abc"}]}, "pairs of numbers"),
        ({"regions": [{"name": "A", "vertices_px": [[0, 0], [1, 1]]}]}, "at least three"),
        ({"regions": [{"name": "A", "vertices_px": [[0, 0], [0, 9], [9, 9]], "kind": "star"}]}, "kind must be one of"),
        ({"regions": [{"name": "A", "vertices_px": [[0, 0], [0, 9], [9, 9]], "kind": []}]}, "kind must be one of"),
    ],
)
def test_region_lists_that_make_no_sense_are_refused(tmp_path, content, words):
    path = tmp_path / "regions.json"
    path.write_text(json.dumps(content))
    with pytest.raises(RecordError, match=f"regions.json.*{words}"):
        read_regions(path)


def test_the_form_has_a_name_and_a_number():
    assert SCHEMA == "fringespan.record/1"
