"""The lie of the land: a plain, hills with a seeded ridge line, and where each line of sight meets them.

The hills are sampled on a grid of azimuth and distance. For each azimuth the largest slope seen so far is kept, which
never falls with distance: the first distance at which it reaches the slope of a line of sight is where that line meets
the ground. One search a pixel, whatever the projection. The earth is round and light bends along it.
"""

from __future__ import annotations

import itertools
import math
from typing import NamedTuple

import numpy as np

from raytrace.jit import kernel, run_all
from raytrace.sky.fields import field_edge_m
from raytrace.sky.noise import gradient_noise, octaves, smoothstep

# 7/6 of the earth's mean radius: usual allowance for refraction in surveying; common practice, no source
EFFECTIVE_EARTH_M = 6_371_000.0 * 7.0 / 6.0
_DISTANCES = 320
_FEWEST_AZIMUTHS, _MOST_AZIMUTHS = 720, 7200
_FIRST_SHARE = 0.45


class Terrain(NamedTuple):
    """State of the ground's shape as kernels take it."""

    relief: float  # height of the hills [m]
    hills_from: float  # level distance where they rise [m]
    reaches: float  # level distance of the last ridge [m]
    wooded: float  # share of woods, 0 to 1
    hedged: bool  # whether hedges stand between fields
    eye: float  # height of the camera [m]
    seed: np.uint64
    distance: np.ndarray  # (distances,) of the grid [m]
    slope: np.ndarray  # (azimuths + 1, distances) largest slope so far; the last row repeats the first


@kernel
def woods(land, x, y, footprint):
    """How much of the ground at (x, y) is wood, 0 to 1."""
    if land.wooded <= 0.0:
        return 0.0
    patch = octaves(x / 620.0, y / 620.0, 11.5, land.seed + np.uint64(500), 4, footprint / 620.0)
    edge = 0.42 - 0.75 * land.wooded
    return smoothstep(edge, edge + 0.05, patch)


@kernel
def hill_height(land, x, y, footprint):
    """Height of the bare ground above the plain [m]; features narrower than the footprint are left out."""
    if land.relief <= 0.0:
        return 0.0
    d = math.hypot(x, y)
    rise = smoothstep(_FIRST_SHARE * land.hills_from, 1.6 * land.hills_from, d)
    if rise <= 0.0:
        return 0.0
    # further ridges stand higher, so that one is seen behind the other
    rise *= 0.35 + 0.65 * min(1.0, d / land.reaches)
    wide = 0.35 * land.reaches if land.reaches < 8000.0 else 2800.0
    shape = octaves(x / wide, y / wide, 3.7, land.seed, 6, footprint / wide)
    return land.relief * rise * max(0.0, 0.5 + 0.95 * shape)


@kernel
def surface_height(land, x, y, footprint):
    """Height of what is seen, with the trees on it [m]."""
    height = hill_height(land, x, y, footprint)
    if land.wooded > 0.0:
        wood = woods(land, x, y, footprint)
        if wood > 0.0:
            crowns = octaves(x / 24.0, y / 24.0, 0.5, land.seed + np.uint64(900), 4, footprint / 48.0)
            height += wood * (12.0 + 11.0 * crowns)
    if land.hedged and footprint < 40.0:
        edge = field_edge_m(x, y, land.seed)
        if edge < 5.0:
            trees = gradient_noise(x / 23.0, y / 23.0, 8.5, land.seed)
            rough = octaves(x / 7.0, y / 7.0, 3.5, land.seed + np.uint64(950), 3, footprint / 14.0)
            height += (2.2 + 9.0 * smoothstep(0.15, 0.5, trees)) * (1.0 + 0.7 * rough)
    return height


@kernel
def fill_slopes(land, first, last):
    """Slopes of the azimuth rows first to last of the grid, counted on beyond a full turn."""
    count = land.slope.shape[0] - 1
    for row in range(first, last):
        i = row % count
        azimuth = 2.0 * math.pi * i / count
        sin_a, cos_a = math.sin(azimuth), math.cos(azimuth)
        best = -1e30
        for k in range(land.distance.size):
            d = land.distance[k]
            across = d * 2.0 * math.pi / count
            z = surface_height(land, d * sin_a, d * cos_a, across) - d * d / (2.0 * EFFECTIVE_EARTH_M)
            best = max(best, (z - land.eye) / d)
            land.slope[i, k] = best
            if i == 0:
                land.slope[count, k] = best


