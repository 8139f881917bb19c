"""Files written whole or not at all."""

from __future__ import annotations

import os
import tempfile
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
    handle, name = tempfile.mkstemp(prefix=f".{path.name[:80]}.", suffix=".part", dir=path.parent)
    try:
        with os.fdopen(handle, "wb") as file:
            if callable(content):
                content(file)
            else:
                file.write(content)
            file.flush()
            os.fsync(file.fileno())
        # mkstemp makes files private; a result gets the mode that any new file would
        umask = os.umask(0)
        os.umask(umask)
        os.chmod(name, 0o666 & ~umask)
        os.replace(name, path)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
