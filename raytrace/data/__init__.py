"""Published tables as CSV files, and the one function that reads them. README.md lists each table and its source."""

from __future__ import annotations

import csv
from functools import lru_cache
from pathlib import Path

import numpy as np

FOLDER = Path(__file__).parent


@lru_cache(maxsize=32)
def read_table(name: str) -> dict[str, np.ndarray]:
    """Read one table.

    Parameters
    ----------
    name : str
        File name without `.csv`.

    Returns
    -------
    dict of str to ndarray, shape (rows,)
        One read-only float64 array for each numeric column; the column `certainty` (where there is one) is text.
        Lines that begin with `#` are the table's citation and are skipped.

    Raises
    ------
    FileNotFoundError
        If there is no table of that name.
    """
    with open(FOLDER / f"{name}.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.reader(line for line in file if not line.startswith("#")))
    columns = {}
    for column, values in zip(rows[0], zip(*rows[1:], strict=True), strict=True):
        array = np.array(values) if column == "certainty" else np.array(values, dtype=np.float64)
        array.setflags(write=False)
        columns[column] = array
    return columns
