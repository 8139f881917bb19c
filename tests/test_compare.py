"""Figures of the bows against handbooks, closed forms and a twin without random numbers."""

import dataclasses
import json
import math

import numpy as np
import pytest
from scipy import stats
from twins import disc_mean, quadrature_trace

import raytrace
from raytrace.colour import xyz_weights
from raytrace.comparison import estimate as estimating
from raytrace.comparison import figures
from raytrace.comparison.estimate import BLOCKS, Estimate, jackknife
from raytrace.comparison.figures import bow_figures, edges, order_name, ray_weight
from raytrace.drops.water import refractive_index
from raytrace.errors import InputError
from raytrace.light.disc import limb_darkening
from raytrace.optics.fold import DiscFold
from raytrace.optics.table import ring_solid_angle_sr


@pytest.fixture(scope="module")
def drop():
    """A drop of fixed index: check_values' numbers are for n = 1.333."""
    return raytrace.compare(raytrace.Drop(refractive_index=1.333), orders=7)


@pytest.fixture(scope="module")
def water():
    return raytrace.compare(orders=4)


def test_edges_of_a_physics_text():
    # Table of a general-physics text, published: theta for n = 1.331 (red) and 1.343 (violet); printed to 0.01 deg.
    # Order 12 folds through 0.
    table = {
        1: (137.63, 139.35),
        2: (129.63, 126.52),
        3: (42.47, 38.11),
        4: (42.76, 48.34),
        5: (127.08, 133.86),
        11: (93.11, 79.29),
        12: (10.19, 4.79),
    }
    for order, (red, violet) in table.items():
        place = edges(1.331, 1.343, 1.337, order)
        turned = [v if place["centre"] == "sun" else 180 - v for v in (place["red_edge_deg"], place["violet_edge_deg"])]
        assert turned == pytest.approx([red, violet], abs=0.0051)
    # Halliday, Resnick, Walker, Fundamentals of Physics, ch. 33 problems, published: widths 3.11 and 4.37 deg
    assert edges(1.331, 1.343, 1.337, 2)["colour_width_deg"] == pytest.approx(3.11, abs=0.0051)
    assert edges(1.331, 1.343, 1.337, 3)["colour_width_deg"] == pytest.approx(4.37, abs=0.0151)
    # the twelfth goes through the sun: the width is of the deviation, not of what is left after folding
    assert edges(1.331, 1.343, 1.337, 12)["colour_width_deg"] == pytest.approx(10.19 + 4.79, abs=0.02)


def test_what_each_bow_stands_round():
    # Großmann et al. 2011, Theusner 2011 (quoted): third and fourth round the sun; the rest by theta (recomputed)
    centres = [edges(1.331, 1.343, 1.333, k)["centre"] for k in range(1, 8)]
    assert centres == ["antisolar", "antisolar", "sun", "sun", "antisolar", "antisolar", "sun"]
    assert edges(2.1, 2.2, 2.15, 1) is None
    assert [order_name(k) for k in (1, 2, 3, 4, 5, 12)] == [
        "primary", "secondary", "tertiary", "quaternary", "5th", "12th"
    ]  # fmt: skip


def test_bow_ray_weights():
    # Fresnel weight at the bow ray, n = 1.333 (recomputed in check values), mean of s and p, printed digits
    for order, mean in ((1, 0.04563), (2, 0.01945), (3, 0.01073), (4, 0.00681)):
        assert ray_weight(1.333, order) == pytest.approx(mean, abs=0.6e-5)
    for order, ratio in ((2, 0.4264), (3, 0.2352), (4, 0.1491)):
        assert ray_weight(1.333, order) / ray_weight(1.333, 1) == pytest.approx(ratio, abs=1.5e-4)


def test_light_shares(drop):
    # Share of the intercepted light by Debye order, n = 1.333 (recomputed), printed digits; k = p - 1
    for row, share in zip(drop.rows, (0.04060, 0.006119, 0.001723, 0.000670, 0.000314, 0.000167), strict=False):
        assert row.light_share == pytest.approx(share, abs=0.6 * 10 ** (math.floor(math.log10(share)) - 3) + 1e-6)
    # order totals 1 : 0.15 : 0.042 : 0.017
    ratios = [row.light_share / drop.rows[0].light_share for row in drop.rows[:4]]
    assert ratios == pytest.approx([1, 0.15, 0.042, 0.017], rel=0.03)


def test_peak_ratios(drop, water):
    # Peak radiance after the sun's disc, sphere, no diffraction (recomputed; band 15 % with bin width)
    for report in (drop, water):
        assert [row.peak_ratio_550nm for row in report.rows[:4]] == pytest.approx([1, 0.168, 0.068, 0.028], rel=0.15)
    # flat 400-700 nm 1 : 0.123 : 0.042 : 0.015; luminance weighs a narrower band of colours and so lies between
    for row, flat, mono in zip(water.rows[1:4], (0.123, 0.042, 0.015), (0.168, 0.068, 0.028), strict=True):
        assert flat * 0.85 < row.peak_ratio_luminance < mono * 1.15


