"""Files are written whole or not at all, whatever happens in the middle."""

import errno
import os
import signal
import subprocess
import sys

import pytest

from raytrace import files
from raytrace.files import is_same_file, write_atomic, write_together

NAMELESS = hasattr(os, "O_TMPFILE") and os.path.isdir(files._OPEN_FILES)
POSIX = pytest.mark.skipif(os.name != "posix", reason="modes and signals of POSIX")


@pytest.fixture(autouse=True, params=[True, False], ids=["nameless", "hidden"])
def way(request, monkeypatch):
    """Both ways to write: to a file without a name, and to a hidden one where the system has no such files."""
    if request.param and not NAMELESS:
        pytest.skip("this system has no files without a name")
    if not request.param:
        monkeypatch.delattr(os, "O_TMPFILE", raising=False)
    return request.param


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
import os, sys
if sys.argv[2] == "False":
    vars(os).pop("O_TMPFILE", None)
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
def test_kill_in_the_middle_leaves_the_old_file_whole(tmp_path, old, kill, way):
    path = tmp_path / "a.bin"
    if old is not None:
        path.write_bytes(old)
    command = [sys.executable, "-c", SLOWLY, str(path), str(way)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as process:
        assert process.stdout.readline() == b"half\n"
        beside = [name for name in names(tmp_path) if name != "a.bin"]
        # where files without a name can be had, a killed process leaves nothing; else a hidden file, never a result
        assert len(beside) == (0 if way else 1) and all(name.startswith(".") for name in beside)
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


def test_a_file_system_without_nameless_files(tmp_path, monkeypatch):
    real = os.open

    def refuse(path, flags, mode):
        if flags & getattr(os, "O_TMPFILE", 0) == getattr(os, "O_TMPFILE", -1):
            raise OSError(errno.EOPNOTSUPP, os.strerror(errno.EOPNOTSUPP))
        return real(path, flags, mode)

    monkeypatch.setattr(os, "open", refuse)
    write_atomic(tmp_path / "a.bin", b"one")
    assert names(tmp_path) == ["a.bin"] and (tmp_path / "a.bin").read_bytes() == b"one"


def test_the_old_file_stands_until_the_new_one_is_on_the_disk(tmp_path, monkeypatch):
    path, steps = tmp_path / "a.bin", []
    path.write_bytes(b"old")

    def watch(step):
        real = getattr(os, step)
        monkeypatch.setattr(os, step, lambda *a: (steps.append((step, path.read_bytes())), real(*a)))

    watch("fsync")
    watch("replace")
    write_atomic(path, b"new")
    assert steps == [("fsync", b"old"), ("replace", b"old")] and path.read_bytes() == b"new"


# --- several at once, links, and what is no regular file


def test_several_files(tmp_path):
    write_together([(tmp_path / "a", b"one"), (tmp_path / "b", lambda file: file.write(b"two"))])
    assert names(tmp_path) == ["a", "b"] and (tmp_path / "b").read_bytes() == b"two"
    write_together([(tmp_path / "a", b"three"), (tmp_path / "b", b"four")])
    assert names(tmp_path) == ["a", "b"] and (tmp_path / "a").read_bytes() == b"three"
    write_together([])


@pytest.mark.parametrize("failure", [OSError(errno.ENOSPC, "no"), KeyboardInterrupt()])
@pytest.mark.parametrize("step", ["content", "replace"])
def test_all_files_or_none(tmp_path, monkeypatch, failure, step):
    (tmp_path / "a").write_bytes(b"old")

    def fail(*arguments):
        raise failure

    real = os.replace
    if step == "replace":
        monkeypatch.setattr(os, "replace", lambda one, other: fail() if other.name == "c" else real(one, other))
    with pytest.raises(type(failure)):
        write_together(
            [(tmp_path / "a", b"new"), (tmp_path / "b", b"new"), (tmp_path / "c", fail if step == "content" else b"")]
        )
    assert names(tmp_path) == ["a"] and (tmp_path / "a").read_bytes() == b"old"


@POSIX
def test_a_link_is_kept_and_its_file_written(tmp_path):
    (tmp_path / "folder").mkdir()
    (tmp_path / "folder" / "a").write_bytes(b"old")
    (tmp_path / "link").symlink_to("folder/a")
    (tmp_path / "dangling").symlink_to("folder/b")
    for link, name in (("link", "a"), ("dangling", "b")):
        write_atomic(tmp_path / link, b"new")
        assert (tmp_path / link).is_symlink() and (tmp_path / "folder" / name).read_bytes() == b"new"
    assert names(tmp_path) == ["dangling", "folder", "link"] and names(tmp_path / "folder") == ["a", "b"]
    (tmp_path / "loop").symlink_to("loop")
    with pytest.raises(OSError):
        write_atomic(tmp_path / "loop", b"")


@POSIX
def test_what_is_no_regular_file_stays(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "link").symlink_to("pipe")
    reader, writer = os.pipe()
    try:
        for path in (tmp_path / "pipe", tmp_path / "link", f"{files._OPEN_FILES}/{writer}"):
            if os.path.lexists(path):
                with pytest.raises(OSError, match="is no regular file"):
                    write_together([(tmp_path / "a", b""), (path, b"")])
    finally:
        os.close(reader)
        os.close(writer)
    assert names(tmp_path) == ["link", "pipe"] and (tmp_path / "pipe").is_fifo() and (tmp_path / "link").is_symlink()


@POSIX
def test_one_file_by_several_names(tmp_path):
    (tmp_path / "a").write_bytes(b"")
    (tmp_path / "soft").symlink_to("a")
    os.link(tmp_path / "a", tmp_path / "hard")
    (tmp_path / "dangling").symlink_to("b")
    a = tmp_path / "a"
    assert (
        is_same_file(a, tmp_path / "soft")
        and is_same_file(a, tmp_path / "hard")
        and is_same_file(a, tmp_path / "." / "a")
    )
    assert is_same_file(tmp_path / "dangling", tmp_path / "b") and not is_same_file(a, tmp_path / "b")
