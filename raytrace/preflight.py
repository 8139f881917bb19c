"""What is checked after a scene is read and before anything compiles: the sun's place, and memory."""

from __future__ import annotations

from raytrace.errors import InputError
from raytrace.memory import free_bytes
from raytrace.optics.scattering import wavelengths_nm
from raytrace.scene.problems import in_toml, quoted

# Measured with 1280x720 and 7680x4320 pictures (tests/benchmarks); rounded up
FIXED_BYTES = 420e6
BYTES_PER_PLATE_PIXEL = 40
BYTES_PER_PIXEL = 36
BYTES_PER_LAYER_PIXEL = 12
TABLES_AT_ONCE = 3.2
# What Airy bows keep of five indices at a time, and the ways from grids to bins
WAVE_BYTES_PER_BIN = 12_000


def preflight(scene, *, layers: bool = False, name: str = "scene", need: float | None = None) -> None:
    """Refuse a scene that cannot be rendered here, or, where no picture is made, cannot be computed with.

    Parameters
    ----------
    scene : Scene
    layers : bool
        Whether the picture's layers are kept.
    name : str
        What problems call the scene.
    need : float, optional
        Memory that is needed where no picture is made, without the plate's; pixels are not counted then [B].

    Raises
    ------
    InputError
        If the sun is below the horizon at the place and time given, the plate is gone, or the picture needs more memory
        than is free.
    """
    problems, name = [], quoted(name, 200)
    if scene.sun.time is not None:
        from raytrace.light.sun import sun_place

        sun = sun_place(scene)
        if sun.elevation_deg <= 0:
            problems.append(
                f"{name}: sun.time: {scene.sun.time.isoformat()} puts the sun {-sun.elevation_deg:.1f} deg below the "
                "horizon at this place; what works: a time by day"
            )
    plate = scene.plate_path()
    if scene.sky.model == "plate" and (plate is None or not plate.is_file()):
        given = "none" if scene.sky.plate is None else in_toml(scene.sky.plate)
        problems.append(
            f"{name}: sky.plate: {given} is not a file, or has no folder to start from; what works: a scene that is "
            "read from its file, with the picture still in place"
        )
        raise InputError(*problems)
    free = free_bytes()
    if need is not None:
        need += _plate_bytes(scene)
        if need > free:
            problems.append(
                f"{name}: would need {need / 1e9:.1f} GB of memory and {free / 1e9:.1f} GB are free; what works: fewer "
                "tables [[rain]], a smaller plate, or a machine with more free memory"
            )
    elif (need := needed_bytes(scene, layers=layers)) > free:
        width, height = scene.camera.width_px, scene.camera.height_px
        spare = free - (need - width * height * _per_pixel(scene, layers))
        works = "a machine with more free memory"
        if spare > 0:
            shrink = (spare / _per_pixel(scene, layers) / (width * height)) ** 0.5
            rows = int(height * shrink)
            # a panorama stays twice as wide as high
            columns = 2 * rows if scene.camera.projection == "panorama" else int(width * shrink)
            if min(rows, columns) >= 8:
                works = f"{columns}x{rows} px or smaller"
        problems.append(
            f"{name}: camera.width_px: {width}x{height} px would need {need / 1e9:.1f} GB of memory and "
            f"{free / 1e9:.1f} GB are free; what works: {works}"
        )
    if problems:
        raise InputError(*problems)


def needed_bytes(scene, *, layers: bool = False) -> float:
    """Estimate of the memory that rendering a scene takes at its peak [B]."""
    optics = scene.optics
    table = 2 * 8 * 2 * optics.paths * optics.bins * wavelengths_nm(optics).size
    # per block of rays a histogram of its own
    if optics.method != "rays":
        # aureole and glory, and rows made from orders without them
        table *= 1.5
    tracing = 32 * 8 * 2 * optics.paths * optics.bins
    pixels = scene.camera.width_px * scene.camera.height_px
    optical = max(TABLES_AT_ONCE * table / 2, table + tracing)
    if optics.method != "rays":
        optical += WAVE_BYTES_PER_BIN * optics.bins
    return FIXED_BYTES + optical + _plate_bytes(scene) + pixels * _per_pixel(scene, layers)


def _plate_bytes(scene) -> float:
    """What reading a plate takes: its pixels as bytes, as encoded and as linear numbers."""
    if scene.plate_path() is None:
        return 0.0
    from PIL import Image

    with Image.open(scene.plate_path()) as picture:
        return float(picture.width * picture.height * BYTES_PER_PLATE_PIXEL)


def _per_pixel(scene, layers: bool) -> float:
    each = BYTES_PER_PIXEL + (12 if scene.sky.model == "plate" else 0)
    return each + (BYTES_PER_LAYER_PIXEL * (scene.optics.paths + 8) if layers else 0)
