"""Bows in a scene: against the rendered picture, where arcs end and why, and filters against Mueller's matrices."""

import math

import numpy as np
import pytest
from skies import make_scene

import raytrace
from raytrace.camera.lens import direction_pixels
from raytrace.comparison import in_scene
from raytrace.comparison.in_scene import EYE_CONTRAST, VISIBILITY_CONTRAST, verdict
from raytrace.light.sun import antisolar, direction, sun_place

RAIN = {"extinction_per_km": 0.5, "near_m": 300.0, "far_m": 2000.0, "top_m": 3000.0}
WIDE = {"field_of_view_deg": 110.0, "elevation_deg": 15.0, "width_px": 220, "height_px": 150}


def bows(scene, orders=2, **more):
    return raytrace.compare(scene, orders=orders, tolerance=0.05, **more).rows


def reasons(row):
    return {end for part in row.scene["visible"] for end in part["ends"]}


def test_luminance_and_contrast_are_those_of_the_picture():
    narrow = {"field_of_view_deg": 40.0, "elevation_deg": 26.0, "width_px": 300, "height_px": 220}
    scene = make_scene((20.0, 250.0), rain=RAIN, sky={"model": "uniform", "luminance_cd_m2": 1500.0}, camera=narrow)
    frame = raytrace.render(scene, layers=True)
    total = sum(layer.astype(float) for layer in frame.layers.values())[..., 1]
    azimuth, elevation = antisolar(sun_place(scene))
    for row in bows(scene):
        # along the top of the arc, at the peak's radius, in the nearest pixel
        turn = np.radians(np.arange(-20, 21, 2))[:, None]
        centre = direction(azimuth, elevation)
        right = direction(azimuth + 90, 0.0)
        up = np.cross(right, centre)
        radius = math.radians(row.peak_deg)
        arc = math.cos(radius) * centre + math.sin(radius) * (np.cos(turn) * up + np.sin(turn) * right)
        x, y, seen = direction_pixels(frame.lens, arc)
        assert seen.all()
        pixel = y.astype(int), x.astype(int)
        own = frame.layers[f"order{row.order}"][..., 1].astype(float)
        # a pixel is an eighth of a degree wide here: the best of three across
        near = [(np.clip(pixel[0] + d, 0, 219), pixel[1]) for d in (-1, 0, 1)]
        luminance = np.max([own[at] for at in near], axis=0)
        contrast = np.max([own[at] / (total[at] - own[at]) for at in near], axis=0)
        assert luminance.max() == pytest.approx(row.scene["peak_luminance_cd_m2"], rel=0.05)
        assert contrast.max() == pytest.approx(row.scene["contrast_best"], rel=0.06)


def test_arcs_end_at_the_horizon_and_at_the_frame():
    # far rain over a plain: the ground hides both feet
    far = {**RAIN, "near_m": 9000.0, "far_m": 12000.0, "edge_m": 100.0, "top_m": 9000.0}
    row = bows(make_scene((20.0, 250.0), rain=far, ground={"cover": "plain"}, camera=WIDE), orders=1)[0]
    assert reasons(row) == {"horizon"} and len(row.scene["visible"]) == 1
    # half the visible arc by spherical trigonometry: sin of the foot's elevation is nought
    half = math.degrees(math.acos(math.sin(math.radians(20)) * math.cos(math.radians(row.peak_deg)) / (
        math.cos(math.radians(20)) * math.sin(math.radians(row.peak_deg)))))  # fmt: skip
    assert row.scene["visible"][0]["to_deg"] == pytest.approx(half, abs=1.5)
    narrow = {**WIDE, "field_of_view_deg": 30.0, "height_px": 220, "elevation_deg": 22.0}
    row = bows(make_scene((20.0, 250.0), rain=RAIN, camera=narrow), orders=1)[0]
    assert reasons(row) == {"edge of the frame"}


def test_arcs_end_where_rain_ends():
    # rain on the right half only; antisolar azimuth 70
    half = {**RAIN, "azimuth_from_deg": 70.0, "azimuth_to_deg": 150.0, "edge_deg": 1.0}
    row = bows(make_scene((20.0, 250.0), rain=half, ground={"cover": "plain"}, camera=WIDE), orders=1)[0]
    assert "no rain" in reasons(row)
    assert row.scene["visible"][0]["from_deg"] == pytest.approx(0, abs=2)


def test_hills_end_an_arc():
    hills = {"cover": "forest", "relief_m": 900.0, "hills_from_m": 1200.0, "reaches_m": 6000.0}
    far = {**RAIN, "near_m": 7000.0, "far_m": 9000.0, "edge_m": 100.0, "top_m": 9000.0}
    row = bows(make_scene((10.0, 250.0), rain=far, ground=hills, camera=WIDE), orders=1)[0]
    assert "ground" in reasons(row)


def test_a_full_circle_closes():
    all_round = {**RAIN, "near_m": 0.0, "azimuth_from_deg": 0.0, "azimuth_to_deg": 360.0}
    camera = {"projection": "fisheye", "field_of_view_deg": 140.0, "elevation_deg": -35.0, "height_m": 400.0}
    scene = make_scene((35.0, 250.0), rain=all_round, ground={"cover": "plain"}, camera=camera)
    row = bows(scene, orders=1)[0]
    assert row.scene["visible"] == [{"from_deg": -180.0, "to_deg": 180.0, "ends": ["closes", "closes"]}]
    assert row.scene["visible_arc_deg"] == 360


