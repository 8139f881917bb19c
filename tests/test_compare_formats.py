"""What a comparison writes: JSON by its schema, CSV, table, HTML and plot, all with the same figures; the command."""

import csv
import io
import json
from html.parser import HTMLParser
from pathlib import Path

import jsonschema
import pytest
from PIL import Image

import raytrace
from raytrace.cli import run
from raytrace.comparison.report import _COLUMNS, FIGURES

SCHEMA = json.loads((Path(raytrace.__file__).parent / "comparison" / "schema.json").read_text(encoding="utf-8"))
SCENE = Path(__file__).parents[1] / "scenes" / "double_bow.toml"


@pytest.fixture(scope="module")
def drop():
    return raytrace.compare(raytrace.Drop(sun_elevation_deg=30.0), orders=7)


@pytest.fixture(scope="module")
def scene():
    return raytrace.compare(raytrace.load_scene(SCENE), orders=4, name="double_bow.toml")


def test_json_is_what_the_schema_says(drop, scene):
    jsonschema.Draft202012Validator.check_schema(SCHEMA)
    for report in (drop, scene):
        data = json.loads(report.to_json())
        jsonschema.validate(data, SCHEMA)
        assert data["schema"] == 1 and data["made_by"].startswith("raytrace ")
        for row in data["orders"]:
            assert set(row["standard_error"]) == set(FIGURES) <= set(row)
            assert ("scene" in row) == (report is scene)
            assert row["standard_error"]["bow_ray_weight"] == 0 < row["standard_error"]["light_share"]
    broken = json.loads(drop.to_json())
    del broken["orders"][0]["polarisation"]
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(broken, SCHEMA)


def test_no_bow_is_null_and_not_zero():
    # an index above 2 makes no primary, but 1.9 is the largest that a drop takes: through the row itself
    from raytrace.comparison.report import Row

    row = Row(order=1, name="primary", centre=None).as_dict()
    assert row["peak_deg"] is None and row["standard_error"]["light_share"] is None
    data = {"schema": 1, "made_by": "raytrace 0", "orders": [row]}
    data["input"] = {"orders": 1, "tolerance": 0.01, "seed": 0, "drop": dict.fromkeys(
        ("diameter_mm", "temperature_c", "sun_elevation_deg", "refractive_index"), 1.0)}  # fmt: skip
    jsonschema.validate(data, SCHEMA)


def test_csv_says_the_same(drop, scene):
    for report in (drop, scene):
        table = list(csv.DictReader(io.StringIO(report.to_csv())))
        assert len(table) == len(report.rows)
        for line, row in zip(table, report.as_dict()["orders"], strict=True):
            assert (int(line["order"]), line["name"], line["centre"]) == (row["order"], row["name"], row["centre"])
            for name in FIGURES:
                assert float(line[name]) == row[name]
                assert float(line[f"{name}_standard_error"]) == row["standard_error"][name]
    assert "contrast_best" in scene.to_csv().splitlines()[0]


def test_table_says_the_same(drop):
    text = drop.to_text()
    lines = text.splitlines()
    assert all(len(line) <= 120 and line.isprintable() for line in lines)
    for row in drop.rows:
        line = next(line for line in lines if line.startswith(f"{row.order} ") and row.name in line)
        cells = line.split()[3:]
        for cell, (*_, name, form) in zip(cells, _COLUMNS, strict=True):
            assert cell == f"{getattr(row, name):{form}}"
    assert "deg" in lines[3]


def test_scene_table_fits_a_terminal(scene):
    assert all(len(line) <= 120 for line in scene.to_text().splitlines())
    assert "contrast (L_bow - L_behind) / L_behind" in scene.to_text()


def test_caution_where_bows_stand_round_the_sun(drop):
    assert "never look at the sun" in drop.to_text().replace("\n", " ")
    assert "never look" not in raytrace.compare(orders=2).to_text().replace("\n", " ")


def test_html_is_well_formed(drop):
    class Checker(HTMLParser):
        stack, cells = [], 0

        def handle_starttag(self, tag, attrs):
            self.stack.append(tag)
            Checker.cells += tag == "td"

        def handle_endtag(self, tag):
            assert self.stack.pop() == tag

    checker = Checker()
    checker.feed(drop._repr_html_())
    assert not checker.stack and Checker.cells == 7 * (3 + len(_COLUMNS))


def test_command_writes_all_three(tmp_path, capsys):
    paths = {kind: tmp_path / f"bows.{kind}" for kind in ("json", "csv", "png")}
    options = ["--json", str(paths["json"]), "--csv", str(paths["csv"]), "--plot", str(paths["png"])]
    assert run(["compare", "--orders", "2", "--diameter-mm", "0.8", "--tolerance", "0.05", *options]) == 0
    out = capsys.readouterr().out
    assert out.startswith("one drop of 0.8 mm, water of 20 degC, black sky") and "\x1b" not in out
    data = json.loads(paths["json"].read_text(encoding="utf-8"))
    jsonschema.validate(data, SCHEMA)
    assert f"{data['orders'][1]['peak_deg']:.2f}" in out
    assert len(paths["csv"].read_text(encoding="utf-8").splitlines()) == 3
    with Image.open(paths["png"]) as picture:
        assert picture.width > 1000
    assert sorted(p.name for p in tmp_path.iterdir()) == ["bows.csv", "bows.json", "bows.png"]


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (["--orders", "13"], "orders: 13 given, which is out of range; what works: a whole number from 1 to 12"),
        (["--orders", "two"], "--orders: 'two' is no number; what works: a whole number"),
        (["--tolerance", "nan"], "tolerance: nan given, which is out of range; what works: above 0 to 0.5"),
        (["--diameter-mm", "inf"], "diameter_mm: inf given, which is out of range; what works: 0.02 to 8"),
        (["--temperature-c", "-3"], "temperature_c: -3.0 given, which is out of range; what works: 0 to 50"),
        (["--refractive-index", "1"], "refractive_index: 1.0 given"),
        (["--sun-elevation-deg", "91"], "sun_elevation_deg: 91.0 given"),
        (["--seed", "-1"], "seed: -1 given"),
        (["--plot", "bows.jpg"], "is no name of a PNG file"),
        (["--json", "no/such/folder.json"], "there is no folder"),
        (["--json", "a", "--csv", "a"], "two of them name one file"),
        ([str(SCENE), "--diameter-mm", "1"], "given beside a scene, which has its own; what works: one of the two"),
        (["nope.toml"], "there is no such file"),
        (["--order", "2"], "unrecognized arguments: --order"),
    ],
)
def test_bad_arguments_are_one_line(arguments, told, tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run(["compare", *arguments]) == 2
    captured = capsys.readouterr()
    assert captured.out == "" and len(captured.err.splitlines()) == 1 and told in captured.err
    assert list(tmp_path.iterdir()) == []
