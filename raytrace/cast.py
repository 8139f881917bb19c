"""The door to compiled code: makes type, order and finiteness of arrays right, so that each kernel compiles once."""

from __future__ import annotations

import numpy as np


def f64(array, *, name: str = "array", ndim: int | None = None) -> np.ndarray:
    """C-ordered, finite float64 array.

    Raises
    ------
    ValueError
        If a value is not finite or the number of dimensions is not `ndim`.
    """
    out = np.ascontiguousarray(array, dtype=np.float64)
    if ndim is not None and out.ndim != ndim:
        raise ValueError(f"{name} has {out.ndim} dimensions, {ndim} are needed")
    if not np.isfinite(out).all():
        raise ValueError(f"{name} has values that are not finite")
    # a read-only array would be a second type to the compiler
    return out if out.flags.writeable else out.copy()
