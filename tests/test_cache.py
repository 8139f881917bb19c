"""Tables on disk: exact, verified, bounded, and never in the way."""

import dataclasses
import errno
import json
import os
import time
import warnings
from pathlib import Path

import numpy as np
import pytest
from skies import make_scene

from raytrace.errors import CacheWarning, InputError
from raytrace.optics import cache, scattering, scattering_table, sphere, trace_sphere
from raytrace.optics.drop_table import drop_table
from raytrace.optics.scattering import is_cached, wavelengths_nm

KEY = "k" * 64
ARRAYS = ("phase_sr", "standard_error_sr", "angle_edges_deg", "wavelength_nm", "index", "left_over", "absorbed")
OPTICS = {"paths": 3, "rays": 1_000, "bins": 180, "wavelength_step_nm": 20.0}


@pytest.fixture
def table():
    return trace_sphere(
        np.array([1.34 + 1e-9j, 1.33]),
        paths=3,
        rays=1_000,
        bins=30,
        seed=4,
        wavelength_nm=np.array([400.0, 700.0]),
        diameter_mm=1.0,
    )


@pytest.fixture
def stored(empty_cache, table) -> Path:
    cache.store(KEY, table)
    return cache.path_of(KEY)


@pytest.fixture
def scene():
    return make_scene(optics=OPTICS)


def same(a, b):
    assert a is not None and b is not None
    for name in ARRAYS:
        x, y = getattr(a, name), getattr(b, name)
        assert x.tobytes() == y.tobytes() and x.shape == y.shape and x.dtype == y.dtype, name
    assert (a.method, a.rays, a.seed, a.disc_diameter_deg) == (b.method, b.rays, b.seed, b.disc_diameter_deg)


def key_of(scene):
    method, arguments = scattering._arguments(scene, 0)
    return cache.table_key(method=method, **arguments)


def head_and_body(path):
    head, body = path.read_bytes().split(b"\n", 1)
    return json.loads(head), body


def rewrite(path, head, body):
    path.write_bytes(json.dumps(head).encode() + b"\n" + body)


def test_cache_lies_where_the_environment_says(empty_cache, stored):
    assert stored.parent == empty_cache / "tables"
    assert [p.name for p in stored.parent.iterdir()] == [KEY[:40] + ".table"]


def test_store_and_load_are_exact(stored, table):
    same(cache.load(KEY), table)


def test_loaded_table_folds_and_shares_like_the_traced_one(stored, table):
    loaded = cache.load(KEY)
    same(loaded.with_sun_disc(), table.with_sun_disc())
    assert loaded.share().tobytes() == table.share().tobytes()


def test_nothing_stored_is_no_warning(empty_cache):
    assert cache.load("absent" * 10) is None
    assert cache.table_cache_size() == (0, 0)


def test_size(stored):
    assert cache.table_cache_size() == (1, stored.stat().st_size)


def damaged(path, how):
    head, body = head_and_body(path)
    data = path.read_bytes()
    if how == "truncated":
        path.write_bytes(data[:-1000])
    elif how == "one value short":
        path.write_bytes(data[:-8])
    elif how == "too long":
        path.write_bytes(data + bytes(8))
    elif how == "header alone":
        path.write_bytes(data[: data.index(b"\n") + 1])
    elif how == "empty":
        path.write_bytes(b"")
    elif how == "one byte flipped":
        path.write_bytes(data[:-5] + bytes([data[-5] ^ 1]) + data[-4:])
    elif how == "foreign text":
        path.write_text("Dear diary,\ntoday it rained.\n")
    elif how == "foreign binary":
        path.write_bytes(bytes(range(256)) * 100)
    elif how == "wrong key":
        rewrite(path, {**head, "key": "j" * 64}, body)
    elif how == "other format":
        rewrite(path, {**head, "format": "raytrace scattering table 0"}, body)
    elif how == "header not a table":
        rewrite(path, [1, 2, 3], body)
    elif how == "header without shapes":
        rewrite(path, {k: v for k, v in head.items() if k != "shapes"}, body)
    elif how == "shapes not numbers":
        rewrite(path, {**head, "shapes": {k: ["a"] for k in head["shapes"]}}, body)
    elif how == "negative shapes":
        shapes = head["shapes"]
        shapes["left_over"] = [-2, -1]
        rewrite(path, head, body)
    elif how == "huge shapes":
        rewrite(path, {**head, "shapes": {k: [2**40, 2**40] for k in head["shapes"]}}, body)
    elif how == "other rays":
        rewrite(path, {**head, "rays": head["rays"] + 1}, body)
    elif how == "other seed":
        rewrite(path, {**head, "seed": 5}, body)
    elif how == "shapes swapped":
        shapes = head["shapes"]
        shapes["phase_sr"] = shapes["phase_sr"][::-1]
        rewrite(path, head, body)
    elif how == "deep nest":
        path.write_bytes(b"[" * 60_000)
    elif how == "endless line":
        path.write_bytes(b'"' + b"a" * 200_000)
    else:
        raise AssertionError(how)


