"""Read a scene file, and say everything that is wrong with it at once, a line each."""

from __future__ import annotations

import hashlib
import json
import re
import tomllib
from pathlib import Path

from pydantic import BaseModel, ValidationError

from raytrace.errors import InputError
from raytrace.scene import model as scene_model
from raytrace.scene.fields import table_in, works_for
from raytrace.scene.problems import Problem, kind_in_toml, nearest, quoted
from raytrace.scene.rules import RULES, across_rules
from raytrace.scene.size_table import read_size_table

LARGEST_BYTES = 1 << 20
MOST_CURTAINS = 8
MOST_PROBLEMS = 200
"""Problems of one file that are told; what is beyond is counted."""
MOST_DOTS_A_LINE = 100
"""The parser's time grows with the square of a dotted key's parts, and a megabyte of them would take hours."""
_TABLES = {
    "sun": scene_model.Sun,
    "air": scene_model.Air,
    "rain": scene_model.Rain,
    "optics": scene_model.Optics,
    "sky": scene_model.Sky,
    "ground": scene_model.Ground,
    "camera": scene_model.Camera,
}
_NEEDED = ("sun", "rain", "camera")
_UNTOLD = Problem("", None, "", "")


def load_scene(path) -> scene_model.Scene:
    """Read and check a scene file.

    Parameters
    ----------
    path : path-like
        A TOML file.

    Returns
    -------
    Scene

    Raises
    ------
    InputError
        With every problem of the file, one line each: file, key, what was given, why it cannot be, what would work.
    """
    path = Path(path)
    name = str(path)
    data = _read(path, name)
    return scene_from_dict(data, folder=path.parent, name=name)


def scene_from_dict(data: dict, *, folder: Path | None = None, name: str = "scene") -> scene_model.Scene:
    """Check the content of a scene file.

    Parameters
    ----------
    data : dict
        As TOML gives it.
    folder : path, optional
        Where relative paths start.
    name : str
        What problems call the file.

    Raises
    ------
    InputError
        With every problem, one line each.
    """
    problems: list[Problem] = []
    tables: dict = {}
    strangers = [key for key in data if key not in _TABLES]
    for key in strangers[:MOST_PROBLEMS]:
        problems.append(Problem(_key(key), None, "is no table of a scene", nearest(key, list(_TABLES), _keys())))
    problems.extend([_UNTOLD] * len(strangers[MOST_PROBLEMS:]))
    for table, kind in _TABLES.items():
        if table not in data:
            if table in _NEEDED:
                problems.append(Problem(table, None, "is missing", f"a table [{table}]"))
            continue
        if table == "rain":
            sound = _curtains(data[table], folder, problems)
        else:
            sound = _table(table, table, kind, data[table], problems)
        if sound is not None:
            tables[table] = sound
    problems.extend(across_rules(tables, folder))
    if problems:
        told = [problem for problem in problems if problem is not _UNTOLD][:MOST_PROBLEMS]
        lines = [problem.line(name) for problem in told]
        if len(problems) > len(told):
            more = len(problems) - len(told)
            lines.append(
                f"{quoted(name, 200)}: has {more} problems more; what works: to mend the {len(told)} above first"
            )
        raise InputError(*lines)
    if tables.get("sky") is not None and tables["sky"].model == "plate":
        # a plate brings its own ground, and the land that a scene has by default would hide it
        tables.setdefault("ground", scene_model.Ground(cover="none"))
    scene = scene_model.Scene(**tables)
    # from the root, since the current folder may change before the plate is read
    scene._folder = None if folder is None else Path(folder).absolute()
    return scene


def scene_hash(scene: scene_model.Scene) -> str:
    """SHA-256 of all that a scene says, however its file is laid out.

    Defaults, the rows of size tables and the plate's bytes are included.
    """
    text = json.dumps(scene.model_dump(mode="json"), sort_keys=True, ensure_ascii=True, allow_nan=False)
    digest = hashlib.sha256(text.encode())
    for rain in scene.rain:
        if rain._measured is not None:
            digest.update(hashlib.sha256(repr(rain._measured).encode()).digest())
    if scene.plate_path() is not None:
        digest.update(scene.plate_path().read_bytes())
    return digest.hexdigest()


