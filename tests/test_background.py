"""What stands behind the rain: skies, cloud bank, and the skylight that drops scatter."""

import math

import numpy as np
import pytest
from skies import make_scene

from raytrace import colour
from raytrace.light.spectrum import illumination
from raytrace.light.sun import direction
from raytrace.sky.background import cloud_cover, make_background, sky_xyz, takagi_1990
from raytrace.sky.radiance import with_sky_illuminance
from raytrace.sky.skylight import VIEWS, skylight_at, surround_grid

WAVELENGTH = np.arange(380.0, 781.0, 20.0)
SUN = (25.0, 220.0)
CLOUD = {"azimuth_deg": 40.0, "width_deg": 120.0, "base_deg": 5.0, "top_deg": 50.0, "edge_deg": 10.0, "cover": 0.9}


def background(sky, sun=SUN):
    scene = make_scene(sun, sky=sky)
    light = with_sky_illuminance(scene, illumination(scene, WAVELENGTH))
    return make_background(scene, light, direction(sun[1], sun[0])), light


def seen(kernel, sky, azimuth, elevation):
    out = np.empty(3)
    return kernel(sky, *direction(azimuth, elevation), out), out


def sky_of(sky, azimuth, elevation):
    return seen(sky_xyz, sky, azimuth, elevation)[1]


@pytest.mark.parametrize("luminance", [0.0, 0.5, 2000.0, 3e6])
def test_uniform_sky(luminance):
    sky, _ = background({"model": "uniform", "luminance_cd_m2": luminance})
    for place in ((0, 0), (100, 45), (3, 90), (200, -30), (0, -90)):
        np.testing.assert_allclose(sky_of(sky, *place), luminance * colour.xy_to_XYZ1(colour.D65_XY), rtol=1e-9)


def test_black_sky():
    sky, _ = background({"model": "black"})
    for place in ((0, 0), (100, 45), (220, 25), (200, -30)):
        np.testing.assert_array_equal(sky_of(sky, *place), 0.0)


@pytest.mark.parametrize("temperature", [4000.0, 6504.0, 25_000.0])
@pytest.mark.parametrize("model", ["cie", "uniform"])
def test_one_colour_temperature(model, temperature):
    sky, _ = background({"model": model, "colour_temperature_k": temperature})
    for place in ((0, 10), (220, 60)):
        xyz = sky_of(sky, *place)
        np.testing.assert_allclose(xyz / xyz[1], colour.xy_to_XYZ1(colour.daylight_xy(temperature)), rtol=1e-9)


def test_takagi_1990():
    # T = 6500 + 1.1985e8 / L^1.2, from memory; at 5000 cd/m2 about 10850 K
    assert takagi_1990(5000.0) == pytest.approx(6500 + 1.1985e8 / 5000**1.2)
    assert takagi_1990(np.array([1.0, 1e9])) == pytest.approx([25_000.0, 6500.0], rel=1e-3)


def test_colour_of_a_clear_sky_follows_its_luminance():
    sky, _ = background({"cie_type": 12})
    xy = []
    for place in ((40, 60), (40, 20), (220, 60), (220, 30)):
        xyz = sky_of(sky, *place)
        expected = colour.xy_to_XYZ1(colour.daylight_xy(float(takagi_1990(xyz[1]))))
        np.testing.assert_allclose(xyz / xyz[1], expected, rtol=5e-4)
        xy.append((xyz[1], xyz[0] / xyz.sum()))
    # brighter is whiter
    assert [x for _, x in sorted(xy)] == sorted(x for _, x in xy)


@pytest.mark.parametrize("number", [1, 5, 6])
def test_overcast_skies_are_white(number):
    sky, _ = background({"cie_type": number})
    for place in ((0, 5), (100, 80)):
        xyz = sky_of(sky, *place)
        np.testing.assert_allclose(xyz / xyz[1], colour.xy_to_XYZ1(colour.daylight_xy(6500.0)), rtol=1e-9)


@pytest.mark.parametrize("wanted", [500.0, 30_000.0])
def test_given_illuminance_scales_the_sky_and_the_skylight(wanted):
    plain, light = background({"cie_type": 5})
    scaled, other = background({"cie_type": 5, "illuminance_lx": wanted})
    assert other.diffuse_horizontal_lx == wanted
    weights = colour.xyz_weights(WAVELENGTH)[:, 1]
    assert other.diffuse_horizontal @ weights == pytest.approx(wanted, rel=1e-9)
    np.testing.assert_array_equal(other.direct_normal, light.direct_normal)
    # type 5 is uniform: illuminance over pi
    assert sky_of(scaled, 10, 40)[1] == pytest.approx(wanted / math.pi, rel=1e-6)
    assert sky_of(plain, 10, 40)[1] == pytest.approx(light.diffuse_horizontal_lx / math.pi, rel=1e-6)


