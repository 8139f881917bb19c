"""The sun's disc folded into tables, against a brute-force integral over the disc in two dimensions."""

import functools
import itertools
import math

import numpy as np
import pytest
from twins import disc_mean

from raytrace.drops.bow_angle import bow_angle
from raytrace.optics import fold, trace_sphere
from raytrace.optics.fold import disc_weights, project_with_sun_disc
from raytrace.optics.table import ScatteringTable

SUN_DEG = 0.533
# I(mu)/I(1) at 559.950 nm: Neckel and Labs 1994, Solar Phys. 153, 91, quoted
WAVELENGTH_NM = 559.950
LIMB = [0.26892, 1.34319, -1.58427, 1.91271, -1.31350, 0.37295]


def make_table(values, error=0.0, wavelengths=(WAVELENGTH_NM,)):
    """A table with the same values (n_angle,) in both polarisations, one order and every wavelength."""
    bins, many = len(values), len(wavelengths)
    phase = np.broadcast_to(np.asarray(values, dtype=float), (1, 2, many, bins)).copy()
    return ScatteringTable(
        phase_sr=phase,
        standard_error_sr=np.full_like(phase, error),
        angle_edges_deg=np.linspace(0, 180, bins + 1),
        wavelength_nm=np.array(wavelengths),
        index=np.full(many, 1.333 + 0j),
        left_over=np.zeros(many),
        absorbed=np.zeros(many),
        method="test",
        rays=1,
        seed=0,
    )


def bin_mean(function, low_deg, high_deg, nodes=5):
    """Mean of a function over a bin, weighted with the solid angle; Gauss-Legendre."""
    x, w = np.polynomial.legendre.leggauss(nodes)
    theta = 0.5 * (low_deg + high_deg) + 0.5 * (high_deg - low_deg) * x
    w = w * np.sin(np.radians(theta))
    return sum(a * function(t) for a, t in zip(w, theta, strict=True)) / w.sum()


def smooth(angle_deg):
    a = np.radians(angle_deg)
    return 0.3 + np.exp(-4 * a) + 0.2 * np.cos(6 * a)


@functools.cache
def smooth_table(bins=3_600):
    edges = np.linspace(0, 180, bins + 1)
    return make_table([bin_mean(smooth, a, b) for a, b in itertools.pairwise(edges)])


@pytest.mark.parametrize(
    ("bins", "diameter_deg"),
    [(90, 0.1), (90, SUN_DEG), (90, 10.0), (900, 0.1), (900, SUN_DEG), (900, 10.0), (9_000, 0.1), (9_000, SUN_DEG)],
)
def test_uniform_stays_uniform(bins, diameter_deg):
    folded = make_table(np.ones(bins), wavelengths=(400.0, 550.0, 700.0)).with_sun_disc(diameter_deg)
    np.testing.assert_allclose(folded.phase_sr, 1.0, rtol=1e-13)


@pytest.mark.parametrize("diameter_deg", [SUN_DEG, 2.0])
def test_energy_is_conserved(diameter_deg):
    random = np.random.default_rng(1).random(3_600)
    for table in (make_table(random), smooth_table()):
        assert table.with_sun_disc(diameter_deg).share() == pytest.approx(table.share(), rel=1e-7)
    # one bin alone: the quadrature over rings and over the viewer's bin shows
    for lit, rel in ((1_200, 1e-7), (10, 1e-4), (0, 0.015), (3_599, 0.015)):
        table = make_table(np.arange(3_600) == lit)
        assert table.with_sun_disc(diameter_deg).share() == pytest.approx(table.share(), rel=rel), lit


def test_energy_of_a_traced_table_is_conserved():
    table = trace_sphere([1.343, 1.331], rays=200_000, bins=3_600, wavelength_nm=[400.0, 700.0])
    folded = table.with_sun_disc(SUN_DEG)
    # the glow straight ahead and back stands in few bins about the poles, where the quadrature is coarsest
    np.testing.assert_allclose(folded.share(), table.share(), rtol=1e-5)


def test_point_source_is_the_table_itself():
    table = smooth_table()
    assert table.with_sun_disc(0) is table
    assert table.with_sun_disc(0.0).disc_diameter_deg == 0


def test_small_disc_changes_little():
    table = smooth_table()
    folded = table.with_sun_disc(0.001)
    np.testing.assert_allclose(folded.phase_sr, table.phase_sr, rtol=1e-4)


