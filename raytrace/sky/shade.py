"""The entry kernel of the sky: from directions to radiance, layer by layer."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace.jit import kernel
from raytrace.sky.background import Background, cloud_cover, sky_xyz
from raytrace.sky.ground import Cover, land_xyz, sea_xyz
from raytrace.sky.rain import Curtains, look_through
from raytrace.sky.skylight import skylight_at
from raytrace.sky.terrain import Terrain, ground_distance, horizon_slope

# Layers, in the order in which they are added up; the bows' orders follow
SKY, SUN, CLOUD, GROUND, VEIL, SKYLIT, FIRST_ORDER = range(7)
_FAR_AWAY = 1e7
_MOST_SUBSAMPLES = 3


class View(NamedTuple):
    """All state of the sky stage as its entry kernel takes it."""

    sky: Background
    land: Terrain
    cover: Cover
    rain: Curtains
    skylight: np.ndarray  # (curtains, azimuths, elevations, 3) XYZ
    orders: np.ndarray  # (curtains, paths, bins, 3) XYZ radiance per unit of sunlit rain
    sun_xyz: tuple  # radiance of the sun's disc [cd/m2]; zero where it is not drawn
    sun_radius: float  # [rad]
    has_plate: bool


@kernel
def shade(view, directions, inside, plate, pixel, layers):
    """Radiance of each layer for each pixel.

    Parameters
    ----------
    view : View
    directions : (n, 3) float64
        Unit vectors: x east, y north, z up.
    inside : (n,) bool
        Pixels outside the lens's image are left black.
    plate : (n, 3) float32
        XYZ of the background picture; not read unless the view has one [cd/m2].
    pixel : float
        Angular width of a pixel [rad].
    layers : (n, FIRST_ORDER + paths, 3) float64
        Written: XYZ of each layer [cd/m2].
    """
    curtains, paths, bins = view.orders.shape[:3]
    sunlit, skylit, marks = np.empty(curtains), np.empty(curtains), np.empty(5 * curtains)
    a, b, airlight, scratch = np.empty(3), np.empty(3), np.empty(3), np.empty(3)
    land, cover, sky, rain = view.land, view.cover, view.sky, view.rain
    layers[:] = 0.0
    for i in range(directions.shape[0]):
        if not inside[i]:
            continue
        x, y, z = directions[i, 0], directions[i, 1], directions[i, 2]
        level = max(math.hypot(x, y), 1e-12)
        azimuth, elevation = math.atan2(x, y), math.atan2(z, level)
        covered = 0.0
        skyline = 0.0
        if cover.kind > 0:
            skyline = math.atan(horizon_slope(land, azimuth))
            covered = min(max((skyline - elevation) / pixel + 0.5, 0.0), 1.0)
        cosine = x * sky.sun[0] + y * sky.sun[1] + z * sky.sun[2]
        theta = math.acos(min(1.0, max(-1.0, cosine)))
        for part in range(2):
            # first what is seen above the skyline, then what is seen of the ground
            share = 1.0 - covered if part == 0 else covered
            if share <= 0.0:
                continue
            reach = _FAR_AWAY
            if part == 1:
                distance_sum = 0.0
                # airlight: what air without an end would look like, the sky at the horizon behind (Koschmieder 1924)
                hx, hy, hz = x / level * 0.99985, y / level * 0.99985, 0.0175
                opacity = cloud_cover(sky, hx, hy, hz, a)
                sky_xyz(sky, hx, hy, hz, airlight)
                for c in range(3):
                    airlight[c] = opacity * a[c] + (1.0 - opacity) * airlight[c]
                # a pixel that looks along the ground averages over a long strip of it
                count = min(max(math.ceil(1.0 / (3.0 * max(-math.sin(elevation), 1e-3))), 1), _MOST_SUBSAMPLES)
                for k in range(count):
                    e = elevation + pixel * ((k + 0.5) / count - 0.5)
                    slope = math.tan(min(max(e, -1.5707), skyline - 1e-7))
                    distance = ground_distance(land, azimuth, slope)
                    if distance < 0.0:
                        distance = max(land.distance[-1], math.sqrt(2.0 * land.eye * 7.4e6)) * 0.999
                    straight = distance * math.sqrt(1.0 + slope * slope)
                    across = pixel * straight
                    along = across / max(abs(math.sin(e)), 1e-3) / count
                    footprint = max(across, math.sqrt(across * min(along, 60.0 * across)))
                    if cover.kind == 5:
                        sea_xyz(cover, sky, distance, azimuth, slope, footprint, scratch, a)
                    else:
                        land_xyz(cover, land, distance, azimuth, slope, footprint, scratch, a)
                    clear = math.exp(-rain.haze * straight)
                    distance_sum += straight
                    for c in range(3):
                        layers[i, GROUND, c] += share / count * a[c] * clear
                        layers[i, VEIL, c] += share / count * airlight[c] * (1.0 - clear)
                reach = distance_sum / count
            behind = look_through(rain, x, y, z, land.eye, reach, sunlit, skylit, marks)
            if part == 1:
                for c in range(3):
                    layers[i, GROUND, c] *= behind
                    layers[i, VEIL, c] *= behind
            elif view.has_plate:
                for c in range(3):
                    layers[i, SKY, c] = share * behind * plate[i, c]
            else:
                opacity = cloud_cover(sky, x, y, z, a)
                sky_xyz(sky, x, y, z, b)
                for c in range(3):
                    layers[i, SKY, c] = share * behind * (1.0 - opacity) * b[c]
                    layers[i, CLOUD, c] = share * behind * opacity * a[c]
                if view.sun_xyz[1] > 0.0:
                    # a disc smaller than a pixel keeps its light, not its radiance
                    radius = max(view.sun_radius, 0.57 * pixel)
                    disc = min(max((radius - theta) / pixel + 0.5, 0.0), 1.0)
                    disc *= share * behind * (1.0 - opacity) * (view.sun_radius / radius) ** 2
                    for c in range(3):
                        layers[i, SUN, c] = disc * view.sun_xyz[c]
            at = min(max(theta / math.pi * bins - 0.5, 0.0), bins - 1.0)
            k = min(int(at), bins - 2)
            f = at - k
            for q in range(curtains):
                if skylit[q] <= 0.0:
                    continue
                skylight_at(view.skylight[q], azimuth, elevation, a)
                for c in range(3):
                    layers[i, SKYLIT, c] += share * skylit[q] * a[c]
                lit = share * sunlit[q]
                for p in range(paths):
                    for c in range(3):
                        low, high = view.orders[q, p, k, c], view.orders[q, p, k + 1, c]
                        layers[i, FIRST_ORDER + p, c] += lit * (low + f * (high - low))
