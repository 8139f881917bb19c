"""Whole renders: layers, conservation, what hides what, and that bytes hang on the scene alone."""

import math

import numpy as np
import pytest
from skies import HARD, around, make_scene

from raytrace import colour
from raytrace.camera.lens import direction_pixels, pixel_directions, row_directions
from raytrace.frame import render, rendering
from raytrace.light.spectrum import illumination
from raytrace.optics.scattering import wavelengths_nm
from raytrace.sky import radiance
from raytrace.sky.radiance import layer_names
from raytrace.sky.terrain import plain_distance

NOT_ORDERS = ["sky", "sun", "cloud", "ground", "veil", "skylit_rain"]
SUN = (25.0, 250.0)
UNIFORM = {"model": "uniform", "luminance_cd_m2": 3000.0}
THICK = {"extinction_per_km": 1.5, "near_m": 200.0, "far_m": 2500.0, "bottom_m": -500.0}
ROUND_THE_EYE = {"near_m": 0.0, "azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0, "bottom_m": -2000.0, "top_m": 4000.0}
LENSES = [
    {"projection": "perspective", "field_of_view_deg": 110.0, "elevation_deg": 10.0, "roll_deg": 20.0},
    {"projection": "fisheye", "field_of_view_deg": 230.0, "elevation_deg": 60.0},
    {"projection": "fisheye", "field_of_view_deg": 180.0, "elevation_deg": 90.0},
    {"projection": "panorama", "width_px": 96, "height_px": 48, "elevation_deg": 0.0},
]


def summed(frame, names):
    return sum(frame.layers[name].astype(np.float64) for name in names)


def rays(frame):
    """Directions of all pixels (height, width, 3) and whether the lens images them (height, width)."""
    directions, inside = row_directions(frame.lens, 0, frame.lens.height_px)
    return directions.reshape(*frame.luminance.shape, 3), inside.reshape(frame.luminance.shape)


# Conservation


@pytest.mark.parametrize("camera", LENSES, ids=lambda c: f"{c['projection']}{c['elevation_deg']:.0f}")
@pytest.mark.parametrize(
    "rain",
    [
        {"extinction_per_km": 0.0},
        THICK,
        {**THICK, **ROUND_THE_EYE},
        [THICK, {**THICK, **HARD, "near_m": 100.0, "far_m": 900.0, "azimuth_from_deg": 350.0, "azimuth_to_deg": 80.0}],
    ],
    ids=["no rain", "curtain", "inside", "two"],
)
def test_uniform_sky_in_uniform_picture_out(camera, rain):
    # What rain takes from the sky behind it, it gives back from the sky all round: only the sun's light makes bows.
    frame = render(make_scene(SUN, rain=rain, sky=UNIFORM, camera=camera), layers=True)
    _, inside = rays(frame)
    assert inside.mean() > 0.3
    white = 3000.0 * colour.xy_to_XYZ1(colour.D65_XY)
    np.testing.assert_allclose(summed(frame, NOT_ORDERS)[inside], np.broadcast_to(white, (inside.sum(), 3)), rtol=1e-6)
    np.testing.assert_array_equal(frame.luminance[~inside], 0)
    np.testing.assert_array_equal(frame.rgb[~inside], 0)
    if rain == {"extinction_per_km": 0.0}:
        assert np.ptp(frame.luminance[inside]) <= 1e-3
        # one grey, give or take the dither
        assert np.ptp(frame.rgb[inside].astype(int), axis=0).max() <= 1
    else:
        assert frame.layers["skylit_rain"][inside, 1].max() > 500


def test_black_sky_leaves_the_bows_alone():
    frame = render(make_scene(SUN, rain=THICK, sky={"model": "black"}), layers=True)
    for name in NOT_ORDERS:
        assert not frame.layers[name].any(), name
    assert frame.luminance.max() > 100


def test_no_light_at_all():
    scene = make_scene(SUN, rain={"extinction_per_km": 0.0}, sky={"model": "black"})
    frame = render(scene)
    assert not frame.luminance.any() and not frame.rgb.any()
    assert (frame.clipped, frame.out_of_gamut) == (0, 0)


def test_layers_add_up():
    scene = make_scene(
        SUN,
        rain=[THICK, {**THICK, "water": "sea", "near_m": 20.0, "far_m": 60.0}],
        sky={"cloud": {}},
        ground={"cover": "meadow"},
        camera={"height_m": 30.0, "elevation_deg": 5.0},
    )
    frame = render(scene, layers=True)
    assert list(frame.layers) == layer_names(8)
    assert list(frame.layers)[-6:] == ["order1", "order2", "order3", "order4", "order5", "order6"]
    total = summed(frame, frame.layers)
    np.testing.assert_allclose(total[..., 1], frame.luminance, rtol=2e-6)
    for name, layer in frame.layers.items():
        assert np.isfinite(layer).all() and (layer >= 0).all(), name
        assert layer.dtype == np.float32 and layer.shape == (32, 48, 3)
    for name in ("sky", "cloud", "ground", "veil", "skylit_rain", "external", "order1"):
        assert frame.layers[name].any(), name
    assert render(scene).layers is None


def test_fewer_paths_fewer_layers():
    frame = render(make_scene(SUN, optics={"paths": 3}), layers=True)
    assert list(frame.layers)[-3:] == ["external", "straight", "order1"]


# Where the orders are


def test_no_orders_where_no_rain_is():
    rain = {**THICK, "azimuth_from_deg": 40.0, "azimuth_to_deg": 75.0, "edge_deg": 4.0}
    frame = render(make_scene(SUN, rain=rain, camera={"field_of_view_deg": 80.0}), layers=True)
    azimuth = np.degrees(np.arctan2(*np.moveaxis(rays(frame)[0][..., :2], -1, 0)))
    rainy = (azimuth > 38) & (azimuth < 77)
    assert 0.2 < rainy.mean() < 0.8
    for name in ("skylit_rain", *list(frame.layers)[6:]):
        assert not frame.layers[name][~rainy].any(), name
    assert frame.layers["order1"][rainy].any()
    assert (frame.layers["external"][(azimuth > 45) & (azimuth < 70), 1] > 0)[5:].any()


def test_orders_keep_to_their_angles():
    # Exact for n = 1.333 (deviation 137.922 and 230.891 at the bows, recomputed): no ray of the primary leaves farther
    # than 42.078 deg from the antisolar point, none of the secondary nearer than 50.891; the disc adds 0.2665.
    scene = make_scene(
        SUN,
        rain={**ROUND_THE_EYE, "refractive_index": 1.333},
        sky={"model": "black"},
        camera=LENSES[-1],
    )
    frame = render(scene, layers=True)
    away = np.degrees(np.arccos(np.clip(-(rays(frame)[0] @ around((250.0, 25.0), 0.0, 0.0)[0]), -1, 1)))
    primary, secondary = frame.layers["order1"][..., 1], frame.layers["order2"][..., 1]
    # and the table's bins of 0.1 deg, folded and then looked up between their middles, two of theirs
    margin = 0.2665 + 0.2
    assert not primary[away > 42.078 + margin].any()
    assert (primary[away < 42.078] > 0).all()
    assert not secondary[away < 50.891 - margin].any()
    assert (secondary[(away > 50.891) & (away < 120)] > 0).all()


# What hides what


def test_ground_hides_far_rain():
    rain = {**THICK, "near_m": 500.0, "edge_m": 0.0}
    frame = render(
        make_scene(SUN, rain=rain, ground={"cover": "plain"}, camera={"elevation_deg": 0.0, "height_m": 2.0}),
        layers=True,
    )
    elevation = np.degrees(np.arcsin(rays(frame)[0][..., 2]))
    below = elevation < -3
    assert below.any()
    for name in ("skylit_rain", *list(frame.layers)[6:]):
        assert not frame.layers[name][below].any(), name
    assert (frame.layers["ground"][below, 1] > 0).all()
    assert not frame.layers["ground"][elevation > 3].any()
    assert not frame.layers["sky"][below].any()


def test_from_a_tower_the_bow_closes_below_the_horizon():
    rain = {"extinction_per_km": 2.0, "near_m": 15.0, "far_m": 1500.0, "top_m": 900.0, "edge_m": 20.0}
    rain |= {"azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0}
    camera = {"projection": "fisheye", "field_of_view_deg": 120.0, "elevation_deg": -30.0, "height_m": 320.0}
    camera |= {"width_px": 120, "height_px": 120}
    frame = render(
        make_scene((30.0, 214.0), rain=rain, ground={"cover": "plain"}, camera=camera),
        layers=True,
    )
    circle = around((34.0, -30.0), 41.2, np.arange(0.0, 360.0, 5.0))
    x, y, seen = direction_pixels(frame.lens, circle)
    assert seen.all()
    row, column = y.astype(int), x.astype(int)
    bow, ground = (frame.layers[name][row, column, 1] for name in ("order1", "ground"))
    assert (bow > 0).all()
    below = circle[:, 2] < -0.1
    assert below.sum() > 40
    assert (ground[below] > 0).all()
    # and stands out: brighter than as much of the other orders' light beside it
    outside = around((34.0, -30.0), 46.0, np.arange(0.0, 360.0, 5.0))
    x, y, seen = direction_pixels(frame.lens, outside)
    orders = summed(frame, list(frame.layers)[6:])[..., 1]
    assert (orders[row, column] > 2 * orders[y.astype(int), x.astype(int)]).all()


def test_camera_above_the_rain():
    camera = {"height_m": 5000.0, "elevation_deg": 0.0, "projection": "panorama", "width_px": 64}
    rain = {
        **THICK,
        "near_m": 0.0,
        "far_m": 30_000.0,
        "top_m": 2000.0,
        "azimuth_from_deg": 0.0,
        "azimuth_to_deg": 360.0,
    }
    frame = render(make_scene(SUN, rain=rain, ground={"cover": "sea"}, camera=camera), layers=True)
    elevation = np.degrees(np.arcsin(rays(frame)[0][..., 2]))
    for name in ("skylit_rain", "order1", "straight"):
        assert not frame.layers[name][elevation > 0].any(), name
    assert frame.layers["order1"][elevation < -10].any()


def test_air_veils_the_ground():
    # Koschmieder: a black ground seen over a distance s is L (1 - exp(-3.912 s / V)) bright before a sky of L.
    scene = make_scene(
        SUN,
        rain={"extinction_per_km": 0.0},
        sky=UNIFORM,
        ground={"cover": "plain", "albedo": 0.0},
        air={"visibility_km": 5.0},
        camera={"height_m": 100.0, "elevation_deg": -30.0},
    )
    frame = render(scene, layers=True)
    for row, column in ((4, 10), (16, 24), (30, 40)):
        ray = rays(frame)[0][row, column]
        slope = ray[2] / math.hypot(ray[0], ray[1])
        path = plain_distance(100.0, slope) * math.hypot(1, slope)
        expected = 3000 * (1 - math.exp(math.log(0.02) * path / 5000))
        # the mean over the pixel's height
        assert frame.layers["veil"][row, column, 1] == pytest.approx(expected, rel=0.02)
        assert frame.layers["ground"][row, column, 1] == 0


# The sun's disc


@pytest.mark.parametrize(
    ("camera", "tolerance"),
    [
        ({"field_of_view_deg": 2.0, "elevation_deg": 25.0, "width_px": 96, "height_px": 64}, 0.01),
        # pixels larger than the disc keep its light, but not to the last per cent
        ({"projection": "fisheye", "field_of_view_deg": 100.0, "elevation_deg": 26.0}, 0.35),
    ],
)
def test_the_suns_disc_holds_its_light(camera, tolerance):
    scene = make_scene(SUN, rain={"extinction_per_km": 0.0}, camera={**camera, "azimuth_deg": SUN[1]})
    frame = render(scene, layers=True)
    light = illumination(scene, wavelengths_nm(scene.optics))
    solid_angle = pixel_solid_angles(frame.lens)
    assert (frame.layers["sun"][..., 1] * solid_angle).sum() == pytest.approx(light.direct_normal_lx, rel=tolerance)


def pixel_solid_angles(lens):
    """Solid angle of each pixel from the cross product of its diagonals [sr]."""
    x, y = np.meshgrid(np.arange(lens.width_px + 1.0), np.arange(lens.height_px + 1.0))
    corner, _ = pixel_directions(lens, x, y)
    one, other = corner[1:, 1:] - corner[:-1, :-1], corner[1:, :-1] - corner[:-1, 1:]
    return np.linalg.norm(np.cross(one, other), axis=-1) / 2


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
