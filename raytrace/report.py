"""What `check` and `info` print: plain lines of name and value, with units."""

from __future__ import annotations


def scene_report(scene, *, name: str) -> str:
    """What `render` would use for a scene.

    Parameters
    ----------
    scene : Scene
    name : str
        What to call the file.

    Raises
    ------
    InputError
        If the scene cannot be rendered here.
    """
    from raytrace.light.spectrum import illumination
    from raytrace.light.sun import antisolar
    from raytrace.optics.scattering import is_cached, wavelengths_nm
    from raytrace.preflight import free_bytes, needed_bytes, preflight
    from raytrace.scene.load import scene_hash
    from raytrace.sky.radiance import with_sky_illuminance

    preflight(scene, name=name)
    wavelength = wavelengths_nm(scene.optics)
    light = with_sky_illuminance(scene, illumination(scene, wavelength))
    azimuth, elevation = antisolar(light.sun)
    optics, camera = scene.optics, scene.camera
    lines = [
        ("scene", name),
        ("sha-256", scene_hash(scene)),
        ("sun", f"{light.sun.elevation_deg:.2f} deg up at azimuth {light.sun.azimuth_deg:.2f} deg, apparent"),
        ("antisolar point", f"{-elevation:.2f} deg below the horizon at azimuth {azimuth:.2f} deg"),
        ("air mass", f"{light.airmass:.2f}"),
        ("direct sunlight", f"{light.direct_normal_lx:,.0f} lx square to the sun"),
        ("diffuse skylight", f"{light.diffuse_horizontal_lx:,.0f} lx on level ground"),
    ]
    for number, (rain, kept) in enumerate(zip(scene.rain, is_cached(scene), strict=True)):
        title = "rain" if len(scene.rain) == 1 else f"rain[{number}]"
        lines += [(f"{title} {key}", value) for key, value in _rain_lines(scene, rain, elevation)]
        lines += [(f"{title} {key}", value) for key, value in _method_lines(scene, rain)]
        lines.append((f"{title} table", "in the cache" if kept else "not made yet"))
    apart = [name for name in ("glory", "aureole") if getattr(optics, name)]
    if apart:
        unknown = ": rays know of neither" if optics.method == "rays" else ""
        lines.append(("drawn apart", ("nothing" if unknown else " and ".join(apart)) + unknown))
    lines += [
        ("orders", f"p = 0 to {optics.paths - 1}: bows 1 to {optics.paths - 2}"),
        ("rays", f"{optics.rays:,} a wavelength, {wavelength.size} wavelengths, seed {optics.seed}"),
        ("angles", f"{optics.bins:,} bins of {180 / optics.bins:.4g} deg"),
        ("sky", _sky_line(scene.sky)),
        ("ground", scene.ground.cover),
        ("camera", _camera_line(camera, azimuth)),
        ("exposure", _exposure_line(camera)),
        ("memory", f"{needed_bytes(scene) / 1e9:.2f} GB at most, {free_bytes() / 1e9:.1f} GB free"),
    ]
    return _aligned(lines)


def _rain_lines(scene, rain, antisolar_elevation_deg):
    from raytrace.drops.bow_angle import bow_angle
    from raytrace.drops.sizes import CLOUD_MM, drop_sizes
    from raytrace.drops.water import refractive_index
    from raytrace.scene.size_laws import SIZE_LAW_KEYS

    sizes = drop_sizes(rain)
    depth = sizes.extinction_per_km * (rain.far_m - rain.near_m) * 1e-3
    yield "extinction", f"{sizes.extinction_per_km:.4g} per km, optical depth {depth:.3g} from near to far"
    mean = f"mean diameter by cross-section {sizes.effective_diameter_mm:.3g} mm"
    if sizes.median_diameter_mm < CLOUD_MM:
        mean = f"effective radius {500.0 * sizes.effective_diameter_mm:.3g} um"
    yield "drops", f"{rain.size_law}, {mean}"
    yield "liquid water", f"{sizes.water_g_m3:.3g} g/m3"
    if "rain_rate_mm_h" in SIZE_LAW_KEYS[rain.size_law].amounts:
        yield "rate", f"{sizes.rain_rate_mm_h:.3g} mm/h"
    index = refractive_index(rain, scene.air, [400.0, 550.0, 700.0])
    yield "index", ", ".join(f"{n.real:.5f} at {w} nm" for n, w in zip(index, (400, 550, 700), strict=True))
    for order, bow in ((1, "primary"), (2, "secondary")):
        if index.real.max() < order + 1:
            radius = [float(bow_angle(n.real, order).radius_deg) for n in index[::-1]]
            top = antisolar_elevation_deg + radius[0]
            where = f"top {top:.1f} deg up" if top > 0 else "below the horizon"
            yield bow, f"radius {radius[0]:.2f} deg red, {radius[1]:.2f} green, {radius[2]:.2f} violet; {where}"


