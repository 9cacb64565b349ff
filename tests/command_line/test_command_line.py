"""What holds for every command: exit status, one line for what is wrong, quick help."""

import os
import re
import signal
import subprocess
import sys
from importlib.metadata import version

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

COMMANDS = ["demo", "measure", "profile", "beam"]


def test_help_names_every_command(run):
    result = run("--help")
    assert result.exit_code == 0
    for command in COMMANDS:
        assert re.search(rf"^  {command} ", result.stdout, re.MULTILINE)


@pytest.mark.parametrize("command", COMMANDS)
def test_the_help_of_each_command_teaches_by_examples(run, command):
    result = run(command, "--help")
    assert result.exit_code == 0
    assert "Examples:" in result.stdout
    assert f"  fringespan {command}" in result.stdout


@pytest.mark.parametrize("command", ["measure", "profile"])
def test_commands_that_read_pictures_take_the_picture_options(run, command):
    text = run(command, "--help").stdout
    for option in (
        "--pixel-size NM[,NM]",
        "--pixel-size-uncertainty PERCENT[,PERCENT]",
        "--voltage KV",
        "--cs MM",
        "--defocus NM",
        "--frame",
        '--region "NAME: r,c r,c ..."',
        "--regions FILE",
        "--phases none|all|NAME,FILE.cif,...",
    ):
        assert option in text


def test_the_version_is_that_of_the_package(run):
    assert version("fringespan") in run("--version").stdout


@pytest.mark.parametrize(
    "arguments",
    [
        ["nonsense"],
        ["measure"],
        ["measure", "a.tif", "--frame", "-1"],
        ["measure", "a.tif", "--frame", "x"],
        ["measure", "a.tif", "--pixel-size", "abc"],
        ["measure", "a.tif", "--pixel-size", "1,2,3"],
        ["measure", "a.tif", "--pixel-size", "-0.02"],
        ["measure", "a.tif", "--pixel-size", "nan"],
        ["measure", "a.tif", "--pixel-size-uncertainty", "200"],
        ["measure", "a.tif", "--voltage", "0"],
        ["measure", "a.tif", "--cs", "inf"],
        ["measure", "a.tif", "--region", "A: 1,2 3,4"],
        ["measure", "a.tif", "--region", "A: 1,2 3,4 5"],
        ["measure", "a.tif", "--region", "A: 0,0 50,50 0,50 50,0 3,3"],
        ["measure", "a.tif", "--figure", "figure.jpg"],
        ["measure", "a.tif", "--json", "-", "--csv", "-"],
        ["measure", "a.tif", "--json", "same", "--csv", "./same"],
        ["measure", "a.tif", "--json", "a.tif"],
        ["measure", "a.tif", "--json", ""],
        ["measure", "a.tif", "--no-such-option"],
        ["profile", "a.tif"],
        ["profile", "a.tif", "--line", "1,2,3"],
        ["profile", "a.tif", "--line", "1,2,3,x"],
        ["profile", "a.tif", "--line", "1,2,3,4", "--width", "0"],
        ["beam"],
        ["beam", "abc"],
        ["beam", "0.1"],
        ["beam", "300", "--defocus", "60"],
        ["beam", "300", "--figure", "transfer.png"],
        ["beam", "300", "--d", "a,b"],
        ["demo", "surplus"],
    ],
    ids=" ".join,
)
def test_wrong_usage_ends_with_status_2_and_one_line_that_points_to_the_help(run, arguments):
    result = run(*arguments)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert len(result.stderr.splitlines()) == 1
    assert "--help)" in result.stderr


@pytest.mark.parametrize(
    "arguments",
    [
        ["measure", "missing.tif"],
        ["measure", "."],
        ["measure", "notes.txt"],
        ["measure", "PICTURE", "--regions", "missing.json"],
        ["measure", "PICTURE", "--regions", "notes.txt"],
        ["measure", "PICTURE", "--region", "far: 1000,1000 1000,1100 1100,1100"],
        ["measure", "PICTURE", "--region", "small: 10,10 10,20 20,20"],
        ["measure", "PICTURE", "--frame", "7"],
        ["measure", "PICTURE", "--json", "nowhere/record.json"],
        ["profile", "missing.tif", "--line", "10,10,10,200"],
        ["profile", "PICTURE", "--line", "10,10,10,20"],
        ["profile", "PICTURE", "--line", "10,10,10,2000"],
        ["demo", "--out", "notes.txt/results"],
    ],
    ids=" ".join,
)
def test_input_that_cannot_be_used_ends_with_status_1_and_one_line_that_names_it(
    run, arguments, picture, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "notes.txt").write_text("no picture")
    result = run(*(picture if a == "PICTURE" else a for a in arguments))
    assert result.exit_code == 1
    (line,) = result.stderr.splitlines()
    named = [a for a in arguments[1:] if "." in a and a != "."] or [str(picture)]
    if arguments == ["measure", "."]:
        named = [": "]
    assert any(name in line for name in named)


