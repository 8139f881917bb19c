"""Compare bows: trace until the figures are known, then look at the scene."""

from __future__ import annotations

import sys
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from raytrace.comparison import in_scene
from raytrace.comparison.asked import FIRST_RAYS, MOST_RAYS, check_asked, shown
from raytrace.comparison.drop import Drop
from raytrace.comparison.estimate import MONO_NM, Estimate, needed_bytes
from raytrace.comparison.figures import (
    COLOUR_FIGURES,
    MONO_FIGURES,
    RED_NM,
    VIOLET_NM,
    bow_figures,
    edges,
    order_name,
    ray_weight,
    relative_error,
)
from raytrace.comparison.in_scene import Sight
from raytrace.comparison.report import Report, Row
from raytrace.comparison.wave_estimate import WaveEstimate
from raytrace.drops.bow_angle import size_parameter
from raytrace.drops.sizes import size_spectrum
from raytrace.drops.water import refractive_index
from raytrace.errors import InputError
from raytrace.light.spectrum import before_loading_beside
from raytrace.optics.scattering import wavelengths_nm
from raytrace.preflight import preflight
from raytrace.scene.model import Scene

# Orders traced at least, so that the glow of a few bows' drops is whole
_FEWEST_PATHS = 9
# Bows of neighbouring wavelengths stand a tenth of the sun's disc apart
_STEP_NM = 10.0


def compare(
    scene_or_drop=None,
    *,
    orders: int = 7,
    tolerance: float = 0.01,
    seed: int | None = None,
    threads: int | None = None,
    progress: bool = False,
    most_rays: tuple[int, int] = MOST_RAYS,
    method: str | None = None,
    name: str = "scene",
) -> Report:
    """How bright each bow is against the others, against the glow of the same drops, and against a scene's sky.

    Parameters
    ----------
    scene_or_drop : Scene or Drop, optional
        A scene: its sun, air, rain, sky and camera. A drop: black sky. A drop of 1 mm and 20 degC unless given.
    orders : int
        Bows 1 to this order, 1 to 12.
    tolerance : float
        Relative standard error that rays are added for, above 0 to 0.5.
    seed : int, optional
        The scene's own, or 0, unless given.
    threads : int, optional
        From 1; all cores unless given; the figures do not depend on it.
    progress : bool
        Show a bar on standard error.
    most_rays : (int, int)
        Rays at 550 nm, and at each wavelength of the spectrum, at which adding ends; at least those of the first round.
    method : str, optional
        "rays", "airy", "waves" or "auto"; a scene's own, and rays for a drop, unless given. With the last three each
        size of drops counts for itself, and what rays would make of them stands beside in the plot.
    name : str
        What problems call the scene.

    Returns
    -------
    Report

    Raises
    ------
    InputError
        If an argument is out of range, or the scene cannot be used.
    """
    subject = Drop() if scene_or_drop is None else scene_or_drop
    check_asked(orders=orders, tolerance=tolerance, seed=seed, threads=threads, most_rays=most_rays, method=method)
    is_drop = isinstance(subject, Drop)
    if not is_drop and not isinstance(subject, Scene):
        raise InputError(
            f"scene_or_drop: {shown(subject)} given, which is neither a scene nor a drop; what works: "
            "raytrace.load_scene(path), or raytrace.Drop(...)"
        )
    scene, name = subject.scene() if is_drop else subject, str(name)
    seed = scene.optics.seed if seed is None else int(seed)
    wavelength = wavelengths_nm(scene.optics.model_copy(update={"wavelength_step_nm": _STEP_NM}))
    paths = max(orders + 2, _FEWEST_PATHS, 0 if is_drop else scene.optics.paths)
    if not is_drop:
        preflight(scene, name=name, need=needed_bytes(paths, len(scene.rain)))
    method = ("rays" if is_drop else scene.optics.method) if method is None else method
    before_loading_beside()
    above_the_air = is_drop and subject.sun_elevation_deg is None
    estimates, light = _traced(scene, wavelength, paths, seed, threads, above_the_air, whole=method == "rays")
    by_rays = None
    if method != "rays":
        by_rays = _curves(estimates[0])["xyz"]
        irradiance = light if isinstance(light, np.ndarray) else light.direct_normal
        estimates = [
            WaveEstimate(scene, c, wavelength, irradiance, method, paths, seed=seed, threads=threads, progress=progress)
            for c in range(len(scene.rain))
        ]
    index = refractive_index(scene.rain[0], scene.air, [VIOLET_NM, MONO_NM, RED_NM]).real
    size = None if method == "rays" else size_parameter(_diameter_mm(scene.rain[0]), MONO_NM)
    places = {
        k: edges(float(index[2]), float(index[0]), float(index[1]), k, size_parameter=size)
        for k in range(1, orders + 1)
    }
    sight = None if is_drop else Sight(scene, light, threads)
    found, seen = _refine(estimates, places, tolerance, most_rays, sight, progress)
    rows = [_row(k, places[k], found.get(k), float(index[1]), tolerance) for k in places]
    elevation = subject.sun_elevation_deg if is_drop else light.sun.elevation_deg
    for row in rows:
        if row.centre is not None and elevation is not None:
            row.place_above_horizon(float(elevation))
        row.scene = seen.get(row.order)
        if row.scene is not None:
            errors = in_scene.relative_errors(row.scene)
            row.scene["tolerance_missed"] = [k for k, error in errors.items() if error > tolerance]
    return Report(
        rows=rows,
        input=_input(subject, scene, name, orders, tolerance, seed, method, light),
        rays=tuple(estimates[0].rays),
        left_over=float(estimates[0].left_over.mean()),
        tolerance=tolerance,
        most_rays=tuple(most_rays),
        curves=_curves(estimates[0]) | {"rays_xyz": by_rays},
    )


