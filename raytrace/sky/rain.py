"""Curtains of rain: where drops are, how they dim what is behind, and how much sunlight they scatter to the eye.

A curtain fills a sector of air between two level distances, two heights and two azimuths, with soft edges. Along a line
of sight the extinction adds up over curtains; sunlight is dimmed on its way in by the same curtains, then scattered
once, then dimmed on its way to the eye. Both ways out of one density, so that what is scattered out of the view is what
can be scattered into it: with a uniform surround the rain disappears.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace.jit import kernel, run_all
from raytrace.sky.noise import smoothstep

# Nodes of the table of sunward optical depth (azimuth, level distance, height) and steps along each part of a path
_GRID = (96, 32, 20)
_SUN_STEPS = 32
VIEW_STEPS = 24

# Columns of the array of curtains, one row a curtain; those from OUTER_NEAR on follow from the ones before
EXTINCTION, NEAR, FAR, BOTTOM, TOP, EDGE, EDGE_TOP, AZIMUTH, HALF, EDGE_AZIMUTH = range(10)
OUTER_NEAR, OUTER_FAR, OUTER_BOTTOM, OUTER_TOP, PER_METRE_OUT, PER_METRE_UP, EDGE_NEAR, EDGE_BOTTOM = range(10, 18)
# Rain that reaches the ground goes on below the level of the camera's foot, where the land may lie lower
_BELOW_GROUND_M = 100.0


class Curtains(NamedTuple):
    """State of all curtains as kernels take it."""

    shape: np.ndarray  # (curtains, 18) extinction [1/m], limits [m], azimuth of the middle, half width, edge [rad] ...
    sun: tuple  # unit vector to the sun
    sun_depth: np.ndarray  # (curtains, *_GRID) optical depth from a point of the curtain to the sun
    haze: float  # extinction of the air along the view [1/m]


@kernel
def azimuth_window(shape, c, x, y):
    """Share of curtain c's density left by its azimuth limits in the level direction (x, y)."""
    half, edge = shape[c, HALF], shape[c, EDGE_AZIMUTH]
    if half >= math.pi - 1e-9:
        return 1.0
    level = math.hypot(x, y)
    if level < 1e-12:
        return 0.0
    cosine = (x * math.sin(shape[c, AZIMUTH]) + y * math.cos(shape[c, AZIMUTH])) / level
    away = math.acos(min(1.0, max(-1.0, cosine)))
    return 1.0 - smoothstep(half - 0.5 * edge, half + 0.5 * edge, away)


@kernel
def level_window(shape, c, r, z):
    """Share of curtain c's density left by its limits of distance and height."""
    e, t = 0.5 * shape[c, EDGE_NEAR], 0.5 * shape[c, EDGE_BOTTOM]
    density = smoothstep(shape[c, NEAR] - e, shape[c, NEAR] + e, r)
    if density > 0.0:
        density *= smoothstep(shape[c, BOTTOM] - t, shape[c, BOTTOM] + t, z)
        e, t = 0.5 * shape[c, EDGE], 0.5 * shape[c, EDGE_TOP]
        density *= 1.0 - smoothstep(shape[c, FAR] - e, shape[c, FAR] + e, r)
        density *= 1.0 - smoothstep(shape[c, TOP] - t, shape[c, TOP] + t, z)
    return density


@kernel
def _circle(x, y, dx, dy, radius):
    """Where the level path (x, y) + s (dx, dy) enters and leaves a circle round the origin; none if last < first."""
    square = dx * dx + dy * dy
    along = x * dx + y * dy
    inside = along * along - square * (x * x + y * y - radius * radius)
    if inside <= 0.0 or square < 1e-18:
        # a path straight up never leaves the circle that it is in
        return (-1e30, 1e30) if square < 1e-18 and x * x + y * y < radius * radius else (1.0, -1.0)
    root = math.sqrt(inside)
    return (-along - root) / square, (-along + root) / square


@kernel
def depth_to_sun(shape, sun, x, y, z):
    """Optical depth from a point to the sun through all curtains.

    Of each curtain the path crosses at most two parts, before and behind the hollow round the camera; the midpoint rule
    runs over just these, so that no step is spent outside and sharp edges fall between steps.
    """
    total = 0.0
    for c in range(shape.shape[0]):
        enter, leave = _circle(x, y, sun[0], sun[1], shape[c, OUTER_FAR])
        enter = max(enter, 0.0)
        if sun[2] > 1e-9:
            enter = max(enter, (shape[c, OUTER_BOTTOM] - z) / sun[2])
            leave = min(leave, (shape[c, OUTER_TOP] - z) / sun[2])
        elif not shape[c, OUTER_BOTTOM] <= z <= shape[c, OUTER_TOP]:
            continue
        if leave <= enter:
            continue
        first, last = _circle(x, y, sun[0], sun[1], shape[c, OUTER_NEAR])
        if last <= first:
            first = last = leave
        for part in range(2):
            start = enter if part == 0 else max(enter, last)
            length = (min(first, leave) if part == 0 else leave) - start
            if length <= 0.0:
                continue
            step = length / _SUN_STEPS
            for k in range(_SUN_STEPS):
                s = start + (k + 0.5) * step
                px, py = x + s * sun[0], y + s * sun[1]
                density = level_window(shape, c, math.hypot(px, py), z + s * sun[2])
                if density > 0.0:
                    total += shape[c, EXTINCTION] * density * azimuth_window(shape, c, px, py) * step
    return total


