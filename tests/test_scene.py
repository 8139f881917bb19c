"""Scene files: what they may say, every way in which they can be wrong, and how that is told."""

import os
import re
from pathlib import Path

import pytest
from scene_files import PLACE, SOUND, plate_scene, problems, toml, write

from raytrace.errors import InputError
from raytrace.preflight import needed_bytes, preflight
from raytrace.scene import load, model, rules
from raytrace.scene.load import load_scene


def test_the_smallest_scene_is_sound(tmp_path):
    scene = load_scene(write(tmp_path, toml()))
    assert scene.camera == model.Camera() and scene.air == model.Air() and scene.ground.cover == "fields"


ONE_PROBLEM = {
    # the tables that stand in place of sound ones: key path, value as told, part of the remedy
    "typo": (dict(camera="width_pix = 100"), "camera.width_pix: 100 is no key", '"width_px"'),
    "typo in capitals": (dict(camera="WIDTH_PX = 100"), "camera.WIDTH_PX: 100 is no key", '"width_px"'),
    "typo in cloud": (dict(sky__cloud="albdo = 0.5"), "sky.cloud.albdo: 0.5 is no key", '"albedo"'),
    "cloud in cloud": (dict(sky__cloud="cloud = 1"), "sky.cloud.cloud: 1 is no key", '"cloud" in table [sky]'),
    "key of another table": (dict(rain="visibility_km = 5.0"), "rain.visibility_km: 5.0 is", "in table [air]"),
    "key of two other tables": (dict(sky="azimuth_deg = 5"), "sky.azimuth_deg: 5 is", "in table [sun] or [camera]"),
    "key of the cloud": (dict(sky="base_deg = 5"), "sky.base_deg: 5 is", "in table [sky.cloud]"),
    "unlike any key": (dict(sky="zzz = 5"), "sky.zzz: 5 is no key", "one of model, cie_type"),
    "table's typo": (dict(grund=""), "grund: is no table", '"ground"'),
    "unknown table": (dict(zzz=""), "zzz: is no table", "one of sun, air, rain, optics"),
    "too small": (dict(camera="width_px = 7"), "camera.width_px: 7 is out of range", "a whole number from 8 to 32768"),
    "open end": (dict(rain="rain_rate_mm_h = 0"), "rain.rain_rate_mm_h: 0 is out of", "a number from above 0 to 300"),
    "nan": (dict(air="visibility_km = nan"), "air.visibility_km: nan is not finite", "0.5 to 400"),
    "inf": (dict(air="visibility_km = -inf"), "air.visibility_km: -inf is not finite", "0.5 to 400"),
    "boolean": (dict(camera="elevation_deg = true"), "camera.elevation_deg: true is a boolean", "a number from -90"),
    "boolean for whole": (dict(camera="width_px = true"), "camera.width_px: true is a boolean", "a whole number"),
    "string": (dict(camera='width_px = "640"'), 'camera.width_px: "640" is a string', "a whole number from 8"),
    "float for whole": (dict(camera="width_px = 640.0"), "camera.width_px: 640.0 is a number", "a whole number from 8"),
    "number for string": (dict(sky="model = 3"), "sky.model: 3 is none of the choices", '"cie" or "uniform"'),
    "wrong choice": (dict(rain='water = "salt"'), 'rain.water: "salt" is none', '"fresh" or "sea"'),
    "array": (dict(camera="width_px = [640]"), "camera.width_px: is an array", "a whole number from 8"),
    "table for a number": (dict(camera="width_px = {}"), "camera.width_px: is a table", "a whole number"),
    "number for the cloud": (dict(sky="cloud = 3"), "sky.cloud: 3 is a whole number", "a table [sky.cloud]"),
    "huge whole number": (dict(camera=f"width_px = {10**400}"), "camera.width_px: a whole number of 1329 bits", "8 to"),
    "huge for a float": (
        dict(air=f"visibility_km = {10**400}"),
        "air.visibility_km: a whole number of 1329 bits is out of",
        "0.5 to 400",
    ),
    "huge seed": (dict(optics=f"seed = {2**63}"), "optics.seed: 9223372036854775808 is out", "0 to 92233720368547758"),
    "date for a number": (dict(air="visibility_km = 2026-10-04"), "air.visibility_km: 2026-10-04 is a date", "0.5"),
    "number for a time": (dict(sun=PLACE + "time = 3"), "sun.time: 3 is a whole number", "2026-10-04T16:20:00+01:00"),
    "string for a time": (
        dict(sun=PLACE + 'time = "2026"'),
        'sun.time: "2026" is a string',
        "date-time with its offset",
    ),
    "date alone": (
        dict(sun=PLACE + "time = 2026-10-04"),
        "sun.time: 2026-10-04 is a date",
        "date-time with its offset",
    ),
    "time alone": (dict(sun=PLACE + "time = 16:20:00"), "sun.time: 16:20:00 is a time", "date-time with its offset"),
    "no offset": (dict(sun=PLACE + "time = 2026-10-04T16:20:00"), "sun.time: 2026-10-04T16:20:00 has no off", "+01:00"),
    "long ago": (dict(sun=PLACE + "time = 0001-01-01T00:00:00+14:00"), "sun.time: 0001-01-01T00:00:00+14:00", "1900"),
    "long value": (dict(rain=f'water = "{"x" * 5000}"'), 'rain.water: "xxx', '"fresh"'),
    "long key": (dict(rain=f"{'x' * 5000} = 1"), "rain.xxx", "one of water"),
    "control characters": (dict(rain=r'water = "a\u0007\nb"'), r'rain.water: "a\x07\nb" is none', '"fresh"'),
    "control characters in a key": (dict(rain=r'"a\n\u001b[31m" = 1'), r'rain."a\n\x1b[31m": 1 is no key', "one of"),
    "deep dots": (dict(rain=".".join("a" * 90) + " = 1"), "rain.a: is no key", "one of"),
    # across keys
    "no sun": (dict(sun=None), "sun: is missing", "a table [sun]"),
    "no camera": (dict(camera=None), "camera: is missing", "a table [camera]"),
    "no rain": (dict(rain=None), "rain: is missing", "a table [rain]"),
    "half the angles": (dict(sun="elevation_deg = 20"), "sun.azimuth_deg: is missing", "elevation_deg and azimuth_deg"),
    "half the place": (
        dict(sun="latitude_deg = 5\ntime = 2026-10-04T16:20:00Z"),
        "sun.longitude_deg: is missing",
        "longitude_deg and time together",
    ),
    "angles and place": (dict(sun=SOUND["sun"] + "latitude_deg = 5"), "sun.latitude_deg: 5.0 contradicts", "either"),
    "angles and height": (dict(sun=SOUND["sun"] + "height_m = 5"), "sun.height_m: 5.0 contradicts", "either"),
    "night by angles": (
        dict(sun="elevation_deg = -3.5\nazimuth_deg = 1"),
        "sun.elevation_deg: -3.5 puts the sun below the horizon",
        "above 0 to 90",
    ),
    "sun on the horizon": (dict(sun="elevation_deg = 0\nazimuth_deg = 1"), "sun.elevation_deg: 0.0 puts", "above 0"),
    "far before near": (dict(rain="near_m = 500\nfar_m = 400"), "rain.far_m: 400.0 is not beyond near_m = 500", "500"),
    "wide edge": (dict(rain="near_m = 5\nfar_m = 25\nedge_m = 21"), "rain.edge_m: 21.0 is wider", "0 to 20"),
    "top below bottom": (dict(rain="bottom_m = 50\ntop_m = 40"), "rain.top_m: 40.0 is not above bottom_m = 50", "50"),
    "high edge": (dict(rain="top_m = 40\nedge_top_m = 41"), "rain.edge_top_m: 41.0 is wider", "0 to 40"),
    "no sector": (
        dict(rain="azimuth_from_deg = 5\nazimuth_to_deg = 5"),
        "rain.azimuth_to_deg: 5.0 equals azimuth_from_deg",
        "360 more",
    ),
    "far at near": (dict(rain="near_m = 500\nfar_m = 500"), "rain.far_m: 500.0 is not beyond near_m = 500", "500"),
    "top at bottom": (dict(rain="bottom_m = 50\ntop_m = 50"), "rain.top_m: 50.0 is not above bottom_m = 50", "50"),
    "flat cloud": (dict(sky__cloud="top_deg = -2"), "sky.cloud.top_deg: -2.0 is not above base_deg = -2", "-2"),
    "no room for hills": (dict(ground="reaches_m = 2500"), "ground.reaches_m: 2500.0 is not beyond", "than 2500"),
    "single without size": (dict(rain='size_law = "single"'), "rain.diameter_mm: is missing", "a diameter in mm"),
    "gamma without size": (dict(rain='size_law = "ulbrich_1983"'), "rain.median_diameter_mm: is missing", "diameter"),
    "size without law": (dict(rain="diameter_mm = 1"), "rain.diameter_mm: 1.0 means nothing", 'size_law = "single"'),
    "shape without law": (dict(rain="shape_mu = 1"), "rain.shape_mu: 1.0 means nothing", 'size_law = "ulbrich_1983"'),
    "two amounts": (
        dict(rain='size_law = "single"\ndiameter_mm = 1\nrain_rate_mm_h = 1\nextinction_per_km = 1'),
        'rain.rain_rate_mm_h: 1.0 contradicts extinction_per_km with size_law "single"',
        "one amount",
    ),
    "two amounts beside a rate": (
        dict(rain="rain_rate_mm_h = 1\nextinction_per_km = 1\nliquid_water_g_m3 = 1"),
        "rain.liquid_water_g_m3: 1.0 contradicts extinction_per_km",
        "one amount",
    ),
    "cloud that rains": (
        dict(rain='size_law = "deirmendjian_1969"\nrain_rate_mm_h = 1'),
        'rain.rain_rate_mm_h: 1.0 means nothing to size_law "deirmendjian_1969", whose drops hang in the air',
        "extinction_per_km or liquid_water_g_m3",
    ),
    "lognormal without width": (
        dict(rain='size_law = "lognormal"\nmedian_diameter_mm = 1'),
        "rain.geometric_standard_deviation: is missing",
        "a number from 1.01 to 3",
    ),
    "table without a file": (dict(rain='size_law = "table"'), "rain.size_table: is missing", "path of a text file"),
    "a median for cloud": (
        dict(rain='size_law = "deirmendjian_1969"\nmedian_diameter_mm = 1'),
        "rain.median_diameter_mm: 1.0 means nothing",
        'size_law = "ulbrich_1983" or "lognormal"',
    ),
    "a radius for rain": (dict(rain="effective_radius_um = 9"), "rain.effective_radius_um: 9.0 means", "deirmendjian_"),
    "a spread for rain": (dict(rain="relative_spread = 0.1"), "rain.relative_spread: 0.1 means nothing", '"single"'),
    "a table for rain": (dict(rain='size_table = "a.txt"'), 'rain.size_table: "a.txt" means nothing', '= "table"'),
    "salt in fresh water": (dict(rain="salinity_permille = 1"), "rain.salinity_permille: 1.0 means", 'water = "sea"'),
    "index and water": (dict(rain='water = "sea"\nrefractive_index = 1.3'), "rain.refractive_index: 1.3 contr", "one"),
    "uniform's key": (dict(sky="luminance_cd_m2 = 5"), "sky.luminance_cd_m2: 5.0 means nothing", 'model = "uniform"'),
    "cie's key": (dict(sky='model = "black"\ncie_type = 5'), "sky.cie_type: 5 means nothing", 'model = "cie"'),
    "lux of a uniform sky": (dict(sky='model = "uniform"\nilluminance_lx = 5'), "sky.illuminance_lx: 5.0", '"cie"'),
    "plate's key": (dict(sky='plate = "a.png"'), 'sky.plate: "a.png" means nothing', 'model = "plate"'),
    "plate's white": (dict(sky="plate_white_cd_m2 = 5"), "sky.plate_white_cd_m2: 5.0 means", 'model = "plate"'),
    "no plate": (dict(sky='model = "plate"'), "sky.plate: is missing", "path of a JPEG, PNG or TIFF"),
    "cloud upside down": (
        dict(sky__cloud="top_deg = -20"),
        "sky.cloud.top_deg: -20.0 is not above base_deg = -2",
        "-2",
    ),
    "hills beyond the land": (dict(ground="reaches_m = 2000"), "ground.reaches_m: 2000.0 is not beyond", "2500"),
    "too wide": (dict(camera="field_of_view_deg = 161"), "camera.field_of_view_deg: 161.0 is too wide", "up to 160"),
    "panorama's field": (
        dict(camera='projection = "panorama"\nwidth_px = 200\nheight_px = 100\nfield_of_view_deg = 90'),
        "camera.field_of_view_deg: 90.0 is always 360",
        "no such key",
    ),
    "panorama's sides": (
        dict(camera='projection = "panorama"\nwidth_px = 200\nheight_px = 90'),
        "camera.width_px: 200 is not a full panorama's",
        "width_px = 180",
    ),
    "panorama that is too high": (
        dict(camera='projection = "panorama"\nheight_px = 30000'),
        "camera.width_px: 1280 is not a full panorama's",
        "height_px = 16384 and width_px = 32768",
    ),
    "two exposures": (
        dict(camera="f_number = 8\nshutter_s = 0.01\niso = 100\nexposure_level = 0.5"),
        "camera.exposure_level: 0.5 contradicts the manual",
        "one of the two",
    ),
}


