"""Angles that waves are worked out at, and the way from there to means over the bins of a table.

Grids have their points in the middles of equal cells, so that none lies on the axis: a focus there would count for the
whole cell. The finest fringes of a drop have a period of 180 deg / x, where light of opposite edges interferes.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np

from raytrace.drops.bow_angle import main_maximum_deg
from raytrace.optics.fold import apply_weights

_COARSEST, _LEVELS = 1125, 6
MANY_SIZES = 24
_A_FRINGE, _A_MAXIMUM = 6, 5
"""Points a fringe where a size stands alone, and a main maximum among many sizes."""
_AMONG_MANY = (1125, 1500, 2250, 3000, 4500, 6000, 9000, 12_000, 18_000)


def cells(size_parameter: float, sizes: int, *, lowest: int = 2, index: float = 1.333) -> int:
    """Number of cells of the grid for a drop.

    Among many sizes the fine fringes cancel out and may be met at any point; what is left is as wide as the bow's main
    maximum itself.

    Parameters
    ----------
    size_parameter : float
    sizes : int
        How many sizes are averaged.
    lowest : int
        Lowest Debye order that is worked out, whose bow is the sharpest; below 2 counts as 2.
    index : float
        Real part, relative to air.

    Returns
    -------
    int
        For few sizes 1125 (0.16 deg) or a power of two times it, up to 36,000 (0.005 deg); among many up to 18,000.
    """
    if sizes >= MANY_SIZES:
        lowest = max(lowest, 2)
        if index >= lowest:
            lowest = int(index) + 1
        wanted = _A_MAXIMUM * 180.0 / main_maximum_deg(index, lowest - 1, size_parameter)
        return next((count for count in _AMONG_MANY if count >= wanted), _AMONG_MANY[-1])
    level = math.ceil(math.log2(max(size_parameter * _A_FRINGE / _COARSEST, 1.0)))
    return _COARSEST * 2 ** min(level, _LEVELS - 1)


def smooth_step(x, low: float, high: float):
    """0 at `low`, 1 at `high` and beyond, 3 u^2 - 2 u^3 between; `low` may be the larger."""
    u = np.clip((x - low) / (high - low), 0.0, 1.0)
    return u * u * (3.0 - 2.0 * u)


@lru_cache(maxsize=16)
def cosines(count: int) -> np.ndarray:
    """(count,) cosines of the scattering angles of a grid."""
    return np.cos((np.arange(count) + 0.5) * (np.pi / count))


def bin_weights(angle_edges_deg: np.ndarray, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Means over the solid angle of bins, from values on a grid, by cubic interpolation (Lagrange).

    Parameters
    ----------
    angle_edges_deg : (bins + 1,) array
        [deg]
    count : int
        Cells of the grid over 0 to 180 deg.

    Returns
    -------
    start : (bins,) int64
        First grid point that each bin draws from.
    weights : (bins, width) float64
        As `apply_weights` takes them; they add up to 1 for each bin.
    """
    edges = np.asarray(angle_edges_deg, dtype=np.float64) / 180.0
    width = np.diff(edges)
    inside = max(1, math.ceil(width.max() * count - 1e-9))
    place = edges[:-1, None] + (np.arange(inside) + 0.5) / inside * width[:, None]
    share = np.sin(np.pi * place)
    share /= share.sum(axis=1, keepdims=True)
    # beyond the first and the last point the value of that point stands
    t = np.clip(place * count - 0.5, 0.0, count - 1.0)
    base = np.clip(np.floor(t).astype(np.int64) - 1, 0, count - 4)
    u = t - base
    four = np.stack(
        [
            -(u - 1) * (u - 2) * (u - 3) / 6,
            u * (u - 2) * (u - 3) / 2,
            -u * (u - 1) * (u - 3) / 2,
            u * (u - 1) * (u - 2) / 6,
        ],
        axis=-1,
    )
    start = base[:, 0]
    weights = np.zeros((start.size, int((base - start[:, None]).max()) + 4))
    rows = np.arange(start.size)
    for s in range(inside):
        for k in range(4):
            weights[rows, base[:, s] - start + k] += share[:, s] * four[:, s, k]
    # rows must not reach beyond the grid, also where their weights there are zero
    shift = np.maximum(start + weights.shape[1] - count, 0)
    for i in np.flatnonzero(shift):
        weights[i] = np.roll(weights[i], shift[i])
    return start - shift, weights


class BinMeans:
    """From grids to bins, for bins that stay; made once a grid and kept."""

    def __init__(self, angle_edges_deg):
        self._edges = np.asarray(angle_edges_deg, dtype=np.float64)
        self._weights = {}

    def of(self, values: np.ndarray) -> np.ndarray:
        """Means over bins of values on a grid.

        Parameters
        ----------
        values : (…, count) array
            0 or more.

        Returns
        -------
        (…, bins) float64
            0 or more: where a cubic dips below, 0 stands.
        """
        count = values.shape[-1]
        if count not in self._weights:
            # two threads may both come here, and make the same
            self._weights[count] = bin_weights(self._edges, count)
        start, weights = self._weights[count]
        rows = np.ascontiguousarray(values.reshape(-1, count).T)
        out = np.empty((start.size, rows.shape[1]))
        apply_weights(rows, start, weights, out)
        return np.maximum(out.T.reshape(*values.shape[:-1], start.size), 0.0)
