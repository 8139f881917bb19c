"""Measured drop sizes: text files of two columns, diameter and number, that a table [rain] names."""

from __future__ import annotations

import itertools
import re
from pathlib import Path

from raytrace.scene.beside import file_beside
from raytrace.scene.problems import Problem, quoted

LARGEST_BYTES = 1 << 20
MOST_ROWS = 2_000
SMALLEST_MM, LARGEST_MM = 1e-4, 30.0
"""Limits of a row's diameter; 0 may stand there too, where a table begins [mm]."""
LEAST_STEP = 1e-6
"""Least relative step between diameters, far above what rounding makes of one."""
LARGEST_NUMBER = 1e15
"""Largest number of drops [1/(m3 mm)]; dense fog has some 1e11."""
WORKS = "a text file of two columns, diameter_mm and drops per m3 and mm"
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)


def read_size_table(key: str, given: str, folder: Path | None) -> tuple | Problem:
    """Rows of a measured law.

    Parameters
    ----------
    key : str
        Path of the key that names the file.
    given : str
        Path of the file, from the scene's folder.
    folder : path or None
        The scene's folder.

    Returns
    -------
    (diameter_mm, number_m3_mm) or Problem
        Two tuples of n numbers: diameters that rise [mm], drops per volume and diameter [1/(m3 mm)]. Or what is wrong.
    """
    path = file_beside(key, given, folder, WORKS)
    if isinstance(path, Problem):
        return path
    try:
        size = path.stat().st_size
        if size > LARGEST_BYTES:
            return Problem(key, given, f"has {size} bytes", f"a text file of up to {LARGEST_BYTES} bytes")
        content = path.read_bytes()
    except OSError as problem:
        return Problem(key, given, f"cannot be read ({quoted(str(problem))})", "a file that may be read")
    try:
        # spreadsheets write a byte order mark
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as problem:
        line = content.count(b"\n", 0, problem.start) + 1
        return Problem(key, given, f"is no text: line {line} is not UTF-8", WORKS)
    if "\0" in text:
        line = text.count("\n", 0, text.index("\0")) + 1
        return Problem(key, given, f"is no text: line {line} has a byte of 0", WORKS)
    try:
        return _rows(text)
    except _Wrong as wrong:
        return Problem(key, given, *wrong.args)


class _Wrong(Exception):
    """Why a table cannot be, and what works."""


def _rows(text: str) -> tuple[tuple[float, ...], tuple[float, ...]]:
    lines, rows = [], []
    for number, line in enumerate(text.split("\n"), 1):
        line = line.partition("#")[0].strip()
        if line:
            if len(rows) == MOST_ROWS:
                raise _Wrong(f"has more than {MOST_ROWS} rows (line {number})", f"up to {MOST_ROWS} rows")
            rows.append(_row(line, number))
            lines.append(number)
    if len(rows) < 2:
        end = text.count("\n") + 1
        raise _Wrong(f"has {_count(len(rows), 'row')} up to its last line, {end}", f"{WORKS}, 2 rows or more")
    for line, (before, after) in zip(lines[1:], itertools.pairwise(rows), strict=True):
        if after[0] <= before[0] * (1.0 + LEAST_STEP):
            works = "diameters that rise, each by a millionth or more"
            raise _Wrong(f"has in line {line} {after[0]:.9g} mm after {before[0]:.9g} mm", works)
    diameter, number = (tuple(column) for column in zip(*rows, strict=True))
    if max(number) == 0.0:
        raise _Wrong(f"has no drops up to its last row, line {lines[-1]}", "a number above 0 in one row or more")
    return diameter, number


def _row(line: str, number: int) -> tuple[float, float]:
    cells = re.split(r"\s*,\s*|\s+", line)
    if len(cells) != 2:
        raise _Wrong(f"has {_count(len(cells), 'column')} in line {number}", WORKS)
    for cell in cells:
        if not _NUMBER.fullmatch(cell):
            raise _Wrong(
                f'has "{quoted(cell, 24)}" in line {number}, which is no number', f"{WORKS}; # begins a comment"
            )
    diameter, drops = map(float, cells)
    if diameter != 0.0 and not SMALLEST_MM <= diameter <= LARGEST_MM:
        works = f"diameters from {SMALLEST_MM:g} to {LARGEST_MM:g} mm, or 0"
        raise _Wrong(f"has {diameter:g} mm in line {number}, which is out of range", works)
    if not 0.0 <= drops <= LARGEST_NUMBER:
        works = f"numbers from 0 to {LARGEST_NUMBER:g}"
        raise _Wrong(f"has {drops:g} drops per m3 and mm in line {number}, which is out of range", works)
    return diameter, drops


def _count(number: int, what: str) -> str:
    return f"{number} {what}" if number == 1 else f"{number} {what}s"
