"""The page that explains scene files, held against the model: every key, its unit, range and default, and no other."""

import math
import re

import pytest
from scene_files import SCENES, write

from raytrace.scene import load, model, size_table
from raytrace.scene.fields import field_range, table_in, works_for
from raytrace.scene.load import load_scene
from raytrace.scene.size_laws import SIZE_LAW_KEYS


def test_every_scene_of_the_project_is_sound():
    files = sorted(SCENES.glob("*.toml"))
    assert len(files) >= 5
    for path in files:
        assert load_scene(path).camera.width_px > 0, path


def documented() -> dict[str, dict[str, list[str]]]:
    """Rows of the tables of scenes/README.md, by table and key."""
    out, table = {}, None
    for line in (SCENES / "README.md").read_text(encoding="utf-8").splitlines():
        if found := re.fullmatch(r"## `\[(.+)\]`", line):
            table = out.setdefault(found[1], {})
        elif found := re.match(r"\| `(\w+)` \|", line):
            cells = [cell.strip() for cell in line.strip("|").split("|")]
            assert len(cells) == 5 and found[1] not in table, line
            table[found[1]] = cells[1:]
    return out


UNIT_OF_ENDING = {
    "deg": "deg", "m": "m", "km": "km", "hpa": "hPa", "c": "°C", "percent": "%", "cm": "cm", "permille": "‰",
    "h": "mm/h", "m3": "g/m³", "um": "µm", "mm": "mm", "nm": "nm", "lx": "lx", "m2": "cd/m²", "k": "K",
    "px": "px", "s": "s",
}  # fmt: skip


@pytest.mark.parametrize("table", [*load._TABLES, "sky.cloud"])
def test_the_readme_holds_every_key_with_range_and_default(table):
    kind = {**load._TABLES, "sky.cloud": model.Cloud}[table]
    rows = documented()[table]
    assert list(rows) == list(kind.model_fields)
    for key, field in kind.model_fields.items():
        unit, span, default, meaning = rows[key]
        works = "" if table_in(field) else works_for(field)
        if table_in(field):
            assert span == "table"
        elif works.startswith(("a number from ", "a whole number from ")):
            assert span == field_range(field), key
        elif works.startswith('"') or works == "true or false":
            assert span == works, key
        else:
            texts = {"time": "date-time with offset", "plate": "path of a picture", "size_table": "path of a text file"}
            assert span.split(",")[0] == texts[key]
        if field.default is None:
            assert default == "none", key
        elif isinstance(field.default, str):
            assert default == f'"{field.default}"', key
        elif isinstance(field.default, bool):
            assert default == str(field.default).lower(), key
        else:
            assert math.isclose(float(default), field.default, rel_tol=0, abs_tol=0), key
        assert meaning.endswith((".", "...")) and len(meaning) > 8, key
        # the unit that the key's name ends in; "atm-cm" is ozone's own, and an extinction is per km
        ending = key.rsplit("_", 1)[-1]
        special = {"ozone_cm": "atm-cm", "extinction_per_km": "1/km", "aerosol_optical_depth_500nm": ""}
        expected = special.get(key, UNIT_OF_ENDING.get(ending, "" if key != "exposure_percentile" else "%"))
        assert unit == expected, key


def test_the_readme_has_no_other_table():
    assert set(documented()) == {*load._TABLES, "sky.cloud"}


def test_the_readmes_own_scene_is_sound(tmp_path):
    (block,) = re.findall(r"```toml\n(.*?)```", (SCENES / "README.md").read_text(encoding="utf-8"), re.S)
    load_scene(write(tmp_path, block))


def test_the_values_that_stand_in_for_unset_keys_of_the_rain_are_those_documented():
    from raytrace.drops import sizes

    rows = documented()
    assert f"{sizes.RAIN_RATE_MM_H:g} if neither" in rows["rain"]["rain_rate_mm_h"][-1]
    assert f"; {sizes.SHAPE_MU:g} unless given" in rows["rain"]["shape_mu"][-1]
    assert f"; {sizes.LIQUID_WATER_G_M3:g} for cloud unless" in rows["rain"]["liquid_water_g_m3"][-1]
    assert f"; {sizes.EFFECTIVE_RADIUS_UM:g} unless given" in rows["rain"]["effective_radius_um"][-1]
    assert f"; 1/{1 / sizes.EFFECTIVE_VARIANCE:g} unless given" in rows["rain"]["effective_variance"][-1]
    text = (SCENES / "README.md").read_text(encoding="utf-8")
    assert f"cloud has {sizes.LIQUID_WATER_G_M3:g} g/m³, and all else rains {sizes.RAIN_RATE_MM_H:g} mm/h" in text
    assert f"drops below {sizes.CLOUD_MM:g} mm" in text
    table = f"at most 1 MiB and {size_table.MOST_ROWS} rows"
    assert table in text and f"from {size_table.SMALLEST_MM:g}" in text and f"to {size_table.LARGEST_MM:g} mm" in text


def test_the_readme_says_which_keys_each_size_law_wants():
    text = (SCENES / "README.md").read_text(encoding="utf-8")
    rows = re.findall(r'^  \| `"(\w+)"` \| [^|]+ \| ([^|]*)\| ([^|]*)\|$', text, re.M)
    told = {law: (tuple(re.findall(r"`(\w+)`", needs)), tuple(re.findall(r"`(\w+)`", may))) for law, needs, may in rows}
    assert told == {law: (keys.needs, keys.takes) for law, keys in SIZE_LAW_KEYS.items()}


def test_the_values_that_stand_in_for_other_unset_keys_are_those_documented():
    from raytrace.sky.background import uniform_luminance_cd_m2
    from raytrace.sky.rain import azimuth_limits_deg

    rows = documented()
    assert azimuth_limits_deg(model.Rain(), 100.0) == (15.0, 185.0)
    assert "85 left of the antisolar point" in rows["rain"]["azimuth_from_deg"][-1]
    luminance = uniform_luminance_cd_m2(model.Sky(model="uniform"))
    assert f"; {luminance:g} unless given" in rows["sky"]["luminance_cd_m2"][-1]
