"""Light through drops: rays and waves, the sun's disc, and the scattering table that everything after it reads."""

_WHERE = {
    "ScatteringTable": "table",
    "airy_bow": "airy",
    "debye_series": "debye",
    "lorenz_mie": "debye",
    "scattering_table": "scattering",
    "trace_sphere": "sphere",
}
__all__ = ["ScatteringTable", "airy_bow", "debye_series", "lorenz_mie", "scattering_table", "trace_sphere"]


def __getattr__(name):
    # compiled code is loaded by whoever uses it, not by `import raytrace`
    if name in _WHERE:
        import importlib

        return getattr(importlib.import_module(f"raytrace.optics.{_WHERE[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__():
    return __all__
