"""Measured sizes: files of a table's rows, every way in which they can be wrong, and what hangs on them."""

import argparse
import os
import re

import numpy as np
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st
from scene_files import problems, toml, write

from raytrace.cli import _with_options
from raytrace.drops.sizes import drop_sizes, size_spectrum
from raytrace.errors import InputError
from raytrace.optics.scattering import _arguments
from raytrace.report import scene_report
from raytrace.scene import size_table
from raytrace.scene.load import load_scene, scene_from_dict, scene_hash

ROWS = "0.5 100\n1.0 300\n2.0 0\n"


def table_scene(name="sizes.txt", **more) -> str:
    return toml(rain=f'size_law = "table"\nsize_table = "{name}"', **more)


def loaded(tmp_path, content):
    (tmp_path / "sizes.txt").write_bytes(content if isinstance(content, bytes) else content.encode())
    return load_scene(write(tmp_path, table_scene()))


LAYOUTS = {
    "blanks": ROWS,
    "commas": "0.5,100\n1.0 , 300\n2.0,0",
    "tabs": "\t0.5\t100\n1.0\t300\n2.0\t0\n",
    "comments": "# a gauge's minute\n\n0.5 100 # first\n1.0 300\n   # nothing\n2.0 0",
    "other digits": "+.5 1e2\n1. 3.0E+2\n2 0e5\n",
    "carriage returns": ROWS.replace("\n", "\r\n"),
    "byte order mark": b"\xef\xbb\xbf" + ROWS.encode(),
}


@pytest.mark.parametrize("layout", LAYOUTS)
def test_a_sound_table_in_any_layout(tmp_path, layout):
    scene = loaded(tmp_path, LAYOUTS[layout])
    # by hand, N linear between the rows: N(0.75) = 200, N(1.5) = 150
    density = size_spectrum(scene.rain[0]).density_per_mm([0.75, 1.0, 1.5, 2.5, 0.4])
    np.testing.assert_allclose(density / density[1], [0.75**2 * 200 / 300, 1.0, 1.5**2 * 0.5, 0.0, 0.0], rtol=1e-12)
    # the layout says nothing
    assert scene_hash(scene) == scene_hash(loaded(tmp_path, ROWS))


WRONG = {
    # content, what is told behind the key and its value, part of what works
    "empty": ("", "has 0 rows up to its last line, 1", "2 rows or more"),
    "comments alone": ("# 1 2\n\n", "has 0 rows up to its last line, 3", "two columns"),
    "one row": ("1 2", "has 1 row up to its last line, 1", "2 rows or more"),
    "one column": ("1 2\n3\n", "has 1 column in line 2", "two columns, diameter_mm and drops"),
    "three columns": ("1 2 3\n", "has 3 columns in line 1", "two columns"),
    "empty cell": ("1,,3\n", "has 3 columns in line 1", "two columns"),
    "decimal commas": ("0,5;1\n", 'has "5;1" in line 1, which is no number', "two columns"),
    "heading": ("diameter number\n1 2\n", 'has "diameter" in line 1, which is no number', "# begins a comment"),
    "nan": ("1 2\n2 nan\n", 'has "nan" in line 2, which is no number', "two columns"),
    "inf": ("1 inf\n", 'has "inf" in line 1, which is no number', "two columns"),
    "underscore": ("1 1_0\n", 'has "1_0" in line 1, which is no number', "two columns"),
    "other digits": ("1 ٣\n", 'has "٣" in line 1, which is no number', "two columns"),
    "overflow": ("1 1e999\n", "has inf drops per m3 and mm in line 1, which is out", "0 to 1e+15"),
    "negative number": ("1 2\n\n2 -1\n", "has -1 drops per m3 and mm in line 3, which is out", "numbers from 0"),
    "negative diameter": ("-1 2\n", "has -1 mm in line 1, which is out of range", "from 0.0001 to 30 mm, or 0"),
    "tiny diameter": ("1e-5 2\n", "has 1e-05 mm in line 1, which is out of range", "from 0.0001 to 30 mm"),
    "huge diameter": ("1 2\n31 2\n", "has 31 mm in line 2, which is out of range", "from 0.0001 to 30 mm"),
    "falling": ("1 2\n# a\n3 2\n2 2\n", "has in line 4 2 mm after 3 mm", "diameters that rise"),
    "hardly rising": ("1 2\n1.0000001 3\n", "has in line 2 1.0000001 mm after 1 mm", "by a millionth or more"),
    "twice": ("1 2\n1 3\n", "has in line 2 1 mm after 1 mm", "diameters that rise"),
    "no drops": ("1 0\n2 0.0\n", "has no drops up to its last row, line 2", "a number above 0"),
    "too many rows": ("1 1\n" * 2001, "has more than 2000 rows (line 2001)", "up to 2000 rows"),
    "not UTF-8": (b"1 2\n2 \xff\n", "is no text: line 2 is not UTF-8", "two columns"),
    "binary": (b"1 2\n" + bytes(range(128)), "is no text: line 2 has a byte of 0", "two columns"),
    "long cell": ("9" * 5000 + " 2", "has ", "0.0001"),
    "large": (b"#" * (size_table.LARGEST_BYTES + 1), "has 1048577 bytes", "up to 1048576 bytes"),
}