DAMAGES = [
    "truncated",
    "one value short",
    "too long",
    "header alone",
    "empty",
    "one byte flipped",
    "foreign text",
    "foreign binary",
    "wrong key",
    "other format",
    "header not a table",
    "header without shapes",
    "shapes not numbers",
    "negative shapes",
    "huge shapes",
    "other rays",
    "other seed",
    "shapes swapped",
    "deep nest",
    "endless line",
]


@pytest.mark.parametrize("how", DAMAGES)
def test_damaged_file_is_left_unused_with_a_warning(stored, table, how):
    damaged(stored, how)
    with pytest.warns(CacheWarning, match="is left unused: .*; the table is made anew") as caught:
        assert cache.load(KEY) is None
    assert len(caught) == 1 and "\n" not in str(caught[0].message)
    # and is replaced by the next
    cache.store(KEY, table)
    same(cache.load(KEY), table)


def test_any_flipped_bit_is_noticed_or_harmless(stored, table):
    data = stored.read_bytes()
    rng = np.random.default_rng(0)
    line = data.index(b"\n")
    # all of the header, and a sample of the arrays
    for at in [*range(line + 1), *rng.integers(line + 1, len(data), 100)]:
        flipped = bytearray(data)
        flipped[at] ^= 1 << int(rng.integers(8))
        stored.write_bytes(flipped)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", CacheWarning)
            loaded = cache.load(KEY)
        if loaded is not None:
            same(loaded, table)


def test_scene_is_traced_anew_when_its_file_is_damaged(empty_cache, scene):
    first = scattering_table(scene)
    (path,) = (empty_cache / "tables").glob("*.table")
    damaged(path, "one byte flipped")
    with pytest.warns(CacheWarning, match="checksum"):
        same(scattering_table(scene), first)
    # the damaged file was replaced
    same(scattering_table(scene), first)


def test_folder_in_the_files_place(empty_cache, scene):
    first = scattering_table(scene, use_cache=False)
    (path,) = [cache.path_of(key_of(scene))]
    path.mkdir(parents=True)
    with pytest.warns(CacheWarning, match="could not be kept"):
        same(scattering_table(scene), first)
    assert is_cached(scene) == [False]
    # nothing half written is left beside it
    assert list(path.parent.iterdir()) == [path]


def test_full_disk(monkeypatch, empty_cache, scene):
    def full(path, content):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(cache, "write_atomic", full)
    with pytest.warns(CacheWarning, match="could not be kept in .*No space left on device"):
        got = scattering_table(scene)
    same(got, scattering_table(scene, use_cache=False))


def test_disk_that_fills_up_while_writing(monkeypatch, empty_cache, table):
    def failing(descriptor):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(os, "fsync", failing)
    with pytest.warns(CacheWarning, match="No space left on device"):
        cache.store(KEY, table)
    assert list((empty_cache / "tables").iterdir()) == []


