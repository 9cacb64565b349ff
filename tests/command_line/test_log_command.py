"""`fringespan log` lists, plots, exports and imports checks, and loses none."""

import json

import pytest

from fringespan.magnification.conditions import Conditions
from fringespan.magnification.log import CheckLog, LogEntry


@pytest.fixture
def own_log(monkeypatch, tmp_path):
    path = tmp_path / "own.sqlite"
    monkeypatch.setenv("FRINGESPAN_LOG", str(path))
    with CheckLog(path) as log:
        for number in range(1, 7):
            log.add(
                LogEntry(
                    checked_at=f"2024-0{number}-01T08:00:00+00:00",
                    conditions=Conditions(
                        instrument=f"TEM {number % 2 + 1}", indicated_magnification=4e5, camera="bottom"
                    ),
                    pictures="gold.tif",
                    sha256="00" * 32,
                    reference="Gold",
                    temperature_c=None,
                    nominal_pixel_size_nm=(0.025, 0.025),
                    pixel_size_nm=(0.0251 + 1e-5 * number, 0.0252),
                    relative_uncertainty=(0.001, 0.001),
                    shared_error=True,
                    shear=None,
                    shear_uncertainty=None,
                    coverage_factor=2.0,
                    tolerance=0.01,
                    verdict="within tolerance",
                    program_version="0.1.0",
                )
            )
    return path


def test_list_shows_the_place_and_the_newest_first(run, own_log):
    result = run("log", "list")
    assert result.exit_code == 0
    assert f"6 entries in {own_log}" in result.stdout.replace("\n", "")
    dates = [
        line.split()[1]
        for line in result.stdout.splitlines()
        if line.split()[1:] and line.split()[1].startswith("2024-")
    ]
    assert dates == sorted(dates, reverse=True)
    assert "0.02516(3)" in result.stdout


def test_list_is_filtered(run, own_log):
    result = run("log", "list", "--instrument", "TEM 1", "--since", "2024-03-01", "--json", "-")
    entries = json.loads(result.stdout)["entries"]
    assert [e["checked_at"][:7] for e in entries] == ["2024-06", "2024-04"]


def test_overdue_checks_are_named(run, own_log):
    result = run("log", "list", "--overdue", 30)
    assert "Not checked for more than 30 days" in result.stdout
    assert "TEM 1, x400 000, bottom: last on 2024-06-01" in result.stdout


@pytest.mark.parametrize("suffix", ["png", "svg", "pdf"])
def test_plot(run, own_log, tmp_path, suffix):
    figure = tmp_path / f"trend.{suffix}"
    assert run("log", "plot", figure).exit_code == 0
    assert figure.stat().st_size > 5000
    if suffix == "svg":
        text = figure.read_text()
        assert "TEM 1" in text
        assert "TEM 2" in text
        assert "tolerance" in text


def test_a_table_goes_out_and_into_another_log_once(run, own_log, tmp_path):
    table, other = tmp_path / "checks.csv", tmp_path / "other.sqlite"
    assert run("log", "export", table).exit_code == 0
    assert "6 entries added" in run("log", "import", table, "--log", other).stderr
    assert "0 entries added" in run("log", "import", table, "--log", other).stderr
    with CheckLog(own_log) as one, CheckLog(other) as two:
        assert one.csv_text() == two.csv_text()
    assert run("log", "export", "-").stdout == table.read_text()


WRONG = [
    pytest.param(("log", "plot", "trend.doc"), 2, ".png", id="figure of no form"),
    pytest.param(
        ("log", "plot", "trend.png", "--instrument", "none"), 1, "no check of these conditions", id="nothing to draw"
    ),
    pytest.param(("log", "list", "--since", "May"), 1, "since must be a date", id="no date"),
    pytest.param(("log", "withdraw", 99, "--because", "x"), 1, "no entry 99", id="no entry"),
    pytest.param(("log", "import", "absent.csv"), 1, "absent.csv", id="no table"),
    pytest.param(("log", "list", "--log", "absent.sqlite"), 1, "no log of magnification checks yet", id="no log"),
]


@pytest.mark.parametrize(("arguments", "status", "words"), WRONG)
def test_wrong_input_is_one_line_and_a_status(run, own_log, arguments, status, words):
    result = run(*arguments)
    assert result.exit_code == status
    assert words in result.stderr
    assert len(result.stderr.strip().splitlines()) == 1


def test_listing_makes_no_log(run, monkeypatch, tmp_path):
    monkeypatch.setenv("FRINGESPAN_LOG", str(tmp_path / "none.sqlite"))
    assert run("log", "list").exit_code == 1
    assert not (tmp_path / "none.sqlite").exists()
