"""The log loses nothing: not with several programs at once, not with a kill at any moment, not by a change of its form."""

import dataclasses
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fringespan.exceptions import RecordError, SettingsError
from fringespan.magnification import log as log_module
from fringespan.magnification.conditions import Conditions
from fringespan.magnification.log import CheckLog, LogEntry, LogFilter, log_path

TEM_2 = Conditions(
    instrument="TEM 2", voltage_kv=200.0, mode="TEM", indicated_magnification=400_000.0, camera="bottom", binning=1
)


def entry(day=1, *, conditions=TEM_2, size=(0.02515, 0.02528), **other):
    values = {
        "checked_at": f"2025-03-{day:02d}T10:20:00+00:00",
        "conditions": conditions,
        "pictures": "gold 1.tif, gold 2.tif",
        "sha256": "ab" * 32,
        "reference": "Gold",
        "temperature_c": 22.0,
        "nominal_pixel_size_nm": (0.025, 0.025),
        "pixel_size_nm": size,
        "relative_uncertainty": (0.001, 0.0011),
        "shared_error": True,
        "shear": 0.0002,
        "shear_uncertainty": 0.0001,
        "coverage_factor": 2.0,
        "tolerance": 0.01,
        "verdict": "outside tolerance",
        "program_version": "0.1.0",
        "details": '{"scale": [1.006, 1.0112]}',
    }
    return LogEntry(**(values | other))


@pytest.fixture
def path(tmp_path):
    return tmp_path / "a folder yet to be made" / "checks.sqlite"


@pytest.fixture
def log(path):
    with CheckLog(path) as opened:
        yield opened


# --- entries --------------------------------------------------------------------------------------------------------


def test_an_entry_comes_back_the_same(log, path):
    made = entry()
    number = log.add(made).number
    with CheckLog(path) as again:
        assert again.entries() == (dataclasses.replace(made, number=number),)
        assert again.entry(number) == dataclasses.replace(made, number=number)


texts = st.text(st.characters(codec="utf-8"), max_size=40)
numbers = st.floats(1e-6, 1e6)


@settings(max_examples=40)
@given(texts, texts, st.one_of(st.none(), numbers), numbers, st.one_of(st.none(), st.floats(-0.5, 0.5)))
def test_any_entry_goes_through_the_table_and_back(name, remark, voltage, size, shear):
    made = entry(
        conditions=Conditions(instrument=name, remark=remark, voltage_kv=voltage),
        size=(size, size / 3),
        shear=shear,
        relative_uncertainty=None if shear is None else (0.001, 0.002),
    )
    with CheckLog(":memory:") as one, CheckLog(":memory:") as two:
        one.add(made)
        assert two.add_csv(one.csv_text()) == (1, 0)
        assert two.entries() == one.entries()


def test_newest_first_and_filtered(log):
    stem = dataclasses.replace(TEM_2, instrument="STEM 1", mode="STEM", indicated_magnification=5e6)
    log.add_all([entry(3), entry(1), entry(2, conditions=stem), entry(9)])
    assert [e.checked_at[8:10] for e in log.entries()] == ["09", "03", "02", "01"]
    assert [e.checked_at[8:10] for e in log.entries(LogFilter(instrument="STEM 1"))] == ["02"]
    assert [e.checked_at[8:10] for e in log.entries(LogFilter(indicated_magnification=400_000.0), most=2)] == [
        "09",
        "03",
    ]
    assert [e.checked_at[8:10] for e in log.entries(LogFilter(since="2025-03-02", until="2025-03-09"))] == ["03", "02"]
    with pytest.raises(RecordError, match="since must be a date"):
        log.entries(LogFilter(since="March"))


def test_the_same_entry_is_added_once(log):
    made = entry()
    assert log.add(made).number == log.add(made).number
    assert len(log) == 1


def test_times_are_kept_in_utc(log):
    log.add(entry(checked_at="2025-03-01T01:00:00+02:00"))
    assert log.entries()[0].checked_at == "2025-02-28T23:00:00+00:00"
    with pytest.raises(RecordError, match="date and time"):
        entry(checked_at="yesterday")


@pytest.mark.parametrize(
    ("other", "words"),
    [
        ({"pixel_size_nm": (0.0, 1.0)}, "pixel_size_nm"),
        ({"nominal_pixel_size_nm": (float("nan"), 1.0)}, "nominal_pixel_size_nm"),
        ({"relative_uncertainty": (2.0, 0.1)}, "relative_uncertainty"),
        ({"id": ""}, "id"),
    ],
)
def test_nonsense_is_refused(other, words):
    with pytest.raises(RecordError, match=words):
        entry(**other)
    with pytest.raises(SettingsError, match="voltage_kv"):
        Conditions(voltage_kv=-1.0)


# --- nothing is deleted ---------------------------------------------------------------------------------------------