def _traced(scene, wavelength, paths, seed, threads, above_the_air, *, whole) -> tuple[list, object]:
    """Estimates by rays after the first round, one a curtain, and the light; not whole: the first curtain's colours."""
    curtains = len(scene.rain) if whole else 1
    with ThreadPoolExecutor(1) as pool:
        # the spectrum's libraries take a second to load, which the rays at 550 nm can overlap
        spectrum = pool.submit(_light, scene, wavelength, above_the_air)
        estimates = [_estimate(scene, c, wavelength, paths, seed, threads) for c in range(curtains)]
        for estimate in estimates if whole else ():
            estimate.add_mono(FIRST_RAYS[0])
        light = spectrum.result()
    for estimate in estimates:
        estimate.set_spectrum(light if isinstance(light, np.ndarray) else light.direct_normal)
        estimate.add_colour(FIRST_RAYS[1])
    return estimates, light


def _diameter_mm(rain) -> float:
    return float(size_spectrum(rain).effective_mm())


def _light(scene, wavelength, above_the_air):
    """The scene's illumination, or just the spectrum of the unattenuated sun."""
    from raytrace.light.spectrum import extraterrestrial, illumination

    if above_the_air:
        return extraterrestrial(wavelength)
    from raytrace.sky.radiance import with_sky_illuminance

    return with_sky_illuminance(scene, illumination(scene, wavelength))


def _estimate(scene, curtain, wavelength, paths, seed, threads):
    rain = scene.rain[curtain]
    return Estimate(
        refractive_index(rain, scene.air, wavelength),
        wavelength,
        complex(refractive_index(rain, scene.air, [MONO_NM])[0]),
        _diameter_mm(rain),
        scene.sun.disc_diameter_deg,
        paths,
        seed=seed,
        threads=threads,
    )


def _refine(estimates, places, tolerance, most_rays, sight, progress) -> tuple[dict, dict]:
    """Add rays, twice as many each time, until every figure is known or the limit is reached.

    Figures of the drops are the first curtain's; those in the scene are of the light of all curtains, which then all
    get the same rays in colour.

    Returns
    -------
    found, seen : dict of int to dict
        By order: figures as `bow_figures` gives them, and what `Sight.bow` says (empty without a scene).
    """
    from tqdm import tqdm

    first = estimates[0]
    with tqdm(
        desc="tracing drops", unit=" M rays", disable=not progress, file=sys.stderr, bar_format="{desc}: {postfix}"
    ) as bar:
        while True:
            found, seen = _figures(estimates, places, sight)
            worst = [_worst(found, names) for names in (MONO_FIGURES, COLOUR_FIGURES)]
            worst[1] = max(
                [worst[1], *(e for scene in seen.values() for e in in_scene.relative_errors(scene).values())]
            )
            million = (first.rays[0] + first.rays[1] * first.wavelength_nm.size) * len(estimates) / 1e6
            bar.set_postfix_str(f"{million:.1f} M rays, largest error {max(worst):.2%} of {tolerance:.2%}")
            wanted = [first.grows and error > tolerance for error in worst]
            more = [min(first.rays[k], most_rays[k] - first.rays[k]) if wanted[k] else 0 for k in range(2)]
            if max(more) < 1000:
                return found, seen
            if more[0] >= 1000:
                first.add_mono(more[0])
            if more[1] >= 1000:
                for estimate in estimates:
                    estimate.add_colour(more[1])


def _figures(estimates, places, sight) -> tuple[dict, dict]:
    found, seen, primary = {}, {}, None
    for order, place in places.items():
        if place is None:
            continue
        found[order] = bow_figures(estimates[0], order, place, primary)
        if order == 1:
            primary = found[order]
        if sight is not None:
            seen[order] = sight.bow(estimates, order, place["centre"], found[order]["luminance_bin"])
    return found, seen


def _worst(found, names) -> float:
    pairs = [(f["value"][n], f["error"][n]) for f in found.values() for n in names]
    return max((relative_error(value, error) for value, error in pairs if value is not None), default=0.0)


def _row(order, place, found, index, tolerance) -> Row:
    if place is None:
        return Row(order=order, name=order_name(order), centre=None)
    weight = ray_weight(index, order)
    ratio = weight / ray_weight(index, 1) if index < 2 else None
    names = MONO_FIGURES + COLOUR_FIGURES
    return Row(
        order=order,
        name=order_name(order),
        centre=place["centre"],
        red_edge_deg=place["red_edge_deg"],
        violet_edge_deg=place["violet_edge_deg"],
        colour_width_deg=place["colour_width_deg"],
        bow_ray_weight=weight,
        bow_ray_ratio=ratio,
        filter=found["filter"],
        standard_error=found["error"],
        missed=[
            n
            for n in names
            if found["value"][n] is not None and relative_error(found["value"][n], found["error"][n]) > tolerance
        ],
        **found["value"],
    )


def _curves(estimate) -> dict:
    return {
        "angle_deg": estimate.angle_deg,
        "mono_sr": estimate.mono.mean(axis=0),
        "xyz": np.moveaxis(estimate.colour.mean(axis=1), 0, -1),
    }


def _input(subject, scene, name, orders, tolerance, seed, method, light) -> dict:
    common = {"orders": int(orders), "tolerance": float(tolerance), "seed": int(seed), "method": method}
    if isinstance(subject, Drop):
        import dataclasses

        return {"drop": dataclasses.asdict(subject), **common}
    from raytrace.scene.load import scene_hash

    sun = {"elevation_deg": light.sun.elevation_deg, "azimuth_deg": light.sun.azimuth_deg}
    named = {"name": name, "sha256": scene_hash(scene), "curtains": len(scene.rain), "sun": sun}
    return {"scene": named, **common}