@pytest.mark.parametrize("case", ONE_PROBLEM)
def test_a_problem_is_one_line_with_key_value_and_remedy(tmp_path, case):
    tables, told, works = ONE_PROBLEM[case]
    (line,) = problems(tmp_path, toml(**tables))
    before, _, remedy = line.partition("; what works: ")
    assert before.startswith(told) and works in remedy, line


def test_every_rule_is_broken_by_some_case(tmp_path):
    """Each line of rules.py that finds a problem in one table is reached by the cases above."""
    import sys

    text = Path(rules.__file__).read_text(encoding="utf-8").splitlines()
    last = next(k for k, line in enumerate(text, 1) if line.startswith("RULES = "))
    made = {k for k, line in enumerate(text[:last], 1) if "yield Problem(" in line}
    assert len(made) >= 25
    reached = set()

    def watch(frame, event, argument):
        if frame.f_code.co_filename != rules.__file__:
            return None
        if event == "line":
            reached.add(frame.f_lineno)
        return watch

    before = sys.gettrace()
    sys.settrace(watch)
    try:
        for tables, _, _ in ONE_PROBLEM.values():
            with pytest.raises(InputError):
                load_scene(write(tmp_path, toml(**tables)))
        for text in (plate_scene(sky__cloud=""), plate_scene(ground="")):
            with pytest.raises(InputError):
                load_scene(write(tmp_path, text))
        with pytest.raises(InputError):
            load_scene(write(tmp_path, toml(sky='model = "plate"\nplate = "a"\ncolour_temperature_k = 5000')))
        with pytest.raises(InputError):
            load_scene(write(tmp_path, toml(camera="f_number = 8")))
    finally:
        sys.settrace(before)
    assert made <= reached, sorted(made - reached)


