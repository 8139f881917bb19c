"""Monte Carlo ray tracing of rainbows: a scene file becomes a calibrated picture of the sky."""

__all__ = ["Drop", "InputError", "__version__", "compare", "load_scene", "optics", "render", "scattering_table"]

_WHERE = {
    "Drop": "raytrace.comparison.drop",
    "compare": "raytrace.comparison.run",
    "InputError": "raytrace.errors",
    "load_scene": "raytrace.scene.load",
    "render": "raytrace.frame",
    "scattering_table": "raytrace.optics.scattering",
}


def __getattr__(name):
    # everything heavy loads on use, so that `raytrace --help` answers at once
    import importlib

    if name == "__version__":
        from importlib.metadata import PackageNotFoundError, version

        try:
            return version("raytrace")
        except PackageNotFoundError:
            return "unknown (not installed)"
    if name in _WHERE:
        return getattr(importlib.import_module(_WHERE[name]), name)
    if name == "optics":
        return importlib.import_module("raytrace.optics")
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__():
    return sorted(__all__)
