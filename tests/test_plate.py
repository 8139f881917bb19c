"""Plates: pictures that stand behind the rain, and every way in which they can be wrong."""

import argparse
import struct
import zlib

import pytest
from PIL import Image
from scene_files import plate_scene, problems, sound_plate, write

from raytrace.cli import _with_options
from raytrace.errors import InputError
from raytrace.preflight import needed_bytes, preflight
from raytrace.scene import model
from raytrace.scene.load import load_scene, scene_from_dict, scene_hash


def huge_png(path):
    """A PNG of a few bytes that says it has 20000 x 20000 pixels."""

    def chunk(kind, data):
        return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))

    header = struct.pack(">IIBBBBB", 20_000, 20_000, 8, 2, 0, 0, 0)
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + chunk(b"IDAT", b"") + chunk(b"IEND", b""))


def test_a_sound_plate_takes_the_place_of_the_land(tmp_path):
    for name in ("sky.png", "sky.jpg", "sky.tif"):
        sound_plate(tmp_path / name)
        scene = load_scene(write(tmp_path, plate_scene().replace("sky.png", name)))
        assert scene.plate_path() == (tmp_path / name).resolve()
        assert scene.ground.cover == "none"
    # the command line reads the scene again from what it had said
    options = argparse.Namespace(size="1280x720", seed=None, scene="again")
    assert scene_hash(_with_options(scene, options)) == scene_hash(scene)


def test_plates_that_cannot_be(tmp_path):
    plate = tmp_path / "sky.png"
    key = 'sky.plate: "sky.png"'
    folder = tmp_path / "scenes"
    folder.mkdir()

    def only(text=None, where=tmp_path):
        (line,) = problems(where, plate_scene() if text is None else text)
        return line

    assert only().startswith(f"{key} is not a file; what works: a JPEG, PNG or TIFF picture")
    plate.write_bytes(b"no picture at all")
    assert only().startswith(f"{key} is no picture that can be read")
    plate.write_bytes(b"")
    assert only().startswith(f"{key} is no picture that can be read")
    Image.new("RGB", (40, 30)).save(plate, "GIF")
    assert only().startswith(f"{key} is no picture that can be read")
    Image.effect_noise((200, 200), 50).convert("RGB").save(plate, "PNG")
    plate.write_bytes(plate.read_bytes()[:4000])
    assert only().startswith(f"{key} is no picture that can be read")
    huge_png(plate)
    assert only() == f"{key} has far too many pixels; what works: up to 80 million pixels"
    sound_plate(plate, mode="I;16")
    assert only().startswith(f"{key} has pixels of kind I;16") and "8 bits a channel" in only()
    sound_plate(plate)
    assert "lies outside the scene's folder" in only(plate_scene().replace("sky.png", "../sky.png"), folder)
    assert "lies outside the scene's folder" in only(plate_scene().replace("sky.png", str(plate)), folder)
    (folder / "sky.png").symlink_to(plate)
    assert "lies outside the scene's folder" in only(None, folder)
    assert "is not a file" in only(plate_scene().replace("sky.png", "."))
    assert "cannot be looked up" in only(plate_scene().replace("sky.png", r"a\u0000b"))
    assert 'ground.cover: "fields" would hide the plate' in only(plate_scene(ground=""))
    assert "sky.cloud: means nothing" in only(plate_scene(sky__cloud=""))
    hot = plate_scene().replace("[rain]", "colour_temperature_k = 6000\n[rain]")
    assert len(problems(tmp_path, hot)) == 1


def test_a_plate_above_the_limit_is_refused_before_it_is_read(tmp_path, monkeypatch):
    monkeypatch.setattr("raytrace.scene.rules.PLATE_MOST_PIXELS", 1000)
    sound_plate(tmp_path / "sky.png")
    (line,) = problems(tmp_path, plate_scene())
    assert line.startswith('sky.plate: "sky.png" has 40x30 pixels')


def test_a_plate_needs_a_folder():
    data = {"sun": {"elevation_deg": 20, "azimuth_deg": 1}, "rain": {}, "camera": {}}
    with pytest.raises(InputError, match="has no folder to start from"):
        scene_from_dict(data | {"sky": {"model": "plate", "plate": "sky.png"}})


def test_a_plate_stays_where_it_was_when_the_current_folder_changes(tmp_path, monkeypatch):
    (tmp_path / "elsewhere").mkdir()
    sound_plate(tmp_path / "sky.png")
    write(tmp_path, plate_scene())
    monkeypatch.chdir(tmp_path)
    scene = load_scene("a.toml")
    monkeypatch.chdir(tmp_path / "elsewhere")
    assert scene.plate_path() == (tmp_path / "sky.png").resolve()
    preflight(scene)


def test_a_plate_that_is_gone_is_refused_before_rendering(tmp_path):
    sound_plate(tmp_path / "sky.png")
    scene = load_scene(write(tmp_path, plate_scene()))
    # made by hand, so that nothing says where the path starts
    by_hand = model.Scene(**{name: getattr(scene, name) for name in model.Scene.model_fields})
    (tmp_path / "sky.png").unlink()
    for each in (scene, by_hand):
        with pytest.raises(InputError) as caught:
            preflight(each, name="a.toml")
        (line,) = caught.value.problems
        assert line.startswith('a.toml: sky.plate: "sky.png" is not a file') and "; what works: " in line


def test_a_plate_counts_for_the_memory_that_is_needed(tmp_path):
    need = []
    for size in ((40, 30), (4000, 3000)):
        sound_plate(tmp_path / "sky.png", size=size)
        need.append(needed_bytes(load_scene(write(tmp_path, plate_scene()))))
    # at least its pixels as three floating-point numbers of four bytes
    assert need[1] - need[0] >= 12 * (4000 * 3000 - 40 * 30)
