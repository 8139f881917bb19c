"""Checks over more than one key of a scene: what contradicts what, and what would work.

Each problem names, as its key or in its reason, every key on whose value it stands: where one of those is unsound by
itself, the problem is not told.
"""

from __future__ import annotations

from pathlib import Path

from raytrace.scene.beside import file_beside
from raytrace.scene.fields import field_range, works_for
from raytrace.scene.model import WIDEST_PX, Rain
from raytrace.scene.problems import Problem, quoted
from raytrace.scene.size_laws import SHAPE_KEYS, SIZE_LAW_KEYS
from raytrace.scene.size_table import WORKS

PLATE_FORMATS = ("JPEG", "PNG", "TIFF")
# below the size from which Pillow warns
PLATE_MOST_PIXELS = 80_000_000
PLATE_MODES = ("1", "L", "LA", "P", "PA", "RGB", "RGBA", "RGBX", "CMYK", "YCbCr")
"""Pillow's modes of eight bits a channel or less; deeper ones it would cut off, not scale."""
SUN_YEARS = (1900, 2100)
"""Years in which the earth's rotation is known, or foreseen, well enough for the sun's place."""


def sun_rules(sun, given):
    """By angles or by place and time, whole, not both, and above the horizon."""
    angles = {"elevation_deg", "azimuth_deg"}
    place = {"latitude_deg", "longitude_deg", "time"}
    has_angles, has_place = angles & given, (place | {"height_m"}) & given
    if has_angles and has_place:
        key = sorted(has_place)[0]
        yield Problem(key, getattr(sun, key), "contradicts the sun's angles", "either the angles or place and time")
    elif has_place:
        for key in sorted(place - given):
            yield Problem(key, None, "is missing", "latitude_deg, longitude_deg and time together")
    else:
        for key in sorted(angles - given):
            yield Problem(
                key, None, "is missing", "elevation_deg and azimuth_deg, or latitude_deg, longitude_deg and time"
            )
    if sun.time is not None and sun.time.tzinfo is None:
        yield Problem("time", sun.time, "has no offset from UTC", "a date-time such as 2026-10-04T16:20:00+01:00")
    first, last = SUN_YEARS
    if sun.time is not None and not first <= sun.time.year <= last:
        yield Problem("time", sun.time, "is too far off to say where the sun stands", f"a year from {first} to {last}")
    if sun.elevation_deg is not None and sun.elevation_deg <= 0:
        yield Problem("elevation_deg", sun.elevation_deg, "puts the sun below the horizon", "above 0 to 90")


def rain_rules(rain, given):
    """Limits in order, and the keys that the size law wants."""
    if rain.far_m <= rain.near_m:
        yield Problem("far_m", rain.far_m, f"is not beyond near_m = {rain.near_m:g}", f"more than {rain.near_m:g}")
    elif "edge_m" in given and rain.edge_m > rain.far_m - rain.near_m:
        most = rain.far_m - rain.near_m
        yield Problem("edge_m", rain.edge_m, "is wider than the curtain from near_m to far_m", f"0 to {most:g}")
    if rain.top_m <= rain.bottom_m:
        yield Problem("top_m", rain.top_m, f"is not above bottom_m = {rain.bottom_m:g}", f"more than {rain.bottom_m:g}")
    elif "edge_top_m" in given and rain.edge_top_m > rain.top_m - rain.bottom_m:
        most = rain.top_m - rain.bottom_m
        yield Problem(
            "edge_top_m", rain.edge_top_m, "is wider than the curtain from bottom_m to top_m", f"0 to {most:g}"
        )
    start, end = rain.azimuth_from_deg, rain.azimuth_to_deg
    if start is not None and end is not None and start == end:
        yield Problem("azimuth_to_deg", end, "equals azimuth_from_deg", "another azimuth; for all round, 360 more")
    yield from _size_rules(rain, given)
    if "salinity_permille" in given and rain.water == "fresh":
        yield Problem("salinity_permille", rain.salinity_permille, "means nothing to fresh water", 'water = "sea"')
    if rain.refractive_index is not None and "water" in given:
        yield Problem("refractive_index", rain.refractive_index, "contradicts water", "one of the two")


def _size_rules(rain, given):
    """The keys that the size law wants, and one amount of water."""
    name, law = rain.size_law, SIZE_LAW_KEYS[rain.size_law]
    for key in sorted(set(law.needs) - given):
        yield Problem(key, None, f'is missing: size_law "{name}" needs it', _works_for(key))
    for key in sorted(set(SHAPE_KEYS) & given - {*law.needs, *law.takes}):
        laws = [f'"{other}"' for other, keys in SIZE_LAW_KEYS.items() if key in keys.needs + keys.takes]
        works = f"size_law = {' or '.join(laws)}"
        yield Problem(key, getattr(rain, key), f'means nothing to size_law "{name}"', works)
    amounts = [key for key in ("extinction_per_km", "liquid_water_g_m3", "rain_rate_mm_h") if key in given]
    for key in [key for key in amounts if key not in law.amounts]:
        why = f'means nothing to size_law "{name}", whose drops hang in the air'
        yield Problem(key, getattr(rain, key), why, " or ".join(law.amounts))
        amounts.remove(key)
    if law.rate_shapes and "rain_rate_mm_h" in amounts:
        amounts.remove("rain_rate_mm_h")
    for key in amounts[1:]:
        why = f'contradicts {amounts[0]} with size_law "{name}"'
        yield Problem(key, getattr(rain, key), why, "one amount of water")