def _method_lines(scene, rain):
    """Which sizes of drops use which method, by order, at 550 nm."""
    import math

    from raytrace.drops.bow_angle import size_parameter
    from raytrace.drops.sizes import size_spectrum
    from raytrace.drops.water import refractive_index
    from raytrace.optics.methods import choose, switch_over
    from raytrace.optics.size_nodes import SizeAxis

    optics, nm = scene.optics, 550.0
    yield (
        "method",
        {
            "rays": "rays for drops of all sizes, no waves",
            "airy": "rays, joined to Airy bows, for drops of all sizes",
            "waves": "exact waves for drops of all sizes",
            "auto": f"each order by the cheapest method that is good to 1 %, at {nm:g} nm:",
        }[optics.method],
    )
    if optics.method == "waves" and size_spectrum(rain).high_mm > 1.0:
        yield "cost", "exact waves of drops beyond a millimetre: the first table takes minutes"
    if optics.method != "auto":
        return
    index = float(refractive_index(rain, scene.air, [nm])[0].real)
    spectrum = size_spectrum(rain)
    rays_from, airy_from = switch_over(optics.paths, index)
    if spectrum.low_mm == spectrum.high_mm:
        x = size_parameter(spectrum.low_mm, nm)
        names = ("rays", "Airy bow", "waves")
        chosen = choose("auto", x, optics.paths, index)[0]
        yield "sizes", ", ".join(f"p = {p} {names[m]}" for p, m in enumerate(chosen))
        return
    if airy_from[min(2, optics.paths - 1)] == math.inf and spectrum.high_mm > 1.0:
        yield (
            "cost",
            f"the index {index:.3f} is no water's, so waves serve large drops too: the first table takes minutes",
        )
    diameter, weight = (part.ravel() for part in SizeAxis(spectrum).nodes(512))
    for p in range(optics.paths):
        start = min(rays_from[p], airy_from[p])
        limit = start / size_parameter(1.0, nm)
        share = weight[diameter < limit].sum()
        then = "rays" if rays_from[p] <= airy_from[p] else "Airy bows"
        text = "waves for all sizes"
        if share < 0.9995:
            text = f"waves to {limit:.3g} mm ({100 * share:.3g} % of the cross-section), {then} above"
        yield f"p = {p}", text


def _sky_line(sky) -> str:
    text = {
        "cie": f"CIE standard general sky type {sky.cie_type}",
        "uniform": f"uniform, {2000.0 if sky.luminance_cd_m2 is None else sky.luminance_cd_m2:g} cd/m2",
        "black": "black",
        "plate": f"plate {sky.plate}",
    }[sky.model]
    return text + (", with a bank of cloud" if sky.cloud is not None else "")


def _camera_line(camera, antisolar_azimuth_deg) -> str:
    azimuth = antisolar_azimuth_deg if camera.azimuth_deg is None else camera.azimuth_deg
    field = {"perspective": 90.0, "fisheye": 180.0, "panorama": 360.0}[camera.projection]
    field = field if camera.field_of_view_deg is None else camera.field_of_view_deg
    lens = f"{camera.projection}, {field:g} deg, {camera.width_px}x{camera.height_px} px"
    pointing = f"{camera.elevation_deg:g} deg up at azimuth {azimuth % 360:.2f} deg, roll {camera.roll_deg:g} deg"
    return f"{lens}, looks {pointing}, {camera.height_m:g} m above ground"


def _exposure_line(camera) -> str:
    from raytrace.camera.develop import manual_exposure

    if camera.f_number is not None:
        exposure = manual_exposure(camera.f_number, camera.shutter_s, camera.iso)
        return f"{exposure.how}: white at {exposure.white_cd_m2:,.0f} cd/m2"
    return f"automatic: {camera.exposure_percentile:g} % of pixels below {camera.exposure_level:g} of white"


def machine_report() -> str:
    """Versions, threads, and the cache folders with their sizes."""
    import importlib.metadata
    import platform

    import raytrace
    from raytrace.cores import core_count
    from raytrace.jit import kernel_cache_folder
    from raytrace.optics.cache import LIMIT_BYTES, table_cache_folder, table_cache_size

    lines = [("raytrace", raytrace.__version__), ("python", platform.python_version()), ("system", platform.platform())]
    for package in (
        "numpy",
        "numba",
        "llvmlite",
        "scipy",
        "matplotlib",
        "pvlib",
        "pandas",
        "pillow",
        "pydantic",
        "tqdm",
        "platformdirs",
    ):
        try:
            lines.append((package, importlib.metadata.version(package)))
        except importlib.metadata.PackageNotFoundError:
            lines.append((package, "not installed"))
    kernels = kernel_cache_folder()
    files, size = table_cache_size()
    lines += [
        ("cores", f"{core_count()} for this process"),
        ("threads", f"{core_count()} unless --threads says otherwise"),
        ("threading layer", "a pool of Python threads; kernels release the interpreter lock (no OpenMP, no TBB)"),
        (
            "kernel cache",
            "none: no folder can be written, kernels compile in each run" if kernels is None else str(kernels),
        ),
        ("table cache", f"{table_cache_folder() or 'none: no folder can be written'}"),
        ("table cache holds", f"{files} tables, {size / 1e6:,.0f} MB of at most {LIMIT_BYTES / 1e6:,.0f} MB"),
    ]
    return _aligned(lines)


def _aligned(lines) -> str:
    width = max(len(name) for name, _ in lines)
    return "\n".join(f"{name:<{width}}  {value}" for name, value in lines)