def test_an_entry_found_wrong_is_marked_and_stays(log):
    number = log.add(entry()).number
    log.withdraw(number, "wrong specimen")
    assert log.entries() == ()
    (kept,) = log.entries(LogFilter(withdrawn=True))
    assert kept.withdrawn_because == "wrong specimen"
    assert kept.withdrawn_at
    log.restore(number)
    assert len(log.entries()) == 1
    with pytest.raises(RecordError, match="no entry 77"):
        log.withdraw(77, "x")
    with pytest.raises(RecordError, match="why"):
        log.withdraw(number, " ")
    with pytest.raises(RecordError, match="no entry 77"):
        log.entry(77)


@pytest.mark.parametrize(
    "statement", ["DELETE FROM checks", "UPDATE checks SET pixel_row_nm = 1", "UPDATE checks SET id = 'x'"]
)
def test_no_program_can_delete_or_change_what_was_measured(log, path, statement):
    log.add(entry())
    other = sqlite3.connect(path)
    with pytest.raises(sqlite3.IntegrityError, match="never"):
        other.execute(statement)
    other.close()
    assert len(log.entries()) == 1


# --- where it is ----------------------------------------------------------------------------------------------------


def test_its_place_can_be_moved(monkeypatch, tmp_path):
    monkeypatch.setenv("FRINGESPAN_LOG", str(tmp_path / "mine.sqlite"))
    assert log_path() == tmp_path / "mine.sqlite"
    with CheckLog() as log:
        assert log.path == tmp_path / "mine.sqlite"
    monkeypatch.delenv("FRINGESPAN_LOG")
    assert log_path().name == "magnification.sqlite"


def test_what_is_no_log_is_refused_and_left_as_it_is(tmp_path):
    other = tmp_path / "other.sqlite"
    with sqlite3.connect(other) as connection:
        connection.execute("CREATE TABLE things (a)")
    connection.close()
    text = tmp_path / "text.sqlite"
    text.write_text("no database at all, but long enough to be looked at as one")
    for file, words in ((other, "no log of magnification checks"), (text, "damaged or no log"), (tmp_path, "folder")):
        before = file.read_bytes() if file.is_file() else None
        with pytest.raises(RecordError, match=words):
            CheckLog(file)
        assert (file.read_bytes() if file.is_file() else None) == before


def test_a_place_that_cannot_be_written_is_named(tmp_path):
    file = tmp_path / "file"
    file.write_text("")
    with pytest.raises(RecordError, match=r"checks.sqlite.*cannot be opened"):
        CheckLog(file / "checks.sqlite")


# --- change of form -------------------------------------------------------------------------------------------------


def add_column(connection):
    connection.execute("ALTER TABLE checks ADD COLUMN weather TEXT NOT NULL DEFAULT ''")


def test_before_its_form_changes_the_log_is_backed_up(log, path, monkeypatch):
    log.add(entry())
    log.close()
    monkeypatch.setattr(log_module, "_MIGRATIONS", (*log_module._MIGRATIONS, add_column))
    with CheckLog(path) as changed:
        assert len(changed.entries()) == 1
    (backup,) = path.parent.glob("*.backup")
    kept = sqlite3.connect(backup)
    assert kept.execute("SELECT count(*) FROM checks").fetchone() == (1,)
    assert "weather" not in [row[1] for row in kept.execute("PRAGMA table_info (checks)")]
    kept.close()
    # once changed, opening it again changes nothing
    CheckLog(path).close()
    assert len(list(path.parent.glob("*.backup"))) == 1


def test_a_change_of_form_that_fails_leaves_the_log_as_it_was(log, path, monkeypatch):
    def fails(connection):
        add_column(connection)
        connection.execute("ALTER TABLE absent ADD COLUMN weather")

    log.add(entry())
    log.close()
    with monkeypatch.context() as patch:
        patch.setattr(log_module, "_MIGRATIONS", (*log_module._MIGRATIONS, fails))
        with pytest.raises(RecordError, match="no such table"):
            CheckLog(path)
    with CheckLog(path) as again:
        assert len(again.entries()) == 1


def test_a_log_of_a_newer_version_is_refused(log, path):
    log.close()
    with sqlite3.connect(path) as connection:
        connection.execute("PRAGMA user_version = 99")
    connection.close()
    with pytest.raises(RecordError, match="newer version"):
        CheckLog(path)


# --- CSV ------------------------------------------------------------------------------------------------------------


def test_a_table_from_elsewhere_is_added_once():
    table = "checked_at,instrument,nominal_row_nm,nominal_column_nm,pixel_row_nm,pixel_column_nm\n" + "".join(
        f"2024-0{month}-01,TEM 1,0.02,0.02,0.0201,0.0202\n" for month in (1, 2, 3)
    )
    with CheckLog(":memory:") as log:
        assert log.add_csv(table) == (3, 0)
        assert log.add_csv(table) == (0, 3)
        first = log.entries()[-1]
    assert first.conditions.instrument == "TEM 1"
    # what the table does not say is not made up
    assert first.relative_uncertainty is None
    assert first.tolerance is None