def test_unreadable_file(monkeypatch, stored, table):
    def refuse(self, *_, **__):
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    with pytest.warns(CacheWarning, match="Permission denied"):
        assert cache.load(KEY) is None


def test_unreadable_folder(monkeypatch, empty_cache, scene):
    def refuse(self, *_, **__):
        raise PermissionError(errno.EACCES, "Permission denied")

    with monkeypatch.context() as patch:
        patch.setattr(Path, "mkdir", refuse)
        assert cache.table_cache_folder() is None
        assert cache.table_cache_size() == (0, 0)
        got = scattering_table(scene)
        assert is_cached(scene) == [False]
    same(got, scattering_table(scene, use_cache=False))


def test_a_file_where_the_folder_should_be(monkeypatch, tmp_path, scene):
    (tmp_path / "file").write_text("in the way")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    same(scattering_table(scene), scattering_table(scene, use_cache=False))


def test_read_only_cache_is_read(monkeypatch, stored, table):
    def refuse(*_, **__):
        raise PermissionError(errno.EROFS, "Read-only file system")

    monkeypatch.setattr(os, "utime", refuse)
    same(cache.load(KEY), table)


def test_least_recently_used_goes_first(monkeypatch, empty_cache, table):
    keys = [c * 64 for c in "abcd"]
    for age, key in zip((40, 30, 20), keys, strict=False):
        cache.store(key, table)
        os.utime(cache.path_of(key), (time.time() - age, time.time() - age))
    size = cache.path_of(keys[0]).stat().st_size
    # reading makes the oldest the newest
    assert cache.load(keys[0]) is not None
    monkeypatch.setattr(cache, "LIMIT_BYTES", 3 * size)
    cache.store(keys[3], table)
    assert [cache.path_of(key).exists() for key in keys] == [True, False, True, True]
    assert cache.table_cache_size() == (3, 3 * size)


def test_newest_stays_even_if_it_alone_is_too_large(monkeypatch, stored, table):
    monkeypatch.setattr(cache, "LIMIT_BYTES", 1)
    cache.store("n" * 64, table)
    assert not stored.exists()
    same(cache.load("n" * 64), table)


def test_other_files_in_the_folder_are_left_alone(monkeypatch, stored, table):
    note = stored.parent / "note.txt"
    note.write_text("mine")
    monkeypatch.setattr(cache, "LIMIT_BYTES", 1)
    cache.store(KEY, table)
    assert note.read_text() == "mine"


def test_leftovers_of_killed_processes_are_cleared(stored, table):
    old, young = stored.parent / ".a.table.x1.part", stored.parent / ".b.table.x2.part"
    for path, age in ((old, 7200), (young, 60)):
        path.write_bytes(b"half")
        os.utime(path, (time.time() - age, time.time() - age))
    cache.store(KEY, table)
    assert not old.exists() and young.exists()


def test_key_changes_with_every_argument(scene):
    method, arguments = scattering._arguments(scene, 0)
    assert method == "rays"
    base = cache.table_key(**arguments)
    assert base == cache.table_key(**dict(reversed(arguments.items())))
    changed = {
        "index": arguments["index"] + 1e-15,
        "wavelength_nm": arguments["wavelength_nm"] + 1e-9,
        "diameter_mm": np.nextafter(arguments["diameter_mm"], 2),
        "paths": arguments["paths"] + 1,
        "rays": arguments["rays"] + 1,
        "bins": arguments["bins"] + 1,
        "seed": arguments["seed"] + 1,
    }
    assert changed.keys() == arguments.keys()
    keys = {base} | {cache.table_key(**{**arguments, name: value}) for name, value in changed.items()}
    assert len(keys) == len(changed) + 1


@pytest.mark.parametrize("method", ["rays", "airy", "waves", "auto"])
def test_key_takes_all_that_the_maker_takes(method):
    import inspect

    found, arguments = scattering._arguments(make_scene(optics={**OPTICS, "method": method}), 0)
    assert found == method
    taken = set(inspect.signature(trace_sphere if method == "rays" else drop_table).parameters)
    assert set(arguments) == taken - {"threads", "on_done", "method"}


