"""What stands behind the rain above the horizon: a standard sky, a uniform or black one, and a bank of dark cloud."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace import colour
from raytrace.jit import kernel
from raytrace.sky.cie import SkyType, horizontal_integral, relative_luminance, sky_type
from raytrace.sky.noise import octaves, smoothstep

# Types 1 to 6 are overcast or near it: their light is white. The others are blue where they are dark.
_OVERCAST_TYPES = 6
_OVERCAST_K = 6500.0
_CCT_STEPS = 256


class Background(NamedTuple):
    """State of the sky as kernels take it; luminances in cd/m2, colours as X/Y and Z/Y."""

    kind: SkyType
    sun: tuple  # unit vector to the sun
    zenith: float  # luminance of the zenith; 0 where the sky is uniform
    uniform: float  # luminance of a uniform sky
    log_step: float  # steps of the colour table per unit of ln luminance
    log_first: float
    xz: np.ndarray  # (steps, 2) X/Y and Z/Y against luminance
    has_cloud: bool
    cloud_centre: tuple  # unit vector (level) to the bank's middle
    cloud_half: float  # half its width [rad]
    cloud_base: float  # [rad]
    cloud_top: float
    cloud_edge: float
    cloud_cover: float
    cloud_texture: float
    cloud_xyz: tuple  # its mean radiance as XYZ [cd/m2]
    cloud_seed: np.uint64


def takagi_1990(luminance_cd_m2: np.ndarray) -> np.ndarray:
    """Correlated colour temperature of a patch of clear sky from its luminance [K].

    Takagi, Miki, Natayama and Tanaka (1990), quoted as T = 6500 + 1.1985e8 / L^1.2 with L in cd/m2; the numbers are
    from memory. Held within the CIE daylight locus's range of 4000 to 25000 K.
    """
    return np.clip(6500.0 + 1.1985e8 / np.maximum(luminance_cd_m2, 1.0) ** 1.2, 4000.0, 25_000.0)


def uniform_luminance_cd_m2(sky) -> float:
    """Luminance of the sky model "uniform": the scene's, or 2000 [cd/m2]."""
    return 2000.0 if sky.luminance_cd_m2 is None else sky.luminance_cd_m2


def make_background(scene, light, sun_vector) -> Background:
    """Prepare the sky of a scene.

    Parameters
    ----------
    scene : Scene
    light : Illumination
        For the diffuse illuminance that the sky is scaled to, and the light on the cloud.
    sun_vector : (3,) array
        Unit vector to the sun.
    """
    sky, cloud = scene.sky, scene.sky.cloud
    kind = sky_type(sky.cie_type)
    sun = tuple(float(v) for v in sun_vector)
    zenith = uniform = 0.0
    if sky.model == "cie":
        zenith = light.diffuse_horizontal_lx / horizontal_integral(kind, sun, 180, 180)
    elif sky.model == "uniform":
        uniform = uniform_luminance_cd_m2(sky)
    luminance = np.geomspace(1.0, 1e6, _CCT_STEPS)
    if sky.colour_temperature_k is not None:
        cct = np.full(_CCT_STEPS, sky.colour_temperature_k)
    elif sky.model == "cie" and sky.cie_type > _OVERCAST_TYPES:
        cct = takagi_1990(luminance)
    else:
        cct = np.full(_CCT_STEPS, _OVERCAST_K)
    white = np.array([colour.xy_to_XYZ1(colour.daylight_xy(t)) for t in cct])
    if sky.model == "uniform" and sky.colour_temperature_k is None:
        white[:] = colour.xy_to_XYZ1(colour.D65_XY)
    shape = dict.fromkeys(("cloud_half", "cloud_base", "cloud_top", "cloud_edge", "cloud_cover", "cloud_texture"), 0.0)
    centre, cloud_xyz, seed = (0.0, 1.0), (0.0, 0.0, 0.0), np.uint64(0)
    if cloud is not None:
        azimuth = math.atan2(-sun[0], -sun[1]) if cloud.azimuth_deg is None else math.radians(cloud.azimuth_deg)
        centre = (math.sin(azimuth), math.cos(azimuth))
        shape = {
            "cloud_half": math.radians(cloud.width_deg) / 2,
            "cloud_base": math.radians(cloud.base_deg),
            "cloud_top": math.radians(cloud.top_deg),
            "cloud_edge": math.radians(cloud.edge_deg),
            "cloud_cover": cloud.cover,
            "cloud_texture": cloud.texture,
        }
        weights = colour.xyz_weights(light.wavelength_nm)
        # as a card of that albedo under the diffuse light, with a little of the sun's: grey by day, warm at sunset
        lit = light.diffuse_horizontal + cloud.sunlit * light.direct_normal
        whitened = (lit @ weights) / math.pi * cloud.albedo
        # cloud droplets scatter all colours alike and see the whole sky and ground: half way to white
        grey = whitened[1] * colour.xy_to_XYZ1(colour.D65_XY)
        cloud_xyz = tuple(float(v) for v in 0.4 * whitened + 0.6 * grey)
        seed = np.uint64(cloud.seed)
    return Background(
        kind=kind,
        sun=sun,
        zenith=float(zenith),
        uniform=float(uniform),
        log_step=(_CCT_STEPS - 1) / math.log(1e6),
        log_first=0.0,
        xz=np.ascontiguousarray(white[:, [0, 2]]),
        has_cloud=cloud is not None,
        cloud_centre=centre,
        cloud_xyz=cloud_xyz,
        cloud_seed=seed,
        **shape,
    )