# near the poles, on the primary and at right angles
@pytest.mark.parametrize("diameter_deg", [SUN_DEG, 2.0])
@pytest.mark.parametrize("angle_deg", [0.1, 42.0, 90.0, 138.0, 179.9])
def test_smooth_function_against_brute_force(angle_deg, diameter_deg):
    table = smooth_table()
    k = int(angle_deg / 180 * 3_600)
    low, high = table.angle_edges_deg[k : k + 2]
    brute = bin_mean(lambda t: disc_mean(smooth, t, diameter_deg, LIMB, rings=100, spokes=180), low, high)
    assert table.with_sun_disc(diameter_deg).phase_sr[0, 0, 0, k] == pytest.approx(brute, rel=1.2e-4)
    # which is more than the function's own change, so that the test would see no disc at all
    if angle_deg < 1:
        assert abs(table.phase_sr[0, 0, 0, k] / brute - 1) > 2e-3


@pytest.mark.parametrize("offset_deg", [-0.3, -0.2, -0.05, 0.0, 0.1, 0.25])
@pytest.mark.parametrize("step_deg", [0.2, 42.0, 138.0, 179.8])
def test_step_against_brute_force(monkeypatch, step_deg, offset_deg):
    bins = 3_600
    table = make_table(np.arange(bins) >= round(step_deg * bins / 180))
    k = math.floor((step_deg + offset_deg + 0.01) * bins / 180)
    if not 0 <= k < bins:
        return
    low, high = table.angle_edges_deg[k : k + 2]
    brute = bin_mean(
        lambda t: disc_mean(lambda a: (a >= step_deg).astype(float), t, SUN_DEG, LIMB, rings=200, spokes=720), low, high
    )
    # 24 rings stand for the disc. About the poles a ring lies on one side of the step as a whole or crosses it, which
    # they resolve less well; there more rings show that it is theirs alone
    near_pole = step_deg in (0.2, 179.8)
    got = table.with_sun_disc(SUN_DEG).phase_sr[0, 0, 0, k]
    assert got == pytest.approx(brute, abs=3e-3 if near_pole else 1.5e-3)
    if near_pole:
        monkeypatch.setattr(fold, "_RINGS", 96)
        got = table.with_sun_disc(SUN_DEG).phase_sr[0, 0, 0, k]
        assert got == pytest.approx(brute, abs=7e-4)