def test_peak_ratios_in_flat_light():
    # 400-700 nm with equal weight for each wavelength: the same band of 15 % about 1 : 0.123 : 0.042 : 0.015
    scene = raytrace.Drop().scene()
    wavelength = np.arange(400.0, 701.0, 10.0)
    index = refractive_index(scene.rain[0], scene.air, wavelength)
    one = Estimate(index, wavelength, index[15], 1.0, 0.533, 6)
    # undo the eye's weights, so that Y is the plain sum over wavelengths
    one.set_spectrum(1.0 / xyz_weights(wavelength)[:, 1])
    one.add_mono(40_000)
    one.add_colour(16_000)
    ratios, primary = [], None
    for order in (1, 2, 3, 4):
        found = bow_figures(one, order, edges(index[-1].real, index[0].real, index[15].real, order), primary)
        primary = primary or found
        ratios.append(found["value"]["peak_ratio_luminance"])
    assert ratios == pytest.approx([1, 0.123, 0.042, 0.015], rel=0.15)


def test_glow_and_filter(water):
    # Peak over the same drop's own background at 550 nm, without and with a polariser (recomputed, of water at 550 nm:
    # with n = 1.333 the edge of the fifth bow falls on the secondary's peak). No band is printed; 5 % for bin width.
    rows = water.rows[:4]
    assert [r.over_own_glow_550nm for r in rows] == pytest.approx([105, 17, 0.067, 0.036], rel=0.05)
    assert [r.over_own_glow_550nm_filtered for r in rows] == pytest.approx([166, 24, 0.129, 0.069], rel=0.05)
    assert all(row.filter == "along the arc" for row in rows)


def test_polarisation_at_the_peak_is_near_that_of_the_bow_ray(drop):
    # bow ray, n = 1.333 (recomputed): 0.9241, 0.8071, 0.7804, 0.7697; the disc mixes in rays beside it, less polarised
    for row, ray in zip(drop.rows[:4], (0.9241, 0.8071, 0.7804, 0.7697), strict=True):
        assert ray - 0.03 < row.polarisation < ray


def test_all_light_goes_somewhere(drop):
    bins = np.linspace(0, 180, estimating.BINS + 1)
    whole = (drop.curves["mono_sr"].sum(axis=(0, 1)) * ring_solid_angle_sr(bins)).sum()
    # n is real to 1e-8: a drop of 1 mm absorbs a few millionths; the fold keeps energy to 1e-5
    assert whole + drop.left_over == pytest.approx(1, abs=5e-5)


def test_peaks_against_the_twin(drop):
    n, bins = 1.333, estimating.BINS
    power = quadrature_trace(n, 9, bins)
    phase = 0.5 * power / ring_solid_angle_sr(np.linspace(0, 180, bins + 1))
    limb = limb_darkening([550.0])[0]
    for row in drop.rows[:4]:
        theta = 180 - row.peak_deg if row.centre == "antisolar" else row.peak_deg
        curve = phase[row.order + 1].sum(axis=0)

        def at(alpha, curve=curve):
            return curve[np.minimum((alpha / 180 * bins).astype(int), bins - 1)]

        # means over the bins round the top; their middles are those of the comparison
        width = 180 / bins
        near = (np.floor(theta / width) + np.arange(-6, 7) + 0.5) * width
        binned = [np.mean([disc_mean(at, t + s * width, 0.533, limb) for s in (-1 / 3, 0, 1 / 3)]) for t in near]
        # the parabola may settle in the bin beside the highest: 0.5 %; then four standard errors
        error = row.standard_error["peak_radiance_sr_550nm"]
        assert row.peak_radiance_sr_550nm == pytest.approx(max(binned), rel=0.005, abs=4 * error)


def test_jackknife_of_means_and_ratios():
    rng = np.random.default_rng(5)
    a, b = rng.normal(3, 0.1, (BLOCKS, 4)), rng.normal(2, 0.1, (BLOCKS, 4))
    value, error = jackknife(lambda x: x, a)
    np.testing.assert_allclose(value, a.mean(axis=0))
    # for a mean the jackknife is the usual standard error, exactly
    np.testing.assert_allclose(error, a.std(axis=0, ddof=1) / math.sqrt(BLOCKS))
    value, error = jackknife(lambda x, y: x / y, a, b)
    ma, mb = a.mean(axis=0), b.mean(axis=0)
    delta = ((a - ma) / mb - ma / mb**2 * (b - mb)).std(axis=0, ddof=1) / math.sqrt(BLOCKS)
    np.testing.assert_allclose(error, delta, rtol=0.02)