BROKEN_TABLES = [
    pytest.param("a,b\n1,2\n", "columns checked_at", id="columns missing"),
    pytest.param("{head}\n2024-01-01,0.02,0.02,wide,0.02\n", "line 2: pixel_row_nm must be a number", id="no number"),
    pytest.param("{head}\nMonday,0.02,0.02,0.02,0.02\n", "line 2: checked_at", id="no date"),
    pytest.param("{head},mood\n2024-01-01,0.02,0.02,0.02,0.02,good\n", "line 2: column 'mood'", id="unknown column"),
    pytest.param("{head}\n2024-01-01,0.02,0.02,-1,0.02\n", "line 2: pixel_size_nm", id="negative"),
    pytest.param("{head}\n2024-01-01,0.02,0.02\n", "line 2", id="cut off"),
]


@pytest.mark.parametrize(("table", "words"), BROKEN_TABLES)
def test_a_broken_table_adds_nothing(log, table, words):
    head = "checked_at,nominal_row_nm,nominal_column_nm,pixel_row_nm,pixel_column_nm"
    good = f"{head}\n2024-01-01,0.02,0.02,0.02,0.02\n"
    assert log.add_csv(good) == (1, 0)
    with pytest.raises(RecordError, match=words):
        log.add_csv(table.format(head=head), "table.csv")
    assert len(log) == 1


# --- trend, overdue -------------------------------------------------------------------------------------------------


def test_trend_is_by_conditions_and_oldest_first(log):
    stem = dataclasses.replace(TEM_2, mode="STEM")
    log.add_all([entry(5, size=(0.03, 0.04)), entry(1), entry(2, conditions=stem, tolerance=None)])
    trend = log.trend()
    assert [str(day)[:10] for day in trend.checked_at] == ["2025-03-01", "2025-03-02", "2025-03-05"]
    assert trend.groups[trend.group[1]].mode == "STEM"
    assert trend.group[0] == trend.group[2]
    assert trend.pixel_size_nm[2].tolist() == [0.03, 0.04]
    assert trend.uncertainty_nm[2] == pytest.approx([0.03 * 0.001, 0.04 * 0.0011])
    assert np.isnan(trend.tolerance[1])
    assert len(log.trend(LogFilter(mode="STEM")).checked_at) == 1


def test_what_is_overdue_is_named(log):
    now = datetime(2025, 4, 1, tzinfo=UTC)
    other = dataclasses.replace(TEM_2, binning=2)
    log.add_all([entry(1), entry(30), entry(2, conditions=other)])
    (late,) = log.overdue(14, now=now)
    assert late.conditions.binning == 2
    assert late.days == pytest.approx(29.57, abs=0.01)
    assert log.overdue(60, now=now) == ()
    # a check that was withdrawn is none
    log.withdraw(log.entries(LogFilter(since="2025-03-20"))[0].number, "camera was moved")
    assert len(log.overdue(14, now=now)) == 2
    assert log.overdue(1, now=now + timedelta(days=1))[0].days > log.overdue(1, now=now + timedelta(days=1))[1].days


# --- several programs, and their end --------------------------------------------------------------------------------

WRITER = """
import sys, uuid
sys.path.insert(0, {folder!r})
from test_log import entry
from fringespan.magnification.log import CheckLog
with CheckLog(sys.argv[1]) as log:
    print("ready", flush=True)
    for k in range(int(sys.argv[3])):
        name = f"{{sys.argv[2]}}-{{k}}"
        log.add(entry(1 + k % 28, id=name))
        # said only once it is written
        print(name, flush=True)
"""


def start_writer(path, name, count):
    code = WRITER.format(folder=os.path.dirname(__file__))
    return subprocess.Popen(
        [sys.executable, "-c", code, str(path), name, str(count)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def test_several_programs_write_at_once_and_nothing_is_lost_or_doubled(path):
    writers = [start_writer(path, f"program {n}", 40) for n in range(4)]
    for writer in writers:
        _, problem = writer.communicate(timeout=120)
        assert writer.returncode == 0, problem
    with CheckLog(path) as log:
        ids = [e.id for e in log.entries()]
        numbers = [e.number for e in log.entries()]
    assert sorted(ids) == sorted(f"program {n}-{k}" for n in range(4) for k in range(40))
    assert len(set(numbers)) == 160


@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="needs a kill that cannot be caught")
def test_a_kill_at_any_moment_leaves_every_entry_whole_or_absent(path):
    moments = random.Random(4)
    said: list[str] = []
    for turn in range(8):
        writer = start_writer(path, f"turn {turn}", 100_000)
        # the last turns are killed while they write, the first may still be making the log
        if turn >= 2:
            assert writer.stdout.readline() == "ready\n", writer.stderr.read()
        time.sleep(moments.uniform(0.0, 0.25))
        writer.send_signal(signal.SIGKILL)
        output, _ = writer.communicate(timeout=60)
        lines = [line for line in output.split("\n")[:-1] if line != "ready"]
        said += lines
    with CheckLog(path) as log:
        kept = log.entries()
        assert log._connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    ids = [e.id for e in kept]
    assert len(ids) == len(set(ids))
    assert set(said) <= set(ids)
    # at most the one entry of each turn that was written but not yet said
    assert len(set(ids) - set(said)) <= 8
    assert all(
        e == dataclasses.replace(entry(int(e.id.split("-")[1]) % 28 + 1), id=e.id, number=e.number) for e in kept
    )
    assert len(said) > 0