def only(tmp_path, text) -> str:
    (line,) = problems(tmp_path, text)
    return line


@pytest.mark.parametrize("case", WRONG)
def test_a_wrong_table_is_one_line(tmp_path, case):
    content, why, works = WRONG[case]
    (tmp_path / "sizes.txt").write_bytes(content if isinstance(content, bytes) else content.encode())
    line = only(tmp_path, table_scene())
    told, _, remedy = line.partition("; what works: ")
    assert told.startswith(f'rain.size_table: "sizes.txt" {why}'), line
    assert works in remedy and len(line) < 300, line


def test_every_refusal_of_a_table_is_reached_by_some_case():
    text = size_table.__file__
    with open(text, encoding="utf-8") as file:
        raised = sum("raise _Wrong(" in line for line in file)
    words = {re.sub(r'\d+(\.\d+)?|"[^"]*"', "", why) for _, why, _ in WRONG.values()}
    assert raised == 8 and len(words) >= raised


def test_where_a_table_may_lie(tmp_path):
    folder = tmp_path / "scenes"
    (folder / "below").mkdir(parents=True)
    for place in (tmp_path, folder / "below"):
        (place / "sizes.txt").write_text(ROWS)
    assert load_scene(write(folder, table_scene("below/sizes.txt"))).rain[0].size_table == "below/sizes.txt"
    works = "a text file of two columns, diameter_mm and drops per m3 and mm"
    assert only(folder, table_scene()) == (
        f'rain.size_table: "sizes.txt" is not a file; what works: {works}, path from the scene file'
    )
    assert '"below" is not a file' in only(folder, table_scene("below"))
    assert "lies outside the scene's folder" in only(folder, table_scene("../sizes.txt"))
    assert "lies outside the scene's folder" in only(folder, table_scene(str(tmp_path / "sizes.txt")))
    (folder / "sizes.txt").symlink_to(tmp_path / "sizes.txt")
    assert "lies outside the scene's folder" in only(folder, table_scene())
    assert "cannot be looked up" in only(folder, table_scene(r"a\u0000b"))
    os.mkfifo(folder / "pipe")
    assert '"pipe" is not a file' in only(folder, table_scene("pipe"))


def test_a_table_that_may_not_be_read(tmp_path, monkeypatch):
    (tmp_path / "sizes.txt").write_text(ROWS)
    path, read = write(tmp_path, table_scene()), type(tmp_path).read_bytes

    def refuse(self):
        if self.name == "sizes.txt":
            raise PermissionError(13, "Permission denied")
        return read(self)

    monkeypatch.setattr(type(tmp_path), "read_bytes", refuse)
    with pytest.raises(InputError, match=r"size_table: \"sizes.txt\" cannot be read \(.*; what works: a file that may"):
        load_scene(path)