def test_standard_errors_cover_the_truth(monkeypatch):
    """Over 200 seeds the truth lies within one and two standard errors as often as Student's t says."""
    bins, paths, n, orders = 900, 6, 1.333 + 0j, (1, 2)
    monkeypatch.setattr(estimating, "BINS", bins)
    # bins of 0.2 degrees, so that 200 runs are quick; the parabola at the top needs some of them
    monkeypatch.setattr(figures, "_TOP_DEG", 0.5)
    edge = np.linspace(0, 180, bins + 1)
    phase = 0.5 * quadrature_trace(1.333, paths, bins) / ring_solid_angle_sr(edge)
    fold = DiscFold(edge, 0.533, [550.0])
    true = fold.fold(phase.reshape(-1, bins).T, 0).T.reshape(phase.shape)
    share = (phase.sum(axis=1) * ring_solid_angle_sr(edge)).sum(axis=1)
    within = {}
    for seed in range(200):
        one = Estimate([n], [550.0], n, 1.0, 0.533, paths, seed=seed, threads=1)
        one.set_spectrum([1.0])
        one.add_mono(BLOCKS * 4 * 400)
        one.add_colour(BLOCKS * 400)
        primary = None
        for order in orders:
            found = bow_figures(one, order, edges(1.333, 1.333, 1.333, order), primary)
            primary = primary or found
            s, q = true[order + 1, :, found["mono_bin"]]
            glow = true[:, :, found["mono_bin"]].sum(axis=0) - (s, q)
            truth = {
                "light_share": share[order + 1],
                "peak_radiance_sr_550nm": s + q,
                "polarisation": (s - q) / (s + q),
                "over_own_glow_550nm": (s + q) / glow.sum(),
                "over_own_glow_550nm_filtered": s / glow[0],
            }
            if order == 2:
                truth["peak_ratio_550nm"] = (s + q) / true[2, :, primary["mono_bin"]].sum()
            for name, value in truth.items():
                pull = abs(found["value"][name] - value) / found["error"][name]
                within.setdefault((order, name), []).append(pull)
    assert len(within) == 11
    for (order, name), pulls in within.items():
        for width in (1, 2):
            expected = 1 - 2 * stats.t.sf(width, BLOCKS - 1)
            inside = int((np.array(pulls) <= width).sum())
            # two-sided binomial test; 22 tests at 1e-4 each: a false alarm once in 450 runs, and seeds are fixed
            assert stats.binomtest(inside, len(pulls), expected).pvalue > 1e-4, (order, name, width, inside, expected)


def test_rays_are_added_until_the_tolerance_is_met():
    coarse = raytrace.compare(orders=2, tolerance=0.1)
    fine = raytrace.compare(orders=2, tolerance=0.003, most_rays=(4_000_000, 48_000))
    assert fine.rays[0] > coarse.rays[0]
    assert not coarse.rows[0].missed
    short = raytrace.compare(orders=2, tolerance=1e-5, most_rays=(400_000, 24_000))
    assert short.rays[0] <= 400_000 and "over_own_glow_550nm" in short.rows[0].missed
    assert "did not reach" in short.to_text() and "did not reach" not in coarse.to_text()


def test_same_seed_same_figures_on_any_threads():
    one, two = (raytrace.compare(orders=2, seed=3, threads=t).to_json() for t in (1, 2))
    assert one == two
    assert raytrace.compare(orders=2, seed=0).to_json() != one
    assert dataclasses.asdict(raytrace.compare(orders=1, seed=0).rows[0])["light_share"] > 0


