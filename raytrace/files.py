"""Files written whole or not at all, one by one or several together."""

from __future__ import annotations

import contextlib
import errno
import os
import secrets
import stat
from pathlib import Path

_OPEN_FILES = "/proc/self/fd"


def write_atomic(path, content) -> None:
    """Write a file so that whoever looks finds the old one or the new one, never a part.

    The content goes to a file without a name, where the system has such, so that also a killed process leaves nothing;
    elsewhere to a hidden one. It is forced to disk and takes its name in one step. A link is kept, and the file that
    it leads to is written.

    Parameters
    ----------
    path : path-like
    content : bytes or callable
        The bytes, or a function that gets the open binary file and writes them.

    Raises
    ------
    OSError
        If the folder cannot be written, the disk is full, or the path is a folder, a device, a pipe or a socket;
        nothing is left behind.
    """
    write_together([(path, content)])


def write_together(files) -> None:
    """Write several files, all of them or none: each is whole on the disk before the first takes its name.

    Parameters
    ----------
    files : sequence of (path-like, bytes or callable)
        As for `write_atomic`; each path leads to another file.

    Raises
    ------
    OSError
        As for `write_atomic`. Files that had taken their names by then give them back, the old ones where there were
        any; only a process that is killed between two names, or a file system without links, can leave new beside old.
    """
    targets, hidden, kept = [regular_target(path) for path, _ in files], [], []
    try:
        for target, (_, content) in zip(targets, files, strict=True):
            hidden.append(_beside(target))
            _stage(hidden[-1], content)
        # nothing can fail after the last one, so its old file need not be kept
        kept = [_keep(target) for target in targets[:-1]]
        done = []
        try:
            for part, target in zip(hidden, targets, strict=True):
                os.replace(part, target)
                done.append(target)
        except BaseException:
            _give_back(zip(done, kept, strict=False))
            raise
    finally:
        for part in [*hidden, *(old for _, old in kept if old is not None)]:
            # those that have taken their names are gone
            with contextlib.suppress(OSError):
                part.unlink()


def regular_target(path) -> Path:
    """The regular file that a path leads to, links followed, or the place of one that is not there yet.

    Raises
    ------
    OSError
        If there is something else: a folder, a device, a pipe, a socket, or an open file without a name.
    """
    target = Path(os.path.realpath(path))
    try:
        found = os.stat(path)
    except FileNotFoundError:
        return target
    if stat.S_ISDIR(found.st_mode):
        raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR), str(path))
    if not stat.S_ISREG(found.st_mode) or not (target.exists() and target.samefile(path)):
        raise OSError(errno.EINVAL, "is no regular file", str(path))
    return target


def is_same_file(one, other) -> bool:
    """Whether two paths lead to one file, through links of either kind; also to one that is not there yet."""
    if os.path.realpath(one) == os.path.realpath(other):
        return True
    with contextlib.suppress(OSError):
        return os.path.samefile(one, other)
    return False


def _beside(target: Path) -> Path:
    return target.parent / f".raytrace-{secrets.token_hex(8)}.part"


def _stage(hidden: Path, content) -> None:
    """The content whole on the disk, under a hidden name."""
    handle, has_name = _open(hidden)
    with os.fdopen(handle, "wb") as file:
        if callable(content):
            content(file)
        else:
            file.write(content)
        file.flush()
        os.fsync(file.fileno())
        if not has_name:
            # a link never replaces a file, so the whole file is hidden for a moment; Python follows the link that
            # stands for the open file only where it is given a descriptor too, which the full path makes unused
            os.link(f"{_OPEN_FILES}/{file.fileno()}", hidden, src_dir_fd=file.fileno(), follow_symlinks=True)


def _keep(target: Path) -> tuple[bool, Path | None]:
    """Whether there is an old file, and a second, hidden name for it where the file system gives one."""
    if not target.exists():
        return False, None
    second = _beside(target)
    try:
        os.link(target, second)
    except OSError:
        return True, None
    return True, second


def _give_back(done) -> None:
    """Undo names that were taken: the old file back, or none where there was none."""
    for target, (existed, second) in done:
        with contextlib.suppress(OSError):
            if second is not None:
                os.replace(second, target)
            elif not existed:
                target.unlink()


def _open(hidden: Path) -> tuple[int, bool]:
    """A new file, with the mode that any new file would get, and whether it has a name yet."""
    if hasattr(os, "O_TMPFILE") and os.path.isdir(_OPEN_FILES):
        # not every file system knows files without a name
        with contextlib.suppress(OSError):
            return os.open(hidden.parent, os.O_WRONLY | os.O_TMPFILE, 0o666), False
    flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0)
    return os.open(hidden, flags, 0o666), True
