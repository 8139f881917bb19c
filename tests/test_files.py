"""Files are written whole or not at all, whatever happens in between."""

import errno
import os
import signal
import stat
import subprocess
import sys
import textwrap

import pytest

from raytrace.files import write_atomic

OLD, NEW = b"the old content", b"the new content, which is longer"
POSIX = pytest.mark.skipif(os.name != "posix", reason="modes and signals of POSIX")
NOT_ROOT = pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may write everywhere")


@pytest.fixture(params=[None, OLD], ids=["new", "over-an-old-one"])
def target(request, tmp_path):
    path = tmp_path / "picture.png"
    if request.param is not None:
        path.write_bytes(request.param)
    return path


def _as_it_was(target, before):
    """The target is untouched and nothing lies beside it."""
    assert sorted(p.name for p in target.parent.iterdir()) == ([] if before is None else [target.name])
    assert before is None or target.read_bytes() == before


def _content(path):
    return path.read_bytes() if path.exists() else None


@pytest.mark.parametrize("content", [NEW, b"", lambda file: (file.write(NEW[:5]), file.write(NEW[5:]))])
def test_writes_bytes_or_what_a_function_writes(target, content):
    write_atomic(str(target), content)
    assert target.read_bytes() == (NEW if callable(content) else content)
    assert [p.name for p in target.parent.iterdir()] == [target.name]


@pytest.mark.parametrize("failure", [RuntimeError("x"), KeyboardInterrupt(), SystemExit(3), MemoryError()], ids=repr)
def test_nothing_is_left_when_the_writer_fails(target, failure):
    before = _content(target)

    def content(file):
        file.write(b"a part of it")
        file.flush()
        raise failure

    with pytest.raises(type(failure)):
        write_atomic(target, content)
    _as_it_was(target, before)


@pytest.mark.parametrize("step", ["fsync", "replace"])
@pytest.mark.parametrize("failure", [OSError(errno.ENOSPC, "No space left on device"), KeyboardInterrupt()], ids=repr)
def test_nothing_is_left_when_the_system_fails(target, step, failure, monkeypatch):
    before = _content(target)

    def fail(*arguments, **options):
        raise failure

    monkeypatch.setattr(os, step, fail)
    with pytest.raises(type(failure)):
        write_atomic(target, NEW)
    monkeypatch.undo()
    _as_it_was(target, before)


def test_bytes_are_on_the_disk_before_they_take_the_name(target, monkeypatch):
    steps = []
    fsync, replace = os.fsync, os.replace
    monkeypatch.setattr(os, "fsync", lambda *a: (steps.append("fsync"), fsync(*a))[1])
    monkeypatch.setattr(os, "replace", lambda *a, **o: (steps.append("replace"), replace(*a, **o))[1])
    write_atomic(target, NEW)
    assert steps[:2] == ["fsync", "replace"]


def test_old_content_stays_while_the_new_is_written(target):
    before = _content(target)
    seen = []

    def content(file):
        file.write(NEW)
        file.flush()
        seen.append(_content(target))

    write_atomic(target, content)
    assert seen == [before]


@POSIX
@pytest.mark.parametrize("umask", [0o022, 0o077, 0o002])
def test_mode_is_that_of_any_new_file(target, umask):
    was = os.umask(umask)
    try:
        target.unlink(missing_ok=True)
        write_atomic(target, NEW)
    finally:
        os.umask(was)
    assert stat.S_IMODE(target.stat().st_mode) == 0o666 & ~umask


@pytest.mark.parametrize("name", ["no_such_folder/picture.png", "x" * 300 + ".png"])
def test_place_that_cannot_be_raises_oserror(tmp_path, name):
    with pytest.raises(OSError):
        write_atomic(tmp_path / name, NEW)
    assert list(tmp_path.iterdir()) == []


def test_folder_is_not_replaced(tmp_path):
    folder = tmp_path / "picture.png"
    folder.mkdir()
    with pytest.raises(OSError):
        write_atomic(folder, NEW)
    assert list(tmp_path.iterdir()) == [folder] and folder.is_dir()


def test_names_of_the_longest_kind_work(tmp_path):
    # 255 bytes is the limit of common file systems (common practice, no source)
    path = tmp_path / ("x" * 251 + ".png")
    write_atomic(path, NEW)
    assert path.read_bytes() == NEW


@POSIX
@NOT_ROOT
def test_folder_without_permission(target):
    before = _content(target)
    target.parent.chmod(0o555)
    try:
        with pytest.raises(PermissionError):
            write_atomic(target, NEW)
    finally:
        target.parent.chmod(0o755)
    _as_it_was(target, before)


@POSIX
def test_kill_in_the_midst_of_writing(target):
    before = _content(target)
    program = """
        import sys, time
        from raytrace.files import write_atomic

        def content(file):
            file.write(b"a part of it" * 10_000)
            file.flush()
            print("writing", flush=True)
            time.sleep(60)

        write_atomic(sys.argv[1], content)
    """
    child = subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(program), str(target)], stdout=subprocess.PIPE, text=True
    )
    with child:
        assert child.stdout.readline() == "writing\n"
        child.send_signal(signal.SIGKILL)
    assert child.returncode == -signal.SIGKILL
    assert _content(target) == before
    # nobody can tidy up after a kill, but what is left must not pass for a result
    assert all(p == target or p.name.startswith(".") for p in target.parent.iterdir())
    write_atomic(target, NEW)
    assert target.read_bytes() == NEW