@kernel
def fill_sun_depth(shape, sun, c, i, out):
    """Sunward optical depth at one azimuth node of one curtain's table, into out (curtains, *_GRID)."""
    near, far, bottom, top = shape[c, OUTER_NEAR], shape[c, OUTER_FAR], shape[c, OUTER_BOTTOM], shape[c, OUTER_TOP]
    n_a, n_r, n_z = out.shape[1:]
    reach = min(math.pi, shape[c, HALF] + 0.5 * shape[c, EDGE_AZIMUTH])
    azimuth = shape[c, AZIMUTH] + reach * (2.0 * i / (n_a - 1) - 1.0)
    for j in range(n_r):
        r = near + (far - near) * j / (n_r - 1)
        for k in range(n_z):
            z = bottom + (top - bottom) * k / (n_z - 1)
            out[c, i, j, k] = depth_to_sun(shape, sun, r * math.sin(azimuth), r * math.cos(azimuth), z)


@kernel
def sun_depth_at(grid, c, i, a, b, d):
    """Optical depth to the sun from curtain c's table (azimuth, distance, height); trilinear.

    Parameters
    ----------
    grid : (curtains, azimuths, distances, heights) float64
    c, i, a : int, int, float
        Curtain, azimuth node and the part of a step beyond it.
    b, d : float
        Distance and height in steps of the table.
    """
    b = min(max(b, 0.0), grid.shape[2] - 1.0001)
    d = min(max(d, 0.0), grid.shape[3] - 1.0001)
    j, k = int(b), int(d)
    b, d = b - j, d - k
    near = grid[c, i, j, k] + d * (grid[c, i, j, k + 1] - grid[c, i, j, k])
    far = grid[c, i, j + 1, k] + d * (grid[c, i, j + 1, k + 1] - grid[c, i, j + 1, k])
    low = near + b * (far - near)
    near = grid[c, i + 1, j, k] + d * (grid[c, i + 1, j, k + 1] - grid[c, i + 1, j, k])
    far = grid[c, i + 1, j + 1, k] + d * (grid[c, i + 1, j + 1, k + 1] - grid[c, i + 1, j + 1, k])
    return low + a * (near + b * (far - near) - low)


@kernel
def clip_path(shape, c, x, y, z, eye, reach):
    """Part of a line of sight inside curtain c's outer limits, as distances from the eye; empty where first >= last."""
    near, far, bottom, top = shape[c, OUTER_NEAR], shape[c, OUTER_FAR], shape[c, OUTER_BOTTOM], shape[c, OUTER_TOP]
    level = math.hypot(x, y)
    first, last = 0.0, reach
    if level > 1e-9:
        first, last = near / level, min(reach, far / level)
    elif near > 0.0:
        return 0.0, 0.0
    if abs(z) > 1e-9:
        a, b = (bottom - eye) / z, (top - eye) / z
        first, last = max(first, min(a, b)), min(last, max(a, b))
    elif not bottom <= eye <= top:
        return 0.0, 0.0
    return first, last


