"""`fringespan check` corrects the sample's wrong pixel size, logs it, reports it; `--from-log` applies it."""

import csv
import io
import json
import re

import pytest

from fringespan.record import read_record
from fringespan.sample_pictures import sample_file

SAMPLE = sample_file("gold_reference.ome.tif")
TRUE_NM = json.loads(sample_file("gold_reference.json").read_text(encoding="utf-8"))["pixel_size"]["true_nm"]


@pytest.fixture(autouse=True)
def own_log(monkeypatch, tmp_path):
    monkeypatch.setenv("FRINGESPAN_LOG", str(tmp_path / "own.sqlite"))
    return tmp_path / "own.sqlite"


def test_the_sample_is_corrected_within_its_stated_uncertainty(run, tmp_path):
    result = run("check", SAMPLE, "--reference", "gold", "--temperature", 25, "--json", tmp_path / "check.json")
    assert result.exit_code == 0
    assert "Magnification check on Gold" in result.stdout
    assert "budget of the scale along rows" in result.stdout
    assert "Largest contribution: reference spacing" in result.stdout
    found = read_record(tmp_path / "check.json").magnification
    for axis in range(2):
        off = found["pixel_size_nm"][axis] - TRUE_NM[axis]
        assert abs(off) < found["scale_uncertainty"][axis] * 0.025
        assert abs(off / TRUE_NM[axis]) < 5e-4


def test_the_budget_adds_up_to_what_is_stated(run, tmp_path):
    run("check", SAMPLE, "--reference", "gold", "--json", tmp_path / "check.json")
    found = read_record(tmp_path / "check.json").magnification
    for axis, quantity in enumerate(("scale along rows", "scale along columns")):
        lines = [line for line in found["budget"] if line["quantity"] == quantity]
        combined = sum((line["standard_uncertainty"] * line["sensitivity"]) ** 2 for line in lines) ** 0.5
        assert combined == pytest.approx(found["scale_uncertainty"][axis])
        assert found["expanded_uncertainty"][axis] == pytest.approx(2 * combined)
    assert {"fit", "spread between regions", "spread between pictures", "reference spacing", "tilt"} <= {
        line["source"] for line in lines
    }


def test_tolerance_and_acceptance_decide_the_verdict(run):
    words = {}
    for tolerance, acceptance in ((2, "simple"), (1, "simple"), (1.2, "guarded")):
        result = run("check", SAMPLE, "--reference", "gold", "--tolerance", tolerance, "--acceptance", acceptance)
        words[tolerance, acceptance] = " ".join(result.stdout.split())
    assert "Within the tolerance of 2 %" in words[2, "simple"]
    assert "Outside the tolerance of 1 %" in words[1, "simple"]
    assert "Too uncertain to say whether within the tolerance of 1.2 %" in words[1.2, "guarded"]


def test_a_certificate_s_spacing_needs_its_uncertainty(run):
    assert run("check", SAMPLE, "--reference", 0.20393).exit_code == 2
    result = run("check", SAMPLE, "--reference", 0.20393, "--reference-uncertainty", 0.05, "--temperature", 25)
    assert result.exit_code == 0
    # two directions of one spacing: one factor
    assert "one factor for all directions" in " ".join(result.stdout.split())


def test_table_and_figure(run, tmp_path):
    run("check", SAMPLE, "--reference", "gold", "--csv", tmp_path / "t.csv", "--figure", tmp_path / "f.svg")
    rows = list(csv.DictReader(io.StringIO((tmp_path / "t.csv").read_text())))
    assert {row["used"] for row in rows} == {"yes", "no"}
    assert all(row["reason"] for row in rows if row["used"] == "no")
    strongest = rows[0]
    assert float(strongest["corrected_d_nm"]) == pytest.approx(0.20393, rel=5e-4)
    assert "Ellipses of Gold" in (tmp_path / "f.svg").read_text()