def _read(path: Path, name: str) -> dict:
    def refuse(why, works):
        raise InputError(f"{quoted(name, 200)}: {why}; what works: {works}")

    try:
        if path.is_dir():
            refuse("is a folder", "a scene file, such as scenes/double_bow.toml")
        if not path.exists():
            refuse("there is no such file", "the path of a scene file, such as scenes/double_bow.toml")
        if not path.is_file():
            refuse("is not a plain file", "the path of a scene file")
        if path.stat().st_size > LARGEST_BYTES:
            refuse(f"has {path.stat().st_size} bytes", f"a scene file of up to {LARGEST_BYTES} bytes")
        content = path.read_bytes()
    except (OSError, ValueError) as problem:
        if isinstance(problem, InputError):
            raise
        refuse(f"cannot be read ({quoted(str(problem))})", "a file that may be read")
    if content.startswith(b"\xef\xbb\xbf"):
        refuse("begins with a byte order mark", "UTF-8 without one")
    try:
        text = content.decode("utf-8")
    except UnicodeDecodeError as problem:
        line = content.count(b"\n", 0, problem.start) + 1
        refuse(f"byte {problem.start} (line {line}) is not UTF-8", "a TOML file in UTF-8")
    for number, line in enumerate(text.split("\n"), 1):
        if line.count(".") > MOST_DOTS_A_LINE and not line.lstrip().startswith("#"):
            refuse(
                f"line {number} has {line.count('.')} dots, so it is nested too deeply or has too many numbers",
                f"lines of up to {MOST_DOTS_A_LINE} dots",
            )
    try:
        return tomllib.loads(text)
    except RecursionError:
        refuse("is nested too deeply", "tables and keys as in scenes/README.md")
    except tomllib.TOMLDecodeError as problem:
        refuse(f"is not TOML: {quoted(str(problem), 120)}", "TOML 1.0, as in scenes/double_bow.toml")
    except ValueError as problem:
        # well-formed, but past what a number or a date can be: more than 4300 digits, the 31st of February
        why = "has a number of too many digits" if "digits" in str(problem) else f"has {quoted(str(problem), 120)}"
        refuse(why, "numbers and dates as in scenes/README.md")


def _curtains(data, folder: Path | None, problems: list[Problem]):
    """The table [rain], or the tables [[rain]]; None where one of them is not sound."""
    if isinstance(data, dict):
        sound = _table("rain", "rain", scene_model.Rain, data, problems)
        return None if sound is None else (_settled(sound, "rain", folder, problems),)
    if not isinstance(data, list):
        problems.append(Problem("rain", data, f"is {kind_in_toml(data)}", "a table [rain] or tables [[rain]]"))
        return None
    if not 1 <= len(data) <= MOST_CURTAINS:
        problems.append(Problem("rain", data, f"has {len(data)} entries", f"1 to {MOST_CURTAINS} tables [[rain]]"))
        return None
    found = [_table("rain", f"rain[{k}]", scene_model.Rain, item, problems) for k, item in enumerate(data)]
    found = [rain and _settled(rain, f"rain[{k}]", folder, problems) for k, rain in enumerate(found)]
    return None if None in found else tuple(found)


def _settled(rain: scene_model.Rain, where: str, folder: Path | None, problems: list[Problem]) -> scene_model.Rain:
    """Soft edges that were not asked for shrink to what a small curtain can hold; measured sizes are read."""
    given = rain.model_fields_set
    changes = {}
    if "edge_m" not in given:
        changes["edge_m"] = min(rain.edge_m, 0.5 * (rain.far_m - rain.near_m))
    if "edge_top_m" not in given:
        changes["edge_top_m"] = min(rain.edge_top_m, 0.5 * (rain.top_m - rain.bottom_m))
    rain = rain.model_copy(update=changes)
    if rain.size_table is not None:
        rows = read_size_table(f"{where}.size_table", rain.size_table, folder)
        if isinstance(rows, Problem):
            problems.append(rows)
        else:
            # kept with the curtain, so that the picture is of what was checked and hashed
            rain._measured = rows
    return rain


