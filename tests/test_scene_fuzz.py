"""Whatever stands in a scene file, `check` says yes or tells problems, a line each; it never falls over."""

import datetime as dt

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scene_files import toml, write

from raytrace.cli import run
from raytrace.scene import load, model
from raytrace.scene.fields import table_in

BOUNDED = settings(
    derandomize=True,
    database=None,
    deadline=None,
    # each example overwrites the same file
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
TABLES = {**load._TABLES, "cloud": model.Cloud}
KEYS = sorted({key for kind in TABLES.values() for key in kind.model_fields})
CHOICES = sorted(
    {c for kind in TABLES.values() for f in kind.model_fields.values() for c in getattr(f.annotation, "__args__", ())
     if isinstance(c, str)}
)  # fmt: skip


def checked(path, capsys) -> int:
    """Status of `check`; the output must fit it."""
    status = run(["check", str(path)])
    out, err = capsys.readouterr()
    if status == 0:
        assert out.startswith("scene ") and err == ""
        return status
    assert status == 2, err
    assert out == "" and err.endswith("\n") and "Traceback" not in err
    for line in err[:-1].split("\n"):
        assert line.startswith(f"{path}: ") and "; what works: " in line and line.isprintable(), line
    return status


@settings(BOUNDED, max_examples=150)
@given(content=st.binary(max_size=300))
def test_any_bytes(content, tmp_path, capsys):
    # no table [sun] can come up by chance
    assert checked(write(tmp_path, content), capsys) == 2


@settings(BOUNDED, max_examples=70)
@given(data=st.data())
def test_a_sound_file_with_a_piece_replaced(data, tmp_path, capsys):
    sound = toml(sky__cloud="albedo = 0.3", ground='cover = "sea"').encode()
    start = data.draw(st.integers(0, len(sound)))
    end = data.draw(st.integers(start, min(start + 12, len(sound))))
    piece = data.draw(st.one_of(st.binary(max_size=8), st.text(max_size=8).map(lambda text: text.encode("utf-8"))))
    checked(write(tmp_path, sound[:start] + piece + sound[end:]), capsys)


def literal(value) -> str:
    """A value as TOML, written here so that also what no reader would give can be tried."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        escaped = "".join(c if (c.isascii() and c.isalnum()) or c in "_-. /" else f"\\U{ord(c):08X}" for c in value)
        return f'"{escaped}"'
    if isinstance(value, dict):
        return "{" + ", ".join(f"{literal(k)} = {literal(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(literal, value)) + "]"
    if isinstance(value, (dt.date, dt.time)):
        return value.isoformat()
    return repr(value)


TEXT = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
OFFSETS = st.integers(-1439, 1439).map(lambda minutes: dt.timezone(dt.timedelta(minutes=minutes)))
SCALARS = st.one_of(
    st.booleans(),
    st.integers(-3, 100),
    st.integers(),
    st.floats(),
    st.floats(0, 100),
    st.sampled_from([10**400, -(10**400), 2**63, 1e308, 5e-324, -0.0]),
    TEXT,
    st.sampled_from(CHOICES),
    st.datetimes(timezones=st.one_of(st.none(), OFFSETS)),
    st.dates(),
    st.times(),
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.one_of(st.sampled_from(KEYS), TEXT), inner)
    ),
    max_leaves=6,
)


def table_of(kind):
    keys = st.one_of(st.sampled_from(sorted(kind.model_fields)), st.sampled_from(KEYS), TEXT)
    return st.dictionaries(keys, VALUES, max_size=6)


WILD = st.fixed_dictionaries(
    {},
    optional={
        name: st.one_of(table_of(kind), table_of(kind), st.lists(table_of(kind), max_size=10), VALUES)
        for name, kind in {**load._TABLES, "zzz": model.Sun}.items()
    },
)


@settings(BOUNDED, max_examples=70)
@given(scene=WILD)
def test_any_toml(scene, tmp_path, capsys):
    text = "".join(f"{literal(key)} = {literal(value)}\n" for key, value in scene.items())
    checked(write(tmp_path, text), capsys)


def within(field):
    """Values that a field takes by itself, its ends among them."""
    if table_in(field):
        return st.just({"albedo": 0.2})
    choices = [c for c in getattr(field.annotation, "__args__", ()) if isinstance(c, str)]
    if choices:
        return st.sampled_from(choices)
    rules = field.metadata
    low = next((getattr(r, n) for r in rules for n in ("ge", "gt") if getattr(r, n, None) is not None), None)
    if low is None:
        times = st.datetimes(dt.datetime(1890, 1, 1), dt.datetime(2110, 1, 1), timezones=OFFSETS)
        return times if "datetime" in str(field.annotation) else st.just("sky.png")
    high = next(r.le for r in rules if getattr(r, "le", None) is not None)
    if field.annotation is int:
        return st.integers(low, high)
    shut = any(getattr(r, "gt", None) is not None for r in rules)
    return st.one_of(st.floats(low, high, exclude_min=shut), st.just(high), st.just(high if shut else low))


def sound_values(kind, needed=()):
    fields = kind.model_fields
    return st.fixed_dictionaries(
        {key: within(fields[key]) for key in needed},
        optional={key: within(field) for key, field in fields.items() if key not in needed},
    )


def few(kind, needed=(), most=3):
    """A table with at most a few keys beyond those it needs: many keys at once nearly always contradict each other."""
    others = [key for key in kind.model_fields if key not in needed]
    chosen = st.lists(st.sampled_from(others), max_size=most, unique=True)
    return chosen.flatmap(
        lambda keys: st.fixed_dictionaries({key: within(kind.model_fields[key]) for key in (*needed, *keys)})
    )


PLAUSIBLE = st.fixed_dictionaries(
    {
        "sun": st.one_of(
            st.fixed_dictionaries(
                {"elevation_deg": st.floats(1e-6, 90), "azimuth_deg": within(model.Sun.model_fields["azimuth_deg"])}
            ),
            st.fixed_dictionaries(
                {key: within(model.Sun.model_fields[key]) for key in ("latitude_deg", "longitude_deg", "time")}
            ),
        ),
        "rain": st.one_of(few(model.Rain), st.lists(few(model.Rain, most=2), min_size=1, max_size=3)),
        "camera": few(model.Camera, most=2),
    },
    optional={
        "air": sound_values(model.Air),
        "optics": sound_values(model.Optics),
        "sky": few(model.Sky, most=2),
        "ground": few(model.Ground, most=2),
    },
)


def test_values_within_their_ranges(tmp_path, capsys):
    """Here many scenes are sound, so that what `check` computes from them is tried at the ends of all ranges."""
    count = {0: 0, 2: 0}

    @settings(BOUNDED, max_examples=150)
    @given(scene=PLAUSIBLE)
    def each(scene):
        text = "".join(f"{key} = {literal(value)}\n" for key, value in scene.items())
        count[checked(write(tmp_path, text), capsys)] += 1

    each()
    # so that the test cannot come to try nothing but refusals
    assert count[0] >= 20 and count[2] >= 20, count


@pytest.mark.parametrize("value", [1, 1.5, True, "a\nb", [1, [2]], {"a b": {}}, dt.date(2026, 1, 2), float("inf")])
def test_literals_are_toml(value):
    import tomllib

    assert tomllib.loads(f"a = {literal(value)}") == {"a": value}