def test_all_problems_of_a_file_are_told_at_once(tmp_path):
    text = toml(
        sun="elevation_deg = 20",
        air="visibility_km = nan\npresure_hpa = 1000",
        rain="near_m = 900\nfar_m = 100\ntop_m = -5",
        camera="width_px = 0\nf_number = 8",
        sky__cloud="albedo = 2",
        lens="",
    )
    keys = [line.split(":")[0] for line in problems(tmp_path, text)]
    assert sorted(keys) == sorted(
        [
            "lens",
            "sun.azimuth_deg",
            "air.visibility_km",
            "air.presure_hpa",
            "rain.far_m",
            "rain.top_m",
            "camera.width_px",
            "camera.iso",
            "camera.shutter_s",
            "sky.cloud.albedo",
        ]
    )


BESIDE_UNSOUND_KEYS = {
    # tables, and the keys of the problems that are told; what would stand on an unsound value is not among them
    "partners": (dict(sun="elevation_deg = 95"), ["elevation_deg", "azimuth_deg"]),
    "typo of the partner": (dict(sun="elevaton_deg = 20\nazimuth_deg = 250"), ["elevaton_deg"]),
    "near": (dict(rain='near_m = "a"\nfar_m = 300\ntop_m = -3\nedge_m = 19000'), ["near_m", "top_m"]),
    "bottom": (dict(rain="bottom_m = nan\ntop_m = -5\nedge_top_m = 9000\nfar_m = 3"), ["bottom_m", "far_m"]),
    "size law": (dict(rain='size_law = "x"\ndiameter_mm = 1\nfar_m = 3'), ["size_law", "far_m"]),
    "unsound size": (dict(rain='size_law = "single"\ndiameter_mm = 9\nfar_m = 3'), ["diameter_mm", "far_m"]),
    "water": (dict(rain="water = 5\nsalinity_permille = 3"), ["water"]),
    "sky's model": (dict(sky='model = "x"\nluminance_cd_m2 = 5'), ["model"]),
    "cloud": (dict(sky='cloud = 5\nplate = "a.png"'), ["cloud", "plate"]),
    "reach": (dict(ground="hills_from_m = true\nreaches_m = 200"), ["hills_from_m"]),
    "lens": (dict(camera="projection = 5\nfield_of_view_deg = 200\nf_number = 8"), ["projection", "iso", "shutter_s"]),
    "panorama": (dict(camera='projection = "panorama"\nheight_px = 5'), ["height_px"]),
    "given but unsound": (
        dict(camera="f_number = 0\nexposure_level = 1"),
        ["f_number", "iso", "shutter_s", "exposure_level"],
    ),
    "exposure": (
        dict(camera="f_number = 8\nshutter_s = 0\nexposure_level = 1"),
        ["iso", "shutter_s", "exposure_level"],
    ),
}


