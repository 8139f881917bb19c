"""Files written whole or not at all."""

from __future__ import annotations

import contextlib
import os
import secrets
from pathlib import Path

_OPEN_FILES = "/proc/self/fd"


def write_atomic(path, content) -> None:
    """Write a file so that whoever looks finds the old one or the new one, never a part.

    The content goes to a file without a name, where the system has such, so that also a killed process leaves nothing;
    elsewhere to a hidden one. It is forced to disk and takes its name in one step.

    Parameters
    ----------
    path : path-like
    content : bytes or callable
        The bytes, or a function that gets the open binary file and writes them.

    Raises
    ------
    OSError
        If the folder cannot be written or the disk is full; nothing is left behind.
    """
    path = Path(path)
    hidden = path.parent / f".raytrace-{secrets.token_hex(8)}.part"
    handle, has_name = _open(hidden)
    try:
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
        os.replace(hidden, path)
    except BaseException:
        hidden.unlink(missing_ok=True)
        raise


def _open(hidden: Path) -> tuple[int, bool]:
    """A new file, with the mode that any new file would get, and whether it has a name yet."""
    if hasattr(os, "O_TMPFILE") and os.path.isdir(_OPEN_FILES):
        # not every file system knows files without a name
        with contextlib.suppress(OSError):
            return os.open(hidden.parent, os.O_WRONLY | os.O_TMPFILE, 0o666), False
    flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0)
    return os.open(hidden, flags, 0o666), True
