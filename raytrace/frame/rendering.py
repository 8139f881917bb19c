"""Render a scene: tables, sky, camera, picture, in strips of rows so that memory does not grow with the layers."""

from __future__ import annotations

import sys
import time
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from raytrace import colour
from raytrace.camera import develop
from raytrace.camera.lens import azimuth_span, make_lens, row_directions
from raytrace.frame.frame import Frame
from raytrace.jit import run_all
from raytrace.light.spectrum import before_loading_beside, illumination
from raytrace.light.sun import antisolar
from raytrace.optics.scattering import scattering_table, wavelengths_nm
from raytrace.sky.radiance import (
    draws,
    layer_names,
    layered_radiance,
    order_xyz,
    prepare_view,
    with_sky_illuminance,
)

_STRIP_PIXELS = 131_072
_DEVELOP_PIXELS = 65_536


def render(
    scene, *, threads: int | None = None, cache: bool = True, progress: bool = False, layers: bool = False
) -> Frame:
    """Render a scene to a frame.

    Parameters
    ----------
    scene : Scene
    threads : int, optional
        All cores unless given; the picture does not depend on it.
    cache : bool
        Whether traced tables are read from and kept in the cache.
    progress : bool
        Show bars on standard error.
    layers : bool
        Keep each layer's XYZ (12 bytes a pixel and layer).

    Returns
    -------
    Frame

    Raises
    ------
    InputError
        If the scene asks for what cannot be: the sun below the horizon, more memory than there is, a bad plate.
    """
    from raytrace import __version__
    from raytrace.preflight import preflight
    from raytrace.scene.load import scene_hash

    start = time.perf_counter()
    preflight(scene, layers=layers)
    wavelength = wavelengths_nm(scene.optics)
    tables, phases, rays = [], [], 0
    before_loading_beside()
    # the spectrum's libraries take a second to load, which the first table's tracing or reading can overlap
    with ThreadPoolExecutor(1) as pool:
        spectrum = pool.submit(illumination, scene, wavelength)
        table = scattering_table(scene, 0, threads=threads, use_cache=cache, progress=progress)
        light = with_sky_illuminance(scene, spectrum.result())
    for curtain in range(len(scene.rain)):
        if curtain:
            table = scattering_table(scene, curtain, threads=threads, use_cache=cache, progress=progress)
        rays += table.rays * wavelength.size
        phases.append(_mean_phase(table, light))
        tables.append(
            order_xyz(
                table,
                light.direct_normal,
                scene.sun.disc_diameter_deg,
                aureole=draws(scene.optics, "aureole"),
                threads=threads,
            )
        )
    lens = make_lens(scene.camera, antisolar(light.sun)[0])
    plate = read_plate(scene, lens) if scene.sky.model == "plate" else None
    plate_mean = None if plate is None else plate.mean(axis=(0, 1), dtype=np.float64)
    view = prepare_view(
        scene, light, tables, phases, lens.pixel_rad, plate_mean, span=azimuth_span(lens), threads=threads
    )
    xyz, inside, kept = _radiance(view, lens, plate, layer_names(scene.optics), layers, threads, progress)
    exposure = _exposure(scene.camera, xyz, inside)
    sun_xyz = light.direct_normal @ colour.xyz_weights(wavelength)
    matrix = develop.xyz_to_display(scene.camera.white_balance, sun_xyz) / exposure.white_cd_m2
    rgb, counts = _develop(xyz, matrix, scene.optics.seed, threads)
    shape = (lens.height_px, lens.width_px)
    azimuth, elevation = antisolar(light.sun)
    truth = {
        "version": __version__,
        "sun": {"elevation_deg": light.sun.elevation_deg, "azimuth_deg": light.sun.azimuth_deg},
        "antisolar": {"elevation_deg": elevation, "azimuth_deg": azimuth},
        "optics": {"rays_traced": rays, "seed": scene.optics.seed, "paths": scene.optics.paths},
        "white_cd_m2": exposure.white_cd_m2,
    }
    return Frame(
        rgb=rgb.reshape(*shape, 3),
        luminance=np.ascontiguousarray(xyz[:, 1]).reshape(shape),
        layers=kept,
        truth=truth,
        exposure=exposure,
        lens=lens,
        scene_hash=scene_hash(scene),
        clipped=int(counts[0]),
        out_of_gamut=int(counts[1]),
        seconds=time.perf_counter() - start,
    )


