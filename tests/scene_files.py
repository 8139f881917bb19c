"""Scene files for tests: sound ones, and what is told about others."""

from __future__ import annotations

from pathlib import Path

import pytest
from PIL import Image

from raytrace.errors import InputError
from raytrace.scene.load import load_scene

SCENES = Path(__file__).parent.parent / "scenes"
SOUND = {
    "sun": "elevation_deg = 20.0\nazimuth_deg = 250.0\n",
    "rain": "",
    "camera": "",
}
PLACE = "latitude_deg = 57.2\nlongitude_deg = -4.4\n"


def toml(**tables) -> str:
    """A sound scene with some of its tables replaced; sky__cloud stands for [sky.cloud]."""
    parts = SOUND | tables
    return "".join(f"[{name.replace('__', '.')}]\n{body}\n" for name, body in parts.items() if body is not None)


def write(tmp_path, text) -> Path:
    path = tmp_path / "a.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def problems(tmp_path, text) -> list[str]:
    """Lines told about a file; each names the file and what works, and is one line of printable text."""
    path = write(tmp_path, text)
    with pytest.raises(InputError) as caught:
        load_scene(path)
    lines = caught.value.problems
    assert lines
    for line in lines:
        assert line.startswith(f"{path}: ") and "; what works: " in line, line
        assert line.isprintable() and len(line) < 1000, line
    return [line.removeprefix(f"{path}: ") for line in lines]


def plate_scene(**more) -> str:
    return toml(sky='model = "plate"\nplate = "sky.png"', **more)


def sound_plate(path, size=(40, 30), mode="RGB"):
    Image.new(mode, size).save(path)
