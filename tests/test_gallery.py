"""The gallery: every scene has its picture, made from the scene as it stands."""

from pathlib import Path

import pytest

from raytrace.frame.png import SOURCE_TYPE, png_texts
from raytrace.scene.load import load_scene, scene_hash

ROOT = Path(__file__).resolve().parent.parent
SCENES = sorted((ROOT / "scenes").glob("*.toml"))


def test_there_is_a_gallery():
    assert len(SCENES) >= 5
    # and no picture without a scene
    assert {path.stem for path in (ROOT / "renders").glob("*.png")} == {path.stem for path in SCENES}


@pytest.mark.parametrize("path", SCENES, ids=lambda path: path.stem)
def test_picture_is_of_the_scene_as_it_stands(path):
    from PIL import Image

    scene = load_scene(path)
    picture = ROOT / "renders" / f"{path.stem}.png"
    texts = png_texts(picture)
    assert texts["raytrace:scene-sha256"] == scene_hash(scene), f"render {path.name} anew"
    assert texts["raytrace:seed"] == str(scene.optics.seed)
    name, version = texts["Software"].split()
    assert name == "raytrace" and version[0].isdigit()
    assert SOURCE_TYPE in texts["XML:com.adobe.xmp"]
    with Image.open(picture) as image:
        assert image.mode == "RGB"
        # a gallery may show a scene smaller than its own size, never in another shape
        ratio = scene.camera.width_px / scene.camera.height_px
        assert image.width / image.height == pytest.approx(ratio, rel=0.01)


def test_hash_hangs_on_every_key_and_on_nothing_else(tmp_path):
    text = (ROOT / "scenes" / "double_bow.toml").read_text()
    same = tmp_path / "other_name.toml"
    same.write_text("# another comment\n" + text.replace(" = ", "   =   "))
    hashes = [scene_hash(load_scene(p)) for p in (ROOT / "scenes" / "double_bow.toml", same)]
    assert hashes[0] == hashes[1]
    assert len(hashes[0]) == 64 and set(hashes[0]) <= set("0123456789abcdef")
    other = tmp_path / "changed.toml"
    other.write_text(text.replace("elevation_deg = 17.0", "elevation_deg = 17.001"))
    assert other.read_text() != text
    assert scene_hash(load_scene(other)) != hashes[0]
