"""From radiance to eight bits: exposure, white, gamut, transfer, dither."""

import math
import warnings

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from raytrace import colour
from raytrace.camera.develop import (
    automatic_exposure,
    code_table,
    develop_pixels,
    dither_stream,
    manual_exposure,
    xyz_to_display,
)

TO_RGB = np.linalg.inv(colour.SRGB_TO_XYZ)


@pytest.fixture(scope="module")
def reference():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import colour as science
    return science


def develop(xyz, *, matrix=TO_RGB, dither=False, seed=0, first=0):
    xyz = np.ascontiguousarray(np.atleast_2d(xyz), dtype=np.float32)
    rgb, counts = np.full(xyz.shape, 77, dtype=np.uint8), np.zeros(2, dtype=np.int64)
    develop_pixels(xyz, matrix, code_table(), dither_stream(seed), first, dither, rgb, counts)
    return rgb, tuple(int(n) for n in counts)


def of_rgb(linear):
    return np.atleast_2d(linear) @ colour.SRGB_TO_XYZ.T


# Exposure


@pytest.mark.parametrize(
    ("f_number", "shutter_s", "iso", "expected"),
    # ISO 12232, saturation-based speed: L_sat = 120 N^2 / (S t); by hand.
    [
        (16.0, 0.01, 100.0, 30_720.0),
        (8.0, 1 / 125, 100.0, 9_600.0),
        (2.8, 0.5, 400.0, 4.704),
        (1.0, 1.0, 120.0, 1.0),
    ],
)
def test_manual_exposure(f_number, shutter_s, iso, expected):
    exposure = manual_exposure(f_number, shutter_s, iso)
    assert exposure.white_cd_m2 == pytest.approx(expected, rel=1e-12)
    assert f"f/{f_number:g}" in exposure.how and f"ISO {iso:g}" in exposure.how and " s " in exposure.how


def test_manual_exposure_and_a_light_meter_agree():
    # N^2/t = L S/K with K = 12.5 (reflected-light meters): what the meter reads lies 120/12.5 = 9.6 times below white.
    luminance, iso, f_number = 4000.0, 100.0, 11.0
    shutter = f_number**2 * 12.5 / (luminance * iso)
    assert manual_exposure(f_number, shutter, iso).white_cd_m2 / luminance == pytest.approx(9.6)


def test_automatic_exposure():
    luminance = np.arange(1, 1001, dtype=np.float32)
    exposure = automatic_exposure(luminance, 90.0, 0.5)
    assert exposure.white_cd_m2 == pytest.approx(np.percentile(luminance, 90) / 0.5)
    assert "90" in exposure.how and "0.5" in exposure.how
    # 90 % of the pixels come out below half of white
    assert np.mean(luminance < 0.5 * exposure.white_cd_m2) == pytest.approx(0.9, abs=0.001)


@pytest.mark.parametrize("luminance", [np.zeros(9), np.zeros(0)])
def test_a_black_picture_has_some_exposure(luminance):
    exposure = automatic_exposure(luminance, 99.0, 0.8)
    assert exposure.white_cd_m2 > 0 and math.isfinite(exposure.white_cd_m2)


# White


def test_d65_is_neutral():
    white = colour.xy_to_XYZ1(colour.D65_XY)
    for matrix in (xyz_to_display("d65", white), xyz_to_display("sun", white)):
        np.testing.assert_allclose(matrix @ white, 1.0, atol=2e-4)


@pytest.mark.parametrize("sun", [(100.0, 98.0, 70.0), (2.0, 1.5, 0.4), (0.9, 1.0, 1.2)])
def test_the_suns_own_white(sun, reference):
    sun = np.array(sun)
    found = xyz_to_display("sun", sun) @ sun
    # neutral, at the sun's own luminance
    np.testing.assert_allclose(found / sun[1], 1.0, atol=2e-4)
    white = colour.xy_to_XYZ1(colour.D65_XY)
    expected = reference.chromatic_adaptation(
        sun / sun[1], sun / sun[1], white, method="Von Kries", transform="Bradford"
    )
    np.testing.assert_allclose(TO_RGB @ expected, found / sun[1], atol=1e-6)
    other = np.array([0.3, 0.2, 0.7])
    expected = reference.chromatic_adaptation(other, sun / sun[1], white, method="Von Kries", transform="Bradford")
    np.testing.assert_allclose(xyz_to_display("sun", sun) @ other, TO_RGB @ expected, atol=1e-6)


def test_no_sun_no_adaptation():
    np.testing.assert_array_equal(xyz_to_display("sun", np.zeros(3)), xyz_to_display("d65", np.zeros(3)))


def test_matrix_undoes_the_standards(reference):
    # colour-science has the standard's printed matrix from RGB to XYZ; the inverse is exact, not the printed one
    matrix = reference.RGB_COLOURSPACES["sRGB"].matrix_RGB_to_XYZ
    np.testing.assert_allclose(xyz_to_display("d65", np.ones(3)) @ matrix, np.eye(3), atol=1e-12)


# Transfer


def test_all_256_levels(reference):
    # IEC 61966-2-1: decode(code / 255) develops to that code, each component alone
    codes = np.arange(256)
    linear = np.asarray(reference.models.eotf_sRGB(codes / 255))
    rgb, counts = develop(of_rgb(np.repeat(linear[:, None], 3, axis=1)))
    np.testing.assert_array_equal(rgb, np.repeat(codes[:, None], 3, axis=1))
    assert counts == (1, 0)
    mixed = np.stack([linear, linear[::-1], np.full(256, 0.2)], axis=1)
    rgb, counts = develop(of_rgb(mixed))
    np.testing.assert_array_equal(rgb[:, 0], codes)
    np.testing.assert_array_equal(rgb[:, 1], codes[::-1])
    assert counts == (0, 0)


