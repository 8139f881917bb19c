"""Comparisons by Airy bows and waves: against the Debye series, against rays, and what is said of them."""

import json

import numpy as np
import pytest
from jsonschema import validate
from skies import make_scene
from test_compare_formats import SCHEMA

import raytrace
from raytrace.comparison import plot
from raytrace.drops.bow_angle import main_maximum_deg
from raytrace.optics import debye_series
from raytrace.optics.table import ring_solid_angle_sr


@pytest.fixture(scope="module")
def small():
    # 0.1 mm is x = 571 at 550 nm
    return raytrace.compare(raytrace.Drop(diameter_mm=0.1, refractive_index=1.333), orders=3, method="waves")


def test_peaks_are_those_of_the_debye_series(small):
    """At 550 nm through the disc; the twin folds nothing: the bows of 0.1 mm are three times wider than the sun."""
    x = np.pi * 0.1e6 / 550.0
    angle = np.linspace(100.0, 160.0, 6001)
    mono = small.curves["mono_sr"]
    for row, p in zip(small.rows[:2], (2, 3), strict=True):
        s = debye_series(1.333, x, angle, paths=p + 1)[p]
        light = (np.abs(s) ** 2).sum(axis=0) / (2 * np.pi * x * x)
        at = angle[np.argmax(light)]
        found = small.curves["angle_deg"][np.argmax(mono[p].sum(axis=0))]
        assert found == pytest.approx(at, abs=0.1)
        assert row.peak_radiance_sr_550nm == pytest.approx(light.max(), rel=0.02)
        degree = np.diff(np.abs(s[::-1, np.argmax(light)]) ** 2)[0] / (np.abs(s[:, np.argmax(light)]) ** 2).sum()
        assert row.polarisation == pytest.approx(degree, abs=0.01)


def test_small_drops_peak_inside_the_rays_bow(small):
    primary, secondary = small.rows[:2]
    rays = raytrace.compare(raytrace.Drop(diameter_mm=0.1, refractive_index=1.333), orders=2, tolerance=0.05).rows
    # x = 571 at 550 nm: 1.0188 h^(1/3) x^(-2/3), h = 4.8992 and 27.910 (van de Hulst 1957, chapter 13; from memory)
    for row, plain, h, side in ((primary, rays[0], 4.8992, -1), (secondary, rays[1], 27.910, 1)):
        shift = np.degrees(1.018793 * h ** (1 / 3) * 571.2 ** (-2 / 3))
        assert side * (row.peak_deg - plain.peak_deg) == pytest.approx(shift, rel=0.2)
        assert main_maximum_deg(1.333, row.order, 571.2) == pytest.approx(shift, rel=1e-4)
    # Können and de Boer 1979: small drops polarise less; in the primary the rays of the sun's disc hide it
    assert secondary.polarisation < rays[1].polarisation - 0.05


def test_waves_have_no_monte_carlo_error(small):
    for row in small.rows:
        assert set(row.standard_error.values()) == {0.0} and row.missed == []


def test_shares_are_of_the_light(small):
    ring = ring_solid_angle_sr(np.linspace(0, 180, 4501))
    shares = small.curves["mono_sr"].sum(axis=1) @ ring
    # folded with the disc or not, the light is the same; what is diffracted is left out
    np.testing.assert_allclose([row.light_share for row in small.rows], shares[2:5], rtol=2e-3)
    assert shares.sum() == pytest.approx(1.0, abs=0.06)


def test_large_drops_are_the_rays_again():
    """Airy bows of 8 mm are near the rays after the disc."""
    drop = raytrace.Drop(diameter_mm=8.0)
    bows = raytrace.compare(drop, orders=2, method="airy").rows
    rays = raytrace.compare(drop, orders=2).rows
    for bow, ray in zip(bows, rays, strict=True):
        assert bow.light_share == pytest.approx(ray.light_share, rel=0.01)
        assert bow.peak_deg == pytest.approx(ray.peak_deg, abs=0.08)
        assert bow.peak_radiance_sr_550nm == pytest.approx(ray.peak_radiance_sr_550nm, rel=0.08)
        assert bow.polarisation == pytest.approx(ray.polarisation, abs=0.01)
        # the glow behind is that of rays, p = 0 and 1, whose error is told
        assert 0 < bow.standard_error["over_own_glow_550nm"] < 0.02 * bow.over_own_glow_550nm


def test_a_scene_brings_its_own_method():
    rain = {"extinction_per_km": 1.0, "size_law": "single", "diameter_mm": 0.03, "relative_spread": 0.1}
    scene = make_scene(rain=rain, optics={"method": "waves"}, camera={"field_of_view_deg": 100.0})
    found = raytrace.compare(scene, orders=1)
    assert found.input["method"] == "waves"
    assert raytrace.compare(scene, orders=1, method="rays", tolerance=0.05).input["method"] == "rays"
    row = found.rows[0]
    assert 36 < row.peak_deg < 41 and row.scene["contrast_best"] > 0


def test_the_method_is_told(small):
    data = json.loads(small.to_json())
    validate(data, SCHEMA)
    assert data["input"]["method"] == "waves" and data["rays_550nm"] == 0
    assert "Exact waves for each size of drops" in small.to_text()
    figure = plot.draw(small)
    labels = figure.axes[1].get_legend_handles_labels()[1]
    assert "by rays alone" in labels
    assert "grey: ray optics" in figure._supxlabel.get_text()


def test_unknown_methods_are_refused():
    with pytest.raises(raytrace.InputError, match='"rays" or "airy" or "waves" or "auto"'):
        raytrace.compare(method="guess")
