"""Skylight that the drops scatter into the view: the surround seen through the phase function of a drop.

The surround (sky, cloud, ground) is sampled in cells of equal solid angle and folded with the drop's total phase
function. The weights of each view are normalised to one, since a drop absorbs next to nothing: in a uniform surround
the rain is invisible, as it must be.
"""

from __future__ import annotations

import itertools
import math

import numpy as np

from raytrace.jit import kernel, run_all
from raytrace.sky.background import cloud_cover, sky_xyz

_CELLS = (64, 40)
VIEWS = (73, 37)


@kernel
def fill_surround(sky, ground_xyz, directions, out):
    """Radiance of the surround as XYZ [cd/m2] in directions (n, 3), into out (n, 3)."""
    a, b = np.empty(3), np.empty(3)
    for i in range(directions.shape[0]):
        x, y, z = directions[i, 0], directions[i, 1], directions[i, 2]
        if z < 0.0 and ground_xyz[0] >= 0.0:
            for c in range(3):
                out[i, c] = ground_xyz[c]
        else:
            opacity = cloud_cover(sky, x, y, z, a)
            sky_xyz(sky, x, y, z, b)
            for c in range(3):
                out[i, c] = opacity * a[c] + (1.0 - opacity) * b[c]


@kernel
def fold_surround(first, last, views, directions, surround, phase, out):
    """Surround folded with a phase function in equal bins of the angle, for views first to last, into out (n, 3)."""
    bins = phase.size
    for i in range(first, last):
        total = 0.0
        for c in range(3):
            out[i, c] = 0.0
        for j in range(directions.shape[0]):
            cosine = 0.0
            for c in range(3):
                cosine += views[i, c] * directions[j, c]
            angle = math.acos(min(1.0, max(-1.0, cosine)))
            weight = phase[min(int(angle / math.pi * bins), bins - 1)]
            total += weight
            for c in range(3):
                out[i, c] += weight * surround[j, c]
        for c in range(3):
            out[i, c] /= total


@kernel
def skylight_at(grid, azimuth, elevation, out):
    """Bilinear look-up in a grid (VIEWS, 3) of azimuth (a full turn) and elevation, into out (3,)."""
    n_a, n_e = grid.shape[0] - 1, grid.shape[1] - 1
    a = azimuth / (2.0 * math.pi)
    a = (a - math.floor(a)) * n_a
    e = min(max((elevation / math.pi + 0.5) * n_e, 0.0), n_e - 1e-6)
    i, j = min(int(a), n_a - 1), int(e)
    a, e = a - i, e - j
    for c in range(3):
        low = (1 - a) * grid[i, j, c] + a * grid[i + 1, j, c]
        high = (1 - a) * grid[i, j + 1, c] + a * grid[i + 1, j + 1, c]
        out[c] = (1 - e) * low + e * high


def surround_grid(sky, ground_xyz, phases, *, threads=None) -> np.ndarray:
    """Skylight scattered by each curtain's drops in every direction.

    Parameters
    ----------
    sky : Background
    ground_xyz : (3,) array or None
        Mean radiance of the ground; None where there is none and the sky goes on below the horizon [cd/m2].
    phases : sequence of (bins,) array
        Total phase function of each curtain's drops, any scale.

    Returns
    -------
    (curtains, *VIEWS, 3) float64
        XYZ [cd/m2] where the drops fill the view, by azimuth and elevation.
    """
    n_a, n_z = _CELLS
    azimuth = (np.arange(n_a) + 0.5) * 2 * np.pi / n_a
    z = (np.arange(n_z) + 0.5) * 2 / n_z - 1
    azimuth, z = (v.ravel() for v in np.meshgrid(azimuth, z, indexing="ij"))
    level = np.sqrt(1 - z**2)
    directions = np.stack([level * np.sin(azimuth), level * np.cos(azimuth), z], axis=1)
    surround = np.empty_like(directions)
    below = np.full(3, -1.0) if ground_xyz is None else np.ascontiguousarray(ground_xyz, dtype=np.float64)
    fill_surround(sky, below, directions, surround)
    azimuth = np.linspace(0, 2 * np.pi, VIEWS[0])
    elevation = np.linspace(-np.pi / 2, np.pi / 2, VIEWS[1])
    azimuth, elevation = (v.ravel() for v in np.meshgrid(azimuth, elevation, indexing="ij"))
    views = np.stack(
        [np.cos(elevation) * np.sin(azimuth), np.cos(elevation) * np.cos(azimuth), np.sin(elevation)], axis=1
    )
    out = np.empty((len(phases), len(views), 3))
    pieces = np.linspace(0, len(views), 9).astype(int)
    tasks = [
        (int(a), int(b), views, directions, surround, np.ascontiguousarray(phase), out[c])
        for c, phase in enumerate(phases)
        for a, b in itertools.pairwise(pieces)
    ]
    run_all(fold_surround, tasks, threads=threads)
    return out.reshape(len(phases), *VIEWS, 3)
