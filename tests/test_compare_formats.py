"""What a comparison writes: JSON by its schema, CSV, table, HTML and plot, all with the same figures; the command."""

import csv
import dataclasses
import io
import itertools
import json
import os
import re
from html.parser import HTMLParser
from pathlib import Path

import jsonschema
import numpy as np
import pytest
from PIL import Image
from scene_files import plate_scene, sound_plate, write

import raytrace
from raytrace.cli import run
from raytrace.comparison import plot
from raytrace.comparison.report import FIGURES
from raytrace.comparison.text import COLUMNS

SCHEMA = json.loads((Path(raytrace.__file__).parent / "comparison" / "schema.json").read_text(encoding="utf-8"))
SCENE = Path(__file__).parents[1] / "scenes" / "double_bow.toml"


@pytest.fixture(scope="module")
def drop():
    return raytrace.compare(raytrace.Drop(sun_elevation_deg=30.0), orders=7)


@pytest.fixture(scope="module")
def scene():
    return raytrace.compare(raytrace.load_scene(SCENE), orders=4, method="rays", name="double_bow.toml")


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
    data["input"] = {"orders": 1, "tolerance": 0.01, "seed": 0, "method": "rays", "drop": dict.fromkeys(
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
    # the same columns for a drop, for a scene with a bow in its frame and for one without, and nothing but plain cells
    first = [report.to_csv().splitlines()[0] for report in (drop, scene)]
    assert first[0] == first[1] and len(set(first[0].split(","))) == len(first[0].split(","))
    assert not set("{}[]'") & set(scene.to_csv())


def test_csv_says_the_same_of_a_scene(scene):
    table = list(csv.DictReader(io.StringIO(scene.to_csv())))
    spelt = ("hidden_by", "visible", "standard_error", "filter_top", "filter_feet", "tolerance_missed")

    def cell(value):
        return "" if value is None else str(value)

    for line, row in zip(table, scene.as_dict()["orders"], strict=True):
        there = row["scene"]
        for name, value in there.items():
            assert name in spelt or line[name] == cell(value), name
        for name, value in there["hidden_by"].items():
            assert line[f"hidden_by_{name.replace(' ', '_')}_deg"] == str(value)
        for name, error in there["standard_error"].items():
            assert line[f"{name}_standard_error"] == cell(error)
        for name in ("filter_top", "filter_feet"):
            for key in ("contrast", "contrast_at_the_other"):
                assert line[f"{name}_{key}"] == cell(there[name] and there[name][key])
                assert line[f"{name}_{key}_standard_error"] == cell(there[name] and there[name]["standard_error"][key])
        assert len([run for run in line["visible"].split(";") if run]) == len(there["visible"])
        assert line["tolerance_missed"] == ";".join(row["tolerance_missed"])
    assert re.fullmatch(r"-\d+ \(horizon\) to \d+ \(ground\)", table[0]["visible"])


def test_table_says_the_same(drop):
    text = drop.to_text()
    lines = text.splitlines()
    assert all(len(line) <= 120 and line.isprintable() for line in lines)
    for row in drop.rows:
        line = next(line for line in lines if line.startswith(f"{row.order} ") and row.name in line)
        cells = line.split()[3:]
        for cell, (*_, name, form) in zip(cells, COLUMNS, strict=True):
            assert cell == f"{getattr(row, name):{form}}"
    assert "deg" in lines[3]


def test_scene_table_fits_a_terminal(scene):
    text = scene.to_text()
    assert all(len(line) <= 120 for line in text.splitlines())
    part = text[text.index("contrast (L_bow - L_behind) / L_behind") :].splitlines()
    # each row of figures is followed by its standard errors, an exposure is told for every bow that is seen
    for row in scene.rows:
        if row.scene["contrast_best"] is None:
            continue
        at = next(k for k, line in enumerate(part) if line.startswith(f"{row.order} ") and row.name in line)
        cells, errors = part[at].split()[2:], part[at + 1].split()
        assert (
            cells[0] == f"{row.scene['peak_luminance_cd_m2']:.3g}"
            and cells[4] == f"{row.scene['filter_top']['contrast']:.3g}"
        )
        assert errors[0] == "+-" and len(errors) == 7
        assert errors[5] == f"{row.scene['filter_top']['standard_error']['contrast']:.1g}"
        assert any(line.startswith(f"{row.name}: from") and "exposure 1/" in line for line in part)
    flat = " ".join(text.split())
    assert "Standard errors are those of the sunlight from the drops of all curtains" in flat
    assert "The best linear filter stands along the arc: primary, secondary, tertiary, quaternary" in flat
    assert "at least 1 % as bright as at its best" in flat and "arc lit" in flat and "seen deg" not in flat


def test_names_of_scenes_are_told_on_one_short_line(scene):
    for name in ("a\x1b[31m\nb.toml", "x" * 5000, "\udce9.toml"):
        odd = dataclasses.replace(scene, input=scene.input | {"scene": scene.input["scene"] | {"name": name}})
        first = odd.to_text().splitlines()[0]
        assert first.isprintable() and len(first) <= 120 and "sun 17.00 deg up" in first
        title = plot.draw(odd).axes[0].get_title(loc="left")
        assert title.replace("\n", " ").isprintable() and all(len(line) <= 120 for line in title.splitlines())


def test_missed_tolerances_are_told_in_full(drop):
    rows = [dataclasses.replace(row, missed=list(FIGURES)) for row in drop.rows]
    text = dataclasses.replace(drop, rows=rows, tolerance=2.5e-6).to_text()
    assert all(len(line) <= 120 for line in text.splitlines())
    assert "did not reach 0.00025 % within the limit of" in " ".join(text.split())


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
    assert not checker.stack and Checker.cells == 7 * (3 + len(COLUMNS))


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
        (["--orders", "13"], "--orders: 13 given, which is out of range; what works: a whole number from 1 to 12"),
        (["--orders", "two"], "--orders: 'two' is no such number; what works: a whole number from 1 to 12"),
        # Python's own reading of numbers takes these three
        (["--orders", "1_0"], "--orders: '1_0' is no such number; what works: a whole number from 1 to 12"),
        (["--orders", "\u0663"], "is no such number; what works: a whole number from 1 to 12"),
        (["--tolerance", " 0.1"], "--tolerance: '0.1' is no such number; what works: a number above 0 to 0.5"),
        (["--tolerance", "nan"], "--tolerance: nan given, which is out of range; what works: a number above 0 to 0.5"),
        (
            ["--diameter-mm", "inf"],
            "--diameter-mm: inf given, which is out of range; what works: a number from 0.002 to 8",
        ),
        (
            ["--temperature-c", "-3"],
            "--temperature-c: -3.0 given, which is out of range; what works: a number from 0 to 50",
        ),
        (
            ["--refractive-index", "1"],
            "--refractive-index: 1.0 given, which is out of range; what works: a number from 1.1",
        ),
        (
            ["--sun-elevation-deg", "0"],
            "--sun-elevation-deg: 0.0 given, which is out of range; what works: a number above 0 to",
        ),
        (
            ["--seed", "-1"],
            "--seed: -1 given, which is out of range; what works: a whole number from 0 to 92233720368547",
        ),
        (["--seed", "\u0663"], "is no such number; what works: a whole number from 0 to 9223372036854775807"),
        (["--threads", "\u0661"], "what works: 1 to"),
        (["--plot", "bows.jpg"], "is no name of a PNG file"),
        (["--json", "no/such/folder.json"], "there is no folder"),
        (["--json", "a", "--csv", "./a"], "--json and --csv: a and a are one file; what works: a name for each"),
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


def test_none_is_written_where_one_cannot_be(tmp_path, capsys, monkeypatch):
    real, taken = os.replace, []
    (tmp_path / "a.json").write_text("old")

    def replace(source, target):
        if Path(target).suffix == ".png":
            raise OSError(28, "No space left on device")
        taken.append(Path(target).name)
        return real(source, target)

    monkeypatch.setattr(os, "replace", replace)
    names = ["--json", "a.json", "--csv", "a.csv", "--plot", "a.png"]
    monkeypatch.chdir(tmp_path)
    assert run(["compare", "--orders", "1", "--tolerance", "0.1", *names]) == 2
    captured = capsys.readouterr()
    assert captured.out == "" and len(captured.err.splitlines()) == 1
    assert "a.json, a.csv, a.png: cannot be written (No space left on device)" in captured.err
    # both had their names before the third failed; the old file is back, and nothing else stands there
    assert taken[:2] == ["a.json", "a.csv"]
    assert os.listdir(tmp_path) == ["a.json"] and (tmp_path / "a.json").read_text() == "old"


@pytest.mark.skipif(os.name != "posix", reason="links and pipes of POSIX")
def test_outputs_never_take_the_place_of_sources_or_of_each_other(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    sound_plate(tmp_path / "sky.png")
    write(tmp_path, plate_scene())
    (tmp_path / "there.json").write_text("{}")
    os.symlink("there.json", "soft.json")
    os.link("there.json", "hard.json")
    os.symlink("sky.png", "soft.png")
    os.symlink("nowhere.csv", "dangling.csv")
    os.mkfifo("pipe.csv")
    before = {path.name: path.lstat().st_ino for path in tmp_path.iterdir()}
    for arguments, told in (
        (["--plot", "sky.png"], "is the plate of the scene"),
        (["--plot", "soft.png"], "is the plate of the scene"),
        (["--json", "sky.png"], "is the plate of the scene"),
        (["--csv", "a.toml"], "is the scene file itself"),
        (["--csv", "pipe.csv"], "is a device, a pipe or a socket; what works: the name of a file"),
        (["--json", "there.json", "--csv", "soft.json"], "are one file"),
        (["--json", "there.json", "--csv", "hard.json"], "are one file"),
        (["--json", "dangling.csv", "--csv", "nowhere.csv"], "are one file"),
    ):
        assert run(["compare", "a.toml", *arguments]) == 2
        captured = capsys.readouterr()
        assert captured.out == "" and len(captured.err.splitlines()) == 1 and told in captured.err, captured.err
    assert {path.name: path.lstat().st_ino for path in tmp_path.iterdir()} == before
    monkeypatch.setattr(os, "access", lambda path, mode: False)
    assert run(["compare", "--json", "new.json"]) == 2
    assert capsys.readouterr().err.endswith("may not be written; what works: another folder\n")


def test_size_tables_are_spared_too(tmp_path):
    from types import SimpleNamespace

    from raytrace.cli import _spare_sources

    (tmp_path / "sizes.csv").write_text("1,2")
    scene = SimpleNamespace(plate_path=lambda: None, _folder=tmp_path, rain=[SimpleNamespace(size_table="sizes.csv")])
    _spare_sources([tmp_path / "other.csv"], scene)
    with pytest.raises(raytrace.InputError, match="is a size table of the scene"):
        _spare_sources([tmp_path / "sizes.csv"], scene)


def test_plot_hides_nothing(drop):
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    figure = plot.draw(drop)
    FigureCanvasAgg(figure).draw()
    top, main, _ = figure.axes
    (legend,) = figure.legends
    assert all(not legend.get_window_extent().overlaps(axes.get_window_extent()) for axes in figure.axes)
    for axes in (top, main):
        boxes = [text.get_bbox_patch().get_window_extent() for text in axes.texts]
        assert len(boxes) == len(drop.rows)
        assert not any(a.overlaps(b) for a, b in itertools.combinations(boxes, 2))
        inside = axes.get_window_extent()
        assert all(inside.y0 <= box.y0 and box.y1 <= inside.y1 for box in boxes)
    # a bow that is wholly polarised has its mark whole
    assert top.get_ylim()[0] < -1 and top.get_ylim()[1] > 1.1
    looks = [(line.get_linestyle(), line._dash_pattern, line.get_marker(), line.get_linewidth()) for line in main.lines]
    assert len({str(look) for look in looks}) == len(looks) == 3 + len(drop.rows)
    looks = [str({k: v for k, v in plot._style(k).items() if k != "color"}) for k in range(1, 13)]
    assert len(set(looks)) == 12


def test_numbers_are_pushed_apart():
    places = plot.spread([50.6, 51.5, 51.0, 179.9, 0.2])
    assert np.diff(np.sort(places)).min() > plot._APART_DEG - 0.01 and 1.4 < min(places) and max(places) < 178.6
    assert places[0] < places[2] < places[1]
    heights = plot.place_numbers([(50.0, 1e-3), (51.0, 1.1e-3), (120.0, 1e-3)])
    assert heights[1] / heights[0] > plot._APART and heights[2] == heights[0]
