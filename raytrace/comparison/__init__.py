"""How bright each bow is: order against order, against the glow of the same drops, and against a scene's sky."""

_WHERE = {"Drop": "drop", "Report": "report", "Row": "report", "compare": "run"}
__all__ = ["Drop", "Report", "Row", "compare"]


def __getattr__(name):
    # the tracer is loaded by whoever compares, not by `import raytrace`
    if name in _WHERE:
        import importlib

        return getattr(importlib.import_module(f"raytrace.comparison.{_WHERE[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__():
    return __all__
