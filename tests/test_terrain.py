"""The lie of the land: where lines of sight meet it."""

import math

import numpy as np
import pytest
from skies import make_scene

from raytrace.light.spectrum import illumination
from raytrace.light.sun import direction
from raytrace.scene.model import Ground
from raytrace.sky.ground import land_xyz, make_cover, mean_ground_xyz, reflectance
from raytrace.sky.terrain import (
    EFFECTIVE_EARTH_M,
    ground_distance,
    height_at,
    horizon_slope,
    make_terrain,
    plain_distance,
    surface_height,
)

EYE = 12.0
HILLY = {"relief_m": 200.0, "hills_from_m": 1200.0, "reaches_m": 9000.0, "seed": 5}
# coarse on purpose: 720 azimuths
PIXEL = math.radians(0.5)


@pytest.fixture(scope="module")
def hills():
    # meadow has woods on its hills, no hedges: every pixel of the surface is a height of one function
    return make_terrain(Ground(cover="meadow", **HILLY), EYE, PIXEL)


def slow_plain_distance(eye, slope):
    """Where a line meets the round plain, by bisection on its height above it."""

    def above(d):
        return eye + slope * d + d * d / (2 * EFFECTIVE_EARTH_M)

    low, high = 0.0, -slope * EFFECTIVE_EARTH_M
    if slope >= 0 or above(high) > 0:
        return -1.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if above(middle) > 0 else (low, middle)
    return low


@pytest.mark.parametrize("eye", [0.1, 1.7, 320.0, 12_000.0])
def test_plain_distance_exactly(eye):
    for slope in (-1e4, -1.0, -0.05, -0.02, -0.006, -1e-3, -1e-4, 0.0, 0.3):
        assert plain_distance(eye, slope) == pytest.approx(slow_plain_distance(eye, slope), rel=1e-9)
    # steep lines see no curvature: eye / tan
    assert plain_distance(eye, -1e3) == pytest.approx(eye / 1e3, rel=1e-5)


def test_the_plain_against_a_ball():
    # The same, on a sphere: for a ray that leaves at a slope the distance along the ball's surface, exactly.
    for eye, slope in ((1.7, -0.002), (100.0, -0.02), (320.0, -0.0095), (3000.0, -0.05)):
        radius, angle = EFFECTIVE_EARTH_M, math.atan(slope)
        # law of sines at the eye, the ball's centre and the point met
        at_point = math.pi - math.asin((radius + eye) / radius * math.cos(angle))
        along = radius * (math.pi - (math.pi / 2 + angle) - at_point)
        assert plain_distance(eye, slope) == pytest.approx(along, rel=3e-3)


@pytest.mark.parametrize("eye", [1.7, 20.0, 320.0, 2000.0])
def test_dip_of_the_horizon(eye):
    # Surveying, common practice, no source: with mean refraction the dip is about 1.76' times the root of the height
    # in metres, and the horizon 3.86 km times that root away.
    land = make_terrain(Ground(cover="sea"), eye, PIXEL)
    dip = -math.atan(horizon_slope(land, 1.0))
    assert math.degrees(dip) * 60 == pytest.approx(1.78 * math.sqrt(eye), rel=0.02)
    # exactly: the ball's tangent
    assert dip == pytest.approx(math.acos(EFFECTIVE_EARTH_M / (EFFECTIVE_EARTH_M + eye)), rel=3e-4)
    assert ground_distance(land, 1.0, -math.tan(dip) * 1.0000001) == pytest.approx(3860 * math.sqrt(eye), rel=0.01)
    assert ground_distance(land, 1.0, -math.tan(dip) * 0.999) < 0


@pytest.mark.parametrize("cover", ["plain", "sea", "none"])
def test_flat_covers_have_no_hills(cover):
    land = make_terrain(Ground(cover=cover, relief_m=500.0), EYE, PIXEL)
    for azimuth in (0.0, 2.0, -3.0):
        assert horizon_slope(land, azimuth) == pytest.approx(-math.sqrt(2 * EYE / EFFECTIVE_EARTH_M), rel=1e-12)
        assert ground_distance(land, azimuth, -0.01) == plain_distance(EYE, -0.01)


def march(land, azimuth, slope, footprint):
    """First distance at which a line of sight is below the surface, by steps of 1 m."""
    sin_a, cos_a = math.sin(azimuth), math.cos(azimuth)
    d = land.distance[0]
    while d < land.distance[-1]:
        if height_at(land, d, slope) <= surface_height(land, d * sin_a, d * cos_a, footprint * d):
            return d
        d += 1.0
    return -1.0


def test_ground_distance_against_a_march(hills):
    count = len(hills.slope) - 1
    met = missed = 0
    for row in (0, 100, 333, 612):
        azimuth = 2 * math.pi * row / count
        skyline = horizon_slope(hills, azimuth)
        for below in (-0.01, 0.001, 0.003, 0.006):
            slope = skyline - below
            found, expected = ground_distance(hills, azimuth, slope), march(hills, azimuth, slope, 2 * math.pi / count)
            if expected < 0:
                assert found < 0
                missed += 1
            else:
                # the grid's steps of distance are 1 %, and crowns may hide between two of them
                assert found == pytest.approx(expected, rel=0.025), (row, below)
                met += 1
    assert met >= 10 and missed >= 4


def test_foreground_is_the_plain(hills):
    slope = -EYE / 300.0
    assert ground_distance(hills, 1.0, slope) == pytest.approx(plain_distance(EYE, slope), rel=1e-12)


