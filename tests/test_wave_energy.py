"""Energy of tables over sizes: what many drops diffract, small drops whose orders interfere, drops without end."""

import numpy as np
import pytest
from skies import make_scene
from test_debye import order_efficiencies

from raytrace.drops.spectrum import Gamma, Linear, Lognormal, Normal, OneSize
from raytrace.optics import debye_series, lorenz_mie
from raytrace.optics.debye import efficiencies
from raytrace.optics.drop_table import drop_table
from raytrace.optics.methods import AIRY, MOST_WAVES_X, RAYS, choose
from raytrace.report import scene_report
from raytrace.sky.radiance import layer_names

N, NM = 1.3343, 550.0


def table(spectrum, method="auto", bins=1800, **more):
    return drop_table([N], [NM], spectrum, method=method, bins=bins, rays=100_000, **more)


def averaged(spectrum, figure, steps):
    """Mean by cross-section over even steps of the diameter."""
    d = np.linspace(spectrum.low_mm, spectrum.high_mm, steps + 2)[1:-1]
    weight = spectrum.density_per_mm(d)
    return sum(w * figure(np.pi * one * 1e6 / NM) for w, one in zip(weight / weight.sum(), d, strict=True))


@pytest.mark.parametrize(
    ("spectrum", "method"),
    [
        (Lognormal(0.13, np.log(1.15)), "auto"),
        (Normal(0.2, 0.15), "waves"),
        (Gamma(10.0, 2 * 0.06 * 0.1), "auto"),
        (Lognormal(0.3, np.log(1.4)), "waves"),
    ],
)
def test_what_is_diffracted_is_all_there(spectrum, method):
    """Rings are finer than the bows of the same drops; against the sums of |a|^2 and |b|^2 (Bohren & Huffman 1983)."""
    found = table(spectrum, method)
    energy = found.phase_sr[0, :, 0].sum(axis=0) @ found.solid_angle_sr
    assert energy == pytest.approx(averaged(spectrum, lambda x: order_efficiencies(N, x, 1)[0], 60), rel=0.006)

    # no step where the finer grid ends, nor where rings of the largest drops begin
    at = np.array([2.95, 3.05, 12.05, 14.95, 15.05])

    def light(x):
        return (np.abs(debye_series(N, x, at, paths=1)[0]) ** 2).sum(axis=0) / (2 * np.pi * x * x)

    exact = averaged(spectrum, light, 700)
    np.testing.assert_allclose(found.phase_sr[0, :, 0].sum(axis=0)[(at * 10).astype(int)], exact, rtol=0.05)


@pytest.mark.parametrize(
    "spectrum", [OneSize(0.002), Gamma(1 / 0.3, 2 * 0.001 * 0.3), Linear((0.0001, 0.0005), (1, 1))]
)
def test_small_drops_send_what_the_exact_sum_says(spectrum):
    """The orders of drops of a few wavelengths interfere; added as intensities they are far too bright."""
    found = table(spectrum)
    light = found.phase_sr[:, :, 0].sum(axis=(0, 1))
    if spectrum.low_mm == spectrum.high_mm:
        x = np.pi * spectrum.low_mm * 1e6 / NM
        wanted = efficiencies(N, x).scattering
        s = lorenz_mie(N, x, found.angle_deg)
        exact = (np.abs(s) ** 2).sum(axis=0) / (2 * np.pi * x * x)
        np.testing.assert_allclose(light[3:], exact[3:], rtol=0.02)
    else:
        wanted = averaged(spectrum, lambda x: efficiencies(N, x).scattering, 300)
    assert light @ found.solid_angle_sr == pytest.approx(wanted, rel=0.01)


def test_drops_without_end_are_left_to_rays_and_airy_bows():
    chosen = choose("waves", [0.9 * MOST_WAVES_X, 1.1 * MOST_WAVES_X], 5, N)
    assert set(chosen[0]) == {2}
    assert list(chosen[1]) == [RAYS, RAYS, AIRY, AIRY, AIRY]
    # the widest law that a scene may ask for, with drops of decimetres
    found = table(Lognormal(6.0, np.log(3.0)), bins=180)
    assert np.isfinite(found.phase_sr).all() and found.phase_sr.sum() > 0


@pytest.mark.parametrize(("index", "x"), [(0.75, 5000.0), (0.5, 50_000.0), (0.6, 2000.0), (0.9, 10_000.0)])
def test_waves_that_do_not_enter_the_drop(index, x):
    """Below 1 the waves of high degree are reflected wholly; their ratio must not overflow."""
    s = debye_series(index, x, [0.0, 10.0, 138.0, 180.0], paths=4)
    assert np.isfinite(s).all() and np.abs(s[0]).max() > 1


def test_other_indices_than_waters_are_left_to_waves():
    assert (choose("auto", 1e4, 8, 1.36) == 2).all()
    assert (choose("auto", 1e4, 8, 1.34)[0, :4] == [RAYS, RAYS, AIRY, AIRY]).all()


def test_rays_know_neither_glory_nor_aureole():
    scene = make_scene(optics={"method": "rays", "glory": True, "aureole": True})
    assert not {"glory", "aureole"} & set(layer_names(scene.optics))
    assert "rays know of neither" in scene_report(scene, name="a.toml")


def test_check_says_where_tables_take_minutes():
    for optics, rain, told in (
        ({"method": "waves"}, {}, "exact waves of drops beyond a millimetre"),
        ({"method": "auto"}, {"refractive_index": 1.5}, "is no water's"),
        ({"method": "auto"}, {}, None),
    ):
        text = scene_report(make_scene(optics=optics, rain=rain), name="a.toml")
        assert ("takes minutes" in text) == (told is not None) and (told or "") in text