def test_thin_ring_spreads_by_the_disc():
    """A bin alone at 90 degrees becomes a strip of the disc's limb-darkened profile: known width and variance."""
    bins = 9_000
    table = make_table(np.arange(bins) == bins // 2)
    folded = table.with_sun_disc(SUN_DEG).phase_sr[0, 0, 0]
    off = table.angle_deg - table.angle_deg[bins // 2]
    width = 180 / bins
    assert (folded[np.abs(off) > SUN_DEG / 2 + width] == 0).all()
    assert (folded[np.abs(off) < SUN_DEG / 2 - width] > 0).all()
    np.testing.assert_allclose(folded, folded[::-1][np.arange(bins) - 1], rtol=2e-3, atol=1e-6)
    # variance along one axis of a disc: half the mean of rho^2, with rho^2 = R^2 (1 - mu^2) and weight mu I(mu) dmu
    powers = np.arange(6)
    mean = np.dot(LIMB, 1 / (powers + 2))
    mean_mu2 = np.dot(LIMB, 1 / (powers + 4))
    variance = (SUN_DEG / 2) ** 2 * (1 - mean_mu2 / mean) / 2
    # and each bin, before and after, adds the variance of its width
    assert (folded * off**2).sum() / folded.sum() == pytest.approx(variance + 2 * width**2 / 12, rel=1e-3)


@pytest.mark.parametrize("diameter_deg", [SUN_DEG, 2.0])
def test_symmetric_from_front_to_back(diameter_deg):
    values = np.random.default_rng(2).random(1_800)
    ahead = make_table(values).with_sun_disc(diameter_deg).phase_sr
    back = make_table(values[::-1]).with_sun_disc(diameter_deg).phase_sr
    np.testing.assert_allclose(ahead, back[..., ::-1], rtol=1e-8)


def test_red_light_sees_a_flatter_disc():
    # the sun's limb is darker in blue, so its disc is more concentrated
    table = make_table(np.arange(9_000) == 4_500, wavelengths=(400.0, 700.0))
    folded = table.with_sun_disc(SUN_DEG).phase_sr[0, 0]
    off = table.angle_deg - table.angle_deg[4_500]
    blue, red = (folded * off**2).sum(axis=1) / folded.sum(axis=1)
    assert 0.9 < blue / red < 0.99


def test_weights_add_up():
    start, weights = disc_weights(np.linspace(0, 180, 901), SUN_DEG, 6)
    for power in range(6):
        np.testing.assert_allclose(weights[power].sum(axis=1), 2 / (power + 2), rtol=1e-12)
    assert (weights >= 0).all()
    assert (start >= 0).all() and (start + weights.shape[2] <= 900).all()


def test_error_is_propagated():
    # independent errors of one size: the error of a weighted mean is that times the root of the sum of squared weights
    table = make_table(np.ones(900), error=0.1)
    folded = table.with_sun_disc(2.0)
    _, basis = disc_weights(table.angle_edges_deg, 2.0, 6)
    weights = np.tensordot(LIMB, basis, axes=1)
    weights /= weights.sum(axis=1, keepdims=True)
    np.testing.assert_allclose(folded.standard_error_sr[0, 0, 0], 0.1 * np.sqrt((weights**2).sum(axis=1)), rtol=1e-4)
    assert (folded.standard_error_sr < 0.1).all()


def test_projection_is_the_fold_summed():
    rng = np.random.default_rng(3)
    wavelengths = np.array([400.0, 480.0, 560.0, 640.0, 700.0])
    table = trace_sphere(np.linspace(1.343, 1.331, 5), paths=3, rays=50_000, bins=900, wavelength_nm=wavelengths)
    to_channels = rng.random((5, 3))
    for diameter in (0.0, SUN_DEG):
        whole = np.einsum("pqwa,wc->pac", table.with_sun_disc(diameter).phase_sr, to_channels)
        np.testing.assert_allclose(project_with_sun_disc(table, to_channels, diameter), whole, rtol=1e-10, atol=1e-14)


def test_result_does_not_depend_on_threads():
    table = make_table(np.random.default_rng(4).random(900), error=0.1, wavelengths=(400.0, 550.0, 700.0))
    one, two = (table.with_sun_disc(SUN_DEG, threads=t) for t in (1, 2))
    assert one.phase_sr.tobytes() == two.phase_sr.tobytes()
    assert one.standard_error_sr.tobytes() == two.standard_error_sr.tobytes()


def test_folding_twice_is_refused():
    folded = smooth_table().with_sun_disc(SUN_DEG)
    assert folded.disc_diameter_deg == SUN_DEG
    for diameter in (0, SUN_DEG):
        with pytest.raises(ValueError, match=r"a disc of 0\.533 degrees is folded in already; start from the table"):
            folded.with_sun_disc(diameter)


@pytest.mark.parametrize("diameter", [-0.1, 10.1, math.nan, math.inf])
def test_bad_diameters(diameter):
    with pytest.raises(ValueError, match="given; 0 to 10 works"):
        smooth_table().with_sun_disc(diameter)


def test_unknown_wavelengths_are_refused():
    table = trace_sphere(1.333, rays=1_000, bins=90)
    with pytest.raises(ValueError, match="needs wavelengths; trace with wavelength_nm"):
        table.with_sun_disc()


def test_peak_radiances_of_the_bows():
    """550 nm, sphere, sun's disc, no diffraction, peak of each order: 1 : 0.168 : 0.068 : 0.028 within 15 %.

    Recomputed without Monte Carlo; the band covers the width of the bins. Index of water at 20 degrees: recomputed.
    """
    n = 1.334312
    folded = trace_sphere(n, rays=4_000_000, bins=9_000, wavelength_nm=550.0).with_sun_disc(SUN_DEG)
    peaks = []
    for k in (1, 2, 3, 4):
        near = np.abs(folded.angle_deg - bow_angle(n, k).scattering_deg) < 2
        peaks.append(folded.phase_sr[k + 1, :, 0, near].sum(axis=1).max())
    np.testing.assert_allclose(np.array(peaks) / peaks[0], [1, 0.168, 0.068, 0.028], rtol=0.15)


def test_disc_moves_the_bows_outer_edge_by_its_radius():
    # Alexander's band is 8.00 degrees wide for n = 1.331 and the disc takes its own diameter off: recomputed
    n = 1.331
    folded = trace_sphere(n, paths=4, rays=1_000_000, bins=9_000, wavelength_nm=650.0).with_sun_disc(SUN_DEG)
    light = folded.phase_sr[2:4, :, 0].sum(axis=(0, 1))
    dark = folded.angle_deg[(light == 0) & (folded.angle_deg > 120)]
    bin_deg = 180 / 9_000
    width = dark.max() - dark.min() + bin_deg
    # on either side the traced bin that holds the edge and the folded bin that the disc's limb just touches are lit
    assert 8.00 - SUN_DEG - 4 * bin_deg - 0.005 < width < 8.00 - SUN_DEG + 0.005
