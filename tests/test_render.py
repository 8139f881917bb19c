"""Whole renders: bytes that hang on the scene alone, exposure, curtains together, and a picture behind the rain."""

import math

import numpy as np
import pytest
from skies import NOT_ORDERS, SUN, THICK, UNIFORM, make_scene, summed

from raytrace import colour
from raytrace.frame import render, rendering
from raytrace.sky import radiance

# The same scene, the same bytes


@pytest.fixture(scope="module")
def busy():
    return make_scene(
        SUN, rain=THICK, sky={"cloud": {}}, ground={"cover": "fields"}, camera={"width_px": 80, "height_px": 60}
    )


@pytest.fixture(scope="module")
def busy_frame(busy):
    return render(busy, threads=1)


def test_bytes_do_not_depend_on_threads(busy, busy_frame):
    two = render(busy, threads=2, cache=False)
    assert two.png() == busy_frame.png()
    np.testing.assert_array_equal(two.luminance, busy_frame.luminance)


def test_bytes_do_not_depend_on_the_cut(busy, busy_frame, monkeypatch):
    monkeypatch.setattr(rendering, "_STRIP_PIXELS", 7 * 80)
    monkeypatch.setattr(rendering, "_DEVELOP_PIXELS", 333)
    monkeypatch.setattr(radiance, "_PIECE", 111)
    assert render(busy, threads=2).png() == busy_frame.png()


def test_seeds_differ_and_0_is_one(busy, busy_frame):
    def seeded(seed):
        return render(busy.model_copy(update={"optics": busy.optics.model_copy(update={"seed": seed})}))

    again, other = seeded(0), seeded(1)
    np.testing.assert_array_equal(again.rgb, busy_frame.rgb)
    assert (other.rgb != busy_frame.rgb).any()
    # the rays differ, and not just the dither
    assert (other.luminance != busy_frame.luminance).any()
    np.testing.assert_allclose(other.luminance, busy_frame.luminance, rtol=0.05)


# The frame


def test_frame_and_summary(busy_frame):
    frame = busy_frame
    assert frame.rgb.shape == (60, 80, 3) and frame.rgb.dtype == np.uint8
    assert frame.luminance.shape == (60, 80) and frame.luminance.dtype == np.float32
    assert frame.truth["sun"] == {"elevation_deg": 25.0, "azimuth_deg": 250.0}
    assert frame.truth["antisolar"] == {"elevation_deg": -25.0, "azimuth_deg": 70.0}
    line = frame.summary()
    assert "\n" not in line
    rays_m = 21 * 20_000 / 1e6
    for part in ("80x60 px", "sun 25.0 deg", "250.0 deg", "cd/m2", "auto", f"{rays_m:.4g} M rays", " s, "):
        assert part in line, part
    assert f"{frame.clipped} clipped, {frame.out_of_gamut} out of gamut" in line
    assert frame.seconds > 0
    assert frame._repr_png_()[:8] == b"\x89PNG\r\n\x1a\n"


def test_saved_picture(busy_frame, tmp_path):
    from raytrace.errors import InputError

    busy_frame.save(tmp_path / "a.png")
    assert (tmp_path / "a.png").read_bytes() == busy_frame.png()
    with pytest.raises(InputError, match=r"\.png would work"):
        busy_frame.save(tmp_path / "a.jpg")
    assert [p.name for p in tmp_path.iterdir()] == ["a.png"]


def test_exposure_in_the_picture():
    grey = {"rain": {"extinction_per_km": 0.0}, "sky": UNIFORM}
    automatic = render(make_scene(SUN, **grey, camera={"exposure_level": 0.5}))
    # half of white, linear: code 188 (IEC 61966-2-1), a shade either way for the dither
    assert np.abs(automatic.rgb.astype(int) - 188).max() <= 1
    # L_sat = 120 N^2 / (S t): 120 * 64 / (100 * 0.0128) = 6000, so that 3000 is half of white again
    manual = {"f_number": 8.0, "shutter_s": 0.0128, "iso": 100.0}
    frame = render(make_scene(SUN, **grey, camera=manual))
    assert frame.exposure.white_cd_m2 == pytest.approx(6000)
    assert np.abs(frame.rgb.astype(int) - 188).max() <= 1
    assert frame.clipped == 0
    frame = render(make_scene(SUN, **grey, camera={**manual, "shutter_s": 0.0512}))
    assert frame.clipped == frame.luminance.size
    assert (frame.rgb == 255).all()