@pytest.mark.parametrize("case", BESIDE_UNSOUND_KEYS)
def test_contradictions_are_told_beside_unsound_keys(tmp_path, case):
    tables, keys = BESIDE_UNSOUND_KEYS[case]
    (table,) = tables
    lines = problems(tmp_path, toml(**tables))
    assert sorted(line.split(":")[0] for line in lines) == sorted(f"{table}.{key}" for key in keys), lines


def test_missing_exposure_keys_are_each_told(tmp_path):
    lines = problems(tmp_path, toml(camera="f_number = 8"))
    assert [line.split(":")[0] for line in lines] == ["camera.iso", "camera.shutter_s"]


def test_endless_problems_are_counted(tmp_path):
    lines = problems(tmp_path, toml(rain="".join(f"a{k} = 1\n" for k in range(1000)), camera="zzz = 1"))
    assert len(lines) == load.MOST_PROBLEMS + 1
    assert f"has {1001 - load.MOST_PROBLEMS} problems more" in lines[-1]


NOT_A_SCENE = {
    "not UTF-8": (b"[sun]\n# caf\xe9\n", "byte 11 (line 2) is not UTF-8"),
    "byte order mark": (b"\xef\xbb\xbf" + toml().encode(), "begins with a byte order mark"),
    "UTF-16": ("[sun]".encode("utf-16"), "byte 0 (line 1) is not UTF-8"),
    "not TOML": (b"[sun]\nelevation_deg = = 3\n", "is not TOML: Invalid value (at line 2, column 17)"),
    "cut off": (b"[sun]\nelevation_deg =", "is not TOML: Invalid value (at end of document)"),
    "table twice": (b"[sun]\n[sun]\n", "is not TOML: Cannot declare ('sun',) twice (at line 2, column 5)"),
    "NUL": (b"[sun]\n\0", "is not TOML: "),
    "too long": (b"#" * (load.LARGEST_BYTES + 1), f"has {load.LARGEST_BYTES + 1} bytes"),
    "deep arrays": (b"a = " + b"[" * 50_000, "is nested too deeply"),
    "deep inline tables": (b"a = " + b"{a=" * 50_000, "is nested too deeply"),
    "deep dotted key": (b"a." * 100_000 + b"a = 1", "line 1 has 100000 dots"),
    "deep dotted table": (b"\n[" + b"a." * 100_000 + b"a]", "line 2 has 100000 dots"),
    "endless number": (b"a = " + b"9" * 5000, "has a number of too many digits"),
    "no such day": (b"a = 2026-02-31T00:00:00Z", "is not TOML: Invalid date or datetime (at line 1, column 5)"),
}