def _table(table: str, where: str, kind: type[BaseModel], data, problems: list[Problem]):
    """One table checked by its model and then by its rules; None where a problem was found."""
    if not isinstance(data, dict):
        problems.append(Problem(where, data, f"is {kind_in_toml(data)}", f"a table [{table}]"))
        return None
    try:
        sound = kind.model_validate(data)
    except ValidationError as failure:
        errors = failure.errors(include_url=False)
        problems.extend(_problem(where, kind, error) for error in errors[:MOST_PROBLEMS])
        problems.extend([_UNTOLD] * len(errors[MOST_PROBLEMS:]))
        problems.extend(_among_the_sound(table, where, kind, data, errors))
        return None
    except (OverflowError, RecursionError):
        problems.append(
            Problem(where, None, "has a number too large to hold, or is nested too deeply", "plain numbers")
        )
        return None
    found = list(RULES[table](sound, sound.model_fields_set)) if table in RULES else []
    problems.extend(problem._replace(key=f"{where}.{problem.key}") for problem in found)
    return None if found else sound


def _among_the_sound(table: str, where: str, kind: type[BaseModel], data: dict, errors: list):
    """Problems between the keys that are sound by themselves, where others of the same table are not."""
    unsound = {error["loc"][0] for error in errors}
    misnamed = any(error["type"] == "extra_forbidden" for error in errors)
    rest = kind.model_validate({key: value for key, value in data.items() if key not in unsound})
    for problem in RULES[table](rest, set(data)) if table in RULES else ():
        # an unsound key has its default here, so nothing that stands on its value may be told; and what is missing may
        # be there under a wrong name
        stands_on = set(re.findall(r"\w+", f"{problem.key} {problem.why}"))
        if not stands_on & unsound and not (misnamed and problem.why.startswith("is missing")):
            yield problem._replace(key=f"{where}.{problem.key}")


def _problem(where: str, kind: type[BaseModel], error) -> Problem:
    """A problem in our words from one of pydantic's."""
    location = [part for part in error["loc"] if isinstance(part, str)]
    owner, field = kind, None
    for depth, part in enumerate(location, 1):
        field = owner.model_fields.get(part)
        inner = table_in(field)
        if inner is not None and depth < len(location):
            owner = inner
    key = ".".join([where, *map(_key, location)])
    value = error["input"]
    if error["type"] == "extra_forbidden":
        works = nearest(location[-1], list(owner.model_fields), _keys(owner))
        return Problem(key, value, "is no key of this table", works)
    if error["type"] == "missing":
        return Problem(key, None, "is missing", works_for(field))
    if table_in(field) is not None:
        return Problem(key, value, f"is {kind_in_toml(value)}", f"a table [{key}]")
    if error["type"] == "float_type" and isinstance(value, int) and not isinstance(value, bool):
        # more than a floating-point number can hold
        return Problem(key, value, "is out of range", works_for(field))
    if error["type"].endswith("_type") or error["type"] in ("int_from_float", "datetime_type"):
        return Problem(key, value, f"is {kind_in_toml(value)}", works_for(field))
    if error["type"] == "literal_error":
        return Problem(key, value, "is none of the choices", works_for(field))
    if error["type"] == "finite_number":
        return Problem(key, value, "is not finite", works_for(field))
    return Problem(key, value, "is out of range", works_for(field))


def _keys(owner=None) -> dict[str, list[str]]:
    """Keys by table, without those of one table."""
    tables = {**_TABLES, "sky.cloud": scene_model.Cloud}
    return {name: list(kind.model_fields) for name, kind in tables.items() if kind is not owner}


def _key(key: str) -> str:
    """A key as it would stand in TOML: quoted where it is not bare."""
    bare = key.replace("_", "").replace("-", "")
    return key if bare.isascii() and bare.isalnum() else f'"{quoted(key)}"'
