"""What covers the land, and how it looks under sun and sky: Lambert's law with invented textures, waves for the sea.

The reflectances here are scenery, not measurement: linear sRGB triples of our own choice, whose luminous part can be
set by the scene's `albedo`.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace.jit import kernel
from raytrace.sky.background import cloud_cover, sky_xyz
from raytrace.sky.fields import field_at
from raytrace.sky.noise import gradient_noise, octaves, smoothstep
from raytrace.sky.terrain import Terrain, height_at, hill_height, woods

_COVERS = {"none": 0, "plain": 1, "meadow": 2, "fields": 3, "forest": 4, "sea": 5}
_SEA_INDEX = 1.339
# Crops as linear sRGB reflectance: pasture, young grain, ripe grain, stubble, ploughed earth, hay meadow
_CROPS = np.array(
    [
        [0.075, 0.105, 0.036],
        [0.070, 0.118, 0.034],
        [0.215, 0.170, 0.085],
        [0.240, 0.195, 0.110],
        [0.115, 0.085, 0.060],
        [0.110, 0.130, 0.048],
    ]
)
_LEAVES = (0.026, 0.048, 0.014)
_MEADOW = (0.085, 0.130, 0.036)
_DEEP = (0.010, 0.026, 0.034)


class Cover(NamedTuple):
    """State of what covers the ground, as kernels take it."""

    kind: int
    gain: float  # factor on all reflectances, from the scene's albedo
    grey: float  # reflectance of cover "plain"
    crops: np.ndarray  # (6, 3) linear sRGB
    sun_rgb: tuple  # direct normal illuminance over pi, linear sRGB of absolute scale [cd/m2]
    sky_rgb: tuple  # diffuse horizontal illuminance over pi
    sun: tuple  # unit vector to the sun
    seed: np.uint64
    to_xyz: np.ndarray  # (3, 3)


@kernel
def grain(x, y, seed, footprint):
    """Fine unevenness of what grows, about -1 to 1: from tufts down to what a pixel can hold."""
    total, height, width = 0.0, 0.42, 6.0
    for k in range(8):
        keep = 1.0 - footprint / width
        if keep <= 0.0:
            break
        total += height * min(1.0, 2.0 * keep) * gradient_noise(x / width, y / width, 0.5, seed + np.uint64(k))
        height *= 0.86
        width *= 0.49
    return total


@kernel
def field_crop(x, y, seed, footprint, crops, out):
    """Reflectance of the patchwork of fields and hedges at (x, y), into out (3,)."""
    cell, edge, across = field_at(x, y, seed)
    crop = crops[np.int64((cell >> np.uint64(32)) % np.uint64(crops.shape[0]))]
    lightness = 0.85 + 0.3 * np.float64(np.int64((cell >> np.uint64(40)) & np.uint64(0xFF))) / 255.0
    patchy = octaves(x / 55.0, y / 55.0, 2.5, seed + np.uint64(40), 4, footprint / 55.0)
    lightness *= 1.0 + 0.30 * patchy + 0.42 * grain(x, y, seed + np.uint64(60), footprint)
    # wheel tracks, two every 24 m, where the pixel is fine enough to show them
    track = abs((across / 24.0 - math.floor(across / 24.0)) * 24.0 - 12.0)
    if footprint < 2.0 and abs(track - 1.0) < 0.35:
        lightness *= 1.0 - 0.4 * (1.0 - 0.5 * footprint)
    hedge, leaf = 0.0, 0.0
    if edge < 6.0 + 0.5 * footprint:
        ragged = edge + 1.6 * grain(x, y, seed + np.uint64(80), max(footprint, 0.6))
        hedge = 1.0 - smoothstep(2.0, 3.2 + 0.5 * footprint, ragged)
        leaf = max(0.35, 0.8 + 0.8 * grain(x, y, seed + np.uint64(90), footprint))
    for c in range(3):
        out[c] = crop[c] * max(lightness, 0.2) * (1.0 - hedge) + _LEAVES[c] * leaf * hedge


@kernel
def reflectance(cover, land, x, y, footprint, out):
    """Linear sRGB reflectance of the ground at (x, y) into out (3,); returns how much of it is wood."""
    if cover.kind == 1:
        out[0] = out[1] = out[2] = cover.grey
        return 0.0
    wood = woods(land, x, y, footprint)
    if cover.kind == 3 and wood < 1.0:
        field_crop(x, y, cover.seed, footprint, cover.crops, out)
    elif cover.kind in (2, 4) and wood < 1.0:
        # between the woods of a forest lie clearings of grass
        wide = octaves(x / 90.0, y / 90.0, 2.5, cover.seed, 4, footprint / 90.0)
        tint = octaves(x / 400.0, y / 400.0, 5.5, cover.seed + np.uint64(9), 3, footprint / 400.0)
        shade = max(0.2, 1.0 + 0.35 * wide + 0.42 * grain(x, y, cover.seed + np.uint64(60), footprint))
        for c in range(3):
            out[c] = _MEADOW[c] * shade
        out[0] *= 1.0 + 0.3 * tint
    else:
        out[0] = out[1] = out[2] = 0.0
    if wood > 0.0:
        leaf = 1.0 + 0.6 * octaves(x / 30.0, y / 30.0, 4.5, cover.seed + np.uint64(70), 4, footprint / 60.0)
        for c in range(3):
            out[c] += wood * (_LEAVES[c] * max(leaf, 0.3) - out[c])
    for c in range(3):
        out[c] = max(out[c], 0.004)
    return wood


@kernel
def land_xyz(cover, land, distance, azimuth, slope, footprint, scratch, out):
    """Radiance of the land as XYZ [cd/m2] into out (3,): Lambert's law under the sun and an even sky.

    Parameters
    ----------
    distance : float
        Level distance [m].
    azimuth : float
        [rad]
    slope : float
        Tangent of the line of sight's elevation.
    footprint : float
        Width over which the pixel averages [m].
    scratch : (3,) float64
    """
    x, y = distance * math.sin(azimuth), distance * math.cos(azimuth)
    wood = reflectance(cover, land, x, y, footprint, scratch)
    bare = hill_height(land, x, y, footprint)
    if distance >= land.distance[0] and cover.kind > 1:
        # what stands well above the bare ground is a tree or a hedge, dark at its foot
        above = height_at(land, distance, slope) - bare
        tree = smoothstep(0.7, 1.6, above)
        if tree > 0.0:
            leaf = max(0.3, 1.0 + 0.9 * grain(x + above, y - above, cover.seed + np.uint64(90), 0.7 * footprint))
            leaf *= 0.45 + 0.55 * smoothstep(0.5, 7.0, above)
            for c in range(3):
                scratch[c] += tree * (_LEAVES[c] * leaf - scratch[c])
            wood = max(wood, tree)
    step = max(12.0, footprint)
    dzdx = (hill_height(land, x + step, y, footprint) - bare) / step
    dzdy = (hill_height(land, x, y + step, footprint) - bare) / step
    norm = 1.0 / math.sqrt(1.0 + dzdx * dzdx + dzdy * dzdy)
    cosine = max(0.0, (-dzdx * cover.sun[0] - dzdy * cover.sun[1] + cover.sun[2]) * norm)
    # crowns and stalks stand upright: seen from the sun's side they show more lit sides than level ground would
    toward = -(math.sin(azimuth) * cover.sun[0] + math.cos(azimuth) * cover.sun[1])
    upright = 0.25 + 0.35 * wood
    if cover.kind > 1:
        cosine = (1.0 - upright) * cosine + upright * 0.5 * max(0.0, 1.0 + toward) * 0.64
    for c in range(3):
        scratch[c] = cover.gain * scratch[c] * (cover.sun_rgb[c] * cosine + cover.sky_rgb[c] * 0.5 * (1.0 + norm))
    for c in range(3):
        out[c] = 0.0
        for k in range(3):
            out[c] += cover.to_xyz[c, k] * scratch[k]


@kernel
def sea_xyz(cover, sky, distance, azimuth, slope, footprint, scratch, out):
    """Radiance of the sea as XYZ [cd/m2] into out (3,): the sky mirrored by waves, and a little light from below."""
    x, y = distance * math.sin(azimuth), distance * math.cos(azimuth)
    elevation = math.atan(-slope)
    # waves turn the mirror; seen along the water those that face the eye win, so the mirrored sky stands higher
    tilt = 0.22 * octaves(x / 7.0, y / 11.0, 0.5, cover.seed, 6, 0.5 * footprint / 7.0)
    up = min(1.45, elevation + 0.17 + tilt * 0.55)
    cosine = math.sin(min(1.5, elevation + 0.10 + 0.5 * max(tilt, -0.15)))
    inside = math.sqrt(1.0 - (1.0 - cosine * cosine) / _SEA_INDEX**2)
    r_s = ((cosine - _SEA_INDEX * inside) / (cosine + _SEA_INDEX * inside)) ** 2
    r_p = ((_SEA_INDEX * cosine - inside) / (_SEA_INDEX * cosine + inside)) ** 2
    mirror = 0.5 * (r_s + r_p)
    dx, dy, dz = math.cos(up) * math.sin(azimuth), math.cos(up) * math.cos(azimuth), math.sin(up)
    opacity = cloud_cover(sky, dx, dy, dz, out)
    sky_xyz(sky, dx, dy, dz, scratch)
    for c in range(3):
        out[c] = mirror * (opacity * out[c] + (1.0 - opacity) * scratch[c])
    for k in range(3):
        below = cover.gain * _DEEP[k] * (1.0 - mirror) * (cover.sun_rgb[k] * cover.sun[2] + cover.sky_rgb[k])
        for c in range(3):
            out[c] += cover.to_xyz[c, k] * below


def make_cover(ground, direct_xyz, diffuse_xyz, sun_vector) -> Cover:
    """Prepare what covers the land of a scene.

    Parameters
    ----------
    ground : Ground
    direct_xyz, diffuse_xyz : (3,) array
        Direct normal and diffuse horizontal illuminance as XYZ [lx].
    sun_vector : (3,) array
    """
    from raytrace.colour import SRGB_TO_XYZ

    to_rgb = np.linalg.inv(SRGB_TO_XYZ)
    # a reddened sun lies outside sRGB; what a reflectance multiplies must not be negative
    sun_rgb = np.maximum(to_rgb @ np.asarray(direct_xyz), 0.0) / math.pi
    sky_rgb = np.maximum(to_rgb @ np.asarray(diffuse_xyz), 0.0) / math.pi
    luminous = SRGB_TO_XYZ[1]
    means = {2: _MEADOW, 3: _CROPS.mean(axis=0), 4: _LEAVES, 5: _DEEP}
    kind = _COVERS[ground.cover]
    grey = 0.2 if ground.albedo is None else ground.albedo
    gain = 1.0
    if ground.albedo is not None and kind in means:
        gain = ground.albedo / float(luminous @ np.asarray(means[kind]))
    return Cover(
        kind=kind,
        gain=gain,
        grey=grey,
        crops=_CROPS.copy(),
        sun_rgb=tuple(float(v) for v in sun_rgb),
        sky_rgb=tuple(float(v) for v in sky_rgb),
        sun=tuple(float(v) for v in sun_vector),
        seed=np.uint64(ground.seed),
        to_xyz=SRGB_TO_XYZ.copy(),
    )


def mean_ground_xyz(cover: Cover) -> np.ndarray:
    """(3,) mean radiance of level ground as XYZ, for the light that rain gets from below [cd/m2]."""
    mean = {
        0: np.zeros(3),
        1: np.full(3, cover.grey),
        2: np.array(_MEADOW),
        4: np.array(_LEAVES),
        5: 3 * np.array(_DEEP),
    }
    rgb = cover.gain * mean.get(cover.kind, _CROPS.mean(axis=0))
    lit = np.array(cover.sun_rgb) * max(cover.sun[2], 0.0) + np.array(cover.sky_rgb)
    return cover.to_xyz @ (rgb * lit)


__all__ = ["Cover", "Terrain", "land_xyz", "make_cover", "mean_ground_xyz", "sea_xyz"]