def _works_for(key: str) -> str:
    if key == "size_table":
        return f"the path of {WORKS}"
    field = Rain.model_fields[key]
    return f"a diameter in mm, {field_range(field)}" if key.endswith("_mm") else works_for(field)


def sky_rules(sky, given):
    """Keys that belong to one model of the sky only."""
    belongs = {
        "cie_type": "cie",
        "illuminance_lx": "cie",
        "luminance_cd_m2": "uniform",
        "plate": "plate",
        "plate_white_cd_m2": "plate",
    }
    for key, model in belongs.items():
        if key in given and sky.model != model:
            yield Problem(key, getattr(sky, key), f'means nothing to model "{sky.model}"', f'model = "{model}"')
    if sky.model == "plate" and sky.plate is None:
        yield Problem("plate", None, 'is missing: model "plate" needs it', "the path of a JPEG, PNG or TIFF picture")
    if sky.model == "plate" and "colour_temperature_k" in given:
        yield Problem("colour_temperature_k", sky.colour_temperature_k, 'means nothing to model "plate"', "no such key")
    if sky.model == "plate" and sky.cloud is not None:
        yield Problem("cloud", None, 'means nothing to model "plate"', "no table [sky.cloud]")
    if sky.cloud is not None and sky.cloud.top_deg <= sky.cloud.base_deg:
        base = sky.cloud.base_deg
        yield Problem("cloud.top_deg", sky.cloud.top_deg, f"is not above base_deg = {base:g}", f"more than {base:g}")


def ground_rules(ground, given):
    """Hills before the end of the land."""
    if ground.reaches_m <= ground.hills_from_m:
        works = f"more than {ground.hills_from_m:g}"
        yield Problem("reaches_m", ground.reaches_m, f"is not beyond hills_from_m = {ground.hills_from_m:g}", works)


def camera_rules(camera, given):
    """What the lens can do, and one way to expose."""
    field = camera.field_of_view_deg
    if camera.projection == "perspective" and field is not None and field > 160:
        yield Problem("field_of_view_deg", field, 'is too wide for projection "perspective"', 'up to 160, or "fisheye"')
    if camera.projection == "panorama":
        if field is not None:
            yield Problem("field_of_view_deg", field, "is always 360 for a panorama", "no such key")
        if camera.width_px != 2 * camera.height_px:
            rows = min(camera.height_px, WIDEST_PX // 2)
            works = f"width_px = {2 * rows}, twice the height"
            if rows < camera.height_px:
                works = f"height_px = {rows} and {works}"
            yield Problem("width_px", camera.width_px, "is not a full panorama's, twice height_px", works)
    manual = {"f_number", "shutter_s", "iso"}
    if manual & given:
        for key in sorted(manual - given):
            yield Problem(key, None, "is missing", "f_number, shutter_s and iso together, or none for automatic")
        for key in sorted({"exposure_percentile", "exposure_level"} & given):
            yield Problem(key, getattr(camera, key), "contradicts the manual exposure", "one of the two")


RULES = {
    "sun": sun_rules,
    "rain": rain_rules,
    "sky": sky_rules,
    "ground": ground_rules,
    "camera": camera_rules,
}
"""Of each table: a generator of problems from the table and the keys that were given."""


def across_rules(tables, plate_folder):
    """Checks over more than one table; the tables are those that are sound by themselves."""
    sky, ground = tables.get("sky"), tables.get("ground")
    if sky is not None and sky.model == "plate":
        if ground is not None and ground.cover != "none":
            yield Problem("ground.cover", ground.cover, "would hide the plate", 'cover = "none" or no table [ground]')
        if sky.plate is not None:
            yield from plate_problems(sky.plate, plate_folder)


def plate_problems(plate: str, folder: Path | None):
    """Whether a plate is a picture file inside the scene's folder, of a size that can be read."""
    key = "sky.plate"
    formats = "a JPEG, PNG or TIFF picture"
    path = file_beside(key, plate, folder, formats)
    if isinstance(path, Problem):
        yield path
        return
    import warnings

    from PIL import Image

    try:
        with warnings.catch_warnings():
            # sizes are judged here, by our own limit
            warnings.simplefilter("ignore", Image.DecompressionBombWarning)
            with Image.open(path, formats=PLATE_FORMATS) as picture:
                pixels = picture.width * picture.height
                if pixels > PLATE_MOST_PIXELS:
                    size = f"{picture.width}x{picture.height}"
                    yield Problem(
                        key, plate, f"has {size} pixels", f"up to {PLATE_MOST_PIXELS // 10**6} million pixels"
                    )
                    return
                if picture.mode not in PLATE_MODES:
                    yield Problem(key, plate, f"has pixels of kind {picture.mode}", f"{formats}, 8 bits a channel")
                    return
                picture.load()
    except Image.DecompressionBombError:
        # raised on opening, from twice the size at which Pillow warns
        yield Problem(key, plate, "has far too many pixels", f"up to {PLATE_MOST_PIXELS // 10**6} million pixels")
    except Exception as problem:
        # Pillow's readers raise a dozen kinds of error on damaged files; each means the same here
        yield Problem(key, plate, f"is no picture that can be read ({quoted(str(problem), 60)})", formats)
