"""Keys of size laws that do not go together: each combination is one line with the key and what works."""

import itertools

import pytest
from scene_files import problems, toml, write

from raytrace.scene.load import load_scene
from raytrace.scene.model import Rain
from raytrace.scene.size_laws import SHAPE_KEYS, SIZE_LAW_KEYS

VALUES = {
    "diameter_mm": "1",
    "relative_spread": "0.1",
    "median_diameter_mm": "1",
    "shape_mu": "3",
    "geometric_standard_deviation": "1.5",
    "effective_radius_um": "8",
    "effective_variance": "0.1",
    "size_table": '"sizes.txt"',
}
AMOUNTS = ("rain_rate_mm_h", "extinction_per_km", "liquid_water_g_m3")


def rain(law, *keys) -> str:
    values = VALUES | dict.fromkeys(AMOUNTS, "2")
    return toml(rain=f'size_law = "{law}"\n' + "".join(f"{key} = {values[key]}\n" for key in keys))


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "sizes.txt").write_text("1 2\n2 1\n")
    return tmp_path


def test_the_laws_name_keys_of_the_rain():
    assert set(SHAPE_KEYS) == set(VALUES)
    assert {*SHAPE_KEYS, *AMOUNTS} <= set(Rain.model_fields)
    assert all(set(keys.amounts) <= set(AMOUNTS) for keys in SIZE_LAW_KEYS.values())


@pytest.mark.parametrize("law", SIZE_LAW_KEYS)
def test_what_goes_together_is_sound(folder, law):
    keys = SIZE_LAW_KEYS[law]
    for amounts in ((), *((key,) for key in keys.amounts)):
        for takes in ((), keys.takes):
            assert load_scene(write(folder, rain(law, *keys.needs, *takes, *amounts))).rain[0].size_law == law


@pytest.mark.parametrize("law", SIZE_LAW_KEYS)
def test_what_is_needed_and_what_belongs_to_others(folder, law):
    keys = SIZE_LAW_KEYS[law]
    for key in keys.needs:
        (line,) = problems(folder, rain(law, *(other for other in keys.needs if other != key)))
        told, _, works = line.partition("; what works: ")
        assert told == f'rain.{key}: is missing: size_law "{law}" needs it'
        assert "path of a text file" in works if key == "size_table" else " 0.002 to " in works or "1.01 to 3" in works
    for key in sorted(set(SHAPE_KEYS) - {*keys.needs, *keys.takes}):
        (line,) = problems(folder, rain(law, *keys.needs, key))
        told, _, works = line.partition("; what works: ")
        assert told.startswith(f"rain.{key}: ") and told.endswith(f' means nothing to size_law "{law}"'), line
        # what works is so
        for other in works.removeprefix("size_law = ").replace('"', "").split(" or "):
            assert key in SIZE_LAW_KEYS[other].needs + SIZE_LAW_KEYS[other].takes


@pytest.mark.parametrize("law", SIZE_LAW_KEYS)
def test_two_amounts(folder, law):
    keys = SIZE_LAW_KEYS[law]
    for pair in itertools.combinations(AMOUNTS, 2):
        text = rain(law, *keys.needs, *pair)
        if law == "marshall_palmer_1948" and "rain_rate_mm_h" in pair:
            assert load_scene(write(folder, text)).rain[0].rain_rate_mm_h == 2.0
            continue
        (line,) = problems(folder, text)
        if set(pair) <= set(keys.amounts):
            assert f' contradicts {sorted(pair)[0]} with size_law "{law}"; what works: one amount of water' in line
            assert line.startswith(f"rain.{sorted(pair)[1]}: 2.0 ")
        else:
            assert line.startswith('rain.rain_rate_mm_h: 2.0 means nothing to size_law "deirmendjian_1969"')
    assert len(problems(folder, rain(law, *keys.needs, *AMOUNTS))) == (1 if law == "marshall_palmer_1948" else 2)


def test_amounts_beside_unsound_keys(folder):
    # what stands on an unsound value is not told
    text = rain("single", "diameter_mm", "extinction_per_km", "rain_rate_mm_h").replace("km = 2", "km = -2")
    (line,) = problems(folder, text)
    assert line.startswith("rain.extinction_per_km: -2")
    (line,) = problems(folder, rain("x", "diameter_mm", "extinction_per_km", "rain_rate_mm_h"))
    assert line.startswith("rain.size_law:")
