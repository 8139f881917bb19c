"""What a field of the model takes, in words: for problems, and for the page that explains scene files."""

from __future__ import annotations

import datetime as dt
import typing

from pydantic import BaseModel

from raytrace.scene.problems import in_toml


def table_in(field) -> type[BaseModel] | None:
    """The model behind a field that is a table of its own."""
    if field is None:
        return None
    for kind in (field.annotation, *typing.get_args(field.annotation)):
        if isinstance(kind, type) and issubclass(kind, BaseModel):
            return kind
    return None


def works_for(field) -> str:
    """What a field takes, in words."""
    kinds = [kind for kind in (field.annotation, *typing.get_args(field.annotation)) if kind is not type(None)]
    choices = [c for kind in kinds if typing.get_origin(kind) is typing.Literal for c in typing.get_args(kind)]
    if typing.get_origin(field.annotation) is typing.Literal:
        choices = list(typing.get_args(field.annotation))
    if choices:
        return " or ".join(in_toml(choice) for choice in choices)
    if str in kinds:
        return "a string"
    if bool in kinds:
        return "true or false"
    if dt.datetime in kinds:
        return "a date-time with its offset, such as 2026-10-04T16:20:00+01:00"
    return f"{'a whole number' if int in kinds else 'a number'} from {field_range(field)}"


def field_range(field) -> str:
    """Range of a number, as `0 to 90` or `above 0 to 300`."""
    low = high = None
    open_low = ""
    for rule in field.metadata:
        for name in ("ge", "gt"):
            if getattr(rule, name, None) is not None:
                low, open_low = getattr(rule, name), "above " if name == "gt" else ""
        for name in ("le", "lt"):
            if getattr(rule, name, None) is not None:
                high = getattr(rule, name)
    low, high = (int(bound) if bound == int(bound) else bound for bound in (low, high))
    return f"{open_low}{in_toml(low)} to {in_toml(high)}"
