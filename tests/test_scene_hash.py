"""The hash of a scene changes with all that it says and with nothing else."""

import re

from scene_files import PLACE, plate_scene, sound_plate, toml, write

from raytrace.scene import load, model
from raytrace.scene.load import load_scene, scene_hash


def variants() -> dict[str, dict]:
    """Of each key of the model one scene in which it alone has another value, sound or not by the rules."""
    out = {}

    def other(field):
        value, rules = field.default, field.metadata
        choices = [c for kind in (field.annotation,) for c in getattr(kind, "__args__", ()) if isinstance(c, str)]
        if choices:
            return next(c for c in choices if c != value)
        low = next((getattr(r, n) for r in rules for n in ("ge", "gt") if getattr(r, n, None) is not None), None)
        high = next(r.le for r in rules if getattr(r, "le", None) is not None) if low is not None else None
        if low is None:
            return None
        middle = (low + high) / 2 if "float" in str(field.annotation) else int(low + high) // 2
        return middle if middle != value else middle + 1

    for table, kind in {**load._TABLES, "cloud": model.Cloud}.items():
        for key, field in kind.model_fields.items():
            if (value := other(field)) is not None:
                out[f"{table}.{key}"] = (table, kind, key, value)
    return out


def test_the_hash_changes_with_every_value():
    base = dict(sun=model.Sun(elevation_deg=20, azimuth_deg=250), rain=(model.Rain(),), camera=model.Camera())
    base["sky"] = model.Sky(cloud=model.Cloud())
    seen = {scene_hash(model.Scene(**base)): "as it is"}
    changes = variants()
    assert len(changes) >= 65
    for name, (table, kind, key, value) in changes.items():
        tables = dict(base)
        if table == "cloud":
            tables["sky"] = model.Sky(cloud=kind(**{key: value}))
        elif table == "rain":
            tables["rain"] = (kind(**{key: value}),)
        else:
            tables[table] = tables.get(table, kind()).model_copy(update={key: value})
        digest = scene_hash(model.Scene(**tables))
        assert digest not in seen, (name, seen.get(digest))
        seen[digest] = name


def test_the_hash_does_not_depend_on_the_layout(tmp_path):
    plain = load_scene(write(tmp_path, toml(air="visibility_km = 60.0\nozone_cm = 0.25")))
    other = (
        'camera = {projection = "perspective"}\nair.ozone_cm = 2.5e-1 # thin\n[[rain]]\r\nfar_m=2_500\n'
        "[sun]\nazimuth_deg = 250\n\n\n'elevation_deg' = 20\n"
    )
    assert scene_hash(load_scene(write(tmp_path, other))) == scene_hash(plain)
    assert re.fullmatch("[0-9a-f]{64}", scene_hash(plain))
    time = "time = 2026-10-04T16:20:00+01:00"
    assert scene_hash(load_scene(write(tmp_path, toml(sun=PLACE + time)))) != scene_hash(plain)


def test_the_hash_changes_with_the_plates_bytes(tmp_path):
    hashes = []
    for size in ((40, 30), (40, 31)):
        sound_plate(tmp_path / "sky.png", size)
        hashes.append(scene_hash(load_scene(write(tmp_path, plate_scene()))))
    assert hashes[0] != hashes[1]
