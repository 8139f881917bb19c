"""The command line: arguments, exit status, and one line for whatever goes wrong. Heavy imports happen on use."""

from __future__ import annotations

import argparse
import contextlib
import difflib
import itertools
import os
import sys
import warnings
from pathlib import Path

from raytrace.errors import InputError
from raytrace.scene.problems import quoted

DONE, FAILED, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130


class _Parser(argparse.ArgumentParser):
    """Argument errors as one line, with the nearest word that would work."""

    def __init__(self, **options):
        # an abbreviation that works today would be ambiguous with the next option
        super().__init__(**options, allow_abbrev=False)

    def error(self, message):
        raise InputError(f"{self.prog}: {_one_line(message)}{self._hint(message)}; what works: {self.prog} --help")

    def _hint(self, message):
        words = [word.split("=")[0] for word in message.replace("'", " ").split() if word.startswith("-")]
        options = _option_strings(self)
        for word in words if "unrecognized" in message else ():
            close = difflib.get_close_matches(word, options, n=1)
            if close:
                return f" (nearest: {close[0]})"
        return ""


def _option_strings(parser) -> list[str]:
    """Options of a parser and of its commands."""
    found = []
    for action in parser._actions:
        found += action.option_strings
        if isinstance(action, argparse._SubParsersAction):
            for command in action.choices.values():
                found += _option_strings(command)
    return found


def run(arguments: list[str]) -> int:
    """Run one command.

    Parameters
    ----------
    arguments : list of str
        Without the program's name.

    Returns
    -------
    int
        0 done, 2 bad input, 1 anything else, 130 interrupted.
    """
    try:
        try:
            options = _parse(arguments)
            with warnings.catch_warnings():
                warnings.showwarning = _show_warning
                status = options.command(options)
        except SystemExit as leaving:
            # --help and --version
            status = DONE if leaving.code in (None, 0) else BAD_INPUT
        if sys.stdout is not None:
            # what cannot be printed must come to light here, and not when the interpreter ends
            sys.stdout.flush()
        return status
    except InputError as problem:
        for line in problem.problems:
            print(line, file=sys.stderr)
        return BAD_INPUT
    except BrokenPipeError:
        # whoever read our output has gone
        _drop_output()
        return FAILED
    except KeyboardInterrupt:
        print("raytrace: interrupted; no file was written", file=sys.stderr)
        return INTERRUPTED
    except MemoryError:
        works = "fewer --orders, fewer [[rain]]" if "compare" in arguments else "a smaller --size, fewer optics.bins"
        print(f"raytrace: out of memory; what works: {works}", file=sys.stderr)
        return FAILED
    except Exception as problem:
        if os.environ.get("RAYTRACE_DEBUG", "0") != "0":
            raise
        print(f"raytrace: {type(problem).__name__}: {_one_line(str(problem))}", file=sys.stderr)
        _drop_output()
        return FAILED


