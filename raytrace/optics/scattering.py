"""From the scene to its scattering tables, made or from the cache."""

from __future__ import annotations

import sys

import numpy as np

from raytrace.drops.sizes import size_spectrum
from raytrace.drops.water import refractive_index
from raytrace.errors import InputError
from raytrace.optics import cache
from raytrace.optics.table import ScatteringTable

SPECTRUM_NM = (380.0, 780.0)


def wavelengths_nm(optics) -> np.ndarray:
    """Wavelengths of a scene's optics, from 380 to at most 780 nm in steps [nm]."""
    first, last = SPECTRUM_NM
    return first + optics.wavelength_step_nm * np.arange(int((last - first) / optics.wavelength_step_nm + 1e-9) + 1)


def scattering_table(
    scene, curtain: int = 0, *, threads: int | None = None, use_cache: bool = True, progress: bool = False
) -> ScatteringTable:
    """Scattering by the mean drop of one curtain of rain, for parallel light.

    In ray optics the size of a drop matters only through absorption, whose chord scales with the diameter; the
    cross-section weighted mean diameter (volume over cross-section) is exact to first order in that absorption. With
    Airy bows and waves each size counts for itself.

    Parameters
    ----------
    scene : Scene
    curtain : int
        Which of the scene's tables [rain].
    threads : int, optional
    use_cache : bool
        Whether tables are read from and kept in the cache.
    progress : bool
        Show a bar on standard error.

    Returns
    -------
    ScatteringTable

    Raises
    ------
    InputError
        If the scene has no such curtain.
    """
    return made_or_kept(*_arguments(scene, curtain), threads=threads, use_cache=use_cache, progress=progress)


def made_or_kept(
    method: str, arguments: dict, *, threads: int | None = None, use_cache: bool = True, progress: bool = False
) -> ScatteringTable:
    """A table from the cache, or made and kept there.

    Parameters
    ----------
    method : str
        "rays", "airy", "waves" or "auto".
    arguments : dict
        Of `trace_sphere` for rays, of `drop_table` for the others.
    threads, use_cache, progress
        As for `scattering_table`.

    Returns
    -------
    ScatteringTable
    """
    key = cache.table_key(method=method, **arguments)
    if use_cache and (table := cache.load(key)) is not None:
        return table
    from tqdm import tqdm

    make = _maker(method)
    with tqdm(
        total=arguments["index"].size, desc=_DOING[method], unit="wavelength", disable=not progress, file=sys.stderr
    ) as bar:
        table = make(**arguments, threads=threads, on_done=bar.update)
    if use_cache:
        cache.store(key, table)
    return table


_DOING = {"rays": "tracing drops", "airy": "Airy bows", "waves": "waves in drops", "auto": "light in drops"}


def _maker(method: str):
    if method == "rays":
        from raytrace.optics.sphere import trace_sphere

        return trace_sphere
    import functools

    from raytrace.optics.drop_table import drop_table

    return functools.partial(drop_table, method=method)


def is_cached(scene) -> list[bool]:
    """Whether the table of each curtain lies in the cache (it is not read)."""
    found = []
    for curtain in range(len(scene.rain)):
        method, arguments = _arguments(scene, curtain)
        path = cache.path_of(cache.table_key(method=method, **arguments))
        found.append(path is not None and path.is_file())
    return found


def _arguments(scene, curtain: int) -> tuple[str, dict]:
    if not 0 <= curtain < len(scene.rain):
        raise InputError(f"curtain {curtain} given; the scene has {len(scene.rain)}, counted from 0")
    rain, optics = scene.rain[curtain], scene.optics
    wavelength, spectrum = wavelengths_nm(optics), size_spectrum(rain)
    arguments = {
        "index": refractive_index(rain, scene.air, wavelength),
        "wavelength_nm": wavelength,
        "paths": optics.paths,
        "rays": optics.rays,
        "bins": optics.bins,
        "seed": optics.seed,
    }
    if optics.method == "rays":
        return "rays", arguments | {"diameter_mm": spectrum.effective_mm()}
    return optics.method, arguments | {"spectrum": spectrum, "glory": optics.glory}
