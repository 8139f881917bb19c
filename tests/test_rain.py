"""Curtains of rain against a slow twin and closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from skies import HARD, make_scene

from raytrace.light.sun import direction
from raytrace.sky import rain as module
from raytrace.sky.rain import azimuth_limits_deg, look_through, make_curtains

FAR = 1e7
COARSE = (9, 6, 5)
SUN = (20.0, 250.0)
SOFT = {"extinction_per_km": 1.0, "near_m": 400.0, "far_m": 2200.0, "top_m": 1500.0, "edge_m": 300.0}
CURTAINS = {
    "soft": [SOFT],
    "hard": [{**SOFT, **HARD}],
    "two that overlap": [
        SOFT,
        {"extinction_per_km": 2.5, "near_m": 900.0, "far_m": 1400.0, "top_m": 900.0, "azimuth_from_deg": 40.0}
        | {"azimuth_to_deg": 100.0, "edge_deg": 20.0, "bottom_m": -50.0},
    ],
    "eye inside": [
        {"extinction_per_km": 0.8, "near_m": 0.0, "far_m": 1500.0, "top_m": 1200.0, "bottom_m": -500.0}
        | {"edge_m": 0.0, "azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0}
    ],
}
VIEWS = [
    (70, 5),
    (70, 25),
    (85, 40),
    (60, 0),
    (120, 12),
    (30, 60),
    (250, 10),
    (70, 90),
    (70, -90),
    (75, -3),
    (70, 89.9),
]


def curtains(rain, sun=SUN, haze=0.0):
    scene = make_scene(sun, rain=rain)
    return make_curtains(scene, [r.extinction_per_km for r in scene.rain], direction(sun[1], sun[0]), haze)


def through(state, view, *, eye=2.0, reach=FAR):
    count = len(state.shape)
    sunlit, skylit = np.full((2, count), np.nan)
    clear = look_through(state, *direction(*view), eye, reach, sunlit, skylit, np.empty(5 * count))
    return clear, sunlit, skylit


def smooth(low, high, x):
    t = np.clip((x - low) / (high - low), 0, 1) if high > low else (x > low).astype(float)
    return t * t * (3 - 2 * t)


def density(rain, antisolar_deg, points):
    """Extinction [1/m] of one [rain] table at points (n, 3), straight from what its keys say."""
    x, y, z = points.T
    r = np.hypot(x, y)
    e, t = rain.edge_m / 2, rain.edge_top_m / 2
    start, end = azimuth_limits_deg(rain, antisolar_deg)
    out = (1 - smooth(rain.far_m - e, rain.far_m + e, r)) * (1 - smooth(rain.top_m - t, rain.top_m + t, z))
    # rain that begins at the camera or reaches the ground has no edge there, and goes on 100 m below the camera's foot
    if rain.near_m > 0:
        out = out * smooth(rain.near_m - e, rain.near_m + e, r)
    out = out * (smooth(rain.bottom_m - t, rain.bottom_m + t, z) if rain.bottom_m > 0 else z > rain.bottom_m - 100)
    if end - start < 360:
        away = np.abs((np.degrees(np.arctan2(x, y)) - (start + end) / 2 + 180) % 360 - 180)
        half = (end - start) / 2
        out = out * (1 - smooth(half - rain.edge_deg / 2, half + rain.edge_deg / 2, away))
    return rain.extinction_per_km * 1e-3 * out


def slow_through(tables, view, *, sun=SUN, eye=2.0, reach=FAR, haze=0.0, steps=3000):
    """The same integral by brute force: fine midpoints along the view, and from each along the way to the sun."""
    rains = make_scene(sun, rain=tables).rain
    antisolar = (sun[1] + 180) % 360
    ray, to_sun = direction(*view), direction(sun[1], sun[0])
    end = min(reach, 12_000.0)
    step = end / steps
    s = (np.arange(steps) + 0.5) * step
    points = np.array([0, 0, eye]) + s[:, None] * ray
    here = np.array([density(r, antisolar, points) for r in rains])
    depth = np.cumsum(here.sum(axis=0)) * step - here.sum(axis=0) * step / 2
    seen = np.exp(-depth) * step
    sunlit = np.zeros(len(rains))
    inward = (np.arange(1500) + 0.5) * 6.0
    for k in np.flatnonzero(here.sum(axis=0)):
        path = points[k] + inward[:, None] * to_sun
        into = sum(density(r, antisolar, path).sum() for r in rains) * 6.0
        sunlit += here[:, k] * seen[k] * math.exp(-into - haze * s[k])
    return math.exp(-here.sum() * step), sunlit, (here * seen).sum(axis=1)


@pytest.mark.parametrize("name", CURTAINS)
def test_against_brute_force(name):
    state = curtains(CURTAINS[name], haze=6e-5)
    lit = 0
    for view in VIEWS:
        clear, sunlit, skylit = through(state, view)
        slow_clear, slow_sunlit, slow_skylit = slow_through(CURTAINS[name], view, haze=6e-5)
        assert clear == pytest.approx(slow_clear, abs=1e-3), view
        np.testing.assert_allclose(skylit, slow_skylit, atol=1e-3, err_msg=str(view))
        np.testing.assert_allclose(sunlit, slow_sunlit, atol=4e-3, err_msg=str(view))
        lit += slow_sunlit.sum() > 0.05
    assert lit >= 3


rain_tables = st.fixed_dictionaries(
    {
        "extinction_per_km": st.floats(0, 50),
        "near_m": st.floats(0, 3000),
        "far_m": st.floats(3001, 8000),
        "bottom_m": st.floats(-500, 500),
        "top_m": st.floats(501, 4000),
        "azimuth_from_deg": st.floats(0, 360),
        "azimuth_to_deg": st.floats(361, 720),
        "edge_m": st.sampled_from([0.0, 10.0, 400.0]),
        "edge_top_m": st.sampled_from([0.0, 10.0, 400.0]),
        "edge_deg": st.sampled_from([0.0, 1.0, 30.0]),
    }
)


@settings(max_examples=40, deadline=None)
@given(tables=st.lists(rain_tables, min_size=1, max_size=3), view=st.tuples(st.floats(0, 360), st.floats(-90, 90)))
def test_what_is_taken_from_the_view_is_what_the_drops_fill(tables, view):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "_GRID", COARSE)
        state = curtains(tables, haze=1e-4)
    for reach in (FAR, 1700.0):
        clear, sunlit, skylit = through(state, view, reach=reach)
        assert 0 <= clear <= 1
        # conservative: exactly, but for rounding
        assert skylit.sum() == pytest.approx(1 - clear, abs=1e-12)
        assert (sunlit >= 0).all() and (sunlit <= skylit + 1e-15).all()


@pytest.fixture
def coarse_sunward_table(monkeypatch):
    # what look_through does does not hang on the table's fineness; a small one keeps the test quick
    monkeypatch.setattr(module, "_GRID", COARSE)


SLAB = {**HARD, "near_m": 500.0, "far_m": 3000.0, "bottom_m": -2000.0, "top_m": 2000.0}


@pytest.mark.parametrize("elevation", [0.0, 1.0, 20.0])
@pytest.mark.parametrize("per_km", [0.02, 1.0, 8.0])
def test_slab_seen_with_the_sun_behind(elevation, per_km):
    # Seen from the sun's side every path in is as long as the path out: int exp(-2 t) dt = (1 - exp(-2 tau)) / 2.
    sun = (elevation, 250.0)
    state = curtains([{**SLAB, "extinction_per_km": per_km}], sun)
    clear, sunlit, skylit = through(state, (70.0, -elevation))
    depth = per_km * 2.5 / math.cos(math.radians(elevation))
    assert clear == pytest.approx(math.exp(-depth), rel=1e-9)
    assert skylit[0] == pytest.approx(1 - math.exp(-depth), rel=1e-9)
    assert sunlit[0] == pytest.approx((1 - math.exp(-2 * depth)) / 2, rel=0.02)


def test_thin_rain_is_sunlit_through_and_through():
    state = curtains([{**SLAB, "extinction_per_km": 1e-4}])
    _, sunlit, skylit = through(state, (70.0, 5.0))
    assert sunlit[0] == pytest.approx(skylit[0], rel=1e-3)
    assert skylit[0] == pytest.approx(1e-4 * 2.5 / math.cos(math.radians(5)), rel=1e-3)


def test_haze_dims_sunlit_rain_alone(coarse_sunward_table):
    thin = [{**SLAB, "extinction_per_km": 1e-4, "near_m": 1000.0, "far_m": 1001.0}]
    clear, sunlit, skylit = through(curtains(thin), (70.0, 0.0))
    hazy_clear, hazy_sunlit, hazy_skylit = through(curtains(thin, haze=1e-3), (70.0, 0.0))
    assert (hazy_clear, hazy_skylit[0]) == (clear, skylit[0])
    assert hazy_sunlit[0] / sunlit[0] == pytest.approx(math.exp(-1.0005), rel=1e-6)


def test_the_view_ends_on_the_ground(coarse_sunward_table):
    state = curtains([{**SLAB, "extinction_per_km": 1.0}])
    for reach, inside in ((400.0, 0.0), (500.0, 0.0), (1500.0, 1.0), (3000.0, 2.5), (9000.0, 2.5)):
        assert through(state, (70.0, 0.0), reach=reach)[0] == pytest.approx(math.exp(-inside), rel=1e-12)


@pytest.mark.parametrize("view", [(250, 0), (250, 40), (160, 1), (340, -5), (70, 90), (70, -90), (70, 80)])
def test_nothing_where_no_rain_is(view, coarse_sunward_table):
    # the default curtain reaches 85 deg to either side of the antisolar point
    state = curtains([{**SLAB, "extinction_per_km": 5.0}, {**SLAB, "extinction_per_km": 1.0}])
    clear, sunlit, skylit = through(state, view)
    assert clear == 1.0
    np.testing.assert_array_equal([sunlit, skylit], 0.0)


def test_rain_of_no_drops_is_nothing(coarse_sunward_table):
    clear, sunlit, skylit = through(curtains([{**SLAB, "extinction_per_km": 0.0}]), (70.0, 10.0))
    assert (clear, sunlit[0], skylit[0]) == (1.0, 0.0, 0.0)


def test_one_curtain_cut_in_two_is_the_same_rain():
    whole = {**SLAB, "extinction_per_km": 1.0}
    two = [{**whole, "far_m": 1200.0}, {**whole, "near_m": 1200.0}]
    for view in ((70, 3), (100, 20)):
        clear, sunlit, skylit = through(curtains([whole]), view)
        cut_clear, cut_sunlit, cut_skylit = through(curtains(two), view)
        assert cut_clear == pytest.approx(clear, abs=1e-3)
        assert cut_skylit.sum() == pytest.approx(skylit[0], abs=1e-3)
        assert cut_sunlit.sum() == pytest.approx(sunlit[0], abs=4e-3)


def test_two_halves_in_one_place_are_one(coarse_sunward_table):
    half, whole = {**SLAB, "extinction_per_km": 0.6}, {**SLAB, "extinction_per_km": 1.2}
    clear, sunlit, skylit = through(curtains([whole]), (70, 3))
    both_clear, both_sunlit, both_skylit = through(curtains([half, half]), (70, 3))
    assert both_clear == pytest.approx(clear, rel=1e-12)
    np.testing.assert_allclose(both_skylit, skylit[0] / 2, rtol=1e-12)
    # the steps are shared out among more ends
    np.testing.assert_allclose(both_sunlit, sunlit[0] / 2, rtol=5e-3)


@pytest.mark.parametrize("turn", [110.0, 180.0, 290.0, 359.9])
def test_no_direction_is_special(turn):
    # everything turned round the zenith together looks the same; turns by 110 and 290 put the limits across north
    tables = [{**SOFT, "azimuth_from_deg": 20.0, "azimuth_to_deg": 130.0}]
    turned = [{**SOFT, "azimuth_from_deg": (20.0 + turn) % 360, "azimuth_to_deg": (130.0 + turn) % 360}]
    state, other = curtains(tables), curtains(turned, (SUN[0], (SUN[1] + turn) % 360))
    for azimuth in (16.0, 22.0, 70.0, 128.0, 133.0):
        clear, sunlit, skylit = through(state, (azimuth, 9.0))
        assert through(other, (azimuth + turn, 9.0))[0] == pytest.approx(clear, abs=1e-9)
        np.testing.assert_allclose(through(other, (azimuth + turn, 9.0))[1:], [sunlit, skylit], atol=1e-9)


def test_rain_all_round_has_no_seam():
    table = {**SOFT, "azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0, "edge_deg": 30.0}
    state = curtains([table], (20.0, 90.0))
    values = np.array([through(state, (azimuth, 9.0))[1][0] for azimuth in np.arange(-3, 3.01, 0.25)])
    # less than a thousandth: no eye sees that as an edge
    assert np.abs(np.diff(values, 2)).max() < 1e-3 * values.mean()


@pytest.mark.parametrize("name", CURTAINS)
def test_finer_steps_change_little(name, monkeypatch):
    coarse = curtains(CURTAINS[name])
    monkeypatch.setattr(module, "_GRID", tuple(3 * n // 2 for n in module._GRID))
    fine = curtains(CURTAINS[name])
    monkeypatch.setattr(module, "VIEW_STEPS", 2 * module.VIEW_STEPS)
    count = len(fine.shape)
    for view in VIEWS[:4]:
        sunlit, skylit = np.zeros((2, count))
        clear = look_through.py_func(fine, *direction(*view), 2.0, FAR, sunlit, skylit, np.empty(5 * count))
        plain_clear, plain_sunlit, plain_skylit = through(coarse, view)
        assert plain_clear == pytest.approx(clear, abs=1e-3)
        np.testing.assert_allclose(plain_skylit, skylit, atol=1e-3)
        np.testing.assert_allclose(plain_sunlit, sunlit, rtol=0.01)


def test_compiled_and_plain_are_one(coarse_sunward_table):
    state = curtains(CURTAINS["two that overlap"], haze=1e-4)
    for view in VIEWS[:4]:
        sunlit, skylit = np.zeros((2, 2))
        clear = look_through.py_func(state, *direction(*view), 2.0, FAR, sunlit, skylit, np.empty(10))
        assert clear == pytest.approx(through(state, view)[0], rel=1e-13)
        np.testing.assert_allclose([sunlit, skylit], through(state, view)[1:], rtol=1e-13)


def test_threads_do_not_change_the_sunward_table(monkeypatch):
    monkeypatch.setattr(module, "_GRID", (12, 10, 7))
    scene, sun = make_scene(SUN, rain=[SOFT]), direction(SUN[1], SUN[0])
    one, two = (make_curtains(scene, [1.0], sun, 0.0, threads=n).sun_depth for n in (1, 2))
    np.testing.assert_array_equal(one, two)
    assert one.max() > 1


def test_rain_that_reaches_the_ground_is_whole_there():
    # level and downward views meet full density: no soft underside thins the feet of a bow
    ground, low = {**SOFT, "bottom_m": 0.0}, {**SOFT, "bottom_m": -900.0}
    for elevation in (-3.0, 0.0, 2.0):
        whole = through(curtains([low]), (70.0, elevation), reach=1800.0)
        reached = through(curtains([ground]), (70.0, elevation), reach=1800.0)
        assert reached[0] == pytest.approx(whole[0], rel=1e-3)
        assert reached[1] == pytest.approx(whole[1], rel=5e-3)
    # and rain that begins at the camera has no hollow round it
    inside = through(curtains([{**SOFT, "near_m": 0.0}]), (70.0, 0.0), reach=100.0)
    assert inside[0] == pytest.approx(math.exp(-0.1), rel=1e-9)


def test_azimuth_limits():
    def limits(**keys):
        return azimuth_limits_deg(make_scene(rain=keys).rain[0], 70.0)

    assert limits() == (-15.0, 155.0)
    assert limits(azimuth_from_deg=350.0, azimuth_to_deg=20.0) == (350.0, 380.0)
    assert limits(azimuth_from_deg=0.0, azimuth_to_deg=360.0) == (0.0, 360.0)
    assert limits(azimuth_from_deg=-30.0) == (-30.0, 155.0)
    assert limits(azimuth_to_deg=-20.0) == (-15.0, 340.0)