def test_given_illuminance_in_the_picture():
    sky = {"cie_type": 5, "illuminance_lx": 9000.0}
    frame = render(make_scene(SUN, rain={"extinction_per_km": 0.0}, sky=sky))
    np.testing.assert_allclose(frame.luminance, 9000 / math.pi, rtol=1e-5)


def test_white_balance_sun():
    # sunlight on a grey plain, with next to no skylight, comes out neutral
    keys = {"rain": {"extinction_per_km": 0.0}, "sky": {"illuminance_lx": 1e-3}, "ground": {"cover": "plain"}}
    camera = {"elevation_deg": -60.0, "height_m": 2.0}
    colours = {}
    for balance in ("d65", "sun"):
        frame = render(make_scene((4.0, 250.0), **keys, camera={**camera, "white_balance": balance}))
        colours[balance] = frame.rgb[8:24, 8:40].reshape(-1, 3).mean(axis=0)
    assert np.ptp(colours["sun"]) < 3
    assert colours["d65"][0] > colours["d65"][2] + 40


# Rain in several curtains


def test_thin_curtains_add_up():
    a = {"extinction_per_km": 1e-3, "near_m": 300.0, "far_m": 800.0}
    b = {**a, "near_m": 600.0, "far_m": 1500.0, "water": "sea", "azimuth_from_deg": 60.0, "azimuth_to_deg": 140.0}
    one, other, both = (
        render(make_scene(SUN, rain=rain, sky={"model": "black"}), layers=True) for rain in ([a], [b], [a, b])
    )
    for name in ("external", "straight", "order1", "order2"):
        expected = one.layers[name].astype(float) + other.layers[name]
        np.testing.assert_allclose(both.layers[name], expected, rtol=0.02, atol=1e-3 * expected.max())


# A picture behind the rain


def plate_scene(tmp_path, picture, extra=""):
    from PIL import Image

    from raytrace.scene.load import load_scene

    Image.fromarray(picture).save(tmp_path / "plate.png")
    path = tmp_path / "scene.toml"
    path.write_text(
        "[sun]\nelevation_deg = 25.0\nazimuth_deg = 250.0\n"
        '[sky]\nmodel = "plate"\nplate = "plate.png"\nplate_white_cd_m2 = 5000.0\n'
        '[ground]\ncover = "none"\n[camera]\nwidth_px = 48\nheight_px = 32\n'
        f"[optics]\nrays = 20000\nbins = 1800\nwavelength_step_nm = 20.0\n[rain]\n{extra}"
    )
    return load_scene(path)


def test_plate_is_the_background(tmp_path):
    picture = np.random.default_rng(3).integers(0, 256, (32, 48, 3), dtype=np.uint8)
    frame = render(plate_scene(tmp_path, picture, "extinction_per_km = 0.0"), layers=True)
    linear = colour.decode_srgb(picture / 255.0) * 5000.0
    np.testing.assert_allclose(frame.layers["sky"], linear @ colour.SRGB_TO_XYZ.T, rtol=1e-4, atol=1e-2)
    np.testing.assert_allclose(frame.luminance, linear @ colour.SRGB_TO_XYZ[1], rtol=1e-4, atol=1e-2)


def test_even_plate_stays_even_behind_rain(tmp_path):
    picture = np.full((20, 30, 3), 188, dtype=np.uint8)
    frame = render(plate_scene(tmp_path, picture, "extinction_per_km = 1.0"), layers=True)
    shown = summed(frame, NOT_ORDERS)[..., 1]
    np.testing.assert_allclose(shown, 5000 * colour.decode_srgb(188 / 255), rtol=1e-4)
    assert frame.layers["order1"].any()
