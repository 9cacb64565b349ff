"""Output files are whole or not there."""

import errno
import os
import signal
import stat
import subprocess
import sys
import threading
import time

import pytest

from fringespan.exceptions import RecordError
from fringespan.output_file import write_whole_file

OLD, NEW = b"old content", b"new content, longer than the old"
unix_only = pytest.mark.skipif(sys.platform == "win32", reason="POSIX permissions and signals")
not_root = pytest.mark.skipif(getattr(os, "geteuid", lambda: 1)() == 0, reason="nothing is read-only for root")


@pytest.fixture
def target(tmp_path):
    path = tmp_path / "results" / "record.json"
    path.parent.mkdir()
    path.write_bytes(OLD)
    return path


def only_the_old_file_is_there(target):
    return target.read_bytes() == OLD and [p.name for p in target.parent.iterdir()] == [target.name]


def test_a_new_file_holds_the_content_and_nothing_else_is_left_in_the_folder(tmp_path):
    assert write_whole_file(tmp_path / "new.json", NEW) == tmp_path / "new.json"
    assert [(p.name, p.read_bytes()) for p in tmp_path.iterdir()] == [("new.json", NEW)]


def test_an_old_file_is_replaced(target):
    write_whole_file(target, NEW)
    assert target.read_bytes() == NEW


@unix_only
def test_the_permissions_of_the_old_file_are_kept(target):
    target.chmod(0o640)
    write_whole_file(target, NEW)
    assert stat.S_IMODE(target.stat().st_mode) == 0o640


@unix_only
def test_a_new_file_gets_the_permissions_that_the_user_gives_to_new_files(tmp_path):
    write_whole_file(tmp_path / "ours", NEW)
    (tmp_path / "plain").write_bytes(NEW)
    assert (tmp_path / "ours").stat().st_mode == (tmp_path / "plain").stat().st_mode


@unix_only
def test_a_link_stays_a_link_to_the_new_content(target, tmp_path):
    link = tmp_path / "link.json"
    link.symlink_to(target)
    write_whole_file(link, NEW)
    assert link.is_symlink()
    assert target.read_bytes() == NEW


@unix_only
def test_a_pipe_is_written_to_and_not_replaced(tmp_path):
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    received = []
    reader = threading.Thread(target=lambda: received.append(pipe.read_bytes()))
    reader.start()
    write_whole_file(pipe, NEW)
    reader.join(timeout=10)
    assert received == [NEW]
    assert stat.S_ISFIFO(pipe.stat().st_mode)


@pytest.mark.parametrize(
    ("code", "words"),
    [
        (errno.ENOSPC, "the disk is full"),
        (errno.EDQUOT, "the disk is full"),
        (errno.EROFS, "read-only disk"),
        (errno.EACCES, "read-only for you"),
        (errno.EIO, os.strerror(errno.EIO)),
    ],
)
def test_a_failure_while_writing_is_said_in_words_and_the_old_file_kept(target, monkeypatch, code, words):
    def fail(descriptor):
        raise OSError(code, os.strerror(code))

    monkeypatch.setattr(os, "fsync", fail)
    with pytest.raises(RecordError, match=f"(?s)record.json.*{words}.*the old file is kept"):
        write_whole_file(target, NEW)
    assert only_the_old_file_is_there(target)


@unix_only
def test_a_file_system_that_takes_no_more_bytes_keeps_the_old_file(target):
    # the limit on the size of a file stands in for the full disk: the system itself refuses the write
    script = (
        "import resource, signal, sys\n"
        "from fringespan.output_file import write_whole_file\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))\n"
        "write_whole_file(sys.argv[1], bytes(100_000))\n"
    )
    done = subprocess.run([sys.executable, "-c", script, str(target)], capture_output=True, text=True, check=False)
    assert "RecordError" in done.stderr
    assert "the disk is full" in done.stderr
    assert only_the_old_file_is_there(target)


def test_a_missing_folder_is_named(tmp_path):
    with pytest.raises(RecordError, match=r"there is no folder .*nowhere"):
        write_whole_file(tmp_path / "nowhere" / "record.json", NEW)


def test_a_folder_in_place_of_the_file_is_refused(tmp_path):
    with pytest.raises(RecordError, match="it is a folder"):
        write_whole_file(tmp_path, NEW)


@pytest.mark.parametrize(("name", "words"), [("x" * 300, "too long"), ("a\0b", "null")])
def test_an_impossible_name_is_refused(tmp_path, name, words):
    with pytest.raises(RecordError, match=words):
        write_whole_file(tmp_path / name, NEW)


@unix_only
@not_root
@pytest.mark.parametrize("what", ["folder", "file"])
def test_what_is_read_only_is_left_alone(target, what):
    path = target.parent if what == "folder" else target
    path.chmod(0o555)
    try:
        with pytest.raises(RecordError, match=r"read-only for you.*the old file is kept"):
            write_whole_file(target, NEW)
        assert only_the_old_file_is_there(target)
    finally:
        path.chmod(0o755)


@unix_only
def test_a_process_killed_in_the_middle_leaves_the_old_file_or_the_new(target):
    script = (
        "import sys\n"
        "from fringespan.output_file import write_whole_file\n"
        "while True:\n"
        "    for letter in b'abc':\n"
        "        write_whole_file(sys.argv[1], bytes([letter]) * 3_000_000)\n"
    )
    seen = set()
    for moment in (0.0, 0.004, 0.011, 0.017, 0.023):
        writer = subprocess.Popen([sys.executable, "-c", script, str(target)])
        try:
            deadline = time.monotonic() + 20
            while target.stat().st_size == len(OLD) and time.monotonic() < deadline:
                time.sleep(0.001)
            time.sleep(moment)
        finally:
            writer.send_signal(signal.SIGKILL)
            writer.wait()
        content = target.read_bytes()
        seen.add((len(content), len(set(content))))
    assert seen == {(3_000_000, 1)}