def test_arguments_that_cannot_be():
    for build, told in (
        (lambda: raytrace.Drop(diameter_mm=math.nan), "diameter_mm: nan given.*0.002 to 8"),
        (lambda: raytrace.Drop(diameter_mm=10**400), "diameter_mm: a whole number of 1329 bits given.*0.002 to 8"),
        (lambda: raytrace.Drop(diameter_mm=10**5000), "diameter_mm: a whole number of 16610 bits given"),
        (lambda: raytrace.Drop(diameter_mm="1\n"), "diameter_mm: '1.*n' given"),
        (lambda: raytrace.compare("x"), "scene_or_drop: 'x' given, which is neither a scene nor a drop.*load_scene"),
        (lambda: raytrace.compare(raytrace.Drop), "scene_or_drop: <class .*neither a scene nor a drop"),
        (lambda: raytrace.compare(orders=True), "orders: True given.*1 to 12"),
        (lambda: raytrace.compare(orders=2.0), "orders: 2.0 given.*1 to 12"),
        (lambda: raytrace.compare(tolerance=True), "tolerance: True given"),
        (lambda: raytrace.compare(seed=True), "seed: True given.*from 0 to 9223372036854775807"),
        (lambda: raytrace.compare(threads=0), "threads: 0 given.*from 1 to"),
        (lambda: raytrace.compare(threads=True), "threads: True given"),
        (lambda: raytrace.compare(most_rays=(0, 0)), r"most_rays: \(0, 0\) given.*200000 and 24000"),
        (lambda: raytrace.compare(most_rays=5), "most_rays: 5 given"),
        (lambda: raytrace.Drop(temperature_c=-1), "temperature_c: -1 given.*0 to 50"),
        (lambda: raytrace.Drop(sun_elevation_deg=0), "sun_elevation_deg: 0 given.*above 0 to 90"),
        (lambda: raytrace.Drop(refractive_index=3.0), "refractive_index: 3.0 given.*1.1 to 1.9"),
        (lambda: raytrace.Drop(diameter_mm=True), "diameter_mm: True given"),
        (lambda: raytrace.compare(orders=0), "orders: 0 given.*1 to 12"),
        (lambda: raytrace.compare(orders=13), "orders: 13 given"),
        (lambda: raytrace.compare(tolerance=0.0), "tolerance: 0.0 given.*above 0 to 0.5"),
        (lambda: raytrace.compare(seed=-1), "seed: -1 given.*from 0"),
    ):
        with pytest.raises(InputError, match=told) as caught:
            build()
        assert all(line.isprintable() and "; what works: " in line for line in caught.value.problems)
    # numpy's numbers are numbers
    assert raytrace.Drop(diameter_mm=np.float32(0.5)).scene().rain[0].diameter_mm == 0.5
    assert raytrace.compare(orders=np.int64(1), tolerance=np.float64(0.1), seed=np.uint8(0)).rows[0].light_share > 0.03


def test_a_bow_beside_the_axis_is_not_the_axis():
    """Of n = 1.9 the primary stands 1.49 degrees from the antisolar point, where light also gathers on the axis."""
    report = raytrace.compare(raytrace.Drop(refractive_index=1.9), orders=1)
    row = report.rows[0]
    # bow ray by cos^2 i = (n^2 - 1)/3 (Descartes): the peak after the disc is within its radius on the bright side
    i = math.acos(math.sqrt((1.9**2 - 1) / 3))
    radius = 180 - math.degrees(2 * i + math.pi - 4 * math.asin(math.sin(i) / 1.9))
    assert 0 < radius - row.peak_deg < 0.27
    assert report.rays[0] < 50_000_000 and not row.missed
    # the axis itself is brighter than the bow
    curve = report.curves["mono_sr"][2].sum(axis=0)
    assert curve[-3:].mean() > 2 * row.peak_radiance_sr_550nm


def test_a_bow_on_the_axis_has_no_figure_of_its_peak():
    # the tenth of n = 1.1 stands 0.75 degrees from the antisolar point (recomputed from Descartes' formula)
    drop = raytrace.Drop(refractive_index=1.1, sun_elevation_deg=20.0)
    report = raytrace.compare(drop, orders=10, tolerance=0.5)
    row = report.rows[9]
    assert row.red_edge_deg == pytest.approx(0.75, abs=0.005) and row.light_share > 0
    assert row.peak_deg is row.polarisation is row.peak_ratio_luminance is row.filter is row.top_elevation_deg is None
    text = " ".join(report.to_text().split())
    assert "10th: its peak cannot be told from the light that gathers at the antisolar point" in text
    data = json.loads(report.to_json())["orders"][9]
    assert data["centre"] == "antisolar" and data["peak_deg"] is None and data["standard_error"]["peak_deg"] is None
    assert data["standard_error"]["light_share"] > 0 and len(report.png()) > 10_000


def test_the_peak_is_not_looked_for_on_the_axis():
    angle = np.linspace(0, 180, 4501)[1:] - 0.02
    focus = 1 / np.maximum(180 - angle, 0.02)
    place = {"ray_deg": 178.5, "window": (177.0, 180.0)}
    bow = np.exp(-0.5 * ((angle - 178.6) / 0.1) ** 2)
    low, high = figures.off_axis(focus + bow, angle, place, 0.2665)
    assert low == 177.0 and 178.7 < high < 179.3
    assert figures.top_of(focus + bow, angle, (low, high)) == pytest.approx(178.6, abs=0.03)
    # a flank without a top, no light, and a bow that the disc smears over the axis
    assert figures.off_axis(focus, angle, place, 0.2665) is None
    assert figures.off_axis(np.zeros_like(angle), angle, place, 0.2665) is None
    assert figures.off_axis(focus + bow, angle, place | {"ray_deg": 179.8}, 0.2665) is None
    # far from the axis the window stays as it was
    place = {"ray_deg": 138.0, "window": (136.0, 141.0)}
    assert figures.off_axis(focus, angle, place, 0.2665) == (136.0, 141.0)
