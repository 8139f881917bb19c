"""From a scene and its scattering tables to the radiance of the sky in any direction."""

from __future__ import annotations

import math

import numpy as np

from raytrace import cast, colour
from raytrace.drops.sizes import drop_sizes
from raytrace.jit import run_all
from raytrace.light.spectrum import Illumination
from raytrace.light.sun import direction
from raytrace.optics.fold import project_with_sun_disc
from raytrace.optics.table import ScatteringTable
from raytrace.sky.background import make_background, uniform_luminance_cd_m2
from raytrace.sky.ground import make_cover, mean_ground_xyz
from raytrace.sky.rain import make_curtains
from raytrace.sky.shade import FIRST_ORDER, View, shade
from raytrace.sky.skylight import surround_grid
from raytrace.sky.terrain import make_terrain

# Visibility is the distance at which a black object keeps a contrast of 2 % against the horizon (Koschmieder 1924)
_KOSCHMIEDER = -math.log(0.02)
# Pixels that one call of the kernel works on; the cut does not depend on the number of threads
_PIECE = 16_384


def layer_names(optics) -> list[str]:
    """Names of the layers of a scene's optics, in the order in which they are added up.

    `external` and `straight` are the Debye orders p = 0 and 1; `order1` is the primary bow's (p = 2), and so on; then
    `glory` and `aureole`, where the scene asks for them.
    """
    names = ["sky", "sun", "cloud", "ground", "veil", "skylit_rain", "external", "straight"]
    names += [f"order{k}" for k in range(1, optics.paths - 1)]
    return names + [name for name in ("glory", "aureole") if draws(optics, name)]


def draws(optics, name: str) -> bool:
    """Whether the scene's optics draw the `glory` or the `aureole`: asked for, and not by rays, which know neither."""
    return getattr(optics, name) and optics.method != "rays"


def with_sky_illuminance(scene, light: Illumination) -> Illumination:
    """The light of a scene, its diffuse part scaled to what the sky that is drawn gives.

    A uniform sky of luminance L lights level ground with pi L, a black one with nothing; elsewhere it is
    `sky.illuminance_lx` where the scene gives one, else the clear-sky model's.
    """
    sky = scene.sky
    wanted = {"uniform": math.pi * uniform_luminance_cd_m2(sky), "black": 0.0}.get(sky.model, sky.illuminance_lx)
    if wanted is None or light.diffuse_horizontal_lx <= 0:
        return light
    factor = wanted / light.diffuse_horizontal_lx
    return light._replace(diffuse_horizontal=light.diffuse_horizontal * factor, diffuse_horizontal_lx=wanted)


def order_xyz(
    table: ScatteringTable,
    direct_normal: np.ndarray,
    disc_diameter_deg: float,
    *,
    aureole: bool = False,
    threads=None,
) -> np.ndarray:
    """Radiance of each order under the sun's disc, per unit of sunlit rain.

    Parameters
    ----------
    table : ScatteringTable
        For parallel light.
    direct_normal : (n_wavelength,) array
        Direct normal irradiance [W m-2 nm-1].
    disc_diameter_deg : float
        Diameter of the sun's disc [deg].
    aureole : bool
        Whether what is diffracted gets a row, the last one.

    Returns
    -------
    (rows, n_angle, 3) float64
        XYZ, rows as of `ScatteringTable.light_sr` [cd/m2].
    """
    weights = direct_normal[:, None] * colour.xyz_weights(table.wavelength_nm)
    return project_with_sun_disc(table, weights, disc_diameter_deg, aureole=aureole, threads=threads)


def prepare_view(
    scene,
    light: Illumination,
    order_tables,
    phases,
    pixel_rad: float,
    plate_xyz=None,
    *,
    span=(0.0, 2 * math.pi),
    threads=None,
) -> View:
    """Everything that the kernel of the sky needs, from the scene.

    Parameters
    ----------
    scene : Scene
    light : Illumination
        From `with_sky_illuminance`.
    order_tables : sequence of (rows, n_angle, 3) array
        From `order_xyz`, one a curtain.
    phases : sequence of (n_angle,) array
        Total phase function of each curtain's drops, any scale.
    pixel_rad : float
        Angular width of a pixel [rad].
    plate_xyz : (3,) array, optional
        Mean XYZ of the background picture, where there is one [cd/m2].
    span : (float, float)
        First azimuth that will be looked at, and the width of what will be [rad].

    Returns
    -------
    View
    """
    sun_vector = direction(light.sun.azimuth_deg, light.sun.elevation_deg)
    weights = colour.xyz_weights(light.wavelength_nm)
    direct, diffuse = light.direct_normal @ weights, light.diffuse_horizontal @ weights
    sky = make_background(scene, light, sun_vector)
    cover = make_cover(scene.ground, direct, diffuse, sun_vector)
    haze = _KOSCHMIEDER / (scene.air.visibility_km * 1e3)
    betas = [drop_sizes(rain).extinction_per_km for rain in scene.rain]
    rain = make_curtains(scene, betas, sun_vector, haze, threads=threads)
    if plate_xyz is not None:
        surround = sky._replace(
            zenith=0.0,
            uniform=float(plate_xyz[1]),
            xz=np.tile(plate_xyz[[0, 2]] / max(plate_xyz[1], 1e-9), (len(sky.xz), 1)),
        )
        ground_xyz = None
    else:
        surround = sky
        ground_xyz = None if cover.kind == 0 else mean_ground_xyz(cover)
    skylight = surround_grid(surround, ground_xyz, phases, threads=threads)
    radius = math.radians(scene.sun.disc_diameter_deg) / 2
    drawn = scene.sky.model == "cie" and radius > 0
    sun_xyz = direct / (math.pi * radius**2) if drawn else np.zeros(3)
    return View(
        sky=sky,
        land=make_terrain(scene.ground, scene.camera.height_m, pixel_rad, span, threads=threads),
        cover=cover,
        rain=rain,
        skylight=skylight,
        orders=np.ascontiguousarray(np.stack(order_tables)),
        sun_xyz=tuple(float(v) for v in sun_xyz),
        sun_radius=radius,
        has_plate=plate_xyz is not None,
    )


def layered_radiance(view: View, directions, inside, pixel_rad: float, plate=None, *, threads=None) -> np.ndarray:
    """Radiance of every layer in many directions.

    Parameters
    ----------
    view : View
    directions : (n, 3) float64
        Unit vectors: x east, y north, z up.
    inside : (n,) bool
    pixel_rad : float
        Angular width of a pixel [rad].
    plate : (n, 3) float32, optional
        XYZ of the background picture [cd/m2].

    Returns
    -------
    (n, layers, 3) float64
        XYZ [cd/m2], layers as `layer_names` has them; their sum is the picture.
    """
    n = len(directions)
    directions = cast.f64(directions, name="directions", ndim=2)
    inside = np.ascontiguousarray(inside, dtype=np.bool_)
    plate = np.zeros((n, 3), dtype=np.float32) if plate is None else np.ascontiguousarray(plate, dtype=np.float32)
    layers = np.empty((n, FIRST_ORDER + view.orders.shape[1], 3))
    tasks = []
    for start in range(0, n, _PIECE):
        piece = slice(start, min(start + _PIECE, n))
        tasks.append((view, directions[piece], inside[piece], plate[piece], float(pixel_rad), layers[piece]))
    run_all(shade, tasks, threads=threads)
    return layers