def test_code_table_is_fine_enough(reference):
    # straight lines between the table's points against the curve itself
    linear = np.linspace(0, 1, 20_001)
    table = code_table()
    found = np.interp(np.sqrt(linear), np.linspace(0, 1, len(table)), table)
    np.testing.assert_allclose(found, 255 * np.asarray(reference.models.eotf_inverse_sRGB(linear)), atol=2e-3)


# Gamut


def test_clipped_pixels_are_white_and_counted():
    xyz = [[0.95, 1.0, 1.09], [9.0, 5.0, 1.0], [0.95, 0.999, 1.09], [0.0, 0.0, 0.0]]
    rgb, counts = develop(xyz)
    np.testing.assert_array_equal(rgb[:2], 255)
    assert rgb[2].min() > 250
    np.testing.assert_array_equal(rgb[3], 0)
    assert counts[0] == 2


def test_out_of_gamut_by_hand():
    # linear (-0.1, 0.5, 0.2) has Y = 0.35078; towards grey until red is 0: t = Y / (Y + 0.1)
    wanted = np.array([-0.1, 0.5, 0.2])
    y = colour.SRGB_TO_XYZ[1] @ wanted
    expected = y + y / (y + 0.1) * (wanted - y)
    rgb, counts = develop(of_rgb(wanted))
    np.testing.assert_array_equal(rgb[0], np.round(255 * colour.encode_srgb(np.maximum(expected, 0))))
    assert counts == (0, 1)
    # linear (1.4, 0.2, 0.1) is too red for its luminance
    wanted = np.array([1.4, 0.2, 0.1])
    y = colour.SRGB_TO_XYZ[1] @ wanted
    expected = y + (1 - y) / (1.4 - y) * (wanted - y)
    rgb, counts = develop(of_rgb(wanted))
    np.testing.assert_array_equal(rgb[0], np.round(255 * colour.encode_srgb(np.minimum(expected, 1))))
    assert rgb[0, 0] == 255 and counts == (0, 1)


component = st.floats(-1.0, 2.0, width=32)


@given(st.tuples(component, component, component))
def test_desaturated_at_constant_luminance(linear):
    linear = np.array(linear)
    y = float(colour.SRGB_TO_XYZ[1] @ linear)
    rgb, (clipped, moved) = develop(of_rgb(linear))
    assert clipped == (1 if y >= 1 else 0) or abs(y - 1) < 1e-5
    if not 0.001 < y < 0.999:
        return
    shown = colour.decode_srgb(rgb[0] / 255)
    # rounding to eight bits moves a component by half a step at most
    half = np.maximum(np.abs(colour.decode_srgb((rgb[0] + 0.51) / 255) - shown), 1e-4)
    assert abs(colour.SRGB_TO_XYZ[1] @ shown - y) <= colour.SRGB_TO_XYZ[1] @ half
    if (linear >= 0).all() and (linear <= 1).all():
        assert moved == 0
    elif (linear < -0.001).any() or (linear > 1.001).any():
        assert moved == 1
        # the hue's order stays
        order = np.argsort(linear)
        assert (np.diff(rgb[0][order].astype(int)) >= 0).all()


def test_every_pixel_is_written_and_none_wraps():
    rng = np.random.default_rng(0)
    rgb, _ = develop(of_rgb(rng.uniform(-0.5, 2.5, (5000, 3))), dither=True)
    bright = of_rgb(np.full((500, 3), 0.9999))
    assert develop(bright, dither=True)[0].min() >= 254
    dark = of_rgb(np.full((500, 3), 1e-6))
    assert develop(dark, dither=True)[0].max() <= 1
    assert rgb.shape == (5000, 3)


# Dither


def test_dither_has_no_bias():
    # Values between two codes come out as each in proportion: the mean of n is off by at most sqrt(p (1-p) / n), and
    # five times that is a false alarm in 1.7 million.
    n = 100_000
    for code in (3.2, 100.5, 180.9, 254.3):
        linear = colour.decode_srgb(code / 255)
        rgb, _ = develop(np.repeat(of_rgb([linear] * 3), n, axis=0), dither=True)
        p = code % 1
        assert set(np.unique(rgb)) == {math.floor(code), math.floor(code) + 1}
        np.testing.assert_allclose(rgb.mean(axis=0), code, atol=5 * math.sqrt(p * (1 - p) / n) + 2e-3)
        # components do not move together
        assert np.abs(np.corrcoef(rgb.T.astype(float)) - np.eye(3)).max() < 5 / math.sqrt(n)


def test_black_and_white_are_not_dithered():
    rgb, _ = develop(np.repeat([[0.0, 0.0, 0.0], [0.95047, 1.0, 1.08883]], 200, axis=0), dither=True)
    np.testing.assert_array_equal(rgb[:200], 0)
    np.testing.assert_array_equal(rgb[200:], 255)


def test_dither_hangs_on_seed_and_pixel_alone():
    xyz = np.repeat(of_rgb([0.21, 0.31, 0.41]), 1000, axis=0)
    whole, _ = develop(xyz, dither=True)
    parts = [develop(xyz[a : a + 250], dither=True, first=a)[0] for a in range(0, 1000, 250)]
    np.testing.assert_array_equal(np.concatenate(parts), whole)
    assert (develop(xyz, dither=True, seed=1)[0] != whole).any()
    np.testing.assert_array_equal(develop(xyz, dither=True, seed=0)[0], whole)