def _drop_output() -> None:
    """What standard output could not take must not raise once more when the interpreter ends."""
    if sys.stdout is None:
        return
    try:
        sys.stdout.flush()
    except (OSError, ValueError):
        with contextlib.suppress(OSError, ValueError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _parse(arguments: list[str]):
    parser = _Parser(
        prog="raytrace",
        description="Turns a scene file into a calibrated picture of the sky with its rainbows.",
        epilog="A scene file is explained key by key in scenes/README.md. "
        "Exit status: 0 done, 2 bad input (one line each on standard error), 1 anything else.",
    )
    parser.add_argument("--version", action="version", version=f"raytrace {_version()}")
    commands = parser.add_subparsers(metavar="COMMAND", parser_class=_Parser)

    render = commands.add_parser("render", help="scene file to picture", description="Renders a scene file to a PNG.")
    render.add_argument("scene", metavar="SCENE", help="scene file (TOML)")
    render.add_argument("-o", "--output", metavar="PNG", help="picture to write; SCENE's name with .png unless given")
    render.add_argument("--size", metavar="WxH", help="size of the picture in pixels, in place of the scene's")
    render.add_argument("--seed", metavar="N", help="seed of the rays and the dither, in place of the scene's")
    render.add_argument("--threads", metavar="N", help="threads to use; all cores unless given")
    render.add_argument("--no-cache", action="store_true", help="neither read nor keep traced tables")
    render.set_defaults(command=_render)

    compare = commands.add_parser(
        "compare",
        help="how bright each bow is",
        description="Says how bright each bow is: against the others, against the glow of the same drops, and, with a "
        "scene, against its sky. Without a scene: one drop before a black sky.",
    )
    compare.add_argument("scene", metavar="SCENE", nargs="?", help="scene file (TOML); a drop unless given")
    compare.add_argument("--diameter-mm", metavar="D", help="diameter of the drop; 1 unless given")
    compare.add_argument("--temperature-c", metavar="T", help="temperature of the drop; 20 unless given")
    compare.add_argument("--refractive-index", metavar="N", help="a fixed index in place of water's")
    compare.add_argument(
        "--sun-elevation-deg", metavar="E", help="let the default air dim the sunlight, place the bows"
    )
    compare.add_argument("--orders", metavar="K", help="bows 1 to K, up to 12; 7 unless given")
    compare.add_argument("--tolerance", metavar="R", help="relative standard error to reach; 0.01 unless given")
    compare.add_argument("--json", metavar="FILE", help="write the figures as JSON")
    compare.add_argument("--csv", metavar="FILE", help="write the figures as CSV")
    compare.add_argument("--plot", metavar="PNG", help="draw the figures")
    compare.add_argument("--seed", metavar="N", help="seed of the rays, in place of the scene's")
    compare.add_argument(
        "--method", metavar="NAME", help="rays, airy, waves or auto, in place of the scene's; rays for a drop"
    )
    compare.add_argument("--threads", metavar="N", help="threads to use; all cores unless given")
    compare.set_defaults(command=_compare)

    check = commands.add_parser("check", help="validate scene files", description="Says what render would use.")
    check.add_argument("scenes", metavar="SCENE", nargs="+", help="scene file (TOML)")
    check.set_defaults(command=_check)

    info = commands.add_parser("info", help="versions, threads, caches", description="Says what the program runs on.")
    info.set_defaults(command=_info)

    names = list(commands.choices)
    first = next((word for word in arguments if not word.startswith("-")), None)
    if first is not None and first not in names:
        close = difflib.get_close_matches(first, names, n=1)
        works = f'"{close[0]}"' if close else " or ".join(names)
        raise InputError(f"raytrace: {_one_line(first)!r} is no command; what works: {works}")
    options = parser.parse_args(arguments)
    if not hasattr(options, "command"):
        raise InputError(f"raytrace: no command given; what works: {', '.join(names)}, or --help")
    return options


def _render(options) -> int:
    from raytrace.scene.load import load_scene

    threads = None if options.threads is None else _threads(options.threads)
    output = _output(options.output, options.scene)
    scene = _with_options(load_scene(options.scene), options)
    _spare_sources([output], scene)
    from raytrace.preflight import preflight

    preflight(scene, name=options.scene)
    from raytrace.frame import render

    frame = render(scene, threads=threads, cache=not options.no_cache, progress=sys.stderr.isatty())
    with _writing([output]):
        frame.save(output)
    print(f"{quoted(str(output), 200)}: {frame.summary()}")
    return DONE


def _compare(options) -> int:
    from raytrace.comparison.asked import WORKS
    from raytrace.comparison.drop import Drop

    threads = None if options.threads is None else _threads(options.threads)
    whole = {"orders": True, "tolerance": False, "seed": True}
    names = ("diameter_mm", "temperature_c", "refractive_index", "sun_elevation_deg")
    given = {name: getattr(options, name) for name in (*whole, *names)}
    given = {
        name: _number(_option(name), text, WORKS[name], whole=whole.get(name, False))
        for name, text in given.items()
        if text is not None
    }
    if options.method is not None:
        given["method"] = options.method
    asked, drop = ({name: given[name] for name in some if name in given} for some in ((*whole, "method"), names))
    outputs = {kind: getattr(options, kind) for kind in ("json", "csv", "plot") if getattr(options, kind) is not None}
    paths = {kind: _output(given, options.scene, ".png" if kind == "plot" else None) for kind, given in outputs.items()}
    _spare_each_other(paths)
    if options.scene is not None and drop:
        words = " and ".join(map(_option, drop))
        raise InputError(f"{words}: given beside a scene, which has its own; what works: one of the two")
    with _options_named():
        if options.scene is None:
            subject = Drop(**drop)
        else:
            from raytrace.scene.load import load_scene

            subject = load_scene(options.scene)
            _spare_sources(paths.values(), subject)
        from raytrace.comparison.run import compare

        name = options.scene or "drop"
        report = compare(subject, **asked, threads=threads, progress=sys.stderr.isatty(), name=name)
    makers = {"json": lambda: report.to_json().encode(), "csv": lambda: report.to_csv().encode(), "plot": report.png}
    from raytrace.files import write_together

    files = [(path, makers[kind]()) for kind, path in paths.items()]
    with _writing(paths.values()):
        write_together(files)
    print(report.to_text())
    return DONE


def _option(name: str) -> str:
    return f"--{name.replace('_', '-')}"


@contextlib.contextmanager
def _options_named():
    """Problems of arguments are told by the options that gave them."""
    from raytrace.comparison.asked import WORKS

    try:
        yield
    except InputError as problem:
        lines = []
        for line in problem.problems:
            name, colon, rest = line.partition(": ")
            lines.append(f"{_option(name)}{colon}{rest}" if name in WORKS else line)
        raise InputError(*lines) from None


@contextlib.contextmanager
def _writing(paths):
    """A disk that has filled meanwhile, or a folder that has gone, is told as bad input."""
    try:
        yield
    except OSError as problem:
        names = ", ".join(quoted(str(path), 200) for path in paths)
        raise InputError(
            f"{names}: cannot be written ({problem.strerror or problem}); what works: another folder"
        ) from None


def _number(option: str, text: str, works: str, *, whole: bool = False):
    """An option's number; the range is judged where it is used."""
    try:
        # Python also takes digits of other scripts, underscores between them, and blanks
        if len(text) > 40 or not text.isascii() or "_" in text or text != text.strip():
            raise ValueError
        return int(text) if whole else float(text)
    except ValueError:
        raise InputError(f"{option}: {_one_line(text)!r} is no such number; what works: {works}") from None


def _check(options) -> int:
    from raytrace.report import scene_report
    from raytrace.scene.load import load_scene

    status = DONE
    for number, path in enumerate(options.scenes):
        try:
            report = scene_report(load_scene(path), name=path)
        except InputError as problem:
            status = BAD_INPUT
            for line in problem.problems:
                print(line, file=sys.stderr)
            continue
        if number:
            print()
        print(report)
    return status


def _info(options) -> int:
    from raytrace.report import machine_report

    print(machine_report())
    return DONE


def _output(given: str | None, scene: str | None, ending: str | None = ".png") -> Path:
    """Where a result goes, checked before any work is done."""
    from raytrace.files import is_same_file, regular_target

    path = Path(given) if given is not None else Path(Path(scene).stem + ".png")
    name = quoted(str(path), 200)
    if ending is not None and path.suffix.lower() != ending:
        raise InputError(f"{name}: is no name of a PNG file; what works: a name that ends in .png")
    try:
        if path.is_dir():
            raise InputError(f"{name}: is a folder; what works: the name of a file in it")
        if path.exists() and not path.is_file():
            raise InputError(f"{name}: is a device, a pipe or a socket; what works: the name of a file")
        # a link is kept, and what it leads to is written
        parent = Path(os.path.realpath(path)).parent if path.is_symlink() else path.parent
        folder = quoted(str(parent), 200)
        if not parent.is_dir():
            raise InputError(f"{name}: there is no folder {folder}; what works: a folder that exists")
        regular_target(path)
        if not os.access(parent, os.W_OK):
            raise InputError(f"{name}: the folder {folder} may not be written; what works: another folder")
        if _is_stream(path):
            raise InputError(f"{name}: is where our own output goes; what works: another name")
        if scene is not None and is_same_file(path, scene):
            raise InputError(f"{name}: is the scene file itself; what works: another name")
    except OSError as problem:
        raise InputError(
            f"{name}: cannot be written ({problem.strerror}); what works: a shorter or other name"
        ) from None
    return path


def _is_stream(path: Path) -> bool:
    """Whether a path leads to the file that standard output or standard error is written to."""
    for number in (1, 2):
        with contextlib.suppress(OSError):
            if os.path.samestat(os.fstat(number), os.stat(path)):
                return True
    return False


def _spare_sources(outputs, scene) -> None:
    """No result may take the place of what the scene is made from; the scene file itself is `_output`'s to spare."""
    from raytrace.files import is_same_file

    sources = [(scene.plate_path(), "the plate")]
    for rain in scene.rain:
        table = getattr(rain, "size_table", None)
        if table is not None and scene._folder is not None:
            sources.append((scene._folder / table, "a size table"))
    for output in outputs:
        for path, what in sources:
            if path is not None and is_same_file(output, path):
                raise InputError(f"{quoted(str(output), 200)}: is {what} of the scene; what works: another name")


def _spare_each_other(paths: dict) -> None:
    """Two results may not go to one file."""
    from raytrace.files import is_same_file

    for one, other in itertools.combinations(paths, 2):
        if is_same_file(paths[one], paths[other]):
            raise InputError(
                f"--{one} and --{other}: {quoted(str(paths[one]), 200)} and {quoted(str(paths[other]), 200)} are one "
                "file; what works: a name for each"
            )


def _with_options(scene, options):
    """The scene with what the command line puts in its place, checked as if the file had said so."""
    from raytrace.scene.load import scene_from_dict

    if options.size is None and options.seed is None:
        return scene
    data = scene.model_dump(exclude_unset=True)
    data["rain"] = [dict(rain) for rain in data["rain"]]
    if options.size is not None:
        width, cross, height = options.size.lower().partition("x")
        if not (cross and _is_digits(width) and _is_digits(height) and len(options.size) < 20):
            raise InputError(f"--size: {_one_line(options.size)!r} is no size; what works: --size 1280x720")
        data["camera"] |= {"width_px": int(width), "height_px": int(height)}
    if options.seed is not None:
        if not (_is_digits(options.seed) and len(options.seed) < 25):
            raise InputError(f"--seed: {_one_line(options.seed)!r} is no seed; what works: a whole number from 0")
        data["optics"] = data.get("optics", {}) | {"seed": int(options.seed)}
    # a problem now is the command line's and not the file's
    changes = [f"--{key} {_one_line(getattr(options, key))}" for key in ("size", "seed") if getattr(options, key)]
    return scene_from_dict(data, folder=scene._folder, name=f"{options.scene} with {' '.join(changes)}")


def _threads(text: str) -> int:
    from raytrace.cores import core_count

    most = core_count()
    if not (_is_digits(text) and len(text) < 10 and 1 <= int(text) <= most):
        raise InputError(f"--threads: {_one_line(text)!r} given; what works: 1 to {most}, the cores of this machine")
    return int(text)


def _is_digits(text: str) -> bool:
    # of no other script
    return text.isascii() and text.isdecimal()


def _version() -> str:
    import raytrace

    return raytrace.__version__


def _one_line(text: str) -> str:
    out = " ".join(text.split())
    out = "".join(c if c.isprintable() else "?" for c in out)
    return out if len(out) <= 300 else out[:297] + "..."


def _show_warning(message, category, filename, lineno, file=None, line=None):
    print(f"raytrace: warning: {_one_line(str(message))}", file=sys.stderr)
