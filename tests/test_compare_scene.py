"""Bows in a scene: against the rendered picture, where arcs end and why, and filters against Mueller's matrices."""

import math

import numpy as np
import pytest
from skies import make_scene

import raytrace
from raytrace.camera.lens import direction_pixels
from raytrace.comparison import in_scene, run
from raytrace.comparison.estimate import BLOCKS
from raytrace.comparison.in_scene import EYE_CONTRAST, VISIBILITY_CONTRAST, verdict
from raytrace.light.sun import antisolar, direction, sun_place
from raytrace.sky.radiance import layered_radiance
from raytrace.sky.shade import FIRST_ORDER

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


def test_filter_against_mueller_matrices():
    rng = np.random.default_rng(4)
    drops, lit, rest = rng.uniform(0.1, 1, (2, 5, 2)), rng.uniform(0.1, 1, (3, 2)), rng.uniform(0.1, 1, 3)
    arc, tangents = in_scene._circle(direction(70.0, -20.0), math.radians(42.0))
    for p in (2, 3):
        for at in range(3):
            for axis in (tangents[at], tangents[100], tangents[300]):
                got = in_scene._filtered(drops, lit, rest, p, arc, tangents, axis, at=at)
                axis = axis - (axis @ arc[at]) * arc[at]
                axis /= np.linalg.norm(axis)
                across = np.cross(arc[at], tangents[at])
                angle = math.atan2(axis @ across, axis @ tangents[at])
                # first row of an ideal polariser's Mueller matrix, reference along the arc
                row = 0.5 * np.array([1, math.cos(2 * angle), math.sin(2 * angle)])
                stokes = [[(s + q, s - q, 0.0) for s, q in curtain] for curtain in drops]
                orders = np.array([sum(row @ stokes[c][k] * lit[at, c] for c in range(2)) for k in range(5)])
                expected = orders[p] / (0.5 * rest[at] + orders.sum() - orders[p])
                assert got == pytest.approx(expected, rel=1e-9)


SPRAY = {"water": "sea", "size_law": "single", "diameter_mm": 0.6, "extinction_per_km": 3.0, "near_m": 30.0,
         "far_m": 100.0, "top_m": 60.0, "edge_m": 10.0, "edge_top_m": 10.0}  # fmt: skip


def seen_with(curtains, **more):
    """A scene's estimates and sight as `compare` makes them, without the rounds that follow."""
    scene = make_scene((20.0, 250.0), rain=curtains, sky={"model": "uniform"}, camera=WIDE)
    kept = {}
    real = run.Sight.bow

    def spy(self, estimates, order, centre, peak_bin):
        kept.update(sight=self, estimates=estimates, bins=kept.get("bins", {}) | {order: (centre, peak_bin)})
        return real(self, estimates, order, centre, peak_bin)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(run.Sight, "bow", spy)
        # what is asked of these holds for any number of rays and wavelengths
        patch.setattr(run, "FIRST_RAYS", (16_000, 3_200))
        patch.setattr(run, "_STEP_NM", 20.0)
        report = raytrace.compare(scene, tolerance=0.5, **more)
    return report, kept


@pytest.mark.parametrize("count", [1, 2, 4])
def test_light_along_the_arc_is_the_kernels(count):
    """Sunlit rain times the drops' light is what the kernel of the sky gives for whole tables."""
    curtains = [RAIN, SPRAY, {**RAIN, "water": "sea"}, {**RAIN, "temperature_c": 30.0}][:count]
    report, kept = seen_with(curtains, orders=1)
    estimates, sight = kept["estimates"], kept["sight"]
    tables = [np.repeat(e.colour[1].mean(axis=0).sum(axis=1)[..., None], 3, axis=-1) for e in estimates]
    view = sight._view._replace(orders=np.ascontiguousarray(np.stack(tables)))
    for row in report.rows:
        _, peak_bin = kept["bins"][row.order]
        arc, _, rest, lit, _ = sight._arcs[row.order, peak_bin]
        light = layered_radiance(view, arc, np.ones(len(arc), dtype=bool), sight._lens.pixel_rad)[..., 1]
        drops = np.stack([e.colour[1, :, :, :, peak_bin].mean(axis=0) for e in estimates])
        own, behind = in_scene._along(drops, lit, rest, row.order + 1)
        # the kernel interpolates between bins by an arc cosine: good to a millionth of a steep curve
        np.testing.assert_allclose(own, light[:, FIRST_ORDER + row.order + 1], rtol=2e-5, atol=1e-9)
        np.testing.assert_allclose(own + behind, light.sum(axis=1), rtol=2e-5)
        assert lit.shape == (360, count) and (lit.max(axis=0) > 0).all()


def test_every_curtain_is_traced_and_counts():
    one = seen_with([RAIN], orders=1)[0]
    both, kept = seen_with([RAIN, SPRAY], orders=1)
    first, second = kept["estimates"]
    assert all(e.mono.sum() > 0 and e.colour.sum() > 0 for e in (first, second))
    assert first.rays[1] == second.rays[1]
    for alone, row in zip(one.rows, both.rows, strict=True):
        # the spray's skylight and glow are behind the rain's bow
        assert row.scene["behind_luminance_cd_m2"] != alone.scene["behind_luminance_cd_m2"]
        for name in in_scene.LIGHT_FIGURES:
            assert row.scene[name] > 0 and 0 < row.scene["standard_error"][name] < 0.05 * row.scene[name]
        for name in in_scene.FILTERS:
            assert set(row.scene[name]["standard_error"]) == set(in_scene.FILTER_FIGURES)
            assert all(error > 0 for error in row.scene[name]["standard_error"].values())
    assert "the first of its curtains" in both.to_text() and "its rain" in one.to_text()


