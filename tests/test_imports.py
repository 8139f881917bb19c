"""What may import what, what the package shows, and that nothing heavy loads before it is used."""

import ast
import importlib
import importlib.metadata
import json
import subprocess
import sys
from pathlib import Path

import pytest

import raytrace

PACKAGE = Path(raytrace.__file__).parent
MODULES = sorted(PACKAGE.rglob("*.py"))
HEAVY = {"PIL", "colour", "llvmlite", "matplotlib", "numba", "numpy", "pandas", "pvlib", "pydantic", "scipy", "tqdm"}
LEFT = {
    "scene": set(),
    "light": {"scene"},
    "drops": {"scene"},
    "optics": {"scene", "light", "drops"},
    "sky": {"scene", "light", "drops", "optics"},
    "camera": {"scene", "light", "drops", "optics", "sky"},
    "frame": {"scene", "light", "drops", "optics", "sky", "camera"},
}
"""Stages, and those to the left of each."""


def _loaded(program: str) -> set[str]:
    """Top-level packages of others that a fresh interpreter has loaded after a program."""
    tail = "\nimport json as j, sys as s; print('\\n' + j.dumps(sorted({m.split('.')[0] for m in s.modules})))"
    done = subprocess.run([sys.executable, "-c", program + tail], capture_output=True, text=True, check=True)
    return set(json.loads(done.stdout.splitlines()[-1]))


@pytest.mark.parametrize(
    "arguments",
    [["--help"], ["--version"], ["render", "--help"], ["check", "--help"], ["info", "--help"], ["rendr"], []],
    ids=" ".join,
)
def test_help_and_wrong_commands_load_nothing_heavy(arguments):
    loaded = _loaded(f"import sys; sys.argv = ['raytrace', *{arguments!r}]\nfrom raytrace.__main__ import main\nmain()")
    assert loaded & HEAVY == set()
    assert "raytrace" in loaded and "argparse" in loaded


def test_import_of_the_package_loads_nothing_heavy():
    assert _loaded("import raytrace, raytrace.optics; dir(raytrace); raytrace.__version__") & HEAVY == set()


def test_bad_scene_is_refused_before_the_compiler_loads(tmp_path):
    path = tmp_path / "bad.toml"
    path.write_text("[sun]\nelevation_deg = -3\n")
    program = f"from raytrace.cli import run\nassert [run([c, {str(path)!r}]) for c in ('check', 'render')] == [2, 2]"
    loaded = _loaded(program)
    assert "pydantic" in loaded
    assert loaded & {"numba", "llvmlite", "pvlib", "pandas", "scipy", "PIL"} == set()


def test_public_names():
    # the contract of the package; a name may join it, none may go
    wanted = {"load_scene", "render", "scattering_table", "optics", "InputError", "__version__"}
    assert wanted <= set(raytrace.__all__)
    assert set(dir(raytrace)) == set(raytrace.__all__)
    for name in raytrace.__all__:
        assert getattr(raytrace, name) is not None
    for name in ("load_scene", "render", "scattering_table"):
        assert callable(getattr(raytrace, name)) and getattr(raytrace, name).__doc__
    assert callable(raytrace.optics.trace_sphere)
    assert issubclass(raytrace.InputError, ValueError)
    with pytest.raises(AttributeError, match="has no attribute 'rendr'"):
        raytrace.rendr  # noqa: B018


def test_version_is_the_installed_one():
    assert raytrace.__version__ == importlib.metadata.version("raytrace")


@pytest.mark.parametrize("name", ["raytrace", "raytrace.optics"])
def test_all_names_can_be_had(name):
    module = importlib.import_module(name)
    assert all(hasattr(module, public) for public in module.__all__)
    assert set(module.__all__) <= set(dir(module))


def _imports(path: Path) -> set[str]:
    """Modules of the package that a file imports, anywhere in it."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: imports are written in full"
            found |= {f"{node.module}.{alias.name}" for alias in node.names} | {node.module}
    return {name for name in found if name.split(".")[0] == "raytrace"}


def test_stages_import_only_to_their_left():
    checked = 0
    for path in MODULES:
        stage = path.relative_to(PACKAGE).parts[0]
        for name in _imports(path) if stage in LEFT else ():
            other = name.split(".")[1] if "." in name else ""
            if other in LEFT and other != stage:
                assert other in LEFT[stage], f"{path.relative_to(PACKAGE)} imports {name}"
                checked += 1
    # the guard has something to guard
    assert checked > 20
    assert {path.name for path in PACKAGE.iterdir() if path.is_dir() and (path / "__init__.py").exists()} >= set(LEFT)


def test_helpers_import_no_stage():
    for name in ("errors", "colour", "cast", "cores", "files", "jit", "memory", "random_stream"):
        stages = {other.split(".")[1] for other in _imports(PACKAGE / f"{name}.py") if "." in other}
        assert stages & set(LEFT) == set(), name


def test_files_stay_small():
    lines = {str(path): len(path.read_text().splitlines()) for path in MODULES}
    assert len(lines) > 40
    assert {path: count for path, count in lines.items() if count > 500} == {}