def test_key_changes_with_sources(monkeypatch, scene):
    before = key_of(scene)
    monkeypatch.setattr(cache, "_NO_SOURCES", (*cache._NO_SOURCES, "sphere_kernels.py"))
    without = key_of(scene)
    assert without != before
    for name in cache._MORE_SOURCES:
        with monkeypatch.context() as patch:
            patch.setattr(cache, "_MORE_SOURCES", tuple(n for n in cache._MORE_SOURCES if n != name))
            assert key_of(scene) != without


def test_waves_come_back_as_they_were_kept(empty_cache):
    wave = make_scene(
        optics={**OPTICS, "method": "waves", "glory": True},
        rain={"size_law": "single", "diameter_mm": 0.01, "relative_spread": 0.1, "rain_rate_mm_h": 0.01},
    )
    first = scattering_table(wave)
    again = scattering_table(wave)
    same(again, first)
    for name in ("aureole_sr", "glory_sr"):
        np.testing.assert_array_equal(getattr(again, name), getattr(first, name))
    assert (again.sizes, again.size_error) == (first.sizes, first.size_error)
    assert first.sizes > 8 and first.glory_sr.max() > 0 and first.aureole_sr.max() > 0


def test_what_tells_scenes_apart(empty_cache):
    keys = [
        key_of(make_scene(**more))
        for more in (
            {"optics": OPTICS},
            {"optics": {**OPTICS, "seed": 1}},
            {"optics": {**OPTICS, "method": "auto"}},
            {"optics": {**OPTICS, "method": "waves"}},
            {"optics": {**OPTICS, "method": "waves", "glory": True}},
            {"optics": {**OPTICS, "method": "waves"}, "rain": {"rain_rate_mm_h": 20.0}},
            {"optics": OPTICS, "rain": {"temperature_c": 11.0}},
            {"optics": OPTICS, "rain": {"water": "sea"}},
            {"optics": OPTICS, "rain": {"rain_rate_mm_h": 20.0}},
            {"optics": OPTICS, "air": {"pressure_hpa": 800.0}},
        )
    ]
    assert len(set(keys)) == len(keys)
    # where the sun and the camera are is of no matter to a drop
    moved = make_scene(sun=(5.0, 100.0), camera={"roll_deg": 3.0}, optics=OPTICS)
    assert key_of(moved) == keys[0]


def test_second_time_nothing_is_traced(monkeypatch, empty_cache, scene):
    assert is_cached(scene) == [False]
    first = scattering_table(scene)
    assert is_cached(scene) == [True]

    def traced_again(*_, **__):
        raise AssertionError("traced again")

    monkeypatch.setattr(sphere, "trace_sphere", traced_again)
    same(scattering_table(scene), first)
    with pytest.raises(AssertionError, match="traced again"):
        scattering_table(scene, use_cache=False)


def test_without_cache_nothing_is_written(empty_cache, scene):
    scattering_table(scene, use_cache=False)
    assert not empty_cache.exists()


def test_each_curtain_has_its_table(empty_cache):
    scene = make_scene(rain=[{}, {"water": "sea"}], optics=OPTICS)
    scattering_table(scene, 1)
    assert is_cached(scene) == [False, True]
    assert not np.array_equal(scattering_table(scene, 0).index, scattering_table(scene, 1).index)
    for curtain in (2, -1):
        with pytest.raises(InputError, match=f"curtain {curtain} given; the scene has 2, counted from 0"):
            scattering_table(scene, curtain)


def test_wavelengths():
    optics = make_scene(optics={"wavelength_step_nm": 5.0}).optics
    np.testing.assert_allclose(wavelengths_nm(optics), np.arange(380, 781, 5))
    # a step that does not divide the range ends before its end
    assert wavelengths_nm(dataclasses.make_dataclass("O", ["wavelength_step_nm"])(7.0)).max() == 380 + 57 * 7