def _mean_phase(table, light) -> np.ndarray:
    """(n_angle,) total phase function, weighted by the luminance of diffuse light."""
    weight = light.diffuse_horizontal * colour.xyz_weights(table.wavelength_nm)[:, 1]
    if weight.sum() <= 0:
        weight = np.ones_like(weight)
    return np.tensordot(weight / weight.sum(), table.light_sr().sum(axis=0), axes=1)


def _radiance(view, lens, plate, names, layers, threads, progress):
    """XYZ of all pixels (n, 3) float32, which of them the lens images, and the layers where asked for."""
    from tqdm import tqdm

    width, height = lens.width_px, lens.height_px
    xyz = np.empty((width * height, 3), dtype=np.float32)
    inside = np.empty(width * height, dtype=bool)
    kept = {name: np.empty((height, width, 3), dtype=np.float32) for name in names} if layers else None
    rows = max(1, _STRIP_PIXELS // width)
    with tqdm(total=height, desc="lighting pixels", unit="row", disable=not progress, file=sys.stderr) as bar:
        for first in range(0, height, rows):
            last = min(first + rows, height)
            part = slice(first * width, last * width)
            directions, inside[part] = row_directions(lens, first, last)
            strip = None if plate is None else plate[first:last].reshape(-1, 3)
            values = layered_radiance(view, directions, inside[part], lens.pixel_rad, strip, threads=threads)
            xyz[part] = values.sum(axis=1)
            if layers:
                for k, name in enumerate(names):
                    kept[name][first:last] = values[:, k].reshape(last - first, width, 3)
            bar.update(last - first)
    return xyz, inside, kept


def _exposure(camera, xyz, inside) -> develop.Exposure:
    if camera.f_number is not None:
        return develop.manual_exposure(camera.f_number, camera.shutter_s, camera.iso)
    luminance = xyz[:, 1] if inside.all() else xyz[inside, 1]
    return develop.automatic_exposure(luminance, camera.exposure_percentile, camera.exposure_level)


def _develop(xyz, matrix, seed, threads):
    rgb = np.empty(xyz.shape, dtype=np.uint8)
    codes, stream = develop.code_table(), develop.dither_stream(seed)
    pieces = range(0, len(xyz), _DEVELOP_PIXELS)
    counts = np.zeros((len(pieces), 2), dtype=np.int64)
    tasks = []
    for row, start in zip(counts, pieces, strict=True):
        part = slice(start, min(start + _DEVELOP_PIXELS, len(xyz)))
        tasks.append((xyz[part], matrix, codes, stream, start, True, rgb[part], row))
    run_all(develop.develop_pixels, tasks, threads=threads)
    return rgb, counts.sum(axis=0)


def read_plate(scene, lens) -> np.ndarray:
    """(height, width, 3) float32 XYZ of the background picture at the frame's size [cd/m2]."""
    from PIL import Image, ImageOps

    with Image.open(scene.plate_path()) as picture:
        picture = ImageOps.exif_transpose(picture).convert("RGB")
        encoded = np.asarray(picture, dtype=np.float32) / np.float32(255)
    linear = colour.decode_srgb(encoded) * np.float32(scene.sky.plate_white_cd_m2)
    # scaled in linear light, or edges would darken
    bands = [
        np.asarray(Image.fromarray(linear[..., k]).resize((lens.width_px, lens.height_px), Image.Resampling.LANCZOS))
        for k in range(3)
    ]
    return np.maximum(np.stack(bands, axis=-1), 0) @ colour.SRGB_TO_XYZ.T.astype(np.float32)