def test_a_table_needs_a_folder():
    data = {"sun": {"elevation_deg": 20, "azimuth_deg": 1}, "rain": {"size_law": "table", "size_table": "a"}}
    with pytest.raises(InputError, match=r"rain.size_table: .* has no folder to start from"):
        scene_from_dict(data | {"camera": {}})


def test_each_curtain_has_its_own_table(tmp_path):
    (tmp_path / "a.txt").write_text(ROWS)
    (tmp_path / "b.txt").write_text("1 2\n3 4 5\n")
    law = '[[rain]]\nsize_law = "table"\nsize_table = '
    line = only(tmp_path, toml(rain=None) + f'{law}"a.txt"\n{law}"b.txt"\n')
    assert line.startswith('rain[1].size_table: "b.txt" has 3 columns in line 2')
    # beside another problem, so that all are told at once
    lines = problems(tmp_path, toml(rain=None) + f'{law}"c.txt"\n{law}"b.txt"\n[[rain]]\ndiameter_mm = 1\n')
    assert len(lines) == 3, lines


def test_what_hangs_on_the_content(tmp_path):
    first = loaded(tmp_path, ROWS)
    digest, extinction = scene_hash(first), drop_sizes(first.rain[0]).extinction_per_km
    second = loaded(tmp_path, ROWS.replace("300", "300.0000001"))
    assert scene_hash(second) != digest
    assert _arguments(second, 0)[1]["spectrum"] != _arguments(first, 0)[1]["spectrum"]
    # a scene is of the rows that it was checked with
    (tmp_path / "sizes.txt").unlink()
    assert scene_hash(first) == digest
    assert drop_sizes(first.rain[0]).extinction_per_km == extinction


def test_the_command_line_reads_the_table_again(tmp_path):
    scene = loaded(tmp_path, ROWS)
    options = argparse.Namespace(size="1280x720", seed=None, scene="again")
    assert scene_hash(_with_options(scene, options)) == scene_hash(scene)
    (tmp_path / "sizes.txt").write_text("1 2")
    with pytest.raises(InputError, match=r"again with --size 1280x720: rain\[0\]\.size_table: .* has 1 row up"):
        _with_options(scene, options)


@settings(
    derandomize=True,
    database=None,
    deadline=None,
    max_examples=150,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(
    content=st.one_of(
        st.binary(max_size=60),
        st.text(st.sampled_from("0123456789.,-+e# \t\n\r"), max_size=40).map(str.encode),
        st.lists(st.tuples(st.floats(), st.floats()), max_size=4).map(
            lambda rows: "".join(f"{a!r} {b!r}\n" for a, b in rows).encode()
        ),
        st.lists(st.tuples(st.floats(0, 40), st.floats(0, 1e16)), min_size=2, max_size=6).map(
            lambda rows: "".join(f"{a!r},{b!r}\n" for a, b in sorted(rows)).encode()
        ),
    )
)
@example(content=b"1e-4 1e-300\n30 5e-324\n")
@example(content=b"0 5e-324\n1e-4 0\n")
@example(content=b"29.999999999999996 1e15\n30 0\n")
@example(content=b"29.9999699 1e15\n30 0\n")
@example(content=b"0 0\n1e-4 1\n0.001 0\n30 5e-324")
def test_any_file(content, tmp_path):
    (tmp_path / "sizes.txt").write_bytes(content)
    try:
        scene = load_scene(write(tmp_path, table_scene()))
    except InputError as error:
        (line,) = error.problems
        assert ': rain.size_table: "sizes.txt" ' in line and "; what works: " in line and line.isprintable()
        return
    sizes, spectrum = drop_sizes(scene.rain[0]), size_spectrum(scene.rain[0])
    assert np.isfinite(sizes[:5]).all() and np.isfinite(sizes.number_m3).all()
    assert 0 < spectrum.low_mm <= spectrum.high_mm <= 30
    assert np.isfinite(spectrum.density_per_mm([spectrum.low_mm, spectrum.high_mm])).all()
    assert "rain extinction" in scene_report(scene, name="a.toml")