def test_what_is_no_number_is_never_told():
    report, kept = seen_with([RAIN], orders=1)
    sight, estimates = kept["sight"], kept["estimates"]
    centre, peak_bin = kept["bins"][1]
    arc, tangents, rest, lit, grounded = sight._arcs[1, peak_bin]
    for k, broken in ((2, np.full_like(rest, np.nan)), (3, np.full_like(lit, np.inf))):
        parts = [arc, tangents, rest, lit, grounded]
        parts[k] = broken
        sight._arcs[1, peak_bin] = tuple(parts)
        with pytest.raises(ArithmeticError, match="not a number"):
            sight.bow(estimates, 1, centre, peak_bin)
    report.rows[0].polarisation = math.nan
    with pytest.raises(ValueError):
        report.to_json()


def test_standard_errors_in_a_scene_are_those_of_many_runs():
    """Scatter of the figures over 200 made-up runs against what each run says."""
    rng = np.random.default_rng(11)
    arc, tangents = in_scene._circle(direction(70.0, -20.0), math.radians(42.0))
    why = np.full(360, "no rain", dtype=object)
    why[120:240] = ""
    lit = np.stack([np.linspace(0.2, 1.0, 360), np.linspace(0.9, 0.1, 360)], axis=1)
    rest = np.linspace(3.0, 5.0, 360)
    true = rng.uniform(0.5, 2.0, (2, 4, 2))
    values, errors = [], []
    for _ in range(200):
        drops = true * rng.normal(1.0, 0.2, (BLOCKS, 2, 4, 2))
        out = in_scene._seen(drops, lit, rest, 2, arc, tangents, why)
        keys = [(out, out["standard_error"], k) for k in in_scene.LIGHT_FIGURES]
        keys += [(out[f], out[f]["standard_error"], k) for f in in_scene.FILTERS for k in in_scene.FILTER_FIGURES]
        values.append([v[k] for v, _, k in keys])
        errors.append([e[k] for _, e, k in keys])
    # the scatter of 200 is itself known to 1/sqrt(400) = 5 %; three and a half of these over eight figures
    np.testing.assert_allclose(np.sqrt(np.mean(np.square(errors), axis=0)), np.std(values, axis=0, ddof=1), rtol=0.18)


def test_rays_are_added_until_the_scene_is_known_too():
    scene = make_scene((20.0, 250.0), rain=RAIN, sky={"model": "uniform"}, camera=WIDE)
    fine = raytrace.compare(scene, orders=1, tolerance=5e-5, most_rays=(200_000, 48_000))
    assert fine.rays[1] == 48_000 and fine.rows[0].standard_error["peak_ratio_luminance"] == 0
    short = raytrace.compare(scene, orders=1, tolerance=1e-6, most_rays=(200_000, 24_000))
    assert "peak_luminance_cd_m2" in short.rows[0].scene["tolerance_missed"]
    assert "filter_feet.contrast" in short.rows[0].scene["tolerance_missed"]
    assert "primary, in the scene: peak_luminance_cd_m2" in short.to_text()
    assert all(len(line) <= 120 for line in short.to_text().splitlines())


def test_no_rain_is_said_before_the_frame():
    camera = {**WIDE, "field_of_view_deg": 30.0, "elevation_deg": 18.0}
    for ground in ("plain", "none"):
        dry = make_scene(
            (20.0, 250.0), rain={**RAIN, "extinction_per_km": 0.0}, ground={"cover": ground}, camera=camera
        )
        row = bows(dry, orders=1)[0]
        assert row.scene["verdict"] == "not seen: no sunlit rain there"
        assert row.scene["hidden_by"]["edge of the frame"] > 180
    away = make_scene((20.0, 250.0), rain=RAIN, camera={**camera, "azimuth_deg": 250.0})
    assert bows(away, orders=1)[0].scene["verdict"] == "not seen: outside the frame"


def test_pixels_cost_no_memory(monkeypatch):
    big = {**WIDE, "width_px": 32_768, "height_px": 32_768}
    monkeypatch.setattr("raytrace.preflight.free_bytes", lambda: 1.0e9)
    assert bows(make_scene((20.0, 250.0), rain=RAIN, camera=big), orders=1)[0].scene["contrast_best"] > 0
    monkeypatch.setattr("raytrace.preflight.free_bytes", lambda: 0.2e9)
    with pytest.raises(
        raytrace.InputError, match=r"would need 0\.. GB of memory and 0\.2 GB are free; what works: fewer"
    ):
        bows(make_scene((20.0, 250.0), rain=RAIN, camera=big), orders=1)


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
        if row.scene["visible"]:
            assert all(row.scene[name] is not None for name in in_scene.LIGHT_FIGURES[:2])
        assert row.scene["verdict"] and -90 <= row.top_elevation_deg <= 90
        assert all(value is None or np.isfinite(value) for value in row.scene["standard_error"].values())


def test_a_drop_under_a_sun_gets_a_place():
    row = raytrace.compare(raytrace.Drop(sun_elevation_deg=10.0), orders=1).rows[0]
    assert row.top_elevation_deg == pytest.approx(row.peak_deg - 10)
    assert row.scene is None
