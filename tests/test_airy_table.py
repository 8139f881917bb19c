"""Tables with uniform Airy bows: shares, bins, fading of fringes, absorption, smoothness."""

import numpy as np
import pytest
from airy_twins import airy_width, maxima, ray_intensity
from twins import share_of_order

from raytrace.drops.bow_angle import bow_angle, fresnel
from raytrace.optics.airy import airy_bow, airy_phase, airy_phase_prepared, prepare_airy
from raytrace.optics.table import ring_solid_angle_sr

N = 1.333
EDGES = np.linspace(0.0, 180.0, 9001)


def test_shares_of_the_orders():
    # Share of the intercepted light per Debye order, n = 1.333, recomputed elsewhere; the last ones to 0.3 % of
    # themselves.
    expected = [0.06641, 0.88370, 0.04060, 0.006119, 0.001723, 0.000670, 0.000314, 0.000167]
    prepared = prepare_airy(N, EDGES, 8)
    for x in (3000.0, 30_000.0):
        share = airy_phase_prepared(prepared, x).sum(axis=1) @ ring_solid_angle_sr(EDGES)
        np.testing.assert_allclose(share, expected, rtol=2e-3)


@pytest.mark.parametrize("n", [1.1, 1.5, 1.9, 2.5])
def test_all_light_is_there(n):
    # Exact: power in is power out. Diffraction into the dark takes of the rays' light and adds to it, x^(-2/3) of it.
    paths = 24
    share = airy_phase(n, 30_000.0, EDGES, paths).sum(axis=1) @ ring_solid_angle_sr(EDGES)
    expected = [sum(share_of_order(n, p)) / 2 for p in range(paths)]
    np.testing.assert_allclose(share[:8], expected[:8], rtol=5e-3)
    assert share.sum() == pytest.approx(1, abs=5e-3)


@pytest.mark.parametrize("k", [1e-6, 1e-5, 1e-4])
def test_absorption_along_the_chords(k):
    # Exact, by quadrature: intensity times exp(-4 k x cos r) a chord.
    x = 5000.0
    share = airy_phase(N + 1j * k, x, EDGES, 6) @ ring_solid_angle_sr(EDGES)
    for p in range(6):
        expected = np.array(share_of_order(N, p, 4 * k * x)) / 2
        np.testing.assert_allclose(share[p], expected, rtol=4e-3)


def test_external_reflection_is_fresnels():
    # Exact: reflected light of either polarisation is R / (8 pi), with the incidence (180 - theta) / 2.
    middle = np.radians(0.5 * (EDGES[1:] + EDGES[:-1]))
    reflected = np.array(fresnel(np.cos((np.pi - middle) / 2), N)) / (8 * np.pi)
    np.testing.assert_allclose(airy_phase(N, 500.0, EDGES, 1)[0][:, 5:], reflected[:, 5:], atol=2e-6)


def test_light_straight_through_is_the_rays():
    phase = airy_phase(N, 500.0, EDGES, 2)[1]
    for j in (10, 2000, 4000):
        expected = ray_intensity(N, 1, np.radians(0.5 * (EDGES[j] + EDGES[j + 1])))
        np.testing.assert_allclose(phase[:, j], expected, rtol=1e-4)
    # Exact: no ray is bent by more than 180 - 2 arcsin(1/n), 82.8 deg.
    assert not phase[:, EDGES[:-1] > np.degrees(np.pi - 2 * np.arcsin(1 / N))].any()


def test_a_bin_is_the_amplitude_squared():
    # One deviation leads to each angle here, so the table is |S|^2 / (2 pi x^2).
    x = 2000.0
    phase = airy_phase(N, x, EDGES, 3)[2]
    middle = 0.5 * (EDGES[1:] + EDGES[:-1])
    part = (middle > 132) & (middle < 160)
    squared = np.abs(airy_bow(N, x, middle[part], 1)) ** 2 / (2 * np.pi * x**2)
    # a bin's mean and its middle differ by the bend within it
    np.testing.assert_allclose(phase[:, part], squared, atol=2e-3 * squared.max())


def test_wide_bins_are_means_of_narrow_ones():
    coarse = np.array([0.0, 1.0, 5.0, 41.3, 100.0, 137.0, 138.2, 140.0, 166.0, 180.0])
    wide = airy_phase(N, 800.0, coarse, 5)
    fine = np.unique(np.round(np.concatenate([EDGES, coarse]), 6))
    narrow = airy_phase(N, 800.0, fine, 5) * ring_solid_angle_sr(fine)
    into = np.searchsorted(coarse, fine[:-1], side="right") - 1
    for j in range(coarse.size - 1):
        mean = narrow[..., into == j].sum(axis=-1) / ring_solid_angle_sr(coarse[j : j + 2])
        np.testing.assert_allclose(wide[..., j], mean, rtol=2e-3, atol=1e-12)