@given(
    arguments=st.lists(
        st.one_of(st.text(max_size=12), st.sampled_from(["--region", "--regions", "--pixel-size"])), max_size=6
    )
)
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_arguments_end_in_an_exit_status(run, tmp_path, monkeypatch, arguments):
    monkeypatch.chdir(tmp_path)
    for command in ("measure", "profile", "beam"):
        # text that contains a NUL never reaches a program
        result = run(command, *(a.replace("\0", "0") for a in arguments))
        assert result.exit_code in (0, 1, 2)
        assert "Traceback" not in result.output


@given(
    content=st.binary(max_size=400),
    beginning=st.sampled_from([b"", b"II*\0", b"MM\0*", b"\x89PNG\r\n\x1a\n", b"\x93NUMPY"]),
)
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_file_is_refused_in_one_line(run, tmp_path, content, beginning):
    path = tmp_path / "picture.tif"
    path.write_bytes(beginning + content)
    result = run("measure", path)
    assert result.exit_code in (0, 1)
    if result.exit_code == 1:
        assert len(result.stderr.splitlines()) == 1
        assert str(path) in result.stderr


# --- as a process of its own ----------------------------------------------------------------------------------------


def test_bad_input_leaves_no_traceback(start, tmp_path):
    (tmp_path / "bad.tif").write_bytes(b"II*\0\x08\0\0\0\xff\xff" + b"\1" * 50)
    done = start("measure", tmp_path / "bad.tif")
    assert done.returncode == 1
    assert done.stdout == ""
    assert len(done.stderr.splitlines()) == 1


def test_a_reader_that_goes_away_is_no_error(picture, tmp_path):
    record = tmp_path / "record.json"
    process = subprocess.Popen(
        [sys.executable, "-m", "fringespan", "measure", str(picture), "--json", str(record)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    process.stdout.close()
    assert process.wait(timeout=120) == 0
    assert process.stderr.read() == ""
    process.stderr.close()
    # the work that was asked for is done all the same
    assert record.exists()


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")
def test_an_interruption_ends_quietly_with_status_130():
    script = (
        "import time, fringespan.reading\n"
        "from fringespan.command_line import main\n"
        "def slow(*arguments, **options):\n"
        "    print('reading', flush=True)\n"
        "    time.sleep(60)\n"
        "fringespan.reading.read = slow\n"
        "main(['measure', 'picture.tif'])\n"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", script], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    assert process.stdout.readline() == "reading\n"
    process.send_signal(signal.SIGINT)
    _, errors = process.communicate(timeout=30)
    assert process.returncode == 130
    assert errors.strip() == "fringespan: stopped"


def test_help_loads_nothing_heavy():
    script = (
        "import sys\n"
        "from fringespan.command_line import main\n"
        "try: main(['--help'])\n"
        "except SystemExit: pass\n"
        "print(sorted({'numpy', 'scipy', 'matplotlib', 'numba', 'rich', 'skimage'} & set(sys.modules)))\n"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


def test_without_a_terminal_there_is_no_colour(start, picture):
    done = start("measure", picture, env={"FORCE_COLOR": ""})
    assert done.returncode == 0
    assert "\x1b" not in done.stdout


def test_names_that_are_no_text_can_be_measured_and_printed(start, picture, tmp_path):
    odd = os.fsencode(tmp_path) + b"/gr\xfcn\n\x1b.tif"
    with open(odd, "wb") as file:
        file.write(picture.read_bytes())
    done = start("measure", os.fsdecode(odd), "--csv", tmp_path / "table.csv", "--json", tmp_path / "record.json")
    assert done.returncode == 0
    assert "\x1b" not in done.stdout
    assert (tmp_path / "table.csv").exists()