@kernel
def look_through(rain, x, y, z, eye, reach, sunlit, skylit, marks):
    """Follow one line of sight through the rain.

    Parameters
    ----------
    rain : Curtains
    x, y, z : float
        Unit vector of the view.
    eye : float
        Height of the eye [m].
    reach : float
        Distance at which the view ends, on the ground or far away [m].
    sunlit : (curtains,) float64
        Written: integral of extinction times both transmittances; times irradiance and phase function it is radiance.
    skylit : (curtains,) float64
        Written: share of the view that the curtain's drops fill, dimmed on the way to the eye.
    marks : (5 * curtains,) float64
        Scratch.

    Returns
    -------
    transmittance : float
        Of all rain along the view.
    """
    # bound once: each access through the tuple would count a reference
    shape, grid, haze = rain.shape, rain.sun_depth, rain.haze
    count = shape.shape[0]
    # scratch: ends of the parts inside, then depth of a step, azimuth in steps of the sunward table, azimuth window
    ends, passes, places, windows = marks[: 2 * count], marks[2 * count :], marks[3 * count :], marks[4 * count :]
    n = 0
    for c in range(count):
        sunlit[c] = skylit[c] = 0.0
        first, last = clip_path(shape, c, x, y, z, eye, reach)
        windows[c] = azimuth_window(shape, c, x, y)
        away = math.atan2(x, y) - shape[c, AZIMUTH]
        away -= 2.0 * math.pi * math.floor(away / (2.0 * math.pi) + 0.5)
        place = away / min(math.pi, shape[c, HALF] + 0.5 * shape[c, EDGE_AZIMUTH])
        last_azimuth = grid.shape[1] - 1
        places[c] = min(max(0.5 * (place + 1.0) * last_azimuth, 0.0), last_azimuth - 0.0001)
        if first < last and shape[c, EXTINCTION] > 0.0 and windows[c] > 0.0:
            for end in (first, last):
                # kept in order, so that no step crosses an outer limit
                k = n
                while k > 0 and ends[k - 1] > end:
                    ends[k] = ends[k - 1]
                    k -= 1
                ends[k] = end
                n += 1
    if n == 0:
        return 1.0
    level = math.hypot(x, y)
    # dense rain takes all the light in its first steps: enough of them that none is deeper than a third
    whole, dense = ends[n - 1] - ends[0], 0.0
    for c in range(count):
        dense += shape[c, EXTINCTION]
    fine = max(VIEW_STEPS, min(int(3.0 * dense * whole), 8 * VIEW_STEPS))
    depth, clear = 0.0, 1.0
    for e in range(n - 1):
        length = ends[e + 1] - ends[e]
        if length <= 0.0:
            continue
        # a short part, as of near spray before far rain, still gets its share
        steps = max(math.ceil(fine * length / whole), VIEW_STEPS // 2) if n > 2 else fine
        step = length / steps
        for k in range(steps):
            s = ends[e] + (k + 0.5) * step
            r, height = s * level, eye + s * z
            passed = 0.0
            for c in range(count):
                passes[c] = 0.0
                if windows[c] > 0.0:
                    density = level_window(shape, c, r, height)
                    passes[c] = shape[c, EXTINCTION] * windows[c] * density * step
                    passed += passes[c]
            if passed <= 0.0:
                continue
            # exact for a density that is constant over the step, so that the steps add up to 1 - exp(-depth)
            depth += passed
            onward = math.exp(-depth)
            taken = (clear - onward) / passed
            clear = onward
            for c in range(count):
                if passes[c] > 0.0:
                    part = passes[c] * taken
                    skylit[c] += part
                    i = int(places[c])
                    b = (r - shape[c, OUTER_NEAR]) * shape[c, PER_METRE_OUT]
                    d = (height - shape[c, OUTER_BOTTOM]) * shape[c, PER_METRE_UP]
                    to_sun = sun_depth_at(grid, c, i, places[c] - i, b, d)
                    sunlit[c] += part * math.exp(-to_sun - haze * s)
    return clear


def make_curtains(scene, extinction_per_km, sun_vector, haze_per_m: float, *, threads=None) -> Curtains:
    """Prepare the rain of a scene.

    Parameters
    ----------
    scene : Scene
    extinction_per_km : sequence of float
        Geometric extinction of each curtain [1/km].
    sun_vector : (3,) array
        Unit vector to the sun.
    haze_per_m : float
        Extinction of the air along the view [1/m].
    """
    sun = tuple(float(v) for v in sun_vector)
    antisolar_deg = math.degrees(math.atan2(-sun[0], -sun[1]))
    shape = np.zeros((len(scene.rain), 18))
    for row, rain, beta in zip(shape, scene.rain, extinction_per_km, strict=True):
        start, end = azimuth_limits_deg(rain, antisolar_deg)
        near, far, bottom, top = rain.near_m, rain.far_m, rain.bottom_m, rain.top_m
        # rain that begins at the camera or reaches the ground has no edge there
        edge_near = rain.edge_m if near > 0.0 else 0.0
        near = near if near > 0.0 else -1.0
        edge_bottom = rain.edge_top_m if bottom > 0.0 else 0.0
        bottom = bottom if bottom > 0.0 else bottom - _BELOW_GROUND_M
        row[:OUTER_NEAR] = (
            beta * 1e-3,
            near,
            far,
            bottom,
            top,
            rain.edge_m,
            rain.edge_top_m,
            math.radians(0.5 * (start + end)),
            math.radians(0.5 * (end - start)),
            math.radians(rain.edge_deg),
        )
        near, far = max(near - 0.5 * edge_near, 0.0), far + 0.5 * rain.edge_m
        bottom, top = bottom - 0.5 * edge_bottom, top + 0.5 * rain.edge_top_m
        steps = (_GRID[1] - 1) / (far - near), (_GRID[2] - 1) / (top - bottom)
        row[OUTER_NEAR:] = near, far, bottom, top, *steps, edge_near, edge_bottom
    depth = np.zeros((len(shape), *_GRID))
    tasks = [(shape, sun, c, i, depth) for c in range(len(shape)) for i in range(_GRID[0])]
    run_all(fill_sun_depth, tasks, threads=threads)
    return Curtains(shape=shape, sun=sun, sun_depth=depth, haze=float(haze_per_m))


def azimuth_limits_deg(rain, antisolar_deg: float) -> tuple[float, float]:
    """Left and right limit of a curtain, the right one larger by at most a full turn [deg]."""
    start = antisolar_deg - 85.0 if rain.azimuth_from_deg is None else rain.azimuth_from_deg
    end = antisolar_deg + 85.0 if rain.azimuth_to_deg is None else rain.azimuth_to_deg
    width = (end - start) % 360.0
    # 0 to 360 is all round; two equal limits are refused when the scene is read
    return start, start + (width if width > 0.0 else 360.0)
