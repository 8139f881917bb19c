"""Files written whole or not at all."""

from __future__ import annotations

import os
import secrets
from pathlib import Path


def write_atomic(path, content) -> None:
    """Write a file so that whoever looks finds the old one or the new one, never a part.

    The content goes to a hidden file in the same folder, is forced to disk, and takes the name in one step.

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
    name = path.parent / f".raytrace-{secrets.token_hex(8)}.part"
    # made by `os.open` and not by `tempfile`, so that it gets the mode that any new file would
    handle = os.open(name, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0), 0o666)
    try:
        with os.fdopen(handle, "wb") as file:
            if callable(content):
                content(file)
            else:
                file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.replace(name, path)
    except BaseException:
        name.unlink(missing_ok=True)
        raise
