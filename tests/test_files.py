"""Files are written whole or not at all, whatever happens in the middle."""

import errno
import os
import signal
import subprocess
import sys

import pytest

from raytrace.files import write_atomic

POSIX = pytest.mark.skipif(os.name != "posix", reason="modes and signals of POSIX")


def names(folder) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def test_bytes_and_callbacks(tmp_path):
    path = tmp_path / "a.bin"
    write_atomic(path, b"one")
    assert path.read_bytes() == b"one"
    write_atomic(str(path), lambda file: (file.write(b"tw"), file.write(b"o")))
    assert path.read_bytes() == b"two"
    assert names(tmp_path) == ["a.bin"]


def test_a_longer_file_is_replaced_whole(tmp_path):
    path = tmp_path / "a.bin"
    path.write_bytes(b"x" * 100_000)
    write_atomic(path, b"short")
    assert path.read_bytes() == b"short"


@POSIX
@pytest.mark.parametrize("umask", [0o022, 0o077, 0o000])
def test_a_file_gets_the_mode_that_any_new_file_gets(tmp_path, umask):
    before = os.umask(umask)
    try:
        write_atomic(tmp_path / "a.bin", b"")
        (tmp_path / "b.bin").write_bytes(b"")
    finally:
        os.umask(before)
    assert (tmp_path / "a.bin").stat().st_mode == (tmp_path / "b.bin").stat().st_mode
    assert (tmp_path / "a.bin").stat().st_mode & 0o777 == 0o666 & ~umask


def test_long_names(tmp_path):
    # 255 bytes are the longest name that common file systems take
    path = tmp_path / ("\u00e9" * 125 + ".png")
    write_atomic(path, b"one")
    assert names(tmp_path) == [path.name]


@pytest.mark.parametrize("failure", [ValueError("no"), KeyboardInterrupt(), MemoryError(), OSError(errno.EIO, "no")])
@pytest.mark.parametrize("old", [b"old", None])
def test_a_failure_in_the_callback_leaves_the_old_file_and_nothing_else(tmp_path, failure, old):
    path = tmp_path / "a.bin"
    if old is not None:
        path.write_bytes(old)

    def fail(file):
        file.write(b"half of it")
        file.flush()
        raise failure

    with pytest.raises(type(failure)):
        write_atomic(path, fail)
    assert names(tmp_path) == ([] if old is None else ["a.bin"])
    assert old is None or path.read_bytes() == old


@pytest.mark.parametrize("step", ["fsync", "replace"])
def test_a_full_disk_leaves_the_old_file_and_nothing_else(tmp_path, monkeypatch, step):
    path = tmp_path / "a.bin"
    path.write_bytes(b"old")

    def full(*arguments):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, step, full)
    with pytest.raises(OSError) as caught:
        write_atomic(path, b"new")
    monkeypatch.undo()
    assert caught.value.errno == errno.ENOSPC
    assert names(tmp_path) == ["a.bin"] and path.read_bytes() == b"old"


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="this system has no device that is always full")
def test_a_disk_that_fills_while_writing(tmp_path, monkeypatch):
    # the kernel's own "no space left", on the way through the buffer
    real = os.open
    monkeypatch.setattr(os, "open", lambda path, flags, mode: real("/dev/full", os.O_WRONLY))
    with pytest.raises(OSError) as caught:
        write_atomic(tmp_path / "a.bin", b"x" * 100_000)
    assert caught.value.errno == errno.ENOSPC
    assert names(tmp_path) == []


def test_a_folder_that_is_not_there(tmp_path):
    with pytest.raises(FileNotFoundError):
        write_atomic(tmp_path / "none" / "a.bin", b"")


def test_a_folder_in_the_files_place(tmp_path):
    (tmp_path / "a.bin").mkdir()
    with pytest.raises(OSError):
        write_atomic(tmp_path / "a.bin", b"")
    assert names(tmp_path) == ["a.bin"]


SLOWLY = """
import sys, time
from raytrace.files import write_atomic

def write(file):
    file.write(b"n" * 1_000_000)
    file.flush()
    print("half", flush=True)
    sys.stdin.readline()
    file.write(b"n" * 1_000_000)

write_atomic(sys.argv[1], write)
"""


@POSIX
@pytest.mark.parametrize("old", [b"old", None])
@pytest.mark.parametrize("kill", [True, False])
def test_kill_in_the_middle_leaves_the_old_file_whole(tmp_path, old, kill):
    path = tmp_path / "a.bin"
    if old is not None:
        path.write_bytes(old)
    command = [sys.executable, "-c", SLOWLY, str(path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as process:
        assert process.stdout.readline() == b"half\n"
        assert len(names(tmp_path)) == (1 if old is None else 2)
        if kill:
            process.send_signal(signal.SIGKILL)
            process.wait()
            assert process.returncode == -signal.SIGKILL
            assert not path.exists() if old is None else path.read_bytes() == old
        else:
            # the control: left alone, the same process does write the file
            process.communicate(b"\n")
            assert process.returncode == 0 and path.read_bytes() == b"n" * 2_000_000
            assert names(tmp_path) == ["a.bin"]
