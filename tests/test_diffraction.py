"""Fraunhofer's rings and the light that the outside of a drop reflects, against closed forms and traced rays."""

import itertools
import math

import numpy as np
import pytest
from scipy.special import j1
from twins import share_of_order

from raytrace.optics import debye_series, trace_sphere
from raytrace.optics.diffraction import diffracted_sr, reflected_sr
from raytrace.optics.table import ring_solid_angle_sr


@pytest.mark.parametrize("x", [1000.0, 5000.0, 40_000.0])
@pytest.mark.parametrize("bins", [1800, 9000])
def test_all_that_is_intercepted_is_diffracted_once(x, bins):
    """Babinet: both polarisations together hold what the cross-section intercepts; 1 - 2 / (pi z) of it within z."""
    edges = np.linspace(0.0, 180.0, bins + 1)
    within = 2 * np.cumsum(diffracted_sr(x, edges) * ring_solid_angle_sr(edges))
    at_8 = within[int(8.0 / 180 * bins + 0.5) - 1]
    beyond = 2 / (math.pi * x * math.sin(math.radians(8.0)))
    assert at_8 == pytest.approx(1 - beyond, abs=0.3 * beyond)
    assert at_8 <= within[-1] < 1.0


def test_dark_rings():
    """Zeros of J1, 3.8317 and 7.0156 (tables of functions, from memory), over x: a disc's dark rings (Airy 1835)."""
    x = 2000.0
    edges = np.radians(np.linspace(0.0, 0.3, 30_001)) * 180 / math.pi
    light = diffracted_sr(x, edges)
    middle = np.radians(0.5 * (edges[1:] + edges[:-1]))
    dark = np.flatnonzero((light[1:-1] < light[:-2]) & (light[1:-1] <= light[2:])) + 1
    assert middle[dark[:2]] * x == pytest.approx([3.8317, 7.0156], abs=0.002)


def test_rings_are_airys_pattern():
    """x^2 J1(z)^2 / (4 pi z^2) / 2 for each polarisation [sr-1] (Born & Wolf, section 8.5.2), in narrow bins."""
    x = 500.0
    edges = np.linspace(0.0, 7.0, 7001)
    light = diffracted_sr(x, edges)
    z = x * np.sin(np.radians(0.5 * (edges[1:] + edges[:-1])))
    wanted = 0.5 * x**2 / math.pi * (j1(z) / z) ** 2
    np.testing.assert_allclose(light, wanted, rtol=0.03, atol=1e-4 * wanted[0])


def test_no_rings_far_out():
    edges = np.linspace(0.0, 180.0, 181)
    light = diffracted_sr(3000.0, edges)
    assert (light >= 0).all() and (light[12:] == 0).all() and (light[:12] > 0).all()


def test_coarse_bins_hold_the_same():
    """Means over bins are exact also where a bin holds many rings."""
    x = 8000.0
    fine, coarse = np.linspace(0.0, 180.0, 18_001), np.linspace(0.0, 180.0, 181)
    light = (diffracted_sr(x, fine) * ring_solid_angle_sr(fine)).reshape(180, 100).sum(axis=1)
    found = diffracted_sr(x, coarse) * ring_solid_angle_sr(coarse)
    np.testing.assert_allclose(found[:7], light[:7], rtol=1e-9)


@pytest.mark.parametrize("index", [1.2, 1.3343, 1.6])
def test_reflection_against_traced_rays(index):
    """Order p = 0 of the tracer, each polarisation, within its standard errors; none is farther than four.

    A bin holds whole rays, however even they are: one ray's light, more or less, is no error.
    """
    bins, rays = 180, 200_000
    table = trace_sphere(index, paths=1, rays=rays, bins=bins)
    # a few points a bin, weighted by their rings
    fine = (np.arange(bins * 20) + 0.5) * 180 / (bins * 20)
    ring = np.sin(np.radians(fine))
    wanted = (reflected_sr(index, fine) * ring).reshape(2, bins, 20).sum(axis=2) / ring.reshape(bins, 20).sum(axis=1)
    found, error = table.phase_sr[0, :, 0], table.standard_error_sr[0, :, 0]
    # rays whose angle of incidence is (180 deg - theta) / 2
    in_bin = table.rays * -np.diff(np.cos(np.radians(table.angle_edges_deg) / 2) ** 2)
    assert in_bin.min() > 10
    off = np.abs(found - wanted) / (error + wanted / in_bin)
    assert off.max() < 4
    assert (off < 2).mean() > 0.95


@pytest.mark.parametrize("index", [1.2, 1.333, 1.6])
def test_reflected_share(index):
    """Over the whole sphere: Fresnel's reflectance averaged over the disc, by another integral."""
    mu, weight = np.polynomial.legendre.leggauss(400)
    found = 2 * math.pi * reflected_sr(index, np.degrees(np.arccos(mu))).sum(axis=0) @ weight
    # the tracer's twin gives each polarisation's share of its own light
    assert found == pytest.approx(np.mean(share_of_order(index, 0)), rel=1e-3)


def test_backward_reflection():
    """((n - 1) / (n + 1))^2 / (4 pi) with both polarisations (Fresnel at normal incidence)."""
    n = 1.333
    assert reflected_sr(n, np.array([180.0])).sum() == pytest.approx(((n - 1) / (n + 1)) ** 2 / (4 * math.pi), rel=1e-9)


def test_both_together_are_the_waves_of_order_0():
    """Debye's p = 0 at x = 3000 in wide rings: what is diffracted and what is reflected add up.

    Near the edge of the shadow waves hold more: rays that graze count twice, by at most the edge's part of the
    extinction, 1.9924 x^(-2/3) (Nussenzveig & Wiscombe 1980, from memory).
    """
    x, index = 3000.0, 1.333
    edges = np.array([0.0, 0.2, 1.0, 2.0, 30.0, 60.0, 100.0, 150.0, 179.0])
    fine = np.linspace(0.0, 12.0, 12_001)
    rings = np.cumsum(np.append(0.0, diffracted_sr(x, fine) * ring_solid_angle_sr(fine)))
    more = 0.0
    for low, high in itertools.pairwise(edges):
        angle, step = np.linspace(low, high, 4001, retstep=True)
        angle = angle[:-1] + 0.5 * step
        ring = 2 * math.pi * math.radians(step) * np.sin(np.radians(angle))
        light = (np.abs(debye_series(index, x, angle, paths=1)[0]) ** 2).sum(axis=0) / (2 * math.pi * x**2)
        found, wanted = light @ ring, reflected_sr(index, angle).sum(axis=0) @ ring
        wanted += 2 * (np.interp(high, fine, rings) - np.interp(low, fine, rings))
        assert wanted == pytest.approx(found, rel=0.09 if high <= 30 else 5e-4), (low, high)
        more += found - wanted
    assert 0.5 < more / (1.9924 * x ** (-2 / 3)) < 1.0