def test_slopes_never_fall_with_distance(hills):
    assert (np.diff(hills.slope, axis=1) >= 0).all()
    assert np.isfinite(hills.slope).all()


def test_lower_lines_meet_nearer_ground(hills):
    for azimuth in np.linspace(-3, 3, 7):
        skyline = horizon_slope(hills, azimuth)
        found = np.array([ground_distance(hills, azimuth, s) for s in np.linspace(skyline - 1e-6, -0.5, 300)])
        assert (found > 0).all()
        assert (np.diff(found) <= 1e-9).all()
        assert ground_distance(hills, azimuth, skyline + 1e-5) < 0


def test_full_turn_has_no_seam(hills):
    np.testing.assert_array_equal(hills.slope[0], hills.slope[-1])
    assert horizon_slope(hills, 0.0) == pytest.approx(horizon_slope(hills, 2 * math.pi), rel=1e-9)
    step = 1e-5
    for azimuth in (0.0, math.pi, -math.pi, 2 * math.pi):
        before, after = horizon_slope(hills, azimuth - step), horizon_slope(hills, azimuth + step)
        assert before == pytest.approx(after, abs=1e-4)
    for turn in (-2 * math.pi, 2 * math.pi):
        assert horizon_slope(hills, 1.0 + turn) == pytest.approx(horizon_slope(hills, 1.0), rel=1e-9)


def test_relief_and_seed():
    def skyline(**keys):
        land = make_terrain(Ground(cover="meadow", **{**HILLY, **keys}), EYE, PIXEL)
        return np.array([horizon_slope(land, a) for a in np.linspace(0, 6, 60)])

    low, high, other = skyline(relief_m=50.0), skyline(), skyline(seed=6)
    assert np.median(high) > 2 * np.median(low) > 0
    assert np.abs(high - other).max() > 0.01
    # no higher than trees on the highest hills (noise reaches 1.45 of the relief) where the hills begin
    assert high.max() < (1.45 * 200 + 30) / (0.45 * 1200)
    # a skyline varies, but is no comb
    assert np.std(high) > 1e-3


@pytest.mark.parametrize("first", [-0.4, 0.3, 2.0, 5.8, 6.6])
def test_land_of_a_narrow_view_is_the_same_land(hills, first):
    part = make_terrain(Ground(cover="meadow", **HILLY), EYE, PIXEL, (first, 1.0))
    for azimuth in np.linspace(first, first + 1.0, 23):
        assert horizon_slope(part, azimuth) == horizon_slope(hills, azimuth)
        assert ground_distance(part, azimuth, -0.008) == ground_distance(hills, azimuth, -0.008)
    # and no more of it than is seen, give or take a row
    assert (part.slope[:-1, -1] > -1e29).mean() < 1.0 / (2 * math.pi) + 0.01


def test_threads_do_not_change_the_land():
    one, two = (make_terrain(Ground(cover="fields", **HILLY), EYE, PIXEL, threads=n).slope for n in (1, 2))
    np.testing.assert_array_equal(one, two)


@pytest.mark.parametrize("albedo", [0.0, 0.2, 0.7])
@pytest.mark.parametrize("elevation", [5.0, 40.0])
def test_plain_ground_obeys_lamberts_law(albedo, elevation):
    # Exact: luminance = albedo (E_direct sin h + E_diffuse) / pi, from wherever it is seen.
    scene = make_scene((elevation, 200.0), ground={"cover": "plain", "albedo": albedo})
    light = illumination(scene, np.arange(380.0, 781.0, 20.0))
    cover, land, out = plain_ground(scene, light)
    expected = (light.direct_normal_lx * math.sin(math.radians(elevation)) + light.diffuse_horizontal_lx) / math.pi
    for azimuth, distance in ((0.0, 3.0), (2.0, 400.0), (4.0, 30_000.0)):
        land_xyz(cover, land, distance, azimuth, -EYE / distance, 1.0, np.empty(3), out)
        assert out[1] == pytest.approx(albedo * expected, rel=1e-9)
    assert mean_ground_xyz(cover)[1] == pytest.approx(albedo * expected, rel=1e-9)


def test_clearings_of_a_forest_are_grass():
    # dark woods send back a few per cent of light, grass about a tenth (our own scenery); nothing is black
    scene = make_scene((40.0, 200.0), ground={"cover": "forest", "relief_m": 50.0})
    light = illumination(scene, np.arange(380.0, 781.0, 20.0))
    cover, land, out = plain_ground(scene, light)
    seen = []
    for x, y in np.mgrid[-3000.0:3000.0:97.0, -3000.0:3000.0:97.0].reshape(2, -1).T:
        wood = reflectance(cover, land, x, y, 8.0, out)
        seen.append((wood, out[1]))
    wood, green = np.array(seen).T
    assert (wood == 0.0).any() and (wood == 1.0).any()
    assert green.min() > 0.01
    assert green[wood == 0.0].mean() > 1.5 * green[wood == 1.0].mean()


def plain_ground(scene, light):
    from raytrace.colour import xyz_weights

    weights = xyz_weights(light.wavelength_nm)
    sun = direction(light.sun.azimuth_deg, light.sun.elevation_deg)
    cover = make_cover(scene.ground, light.direct_normal @ weights, light.diffuse_horizontal @ weights, sun)
    return cover, make_terrain(scene.ground, EYE, PIXEL), np.empty(3)