def test_fine_fringes_fade_into_the_rays():
    # 360 / (x |b1 - b2|) is below 0.06 deg from 1.5 deg inside the primary on at x = 60 000.
    phase = airy_phase(N, 60_000.0, EDGES, 3)[2]
    middle = 0.5 * (EDGES[1:] + EDGES[:-1])
    for theta in (140.0, 145.0, 155.0, 163.0):
        j = np.argmin(np.abs(middle - theta))
        np.testing.assert_allclose(phase[:, j], ray_intensity(N, 2, np.radians(middle[j])), rtol=1e-3)
    # coarse fringes are there, and their mean is the rays' too
    shown = airy_phase(N, 3000.0, EDGES, 3)[2, 0]
    part = (middle > 150) & (middle < 156)
    rays = np.mean([ray_intensity(N, 2, np.radians(theta))[0] for theta in middle[part][::10]])
    assert shown[part].mean() == pytest.approx(rays, rel=0.02)
    assert np.ptp(shown[part]) > 0.5 * rays
    assert (np.diff(shown[part]) > 0.01 * rays).any()
    assert (np.diff(phase[0, part]) < 0).all()


def test_the_bow_itself_is_never_faded():
    for x in (1e4, 1e5, 1e6):
        bow = float(bow_angle(N, 1).scattering_deg)
        unit = np.degrees(airy_width(N, 1) ** (1 / 3) * x ** (-2 / 3))
        edges = bow + unit * np.linspace(-2, 2.3, 431)
        peak = airy_phase(N, x, edges, 3)[2, 0].max() * 2 * np.pi * x**2
        assert peak == pytest.approx(maxima(airy_bow, N, x, 1, 1)[1][0], rel=1e-3)


@pytest.mark.parametrize("n", [1.0001, 1.1, 1.2, N, 1.5, 1.7, 1.9, 1.9999, 2.0, 3.0, 4.0])
def test_every_drop_gives_numbers(n):
    edges = np.linspace(0.0, 180.0, 901)
    prepared = prepare_airy(n, edges, 12)
    for x in (1.0, 7.0, 100.0, 3333.3, 1e5, 1e6):
        for k in (0.0, 1e-7, 1e-3):
            phase = airy_phase_prepared(prepared, x, k)
            assert np.isfinite(phase).all() and (phase >= 0).all()
    lossless, lossy = airy_phase_prepared(prepared, 1e4), airy_phase_prepared(prepared, 1e4, 1e-3)
    np.testing.assert_array_equal(lossless[0], lossy[0])
    assert (lossy[1] <= lossless[1]).all()
    for order in range(1, 12):
        if n < order + 1:
            for x in (1.0, 100.0, 1e5):
                assert np.isfinite(airy_bow(n + 1e-6j, x, np.linspace(0.01, 179.99, 500), order)).all()


def test_prepared_or_not_is_the_same():
    prepared = prepare_airy(N + 1e-7j, EDGES, 4)
    out = np.full((4, 2, 9000), np.nan)
    once = airy_phase_prepared(prepared, 700.0, 1e-7, out=out)
    assert once is out
    np.testing.assert_array_equal(once, airy_phase(N + 1e-7j, 700.0, EDGES, 4))
    np.testing.assert_array_equal(once, airy_phase_prepared(prepared, 700.0, 1e-7))


def test_neighbouring_bins_go_on_smoothly():
    # Such small drops have fringes of several degrees, so any step would stand out: at the bows, the grazing rays
    # (165.57 deg for p = 2) and the last complex rays. Per bin of 0.02 deg, of I sin(theta) over its mean nearby, 2 %
    # of its most at least (a zero is no step), but for the last degree before the axis, where sin(theta) goes to 0.
    # Fringes change I by at most 2 x |b1 - b2| of itself per radian, 7e-4 x a bin.
    middle = np.radians(0.5 * (EDGES[1:] + EDGES[:-1]))
    for x in (5.0, 20.0, 60.0):
        for y in airy_phase(N, x, EDGES, 7)[2:].reshape(10, -1) * np.sin(middle):
            nearby = np.convolve(y, np.full(51, 1 / 51), "same") + 0.02 * y.max()
            assert np.abs(np.diff(y) / nearby[1:])[50:-50].max() < 0.02 + 7e-4 * x
            assert (np.abs(np.diff(y, 2)) / nearby[1:-1])[50:-50].max() < 2e-3


@pytest.mark.parametrize(
    ("edges", "paths", "message"),
    [
        ([0.0, 180.0], 0, "paths=0 given; whole numbers from 1 to 64 work"),
        ([0.0, 180.0], 2.0, "paths=2.0 given; whole numbers from 1 to 64 work"),
        ([0.0], 2, "angle_edges_deg must rise from 0 or more to 180 or less"),
        ([0.0, 90.0, 90.0], 2, "angle_edges_deg must rise from 0 or more to 180 or less"),
        ([0.0, 181.0], 2, "angle_edges_deg must rise from 0 or more to 180 or less"),
    ],
)
def test_bad_arguments_of_a_table(edges, paths, message):
    with pytest.raises(ValueError, match=message):
        prepare_airy(N, edges, paths)