def test_several_pictures_are_one_check_with_a_record_each(run, tmp_path):
    second = tmp_path / "second.ome.tif"
    second.write_bytes(SAMPLE.read_bytes())
    result = run("check", SAMPLE, second, "--reference", "gold", "--json", tmp_path / "r.json")
    assert result.exit_code == 0
    records = [read_record(tmp_path / f"r.{name}.json") for name in ("gold_reference", "second")]
    assert records[0].magnification == records[1].magnification
    assert len(records[0].magnification["regions"]) == 2


# --- log and --from-log ---------------------------------------------------------------------------------------------


def test_a_logged_check_corrects_later_pictures_and_they_say_so(run, own_log, tmp_path):
    logged = run("check", SAMPLE, "--reference", "gold", "--log", "own", "--instrument", "TEM 2", "--voltage", 200)
    assert f"entry 1 added to the log {own_log}" in logged.stderr
    result = run("measure", SAMPLE, "--from-log", "--json", tmp_path / "m.json")
    assert result.exit_code == 0
    picture = read_record(tmp_path / "m.json").picture
    assert picture.pixel_size_nm == pytest.approx(TRUE_NM, rel=5e-4)
    assert picture.pixel_size_relative_uncertainty == pytest.approx(1e-3, rel=0.05)
    assert re.match(
        r"magnification check no. 1 of \d{4}-\d\d-\d\d on Gold, nominal 0.025 x 0.025 nm", picture.pixel_size_source
    )
    by_file = run("measure", SAMPLE, "--from-log", f"{own_log}:1", "--json", tmp_path / "n.json")
    assert by_file.exit_code == 0
    assert read_record(tmp_path / "n.json").picture == picture
    # without the option nothing is applied
    run("measure", SAMPLE, "--json", tmp_path / "o.json")
    assert read_record(tmp_path / "o.json").picture.pixel_size_nm == (0.025, 0.025)


def test_the_log_keeps_when_the_pictures_were_taken(run):
    run("check", SAMPLE, "--reference", "gold", "--log", "own", "--date", "2024-05-06T07:08:09+00:00")
    (entry,) = json.loads(run("log", "list", "--json", "-").stdout)["entries"]
    assert entry["checked_at"] == "2024-05-06T07:08:09+00:00"
    assert json.loads(entry["details"])["reference"] == "au"
    assert run("check", SAMPLE, "--reference", "gold", "--date", "May").exit_code == 2


def test_a_withdrawn_check_is_not_applied(run, own_log):
    run("check", SAMPLE, "--reference", "gold", "--log", "own")
    assert run("log", "withdraw", 1, "--because", "wrong specimen").exit_code == 0
    result = run("measure", SAMPLE, "--from-log")
    assert result.exit_code == 1
    assert "no check of the nominal pixel size" in result.stderr
    assert "wrong specimen" in run("measure", SAMPLE, "--from-log", 1).stderr
    run("log", "restore", 1)
    assert run("measure", SAMPLE, "--from-log").exit_code == 0


def test_checks_under_different_conditions_are_asked_about(run):
    for instrument in ("TEM 1", "TEM 2"):
        run("check", SAMPLE, "--reference", "gold", "--log", "own", "--instrument", instrument)
    result = run("measure", SAMPLE, "--from-log")
    assert result.exit_code == 1
    assert "--from-log NUMBER: 2 (TEM 2); 1 (TEM 1)" in result.stderr
    assert run("measure", SAMPLE, "--from-log", 1).exit_code == 0


def test_from_log_refuses_what_cannot_be(run, picture, own_log, tmp_path):
    assert "no log of magnification checks yet" in run("measure", SAMPLE, "--from-log").stderr
    run("check", SAMPLE, "--reference", "gold", "--log", "own")
    assert "the picture has none" in run("measure", picture, "--from-log").stderr
    assert "checked the nominal pixel size" in run("measure", picture, "--pixel-size", 0.05, "--from-log", 1).stderr
    assert run("measure", SAMPLE, "--from-log", "--pixel-size-uncertainty", 1).exit_code == 2
    # the option before the picture takes it for a log
    wrong = run("measure", "--from-log", SAMPLE, SAMPLE)
    assert wrong.exit_code == 2
    assert "after the pictures" in wrong.stderr


# --- report, internal standard --------------------------------------------------------------------------------------


