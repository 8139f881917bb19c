"""What `check` prints, number by number, and how the command line hands its options on."""

import re

import pytest
from scene_files import toml, write

import raytrace.cli as cli
from raytrace.light.spectrum import illumination
from raytrace.optics.scattering import scattering_table, wavelengths_nm
from raytrace.report import scene_report
from raytrace.scene.load import load_scene

QUICK = "rays = 1000\nbins = 180\npaths = 4\nwavelength_step_nm = 20\n"


def values(scene) -> dict[str, str]:
    """Values of a report by name; names and values are parted by two blanks or more."""
    return dict(re.split(r"  +", line, maxsplit=1) for line in scene_report(scene, name="a.toml").splitlines())


def first_number(text: str) -> float:
    return float(re.match(r"-?[\d,.]+", text)[0].replace(",", ""))


@pytest.fixture
def scene(tmp_path):
    return load_scene(write(tmp_path, toml(optics=QUICK)))


def test_names_and_values_are_aligned(scene):
    lines = scene_report(scene, name="a.toml").splitlines()
    assert len({re.match(r"(\S+ )+ +", line).end() for line in lines}) == 1
    assert all(line.isprintable() for line in lines)


def test_light_is_that_of_the_clear_sky_model(scene):
    light = illumination(scene, wavelengths_nm(scene.optics))
    told = values(scene)
    assert told["direct sunlight"] == f"{light.direct_normal_lx:,.0f} lx square to the sun"
    assert told["diffuse skylight"] == f"{light.diffuse_horizontal_lx:,.0f} lx on level ground"
    # common practice, no source: clear-sky sunlight is some ten times the skylight, and below 130,000 lx
    assert 130_000 > first_number(told["direct sunlight"]) > 4 * first_number(told["diffuse skylight"]) > 4_000


def test_a_given_illuminance_takes_the_models_place(tmp_path):
    scene = load_scene(write(tmp_path, toml(optics=QUICK, sky="illuminance_lx = 12345")))
    assert values(scene)["diffuse skylight"] == "12,345 lx on level ground"


def test_rain_by_the_closure_of_its_law(scene):
    # geometric, so half of the extinction of 1.0052 per km with Q = 2 at 5 mm/h, from the closure pi 8000 / Lambda^3 of
    # Marshall and Palmer (1948); recomputed. The curtain is 2.1 km deep.
    assert values(scene)["rain extinction"] == "0.5026 per km, optical depth 1.06 from near to far"


def test_bows_of_a_fixed_index(tmp_path):
    # Halliday, Resnick, Walker, Fundamentals of Physics, ch. 33 (published): n = 1.331 turns the light by 137.63 and
    # 230.37 degrees, so that the bows stand 42.37 and 50.37 degrees from the antisolar point
    told = values(load_scene(write(tmp_path, toml(optics=QUICK, rain="refractive_index = 1.331"))))
    assert told["rain primary"] == "radius 42.37 deg red, 42.37 green, 42.37 violet; top 22.4 deg up"
    assert told["rain secondary"] == "radius 50.37 deg red, 50.37 green, 50.37 violet; top 30.4 deg up"


def test_high_sun_puts_the_bow_below_the_horizon(tmp_path):
    sun = "elevation_deg = 45\nazimuth_deg = 250"
    told = values(load_scene(write(tmp_path, toml(sun=sun, optics=QUICK))))
    # common practice, no source: from the ground no primary is seen while the sun is higher than about 42 degrees
    assert told["rain primary"].endswith("; below the horizon")
    assert re.search(r"; top \d\.\d deg up$", told["rain secondary"])


def test_table_is_known_to_be_in_the_cache(scene, empty_cache):
    assert values(scene)["rain table"] == "not made yet"
    scattering_table(scene)
    assert values(scene)["rain table"] == "in the cache"


def test_each_curtain_has_its_lines(tmp_path):
    text = toml(rain=None, optics=QUICK) + "[[rain]]\n[[rain]]\nwater = 'sea'\nnear_m = 10\nfar_m = 30\n"
    told = values(load_scene(write(tmp_path, text)))
    radius = [float(re.match(r"radius ([\d.]+)", told[f"rain[{k}] primary"])[1]) for k in (0, 1)]
    # common practice, no source: the bow of sea water is almost a degree smaller
    assert 0.6 < radius[0] - radius[1] < 1.0


@pytest.mark.parametrize(
    ("camera", "exposure"),
    [
        ("f_number = 8\nshutter_s = 0.01\niso = 100", "white at 7,680 cd/m2"),
        ("exposure_percentile = 95\nexposure_level = 0.5", "automatic: 95 % of pixels below 0.5 of white"),
    ],
)
def test_exposure(tmp_path, camera, exposure):
    # ISO 12232 (from memory): L_sat = 120 N^2 / (S t) = 120 * 64 / (100 * 0.01)
    assert values(load_scene(write(tmp_path, toml(optics=QUICK, camera=camera))))["exposure"].endswith(exposure)


@pytest.mark.parametrize(
    ("more", "options"),
    [
        ([], {"threads": None, "cache": True, "progress": False}),
        (["--no-cache"], {"threads": None, "cache": False, "progress": False}),
        (["--threads", "1"], {"threads": 1, "cache": True, "progress": False}),
    ],
)
def test_render_hands_its_options_on(tmp_path, monkeypatch, capsys, more, options):
    path, calls = write(tmp_path, toml(optics=QUICK)), []

    class Nothing:
        def save(self, path):
            pass

        def summary(self):
            return "nothing"

    monkeypatch.setattr("raytrace.frame.render", lambda scene, **given: (calls.append(given), Nothing())[1])
    monkeypatch.chdir(tmp_path)
    assert cli.run(["render", str(path), *more]) == 0
    assert capsys.readouterr().out == "a.png: nothing\n"
    assert calls == [options]


def test_options_are_not_cut_short(tmp_path, capsys):
    # what is plain today would be ambiguous with the next option
    assert cli.run(["render", str(write(tmp_path, toml())), "--thread", "1"]) == 2
    assert "(nearest: --threads)" in capsys.readouterr().err
