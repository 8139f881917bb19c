"""Layers of whole renders: what is conserved, what stands where, what hides what."""

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from skies import HARD, NOT_ORDERS, SUN, THICK, UNIFORM, around, make_scene, rays, summed

from raytrace import colour
from raytrace.camera.lens import direction_pixels, pixel_directions
from raytrace.frame import render
from raytrace.light.spectrum import illumination
from raytrace.optics.scattering import wavelengths_nm
from raytrace.sky import radiance
from raytrace.sky import rain as rain_stage
from raytrace.sky.radiance import layer_names, prepare_view
from raytrace.sky.terrain import plain_distance

ROUND_THE_EYE = {"near_m": 0.0, "azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0, "bottom_m": -2000.0, "top_m": 4000.0}
LENSES = [
    {"projection": "perspective", "field_of_view_deg": 110.0, "elevation_deg": 10.0, "roll_deg": 20.0},
    {"projection": "fisheye", "field_of_view_deg": 230.0, "elevation_deg": 60.0},
    {"projection": "fisheye", "field_of_view_deg": 180.0, "elevation_deg": 90.0},
    {"projection": "panorama", "width_px": 96, "height_px": 48, "elevation_deg": 0.0},
]


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
    assert list(frame.layers) == layer_names(scene.optics)
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


def test_rain_dims_the_veil_and_the_ground_behind_it():
    keys = {
        "sky": UNIFORM,
        "ground": {"cover": "plain"},
        "air": {"visibility_km": 20.0},
        "camera": {"height_m": 400.0, "elevation_deg": -10.0, "field_of_view_deg": 20.0},
    }
    rain = {**HARD, "extinction_per_km": 1.0, "near_m": 300.0, "far_m": 800.0, "bottom_m": -100.0}
    clear, rainy = (
        render(make_scene(SUN, rain=table, **keys), layers=True) for table in ({"extinction_per_km": 0.0}, rain)
    )
    row, column = 16, 24
    level = np.hypot(*rays(clear)[0][row, column, :2])
    for name in ("ground", "veil"):
        share = rainy.layers[name][row, column, 1] / clear.layers[name][row, column, 1]
        assert share == pytest.approx(math.exp(-0.5 / level), rel=1e-3), name
    # what the rain takes from the view it fills itself
    lit = rainy.layers["skylit_rain"][row, column, 1]
    assert 0 < lit <= 3000 * (1 - math.exp(-0.5 / level)) * (1 + 1e-6)


# The table of angles


def test_orders_are_looked_up_between_the_middles_of_bins():
    # A table whose entries are its own angles comes back as the angle of the view, at the coarsest bins allowed.
    scene = make_scene(SUN, rain={**HARD, **ROUND_THE_EYE, "extinction_per_km": 1e-3}, sky={"model": "black"})
    middles = np.arange(180) + 0.5
    orders = np.broadcast_to(middles[None, :, None], (3, 180, 3)) * np.array([1.0, 2.0, 3.0])[:, None, None]
    light = illumination(scene, wavelengths_nm(scene.optics))
    view = prepare_view(scene, light, [np.ascontiguousarray(orders)], [np.ones(180)], 0.01)
    theta = np.array([0.5, 0.7, 33.3, 90.0, 137.922, 179.5])
    towards = around((250.0, 25.0), 0.0, 0.0)[0]
    side = np.cross(towards, [0.0, 0.0, 1.0])
    side /= np.linalg.norm(side)
    angle = np.radians(theta)[:, None]
    directions = np.cos(angle) * towards + np.sin(angle) * side
    layers = radiance.layered_radiance(view, directions, np.ones(6, dtype=bool), 0.01)[:, 6:, 0]
    np.testing.assert_allclose(layers / layers[:, :1], [[1.0, 2.0, 3.0]] * 6, rtol=1e-9)
    # the same amount of rain in every direction but for its slant: compare through two tables
    flat = view._replace(orders=np.ones_like(view.orders))
    lit = radiance.layered_radiance(flat, directions, np.ones(6, dtype=bool), 0.01)[:, 6, 0]
    np.testing.assert_allclose(layers[:, 0] / lit, theta, rtol=1e-6)


# Whatever a scene may say

some_rain = st.fixed_dictionaries(
    {
        "extinction_per_km": st.sampled_from([0.0, 0.3, 50.0]),
        "near_m": st.sampled_from([0.0, 30.0, 2000.0]),
        "far_m": st.sampled_from([2001.0, 100_000.0]),
        "bottom_m": st.sampled_from([-2000.0, 0.0, 999.0]),
        "top_m": st.sampled_from([1000.0, 15_000.0]),
        "edge_m": st.sampled_from([0.0, 300.0]),
        "edge_deg": st.sampled_from([0.0, 90.0]),
        "azimuth_from_deg": st.sampled_from([None, 0.0, -360.0]),
        "azimuth_to_deg": st.sampled_from([None, 10.0, 359.0]),
    }
)
some_scenes = st.fixed_dictionaries(
    {
        "sun": st.tuples(st.sampled_from([0.05, 3.0, 45.0, 89.0, 90.0]), st.sampled_from([0.0, 123.0])),
        "disc": st.sampled_from([0.0, 0.533, 2.0]),
        "rain": st.lists(some_rain, min_size=1, max_size=2),
        "sky": st.one_of(
            st.builds(lambda n, c: {"cie_type": n, "cloud": c}, st.integers(1, 15), st.sampled_from([None, {}])),
            st.sampled_from([{"model": "black"}, UNIFORM]),
        ),
        "ground": st.fixed_dictionaries(
            {
                "cover": st.sampled_from(["fields", "meadow", "forest", "sea", "plain", "none"]),
                "relief_m": st.sampled_from([0.0, 100.0, 3000.0]),
                "hills_from_m": st.sampled_from([10.0, 2000.0]),
                "albedo": st.sampled_from([None, 0.0, 1.0]),
            }
        ),
        "camera": st.builds(
            lambda lens, elevation, height: {**lens, "elevation_deg": elevation, "height_m": height},
            st.sampled_from(LENSES),
            st.sampled_from([-90.0, -5.0, 0.0, 30.0, 90.0]),
            st.sampled_from([0.1, 20.0, 999.0, 12_000.0]),
        ),
        "air": st.sampled_from([{}, {"visibility_km": 0.5}, {"aerosol_optical_depth_500nm": 2.0}]),
    }
)


@settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(keys=some_scenes)
def test_every_scene_renders_sound(keys):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(rain_stage, "_GRID", (9, 6, 5))
        frame = render(make_scene(**keys), layers=True)
    for name, layer in frame.layers.items():
        assert np.isfinite(layer).all() and (layer >= 0).all(), name
    np.testing.assert_allclose(summed(frame, frame.layers)[..., 1], frame.luminance, rtol=2e-6, atol=1e-30)
    assert math.isfinite(frame.exposure.white_cd_m2) and frame.exposure.white_cd_m2 > 0
    # nothing shines brighter than the sun
    assert frame.luminance.max() < 3e9


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