def test_below_the_horizon_is_said_and_not_zero():
    # a rule of thumb: with the sun above 42 degrees the primary is below the horizon; common practice, no source
    far = {**RAIN, "near_m": 3000.0, "far_m": 5000.0}
    scene = make_scene((50.0, 250.0), rain=far, ground={"cover": "plain"}, camera={**WIDE, "elevation_deg": -5.0})
    report = raytrace.compare(scene, orders=1, tolerance=0.05)
    row = report.rows[0]
    assert row.top_elevation_deg == pytest.approx(row.peak_deg - 50)
    assert row.scene["verdict"] == "not seen: below the horizon"
    assert row.scene["peak_luminance_cd_m2"] is None and row.light_share > 0.03
    assert "wholly below the horizon by" in report.to_text()


def test_verdicts_at_the_thresholds():
    assert verdict(VISIBILITY_CONTRAST).startswith("can be seen")
    assert verdict(EYE_CONTRAST).startswith("at the limit")
    assert verdict(0.019).startswith("not by eye")
    assert verdict(None).startswith("stands before black")


def test_filter_against_mueller_matrices(monkeypatch):
    kept = {}
    real = in_scene._filtered

    def spy(light, p, arc, tangents, axis, *, at):
        out = real(light, p, arc, tangents, axis, at=at)
        kept.setdefault(p, []).append((light[at].copy(), arc[at], tangents[at], axis, out))
        return out

    monkeypatch.setattr(in_scene, "_filtered", spy)
    bows(make_scene((20.0, 250.0), rain=RAIN, ground={"cover": "plain"}, camera=WIDE))
    assert set(kept) == {2, 3}
    for p, found in kept.items():
        for light, view, tangent, axis, got in found:
            axis = axis - (axis @ view) * view
            axis /= np.linalg.norm(axis)
            across = np.cross(view, tangent)
            angle = math.atan2(axis @ across, axis @ tangent)
            # first row of an ideal polariser's Mueller matrix, reference along the arc
            row = 0.5 * np.array([1, math.cos(2 * angle), math.sin(2 * angle)])

            def through(along, across_, row=row):
                return row @ [along + across_, along - across_, 0.0]

            orders = np.array([through(s, q) for s, q in light[6:, [0, 2]]])
            rest = 0.5 * light[:6, 1].sum()
            assert got == pytest.approx(orders[p] / (rest + orders.sum() - orders[p]), rel=1e-9)


def test_the_best_filter_is_the_best_of_all_angles():
    report = raytrace.compare(orders=4)
    mono = report.curves["mono_sr"]
    for row in report.rows:
        theta = 180 - row.peak_deg if row.centre == "antisolar" else row.peak_deg
        # the peak at 550 nm stands near that of luminance
        window = np.abs(report.curves["angle_deg"] - theta) < 1.0
        k = np.flatnonzero(window)[mono[row.order + 1].sum(axis=0)[window].argmax()]
        own, glow = mono[row.order + 1, :, k], mono[:, :, k].sum(axis=0) - mono[row.order + 1, :, k]
        turn = np.radians(np.arange(0, 180))
        let = np.cos(turn) ** 2, np.sin(turn) ** 2
        ratio = (own[0] * let[0] + own[1] * let[1]) / (glow[0] * let[0] + glow[1] * let[1])
        assert ratio.argmax() == 0 and row.filter == "along the arc"
        # the bin beside may be the one: the glow near an edge is steep
        assert row.over_own_glow_550nm_filtered == pytest.approx(ratio.max(), rel=0.05)


def test_exposure_is_iso_12232s():
    # white is L_sat = 120 N^2 / (S t), ISO 12232 (from memory); half of it is the arc's brightest
    scene = make_scene((20.0, 250.0), rain=RAIN, sky={"model": "black"}, camera=WIDE)
    row = bows(scene, orders=1)[0]
    white = 120 * 8.0**2 / (100 * row.scene["exposure_s"])
    assert white / 2 >= row.scene["peak_luminance_cd_m2"]
    assert white / 2 == pytest.approx(row.scene["peak_luminance_cd_m2"], rel=0.1)


@pytest.mark.parametrize("sky", [{"model": "uniform"}, {"model": "black"}, {"cie_type": 3}])
@pytest.mark.parametrize("sun", [(0.2, 0.0), (89.99, 10.0)])
def test_any_sky_and_sun(sky, sun):
    rows = bows(make_scene(sun, rain=[RAIN, {**RAIN, "water": "sea"}], sky=sky, camera=WIDE), orders=3)
    for row in rows:
        assert row.scene["verdict"] and -90 <= row.top_elevation_deg <= 90
        assert all(value is None or np.isfinite(value) for value in row.scene["standard_error"].values())


def test_a_drop_under_a_sun_gets_a_place():
    row = raytrace.compare(raytrace.Drop(sun_elevation_deg=10.0), orders=1).rows[0]
    assert row.top_elevation_deg == pytest.approx(row.peak_deg - 10)
    assert row.scene is None