@pytest.mark.parametrize(
    ("sky", "expected_lx"),
    # Exact: a uniform hemisphere of luminance L gives pi L on level ground.
    [
        ({"model": "uniform", "luminance_cd_m2": 700.0}, 700 * math.pi),
        ({"model": "uniform"}, 2000 * math.pi),
        ({"model": "black"}, 0.0),
    ],
)
def test_the_sky_that_is_drawn_lights_the_ground(sky, expected_lx):
    _, light = background(sky)
    assert light.diffuse_horizontal_lx == pytest.approx(expected_lx)
    assert light.diffuse_horizontal @ colour.xyz_weights(WAVELENGTH)[:, 1] == pytest.approx(expected_lx)


# Cloud


def test_no_cloud_no_cover():
    sky, _ = background({})
    opacity, out = seen(cloud_cover, sky, 40, 20)
    assert opacity == 0 and (out == 0).all()


def test_cloud_stands_where_it_is_told():
    sky, _ = background({"cloud": CLOUD})
    opacity = {place: seen(cloud_cover, sky, *place)[0] for place in ((40, 27), (0, 25), (80, 25))}
    assert all(value == pytest.approx(0.9) for value in opacity.values())
    for place in ((220, 25), (40, 75), (40, -30), (130, 25), (310, 25)):
        assert seen(cloud_cover, sky, *place)[0] == 0


def test_cloud_opposite_the_sun_unless_told():
    sky, _ = background({"cloud": {**CLOUD, "azimuth_deg": None, "width_deg": 60.0}})
    assert seen(cloud_cover, sky, SUN[1] - 180, 27)[0] > 0.85
    assert seen(cloud_cover, sky, SUN[1], 27)[0] == 0


def test_cloud_has_neither_seam_nor_pole():
    sky, _ = background({"cloud": {**CLOUD, "width_deg": 360.0, "top_deg": 90.0, "base_deg": -20.0, "edge_deg": 30.0}})

    def bright(azimuth, elevation):
        opacity, out = seen(cloud_cover, sky, azimuth, elevation)
        return np.array([opacity, out[1] / 1000])

    step = 1e-4
    for azimuth in (0.0, 40.0, 180.0, 220.0, 360.0):
        np.testing.assert_allclose(bright(azimuth - step, 30), bright(azimuth + step, 30), atol=1e-3)
    top = [bright(azimuth, 90 - step) for azimuth in range(0, 360, 30)]
    np.testing.assert_allclose(top, np.broadcast_to(top[0], (12, 2)), atol=1e-3)


@pytest.mark.parametrize("width", [120.0, 200.0, 330.0])
def test_cloud_of_any_width_is_smooth_near_the_zenith(width):
    sky, _ = background({"cloud": {**CLOUD, "width_deg": width, "top_deg": 85.0, "edge_deg": 20.0}})
    ring = [seen(cloud_cover, sky, azimuth, 89.999)[0] for azimuth in range(0, 360, 15)]
    assert max(ring) - min(ring) < 1e-3


def test_cloud_luminance_is_a_share_of_a_white_cards():
    # With no texture and no sunlight: albedo times E_diffuse / pi.
    sky, light = background({"cloud": {**CLOUD, "albedo": 0.3, "sunlit": 0.0, "texture": 0.0}})
    _, out = seen(cloud_cover, sky, 40, 27)
    assert out[1] == pytest.approx(0.3 * light.diffuse_horizontal_lx / math.pi, rel=1e-9)
    lit, _ = background({"cloud": {**CLOUD, "albedo": 0.3, "sunlit": 0.1, "texture": 0.0}})
    more = 0.3 * (light.diffuse_horizontal_lx + 0.1 * light.direct_normal_lx) / math.pi
    assert seen(cloud_cover, lit, 40, 27)[1][1] == pytest.approx(more, rel=1e-9)