def test_report_as_a_page_that_needs_nothing_else(run, tmp_path):
    result = run(
        "check", SAMPLE, "--reference", "gold", "--report", tmp_path / "check.html", "--specimen", "foil <3>", "--tolerance", 1,
        "--remark", "after the service",
    )  # fmt: skip
    assert result.exit_code == 0
    page = (tmp_path / "check.html").read_text(encoding="utf-8")
    for words in (
        "foil &lt;3&gt;",
        "after the service",
        "reference spacing",
        "outside tolerance",
        "fringespan 0.",
        "Reflections",
        "degrees of freedom",
    ):
        assert words in page, words
    import hashlib

    assert hashlib.sha256(SAMPLE.read_bytes()).hexdigest() in page
    assert page.count("<svg") == 2
    assert not re.search(r'(src|href)="(?!#|data:)', page)
    ids = re.findall(r'\bid="([^"]+)"', page)
    assert len(ids) == len(set(ids))


def test_report_as_pdf(run, tmp_path):
    assert run("check", SAMPLE, "--reference", "gold", "--report", tmp_path / "check.pdf").exit_code == 0
    content = (tmp_path / "check.pdf").read_bytes()
    assert content.startswith(b"%PDF")
    assert content.count(b"/Type /Page\n") + content.count(b"/Type /Page ") >= 3


def test_one_region_calibrates_the_other(run, tmp_path):
    """Two halves of the same foil: the mismatch is zero although the pixel size is wrong."""
    result = run(
        "check", SAMPLE, "--reference", "gold", "--standard", "left", "--region", "left: 0,0 0,250 511,250 511,0",
        "--region", "right: 0,261 0,511 511,511 511,261", "--json", tmp_path / "r.json",
    )  # fmt: skip
    assert result.exit_code == 0
    assert "Mismatch against Gold in the same picture" in result.stdout
    rows = [line.split() for line in result.stdout[result.stdout.index("Mismatch") :].splitlines() if "right" in line]
    assert len(rows) >= 4
    found = read_record(tmp_path / "r.json").magnification["mismatches"]
    assert len(found) == len(rows)
    for mismatch in found:
        assert abs(mismatch["mismatch_percent"]) < 4 * mismatch["mismatch_uncertainty_percent"]
    assert abs(found[0]["mismatch_percent"]) < 0.1


WRONG = [
    pytest.param(("check", SAMPLE), 2, "--reference", id="no reference"),
    pytest.param(("check", SAMPLE, "--reference", "unobtainium"), 1, "no phase called", id="no such phase"),
    pytest.param(
        ("check", SAMPLE, "--reference", "gold", "--report", "r.doc"), 2, ".html or .pdf", id="report of no form"
    ),
    pytest.param(
        ("check", SAMPLE, "--reference", "gold", "--standard", "film"), 2, "none of the regions", id="no region"
    ),
    pytest.param(("check", SAMPLE, "--reference", "gold", "--tolerance", 0), 2, "tolerance", id="tolerance 0"),
    pytest.param(
        ("check", SAMPLE, "--reference", "gold", "--magnification", -5), 2, "magnification", id="magnification"
    ),
    pytest.param(("check", SAMPLE, "--reference", "gold", "--csv", SAMPLE), 2, "overwritten", id="over the picture"),
    pytest.param(("check", SAMPLE, "--reference", 0.9, "--reference-uncertainty", 1), 1, "within 10 %", id="not there"),
    pytest.param(("check", "absent.tif", "--reference", "gold"), 1, "absent.tif", id="no file"),
]


@pytest.mark.parametrize(("arguments", "status", "words"), WRONG)
def test_wrong_input_is_one_line_and_a_status(run, arguments, status, words):
    result = run(*arguments)
    assert result.exit_code == status
    assert words in result.stderr
    assert len(result.stderr.strip().splitlines()) == 1


def test_a_picture_without_a_pixel_size_is_told_what_to_do(run, picture):
    result = run("check", picture, "--reference", "gold")
    assert result.exit_code == 1
    assert "--pixel-size NM" in result.stderr
