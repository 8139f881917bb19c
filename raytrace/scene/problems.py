"""Problems of a scene file, and how each is put into one line."""

from __future__ import annotations

import datetime as dt
import difflib
import math
from typing import Any, NamedTuple


class Problem(NamedTuple):
    """One thing that is wrong.

    Attributes
    ----------
    key : str
        Path of the key, as `camera.width_px` or `rain[1].near_m`.
    given : object
        The value; None where a key is missing or the whole table is meant.
    why : str
        Why it cannot be, fit to follow the value.
    works : str
        What would work.
    """

    key: str
    given: Any
    why: str
    works: str

    def line(self, file: str) -> str:
        """The problem as one line of text."""
        # what stands in a table or an array is too long for a line, and the rest of the line says that it is one
        given = "" if self.given is None or isinstance(self.given, (dict, list)) else f" {in_toml(self.given)}"
        return f"{quoted(file, 200)}: {quoted(self.key, 120)}:{given} {self.why}; what works: {self.works}"


def quoted(text: str, most: int = 60) -> str:
    """Text on one line: control characters and stray surrogates escaped, shortened in the middle."""
    out = "".join(c if c.isprintable() else c.encode("unicode_escape", "surrogatepass").decode() for c in text)
    if len(out) > most:
        keep = (most - 3) // 2
        out = f"{out[:keep]}...{out[-keep:]}"
    return out


def in_toml(value) -> str:
    """A value as it would stand in a TOML file, on one line, shortened."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f'"{quoted(value)}"'
    if isinstance(value, float):
        if math.isnan(value) or math.isinf(value):
            return str(value)
        text = f"{value:g}" if float(f"{value:g}") == value else repr(value)
        # so that it is told from a whole number
        return text if set(text) & set(".e") else text + ".0"
    if isinstance(value, int):
        # a whole number can have any number of digits, and Python refuses to print very long ones
        return str(value) if abs(value) < 10**20 else f"a whole number of {value.bit_length()} bits"
    if isinstance(value, (dt.datetime, dt.date, dt.time)):
        return value.isoformat()
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, (list, tuple)):
        return "an array"
    return quoted(str(value))


def kind_in_toml(value) -> str:
    """What TOML calls the kind of a value."""
    for kind, name in (
        (bool, "a boolean"),
        (str, "a string"),
        (int, "a whole number"),
        (float, "a number"),
        (dt.datetime, "a date-time"),
        (dt.date, "a date"),
        (dt.time, "a time"),
        (dict, "a table"),
        (list, "an array"),
    ):
        if isinstance(value, kind):
            return name
    return type(value).__name__


def nearest(word: str, valid, elsewhere: dict[str, list[str]] | None = None) -> str:
    """What to write in place of an unknown key.

    Parameters
    ----------
    word : str
    valid : sequence of str
        Keys that the table has.
    elsewhere : dict of str to list of str, optional
        Keys of the other tables, by table.
    """
    # a key of another table is more likely in the wrong place than misspelt
    homes = [f"[{table}]" for table, keys in (elsewhere or {}).items() if word in keys]
    if homes:
        return f'"{word}" in table {" or ".join(homes)}'
    close = difflib.get_close_matches(word[:80].lower(), list(valid), n=1, cutoff=0.6)
    if close:
        return f'"{close[0]}"'
    return "one of " + ", ".join(valid)