def test_a_file_of_one_mebibyte_is_read(tmp_path):
    text = toml()
    load_scene(write(tmp_path, text + "#" * (2**20 - len(text))))
    assert load.LARGEST_BYTES == 2**20


@pytest.mark.parametrize("case", NOT_A_SCENE)
def test_what_is_no_scene_file_is_one_line(tmp_path, case):
    content, told = NOT_A_SCENE[case]
    (line,) = problems(tmp_path, content)
    assert line.startswith(told), line


def test_empty_file_lacks_its_three_tables(tmp_path):
    assert [line.split(";")[0] for line in problems(tmp_path, "")] == [
        f"{table}: is missing" for table in ("sun", "rain", "camera")
    ]


def test_paths_that_are_no_files(tmp_path):
    for path, told in (
        (tmp_path, "is a folder"),
        (tmp_path / "none.toml", "there is no such file"),
        (tmp_path / "a\0b", "there is no such file"),
        (tmp_path / ("x" * 5000), "cannot be read"),
        (tmp_path / "new\nline", "there is no such file"),
    ):
        with pytest.raises(InputError) as caught:
            load_scene(path)
        (line,) = caught.value.problems
        assert told in line and "; what works: " in line and line.isprintable()


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="this system has no named pipes")
def test_a_pipe_is_not_waited_for(tmp_path):
    os.mkfifo(tmp_path / "pipe.toml")
    with pytest.raises(InputError, match="is not a plain file"):
        load_scene(tmp_path / "pipe.toml")


