"""The package from outside and from inside: public names, which stage knows which, size of files, docstrings."""

import ast
import importlib
import importlib.metadata
from pathlib import Path

import pytest

import raytrace
import raytrace.optics

ROOT = Path(raytrace.__file__).parent
FILES = sorted(ROOT.rglob("*.py"))
STAGES = (
    "scene",
    "light",
    "drops",
    "optics",
    "sky",
    "camera",
    "preflight",
    "frame",
    "comparison",
    "report",
    "cli",
    "__main__",
)
"""From left to right; each imports only what stands left of it."""
APART = {("light", "drops"), ("drops", "light")}
"""Neighbours that know nothing of each other."""
FOR_ALL = {"errors", "colour", "data", "cast", "jit", "cores", "files", "memory", "random_stream"}
"""Belong to no stage; they import nothing but each other."""
MOST_LINES = 500

ALLOWED = {
    # the version that made a picture or a comparison is written into it
    ("frame", "__init__"),
    ("comparison", "__init__"),
    ("report", "__init__"),
    ("cli", "__init__"),
}
"""Imports of the package itself, which only loads names on use."""


def stage(parts) -> str:
    """Stage of a module by the parts of its dotted name, `raytrace` first."""
    return parts[1] if len(parts) > 1 else "__init__"


def module(path: Path) -> tuple[str, ...]:
    parts = ("raytrace", *path.relative_to(ROOT).with_suffix("").parts)
    return parts[:-1] if parts[-1] == "__init__" else parts


def imports(path: Path):
    """(line, dotted name) of every import of the package's own modules, those inside functions included."""
    package = module(path) if path.name == "__init__.py" else module(path)[:-1]
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            for name in node.names:
                yield node.lineno, name.name.split(".")
        elif isinstance(node, ast.ImportFrom):
            above = [] if not node.level else list(package[: len(package) - node.level + 1])
            base = [*above, *(node.module.split(".") if node.module else [])]
            for name in node.names:
                # `from raytrace import colour` means a module, `from raytrace import __version__` the package
                deeper = [*base, name.name]
                is_module = (
                    ROOT.parent.joinpath(*deeper).is_dir() or ROOT.parent.joinpath(*deeper).with_suffix(".py").is_file()
                )
                yield node.lineno, deeper if is_module else base


def test_stages_import_only_to_their_left():
    wrong, seen = [], 0
    for path in FILES:
        own = stage(module(path))
        for line, name in imports(path):
            other = stage(name)
            if name[0] != "raytrace" or other == own:
                continue
            seen += 1
            if own == "__init__":
                # the package itself names modules as strings only
                sound = False
            elif own in FOR_ALL:
                sound = other in FOR_ALL
            elif other in FOR_ALL or (own, other) in ALLOWED:
                sound = True
            else:
                sound = other in STAGES and STAGES.index(other) < STAGES.index(own) and (own, other) not in APART
            if not sound:
                wrong.append(f"{path.relative_to(ROOT)}:{line}: {own} imports {'.'.join(name)}")
    assert seen >= 60
    assert wrong == []


def test_every_module_belongs_to_a_stage():
    found = {stage(module(path)) for path in FILES}
    assert found == {*STAGES, *FOR_ALL, "__init__"}
    assert len(FILES) >= 40


def test_the_reader_of_imports_reads_all_kinds(tmp_path, monkeypatch):
    """The guard's own eyes: each way to import is seen."""
    monkeypatch.setitem(globals(), "ROOT", tmp_path / "raytrace")
    folder = tmp_path / "raytrace" / "sky"
    folder.mkdir(parents=True)
    (tmp_path / "raytrace" / "colour.py").touch()
    (folder / "rain.py").touch()
    path = folder / "a.py"
    path.write_text(
        "import raytrace.frame.png as p\nfrom raytrace import colour\nfrom raytrace import render\nfrom . import rain\n"
        "from ..light.sun import x\ndef f():\n    from raytrace.report import y\n"
    )
    assert [".".join(name) for _, name in imports(path)] == [
        "raytrace.frame.png", "raytrace.colour", "raytrace", "raytrace.sky.rain",
        "raytrace.light.sun", "raytrace.report",
    ]  # fmt: skip


# --- public names


def test_the_public_names():
    names = ["Drop", "InputError", "__version__", "compare", "load_scene", "optics", "render", "scattering_table"]
    assert raytrace.__all__ == names
    assert dir(raytrace) == sorted(raytrace.__all__)
    for name in raytrace.__all__:
        assert getattr(raytrace, name) is not None
    assert issubclass(raytrace.InputError, ValueError)
    assert raytrace.optics is importlib.import_module("raytrace.optics")
    assert raytrace.__version__ == importlib.metadata.version("raytrace")
    with pytest.raises(AttributeError, match="no attribute 'rendr'"):
        raytrace.rendr  # noqa: B018


def test_the_public_names_of_optics():
    names = {"ScatteringTable", "airy_bow", "debye_series", "lorenz_mie", "scattering_table", "trace_sphere"}
    assert names <= set(raytrace.optics.__all__) <= set(dir(raytrace.optics))
    for name in raytrace.optics.__all__:
        assert getattr(raytrace.optics, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'trace_cube'"):
        raytrace.optics.trace_cube  # noqa: B018


def test_star_import_gives_the_public_names():
    space = {}
    exec("from raytrace import *", space)
    assert set(raytrace.__all__) <= set(space)


# --- files and docstrings


def test_files_stay_small():
    lines = {path.relative_to(ROOT).as_posix(): len(path.read_bytes().splitlines()) for path in FILES}
    assert max(lines.values()) > 100
    assert {name: count for name, count in lines.items() if count > MOST_LINES} == {}


def public(tree, prefix=""):
    """Public functions and classes of a module, methods of classes included; what stands inside functions is not."""
    for node in tree.body:
        if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)) and not node.name.startswith("_"):
            yield prefix + node.name, node
            if isinstance(node, ast.ClassDef):
                yield from public(node, f"{prefix}{node.name}.")


def test_everything_public_has_a_docstring():
    missing, seen = [], 0
    for path in FILES:
        tree = ast.parse(path.read_text(encoding="utf-8"))
        if tree.body and not ast.get_docstring(tree):
            missing.append(f"{path.relative_to(ROOT)}")
        for name, node in public(tree):
            seen += 1
            text = ast.get_docstring(node)
            # an overridden method says what its base class says it does
            if not text or len(text) < 10:
                missing.append(f"{path.relative_to(ROOT)}:{node.lineno}: {name}")
    assert seen >= 100
    assert missing == []


def test_heavy_libraries_are_imported_on_use():
    """What --help and `import raytrace` load may import nothing heavy at the top of a file."""
    first = ["__init__.py", "__main__.py", "cli.py", "errors.py", "report.py", "scene/__init__.py", "scene/problems.py"]
    heavy = {"numpy", "numba", "colour", "pvlib", "pandas", "scipy", "pydantic", "PIL", "tqdm"}
    for name in first:
        tree = ast.parse((ROOT / name).read_text(encoding="utf-8"))
        top = [node for node in tree.body if isinstance(node, (ast.Import, ast.ImportFrom))]
        names = {alias.name for node in top if isinstance(node, ast.Import) for alias in node.names}
        names |= {node.module for node in top if isinstance(node, ast.ImportFrom) and node.module}
        assert not {full.split(".")[0] for full in names} & heavy, name