@kernel
def sky_xyz(sky, x, y, z, out):
    """Radiance of the sky without cloud in a direction, as XYZ [cd/m2], into out (3,)."""
    luminance = sky.uniform
    if sky.zenith > 0.0:
        luminance = sky.zenith * relative_luminance(sky.kind, sky.sun, x, y, z)
    at = 0.0
    if luminance > 1.0:
        at = min((math.log(luminance) - sky.log_first) * sky.log_step, sky.xz.shape[0] - 1.001)
    k = int(at)
    f = at - k
    out[0] = luminance * (sky.xz[k, 0] + f * (sky.xz[k + 1, 0] - sky.xz[k, 0]))
    out[1] = luminance
    out[2] = luminance * (sky.xz[k, 1] + f * (sky.xz[k + 1, 1] - sky.xz[k, 1]))


@kernel
def cloud_cover(sky, x, y, z, out):
    """Radiance of the cloud bank as XYZ [cd/m2] into out (3,); returns its opacity in this direction."""
    if not sky.has_cloud:
        out[0] = out[1] = out[2] = 0.0
        return 0.0
    level = math.hypot(x, y)
    elevation = math.atan2(z, level)
    away = 0.0
    if level > 1e-9:
        away = math.acos(min(1.0, max(-1.0, (x * sky.cloud_centre[0] + y * sky.cloud_centre[1]) / level)))
    # texture lives on the unit sphere, so that it has neither seam nor pole; layers lie flat, hence the stretch in z
    wide = octaves(2.2 * x, 2.2 * y, 4.4 * z, sky.cloud_seed, 3, 0.0)
    fine = octaves(6.5 * x + wide, 6.5 * y, 15.0 * z, sky.cloud_seed + np.uint64(77), 4, 0.0)
    frayed = sky.cloud_edge * (0.9 * wide + 0.35 * fine)
    half = 0.5 * sky.cloud_edge
    inside = 1.0 - smoothstep(sky.cloud_top - half, sky.cloud_top + half, elevation + frayed)
    inside *= smoothstep(sky.cloud_base - half, sky.cloud_base + half, elevation + frayed)
    if sky.cloud_half < math.pi - 1e-6:
        # meridians run together towards the zenith: the distance from the limit counts on the sky, not in azimuth
        inside *= 1.0 - smoothstep(-half, half, (away - sky.cloud_half) * level + frayed)
    opacity = sky.cloud_cover * inside
    shade = 1.0 + sky.cloud_texture * (0.9 * wide + 0.6 * fine)
    shade = max(shade, 0.15)
    for c in range(3):
        out[c] = sky.cloud_xyz[c] * shade
    return opacity
