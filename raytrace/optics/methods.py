"""Which method serves a drop: rays, Airy bows, or the exact waves, by Debye order and size parameter."""

from __future__ import annotations

import numpy as np

from raytrace.data import read_table

METHODS = ("rays", "airy", "waves", "auto")
RAYS, AIRY, WAVES = range(3)
MEASURED_INDEX = (1.32, 1.353)
"""Range of the index, water's, for which the switch-over holds; it is measured at 1.3343 and checked at the ends."""
MOST_WAVES_X = 100_000.0
"""Larger drops, of 14 mm and more, are left to rays and Airy bows by all methods: the Debye series ends here."""


def choose(method: str, size_parameter, paths: int, index: float) -> np.ndarray:
    """Method for each drop and order.

    `auto` takes the cheapest method whose error against the Debye series is below 1 % of the order's largest value
    after the sun's disc, as `data/optics_methods.csv` has it: measured for water, order by order up to p = 7. What is
    not measured is left to the waves.

    Parameters
    ----------
    method : str
        One of METHODS.
    size_parameter : (m,) array
    paths : int
    index : float
        Real part, relative to air.

    Returns
    -------
    (m, paths) int8
        RAYS, AIRY or WAVES.

    Raises
    ------
    ValueError
        If there is no such method.
    """
    if method not in METHODS:
        raise ValueError(f"method {method!r} given; {', '.join(METHODS)} work")
    x = np.atleast_1d(np.asarray(size_parameter, dtype=np.float64))[:, None]
    p = np.arange(paths)
    if method == "auto":
        rays_from, airy_from = switch_over(paths, index)
        chosen = np.where(x >= rays_from, RAYS, np.where(x >= airy_from, AIRY, WAVES))
        return _within_reach(chosen, x, p)
    whole = {"rays": np.full(paths, RAYS), "airy": np.where(p < 2, RAYS, AIRY), "waves": np.full(paths, WAVES)}[method]
    return _within_reach(np.repeat(whole[None, :], x.size, axis=0), x, p)


def _within_reach(chosen, x, p):
    too_large = (chosen == WAVES) & (x > MOST_WAVES_X)
    return np.where(too_large, np.where(p < 2, RAYS, AIRY), chosen).astype(np.int8)


def switch_over(paths: int, index: float) -> tuple[np.ndarray, np.ndarray]:
    """Size parameters from which `auto` takes rays and Airy bows; infinity or 1e9 for never.

    Returns
    -------
    rays_from, airy_from : (paths,) float64
    """
    out = np.full((2, paths), np.inf)
    low, high = MEASURED_INDEX
    if low <= index <= high:
        table = read_table("optics_methods")
        known = min(paths, table["p"].size)
        out[0, :known], out[1, :known] = table["rays_from_x"][:known], table["airy_from_x"][:known]
    return out[0], out[1]