@kernel
def plain_distance(eye, slope):
    """Level distance at which a line of sight of that slope meets the round plain; negative if it does not [m]."""
    inside = slope * slope - 2.0 * eye / EFFECTIVE_EARTH_M
    if slope >= 0.0 or inside < 0.0:
        return -1.0
    # the product form keeps its digits for steep lines
    return 2.0 * eye / (-slope + math.sqrt(inside))


@kernel
def height_at(land, distance, slope):
    """Height above the plain at which a line of sight of that slope stands at a level distance [m]."""
    return land.eye + distance * slope + distance * distance / (2.0 * EFFECTIVE_EARTH_M)


@kernel
def horizon_slope(land, azimuth):
    """Slope of the skyline in an azimuth [rad]: the hills' or the plain's own horizon, whichever stands higher."""
    plain = -math.sqrt(2.0 * land.eye / EFFECTIVE_EARTH_M)
    if land.slope.shape[0] < 2:
        return plain
    count = land.slope.shape[0] - 1
    at = azimuth / (2.0 * math.pi) * count
    at -= count * math.floor(at / count)
    i = min(int(at), count - 1)
    f = at - i
    last = land.distance.size - 1
    return max(plain, land.slope[i, last] + f * (land.slope[i + 1, last] - land.slope[i, last]))


@kernel
def ground_distance(land, azimuth, slope):
    """Level distance at which a line of sight meets the ground [m]; negative if it is above the skyline.

    Parameters
    ----------
    land : Terrain
    azimuth : float
        [rad]
    slope : float
        Tangent of the line's elevation.
    """
    flat = plain_distance(land.eye, slope)
    if land.slope.shape[0] < 2 or (0.0 < flat < land.distance[0]):
        return flat
    count = land.slope.shape[0] - 1
    at = azimuth / (2.0 * math.pi) * count
    at -= count * math.floor(at / count)
    i = min(int(at), count - 1)
    f = at - i
    low, high = 0, land.distance.size - 1
    a, b = land.slope[i], land.slope[i + 1]
    if a[high] + f * (b[high] - a[high]) < slope:
        return flat if flat > land.distance[high] else -1.0
    while high - low > 1:
        middle = (low + high) // 2
        if a[middle] + f * (b[middle] - a[middle]) >= slope:
            high = middle
        else:
            low = middle
    before, after = a[low] + f * (b[low] - a[low]), a[high] + f * (b[high] - a[high])
    if before >= slope or after <= before:
        return land.distance[low]
    return land.distance[low] + (land.distance[high] - land.distance[low]) * (slope - before) / (after - before)


def make_terrain(ground, eye_m: float, pixel_rad: float, span=(0.0, 2 * math.pi), *, threads=None) -> Terrain:
    """Prepare the land of a scene.

    Parameters
    ----------
    ground : Ground
        The scene's table.
    eye_m : float
        Height of the camera [m].
    pixel_rad : float
        Width of a pixel, which decides how finely the skyline is sampled [rad].
    span : (float, float)
        First azimuth that will be looked at, and the width of what will be [rad].
    """
    flat = ground.cover in ("sea", "plain", "none") or ground.relief_m == 0
    wooded = {"fields": 0.38, "meadow": 0.2, "forest": 1.0}.get(ground.cover, 0.0)
    count = int(min(max(2 * math.pi / pixel_rad, _FEWEST_AZIMUTHS), _MOST_AZIMUTHS))
    distance = np.geomspace(_FIRST_SHARE * ground.hills_from_m, ground.reaches_m, _DISTANCES)
    land = Terrain(
        relief=0.0 if flat else ground.relief_m,
        hills_from=ground.hills_from_m,
        reaches=ground.reaches_m,
        wooded=0.0 if flat else wooded,
        hedged=ground.cover == "fields" and not flat,
        eye=float(eye_m),
        seed=np.uint64(ground.seed),
        distance=distance,
        slope=np.full((1 if flat else count + 1, _DISTANCES), -1e30),
    )
    if not flat:
        first = math.floor(span[0] / (2 * math.pi) * count)
        rows = min(math.ceil(span[1] / (2 * math.pi) * count) + 2, count)
        pieces = np.linspace(first, first + rows, 33).astype(int)
        run_all(fill_slopes, [(land, int(a), int(b)) for a, b in itertools.pairwise(pieces)], threads=threads)
    return land
