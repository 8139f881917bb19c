"""Means over bins from values on a grid of angles, against adaptive integration."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from raytrace.optics import debye_series
from raytrace.optics.angle_grids import MANY_SIZES, BinMeans, bin_weights, cells, cosines

COUNTS = (1125, 1500, 2250, 36_000)


def exact(function, low_deg, high_deg):
    """Mean over a ring between two scattering angles by the adaptive rule of QUADPACK."""
    ring = quad(lambda t: math.sin(math.radians(t)), low_deg, high_deg)[0]
    return quad(lambda t: function(t) * math.sin(math.radians(t)), low_deg, high_deg, limit=500)[0] / ring


def some_bins(bins):
    return [0, 1, bins // 3, bins // 2, int(0.77 * bins), bins - 2, bins - 1]


def grid_deg(count):
    return np.degrees(np.arccos(cosines(count)))


def test_grids_are_the_middles_of_equal_cells():
    for count in COUNTS:
        assert grid_deg(count) == pytest.approx((np.arange(count) + 0.5) * 180 / count, abs=1e-9)


# coarser and finer than the grids: 1 deg, 0.1 deg, a number that no grid divides by, 0.002 deg
@pytest.mark.parametrize("bins", [180, 1800, 2777, 90_000])
@pytest.mark.parametrize("count", COUNTS)
def test_smooth_functions(bins, count):
    edges = np.linspace(0.0, 180.0, bins + 1)
    means = BinMeans(edges)
    for function in (lambda t: 2 + math.cos(math.radians(t)), lambda t: math.exp(-(((t - 139) / 2) ** 2))):
        found = means.of(np.array([function(t) for t in grid_deg(count)]))
        for i in some_bins(bins):
            # nearer the axis than the first point of the grid its value stands
            assert found[i] == pytest.approx(exact(function, edges[i], edges[i + 1]), rel=1e-3, abs=2e-5)


@pytest.mark.parametrize("bins", [180, 1800, 2777, 90_000])
@pytest.mark.parametrize("count", COUNTS)
def test_weights_add_to_one_and_stay_on_the_grid(bins, count):
    start, weights = bin_weights(np.linspace(0.0, 180.0, bins + 1), count)
    np.testing.assert_allclose(weights.sum(axis=1), 1.0, rtol=1e-12)
    assert start.min() >= 0 and start.max() + weights.shape[1] <= count
    assert BinMeans(np.linspace(0.0, 180.0, bins + 1)).of(np.full(count, 3.0)) == pytest.approx(3.0, rel=1e-12)


@pytest.mark.parametrize("x", [20.0, 300.0, 3000.0])
def test_fringes_of_a_single_size(x):
    """The finest have a period of 180 deg / x; the grid has six points for each.

    A cubic midway between points is then off by 3/128 (2 pi / 6)^4 = 2.8 % of their height. Within half a cell of the
    axis the first point stands, off by at most 1 - cos(pi / 6) = 13 %: light is even in the angle there.
    """
    count = cells(x, 1)
    assert count >= 6 * x
    function = _fringes(x)
    values = np.array([function(t) for t in grid_deg(count)])
    fine = np.linspace(0.0, 180.0, int(10 * x) * 2 + 1)
    found = BinMeans(fine).of(values)
    for i in some_bins(fine.size - 1):
        on_axis = min(fine[i], 180.0 - fine[i + 1]) < 90.0 / count
        assert found[i] == pytest.approx(exact(function, fine[i], fine[i + 1]), abs=0.135 if on_axis else 0.03)
    # in bins that hold many fringes little is left of them
    coarse = np.linspace(0.0, 180.0, 91)
    if x >= 300:
        found = BinMeans(coarse).of(values)
        for i in some_bins(90):
            assert found[i] == pytest.approx(exact(function, coarse[i], coarse[i + 1]), abs=0.005)


def _fringes(x):
    return lambda t: 1 + math.cos(2 * x * math.radians(t))


def test_a_single_size_has_six_points_a_fringe_until_the_finest_grid():
    for x in np.geomspace(0.02, 6000, 60):
        assert cells(x, 1) >= 6 * x and 1125 <= cells(x, 1) <= 36_000
        assert cells(x, MANY_SIZES - 1) == cells(x, 1)
    assert cells(1e5, 1) == 36_000


def test_energy_of_a_drop_goes_through_the_grid():
    """Each Debye order of x = 200 in bins of 1 degree holds what Gauss's rule finds, finely meshed."""
    x, index = 200.0, 1.333
    count = cells(x, 1)
    edges = np.linspace(0.0, 180.0, 181)
    found = BinMeans(edges).of(np.abs(debye_series(index, x, grid_deg(count), paths=4)) ** 2)
    ring = 2 * math.pi * -np.diff(np.cos(np.radians(edges)))
    mu, weight = np.polynomial.legendre.leggauss(300)
    wanted = 2 * math.pi * np.abs(debye_series(index, x, np.degrees(np.arccos(mu)), paths=4)) ** 2 @ weight
    np.testing.assert_allclose(found @ ring, wanted, rtol=2e-3)


@given(
    st.integers(2, 400),
    st.sampled_from([1125, 1500]),
    st.lists(st.tuples(st.integers(0, 1124), st.floats(0, 1e3)), min_size=1, max_size=5),
)
def test_nothing_is_negative(bins, count, spikes):
    """Whatever the values, also single spikes, beside which a cubic dips below 0."""
    values = np.zeros((2, count))
    for place, height in spikes:
        values[:, place] = height
    means = BinMeans(np.linspace(0.0, 180.0, bins + 1)).of(values)
    assert means.shape == (2, bins)
    assert (means >= 0).all() and np.isfinite(means).all()


def test_shapes_are_kept():
    means = BinMeans(np.linspace(0.0, 180.0, 61))
    values = np.random.default_rng(5).uniform(0.5, 1.0, (3, 2, 1125))
    found = means.of(values)
    assert found.shape == (3, 2, 60)
    np.testing.assert_array_equal(found[2, 1], means.of(values[2, 1]))