def test_cloud_texture_and_seed():
    def picture(**keys):
        sky, _ = background({"cloud": {**CLOUD, **keys}})
        return np.array([seen(cloud_cover, sky, a, e)[1][1] for a in range(0, 80, 4) for e in range(15, 40, 4)])

    plain, soft, rough, other = picture(texture=0.0), picture(texture=0.2), picture(texture=0.8), picture(seed=2)
    assert np.ptp(plain) == 0
    assert 0.02 < soft.std() / soft.mean() < rough.std() / rough.mean() < 0.5
    assert soft.mean() == pytest.approx(plain.mean(), rel=0.1)
    assert np.abs(other - picture(seed=1)).max() > 0.02 * plain.mean()
    assert (rough > 0).all()


# Skylight on drops


def grid_of(sky, ground, *phases):
    return surround_grid(sky, ground, [np.asarray(phase, dtype=float) for phase in phases])


def look_up(grid, azimuth_deg, elevation_deg):
    out = np.empty(3)
    skylight_at(grid, math.radians(azimuth_deg), math.radians(elevation_deg), out)
    return out


def test_uniform_surround_comes_back_uniform():
    sky, _ = background({"model": "uniform", "luminance_cd_m2": 1000.0})
    peaked = np.exp(-np.linspace(0, 12, 180))
    grids = grid_of(sky, None, np.ones(180), peaked)
    assert grids.shape == (2, *VIEWS, 3)
    np.testing.assert_allclose(grids[..., 1], 1000.0, rtol=1e-9)


def test_even_drops_see_the_mean_of_the_surround():
    # Isotropic scattering: the mean over the sphere, here half sky and half ground.
    sky, _ = background({"model": "uniform", "luminance_cd_m2": 1000.0})
    grid = grid_of(sky, np.array([90.0, 100.0, 110.0]), np.ones(180))[0]
    np.testing.assert_allclose(grid[..., 1], 550.0, rtol=1e-9)


def test_forward_drops_see_what_is_behind_them():
    sky, _ = background({"model": "uniform", "luminance_cd_m2": 1000.0})
    forward = np.where(np.arange(180) < 10, 1.0, 0.0)
    grid = grid_of(sky, np.zeros(3), forward)[0]
    for azimuth in (0, 77, 180, 359):
        assert look_up(grid, azimuth, 40)[1] == pytest.approx(1000.0)
        assert look_up(grid, azimuth, -40)[1] == 0.0
    # and drops that throw light straight back see what is behind the eye
    grid = grid_of(sky, np.zeros(3), forward[::-1])[0]
    assert look_up(grid, 10, 40)[1] == 0.0
    assert look_up(grid, 10, -40)[1] == pytest.approx(1000.0)


def test_fold_against_a_finer_sum():
    sky, _ = background({"cie_type": 8, "cloud": CLOUD})
    phase = 0.1 + np.exp(-np.linspace(0, 6, 360))
    grid = grid_of(sky, np.array([500.0, 500.0, 500.0]), phase)[0]
    rng = np.random.default_rng(1)
    z = rng.uniform(-1, 1, 40_000)
    azimuth = rng.uniform(0, 2 * np.pi, 40_000)
    level = np.sqrt(1 - z**2)
    rays = np.stack([level * np.sin(azimuth), level * np.cos(azimuth), z], axis=1)
    a, b, surround = np.empty(3), np.empty(3), np.full(len(rays), 500.0)
    for i in np.flatnonzero(z >= 0):
        opacity = cloud_cover(sky, *rays[i], a)
        sky_xyz(sky, *rays[i], b)
        surround[i] = opacity * a[1] + (1 - opacity) * b[1]
    for place in ((220, 20), (40, 30), (300, -40), (100, 80)):
        angle = np.arccos(np.clip(rays @ direction(*place), -1, 1))
        weight = phase[np.minimum((angle / np.pi * 360).astype(int), 359)]
        expected = (weight * surround).sum() / weight.sum()
        assert look_up(grid, *place)[1] == pytest.approx(expected, rel=0.03)


def test_look_up_has_no_seam():
    sky, _ = background({"cie_type": 12})
    grid = grid_of(sky, np.full(3, 300.0), np.exp(-np.linspace(0, 6, 360)))[0]
    np.testing.assert_allclose(grid[0], grid[-1], rtol=1e-9)
    for elevation in (-89.9, -30, 0, 30, 89.9):
        np.testing.assert_allclose(look_up(grid, 1e-7, elevation), look_up(grid, -1e-7, elevation), rtol=1e-6)
        np.testing.assert_allclose(look_up(grid, 180, elevation), look_up(grid, -180, elevation), rtol=1e-6)
    assert np.isfinite(look_up(grid, 12, 90)).all() and np.isfinite(look_up(grid, 12, -90)).all()
