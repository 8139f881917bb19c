"""Files that a scene file names: each lies in the scene's folder or below."""

from __future__ import annotations

from pathlib import Path

from raytrace.scene.problems import Problem, quoted


def file_beside(key: str, given: str, folder: Path | None, kind: str) -> Path | Problem:
    """A file that a scene names, or why it cannot be used.

    Parameters
    ----------
    key : str
        Path of the key that names it.
    given : str
        What the key says: a path from the scene's folder.
    folder : path or None
        The scene's folder.
    kind : str
        What the file should be, in words.

    Returns
    -------
    Path or Problem
        Its absolute path, links followed.
    """
    if folder is None:
        return Problem(key, given, "has no folder to start from", "a scene that is read from a file")
    try:
        path = (folder / given).resolve()
        inside = path.is_relative_to(folder.resolve())
        is_file = path.is_file()
    except (OSError, ValueError) as problem:
        return Problem(key, given, f"cannot be looked up: {quoted(str(problem))}", kind)
    if not inside:
        return Problem(key, given, "lies outside the scene's folder", "a path below the folder of the scene file")
    if not is_file:
        return Problem(key, given, "is not a file", f"{kind}, path from the scene file")
    return path
