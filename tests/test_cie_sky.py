"""The CIE standard general sky, ISO 15469:2004."""

import math

import numpy as np
import pytest
from skies import make_scene

from raytrace.light.spectrum import illumination
from raytrace.light.sun import direction
from raytrace.sky.background import make_background, sky_xyz
from raytrace.sky.cie import gradation, horizontal_integral, indicatrix, relative_luminance, sky_type

# ISO 15469:2004, table 1, as five independent codes quote it: a, b, c, d, e of types 1 to 15.
TABLE = """
 4.0 -0.70  0 -1.0 0.00 |  4.0 -0.70  2 -1.5 0.15 |  1.1 -0.80  0 -1.0 0.00 |  1.1 -0.80  2 -1.5 0.15
 0.0 -1.00  0 -1.0 0.00 |  0.0 -1.00  2 -1.5 0.15 |  0.0 -1.00  5 -2.5 0.30 |  0.0 -1.00 10 -3.0 0.45
-1.0 -0.55  2 -1.5 0.15 | -1.0 -0.55  5 -2.5 0.30 | -1.0 -0.55 10 -3.0 0.45 | -1.0 -0.32 10 -3.0 0.45
-1.0 -0.32 16 -3.0 0.30 | -1.0 -0.15 16 -3.0 0.30 | -1.0 -0.15 24 -2.8 0.15
"""
TYPES = [tuple(float(v) for v in row.split()) for line in TABLE.strip().splitlines() for row in line.split("|")]


def slow_luminance(number, sun_zenith_deg, zenith_deg, azimuth_deg):
    """Relative luminance by the angles of the standard's own figure; azimuth counts from the sun."""
    a, b, c, d, e = TYPES[number - 1]
    zs, z, alpha = (math.radians(v) for v in (sun_zenith_deg, zenith_deg, azimuth_deg))
    chi = math.acos(max(-1.0, min(1.0, math.cos(zs) * math.cos(z) + math.sin(zs) * math.sin(z) * math.cos(alpha))))

    def f(x):
        return 1 + c * (math.exp(d * x) - math.exp(d * math.pi / 2)) + e * math.cos(x) ** 2

    def phi(angle):
        return 1.0 if angle >= math.pi / 2 - 1e-9 else 1 + a * math.exp(b / math.cos(angle))

    return f(chi) * phi(z) / (f(zs) * phi(0.0))


def ours(number, sun_zenith_deg, zenith_deg, azimuth_deg):
    sun = tuple(direction(0.0, 90.0 - sun_zenith_deg))
    return relative_luminance(sky_type(number), sun, *direction(azimuth_deg, 90.0 - zenith_deg))


@pytest.mark.parametrize(
    ("number", "zenith_deg", "azimuth_deg", "expected"),
    # Recomputed elsewhere, sun at zenith angle 60 deg, five printed decimals.
    [
        (1, 45, 90, 0.83258),
        (7, 60, 0, 4.62373),
        (7, 60, 180, 0.74789),
        (12, 60, 0, 13.47901),
        (12, 30, 0, 2.57937),
        (12, 85, 180, 2.97742),
    ],
)
def test_points(number, zenith_deg, azimuth_deg, expected):
    assert ours(number, 60, zenith_deg, azimuth_deg) == pytest.approx(expected, abs=5.1e-6)


@pytest.mark.parametrize("number", range(1, 16))
def test_against_slow_twin(number):
    for sun_zenith in (0, 25, 60, 88):
        for zenith in (0, 10, 45, 80, 89.5, 90):
            for azimuth in (0, 3, 90, 179, 270):
                expected = slow_luminance(number, sun_zenith, zenith, azimuth)
                # the arc cosine near the sun itself keeps seven digits
                assert ours(number, sun_zenith, zenith, azimuth) == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize("number", range(1, 16))
def test_parameters_zenith_and_horizon(number):
    kind = sky_type(number)
    assert tuple(kind) == TYPES[number - 1]
    assert gradation(kind, 0.0) == gradation(kind, -0.5) == 1.0
    # continuous at the horizon: exp(b / cos Z) has gone to nothing
    assert gradation(kind, 2e-6) == 1.0
    assert ours(number, 37, 0, 0) == pytest.approx(1.0, rel=1e-12)
    # a right angle from the sun the exponentials cancel
    assert indicatrix(kind, math.pi / 2) == pytest.approx(1.0, abs=1e-12)


def test_type_5_is_uniform():
    for zenith, azimuth in ((0, 0), (40, 77), (89, 200), (90, 3)):
        assert ours(5, 50, zenith, azimuth) == pytest.approx(1.0, rel=1e-14)
    assert horizontal_integral(sky_type(5), (0.0, 0.6, 0.8), 30, 30) == pytest.approx(math.pi, rel=1e-12)


def test_overcast_type_1_closed_integral():
    # With c = e = 0 the integral is 2 pi int u (1 + a exp(b/u)) du over phi(0), one dimension: by Gauss-Legendre.
    node, weight = np.polynomial.legendre.leggauss(200)
    u, weight = 0.5 * (node + 1), 0.5 * weight
    expected = 2 * math.pi * np.sum(weight * u * (1 + 4 * np.exp(-0.7 / u))) / (1 + 4 * math.exp(-0.7))
    # common practice: an overcast sky's zenith is 9/(7 pi) of the horizontal illuminance (Moon and Spencer's form)
    assert expected == pytest.approx(7 * math.pi / 9, rel=0.03)
    assert horizontal_integral(sky_type(1), (0.0, 0.6, 0.8), 180, 180) == pytest.approx(expected, rel=1e-4)


def test_below_the_horizon_reads_the_horizon():
    for azimuth in (0, 50, 180):
        assert ours(12, 60, 120, azimuth) == pytest.approx(ours(12, 60, 90, azimuth), rel=1e-9)
    assert math.isfinite(ours(12, 60, 180, 0))


@pytest.mark.parametrize("number", [0, 16, -1, 2.5])
def test_no_such_type(number):
    with pytest.raises(ValueError, match="1 to 15 works"):
        sky_type(number)


@pytest.mark.parametrize(("number", "elevation"), [(1, 40.0), (7, 10.0), (12, 3.0), (12, 50.0), (15, 25.0)])
def test_horizontal_illuminance_is_the_diffuse_one(number, elevation):
    scene = make_scene((elevation, 200.0), sky={"cie_type": number})
    light = illumination(scene, np.arange(380.0, 781.0, 20.0))
    sky = make_background(scene, light, direction(200.0, elevation))
    # another quadrature than the program's: Gauss-Legendre in the elevation, twice as many azimuths
    node, weight = np.polynomial.legendre.leggauss(240)
    heights, weight = 0.25 * math.pi * (node + 1), 0.25 * math.pi * weight
    out, total, count = np.empty(3), 0.0, 480
    for height, w in zip(np.degrees(heights), weight, strict=True):
        up = math.sin(math.radians(height))
        ring = 0.0
        for ray in direction(np.arange(count) * 360 / count + 0.3, height):
            sky_xyz(sky, *ray, out)
            ring += out[1]
        total += w * up * math.cos(math.radians(height)) * ring * 2 * math.pi / count
    assert total == pytest.approx(light.diffuse_horizontal_lx, rel=2e-3)