def test_a_file_that_may_not_be_read(tmp_path, monkeypatch):
    path = write(tmp_path, toml())

    def refuse(self):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", refuse)
    with pytest.raises(InputError, match=r"cannot be read \(\[Errno 13\] Permission denied\)"):
        load_scene(path)


def curtains(*bodies) -> str:
    return toml(rain=None) + "".join(f"[[rain]]\n{body}\n" for body in bodies)


def test_curtains(tmp_path):
    assert len(load_scene(write(tmp_path, curtains(*[""] * 8))).rain) == 8
    assert load_scene(write(tmp_path, curtains("near_m = 5", "near_m = 7"))).rain[1].near_m == 7
    for text, told in (
        (curtains(*[""] * 9), "rain: has 9 entries; what works: 1 to 8 tables [[rain]]"),
        ("rain = []\n" + toml(rain=None), "rain: has 0 entries"),
        ("rain = 5\n" + toml(rain=None), "rain: 5 is a whole number; what works: a table [rain] or tables [[rain]]"),
        ("rain = [1]\n" + toml(rain=None), "rain[0]: 1 is a whole number; what works: a table [rain]"),
        (curtains("", "far_m = 5"), "rain[1].far_m: 5.0 is not beyond near_m = 400"),
        (curtains("", "fur_m = 5"), 'rain[1].fur_m: 5 is no key of this table; what works: "far_m"'),
    ):
        (line,) = problems(tmp_path, text)
        assert line.startswith(told), line


def test_soft_edges_that_were_not_asked_for_fit_their_curtain(tmp_path):
    (thin,) = load_scene(write(tmp_path, toml(rain="near_m = 10\nfar_m = 30\ntop_m = 8"))).rain
    assert (thin.edge_m, thin.edge_top_m) == (10, 4)
    (wide,) = load_scene(write(tmp_path, toml())).rain
    assert (wide.edge_m, wide.edge_top_m) == (150, 300)
    (asked,) = load_scene(write(tmp_path, toml(rain="near_m = 10\nfar_m = 30\nedge_m = 20"))).rain
    assert asked.edge_m == 20


# --- what is checked after reading


def test_night_by_place_and_time(tmp_path):
    by_day = load_scene(write(tmp_path, toml(sun=PLACE + "time = 2026-10-04T16:20:00+01:00")))
    preflight(by_day)
    by_night = load_scene(write(tmp_path, toml(sun=PLACE + "time = 2026-10-04T23:20:00+01:00")))
    with pytest.raises(InputError) as caught:
        preflight(by_night, name="a.toml")
    (line,) = caught.value.problems
    assert re.match(r"a.toml: sun.time: 2026-10-04T23:20:00\+01:00 puts the sun \d+\.\d deg below the horizon", line)
    assert line.endswith("what works: a time by day")


@pytest.mark.parametrize("lens", ["perspective", "panorama"])
def test_memory_is_refused_with_both_figures_and_a_size_that_fits(tmp_path, monkeypatch, lens):
    camera = f'projection = "{lens}"\nwidth_px = 20000\nheight_px = 10000'
    scene = load_scene(write(tmp_path, toml(camera=camera)))
    monkeypatch.setattr("raytrace.preflight.free_bytes", lambda: 2e9)
    with pytest.raises(InputError) as caught:
        preflight(scene, name="a.toml")
    (line,) = caught.value.problems
    assert line.startswith(f"a.toml: camera.width_px: 20000x10000 px would need {needed_bytes(scene) / 1e9:.1f} GB")
    assert "2.0 GB are free" in line
    width, height = map(int, re.search(r"(\d+)x(\d+) px or smaller$", line).groups())
    fits = load_scene(write(tmp_path, toml(camera=camera.replace("20000", str(width)).replace("10000", str(height)))))
    preflight(fits)
    assert needed_bytes(fits) > 1.99e9
    monkeypatch.setattr("raytrace.preflight.free_bytes", lambda: 1e8)
    with pytest.raises(InputError, match="a machine with more free memory"):
        preflight(scene)
