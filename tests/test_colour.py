"""Colour against the standards and against colour-science."""

import warnings

import numpy as np
import pytest

from raytrace import colour as ours


@pytest.fixture(scope="module")
def reference():
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import colour
    return colour


def test_srgb_matrices_are_those_of_iec_61966_2_1(reference):
    space = reference.RGB_COLOURSPACES["sRGB"]
    np.testing.assert_array_equal(ours.SRGB_TO_XYZ, space.matrix_RGB_to_XYZ)
    np.testing.assert_array_equal(ours.XYZ_TO_SRGB, space.matrix_XYZ_to_RGB)
    np.testing.assert_array_equal(ours.D65_XY, space.whitepoint)
    # The printed four digits undo each other to about 1e-4.
    np.testing.assert_allclose(ours.XYZ_TO_SRGB @ ours.SRGB_TO_XYZ, np.eye(3), atol=2e-4)


def test_srgb_white_is_d65():
    # IEC 61966-2-1: white is D65, x 0.3127 y 0.3290; the matrix has four digits.
    np.testing.assert_allclose(ours.SRGB_TO_XYZ @ np.ones(3), ours.xy_to_XYZ1(ours.D65_XY), atol=2e-4)


@pytest.mark.parametrize(
    ("linear", "encoded"),
    # IEC 61966-2-1:1999, equation for the transfer: ends, the joint, and values recomputed from it to six digits.
    [(0.0, 0.0), (0.0031308, 0.040450), (0.18, 0.461356), (0.2158605, 128 / 255), (0.5, 0.735357), (1.0, 1.0)],
)
def test_srgb_transfer_values(linear, encoded):
    assert ours.encode_srgb(linear) == pytest.approx(encoded, abs=1e-6)
    assert ours.decode_srgb(encoded) == pytest.approx(linear, abs=1e-6)


def test_srgb_transfer_against_colour_science(reference):
    ramp = np.linspace(-0.1, 1.5, 1601)
    inside = ramp[ramp >= 0]
    np.testing.assert_allclose(ours.encode_srgb(inside), reference.models.eotf_inverse_sRGB(inside), atol=1e-12)
    np.testing.assert_allclose(ours.decode_srgb(inside), reference.models.eotf_sRGB(inside), atol=1e-12)
    np.testing.assert_allclose(ours.decode_srgb(ours.encode_srgb(ramp)), ramp, atol=1e-7)
    assert (np.diff(ours.encode_srgb(ramp)) > 0).all()


def test_srgb_transfer_keeps_float32():
    image = np.linspace(0, 1, 12, dtype=np.float32).reshape(2, 2, 3)
    assert ours.encode_srgb(image).dtype == ours.decode_srgb(image).dtype == np.float32
    assert ours.encode_srgb(image).shape == image.shape


@pytest.mark.parametrize("cct_k", [4000, 5003, 6504, 7000, 7001, 9300, 25000])
def test_daylight_against_colour_science(reference, cct_k):
    # CIE 015 daylight locus.
    expected = reference.temperature.CCT_to_xy_CIE_D(cct_k)
    np.testing.assert_allclose(ours.daylight_xy(cct_k), expected, atol=1e-12)


def test_daylight_of_6504_k_is_d65():
    # CIE 015: D65 is x 0.31272, y 0.32903 (2 degree observer); published to these digits.
    assert ours.daylight_xy(6504) == pytest.approx((0.31272, 0.32903), abs=1.2e-4)


@pytest.mark.parametrize("cct_k", [3999.9, 25000.1, float("nan")])
def test_daylight_out_of_range_says_the_range(cct_k):
    with pytest.raises(ValueError, match="4000 to 25000 K"):
        ours.daylight_xy(cct_k)


def test_adaptation_against_colour_science(reference):
    sunset, d65 = ours.xy_to_XYZ1((0.45, 0.41)), ours.xy_to_XYZ1(ours.D65_XY)
    expected = reference.adaptation.matrix_chromatic_adaptation_VonKries(sunset, d65, transform="Bradford")
    matrix = ours.adaptation_matrix(sunset, d65)
    np.testing.assert_allclose(matrix, expected, atol=1e-12)
    np.testing.assert_allclose(matrix @ sunset, d65, atol=1e-14)
    np.testing.assert_allclose(ours.adaptation_matrix(d65, d65), np.eye(3), atol=1e-14)


def test_weights_against_colour_science(reference):
    # Flat spectrum of 1 W m-2 sr-1 nm-1 and illuminant D65, whole table.
    wavelength = np.arange(361.0, 830.0)
    observer = reference.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"]
    expected = ours.KM * observer.values[1:-1].sum(axis=0)
    # Averaging over a bin of 1 nm smooths the table by a hundredth of a percent.
    np.testing.assert_allclose(ours.xyz_weights(wavelength).sum(axis=0), expected, rtol=1e-4)
    illuminant = reference.SDS_ILLUMINANTS["D65"]
    power = np.interp(wavelength, illuminant.wavelengths, illuminant.values)
    xyz = power @ ours.xyz_weights(wavelength)
    # CIE 015: chromaticity of D65.
    np.testing.assert_allclose(xyz[:2] / xyz.sum(), (0.31272, 0.32903), atol=2e-5)


def test_peak_efficacy():
    # CIE 018:2019: 683.002 lm/W at the peak of V(lambda), 555 nm.
    assert ours.xyz_weights(np.array([555.0]))[0, 1] == pytest.approx(683.002, rel=1e-4)


@pytest.mark.parametrize("step", [1.0, 5.0, 20.0])
def test_weights_keep_the_integral_for_every_step(step):
    # The same band, 370 to 790 nm, in other bins.
    wavelength = np.arange(370 + step / 2, 790, step)
    fine = ours.xyz_weights(np.arange(370.25, 790, 0.5)).sum(axis=0)
    np.testing.assert_allclose(ours.xyz_weights(wavelength).sum(axis=0), fine, rtol=1e-12)


@pytest.mark.parametrize("wavelength", [[360.0], [830.0], [355.0, 365.0], [700.0, 900.0]])
def test_outside_the_table_says_the_range(wavelength):
    with pytest.raises(ValueError, match="360 to 830 nm"):
        ours.cmfs(np.array(wavelength))


@pytest.mark.parametrize("wavelength", [[], [500.0, 500.0], [500.0, 400.0], [np.nan], [[400.0, 500.0]]])
def test_wavelengths_must_be_an_increasing_row(wavelength):
    with pytest.raises(ValueError, match="strictly increasing"):
        ours.bin_edges(wavelength)


def test_bin_edges_are_halfway():
    np.testing.assert_array_equal(ours.bin_edges([400, 410, 430]), [395, 405, 420, 440])
    np.testing.assert_array_equal(ours.bin_edges([555]), [554.5, 555.5])


def test_bin_means_against_brute_force():
    rng = np.random.default_rng(5)
    x = np.sort(rng.uniform(0, 10, 40))
    y = rng.normal(size=(40, 2))
    edges = np.array([x[0], 2.0, 2.1, 5.0, x[-1]])
    means = ours.bin_means(x, y, edges)
    for i in range(4):
        # Brute force: the trapezium rule with every corner of the curve among its points is exact.
        points = np.unique(np.concatenate([edges[i : i + 2], x[(x > edges[i]) & (x < edges[i + 1])]]))
        for c in range(2):
            exact = np.trapezoid(np.interp(points, x, y[:, c]), points) / (edges[i + 1] - edges[i])
            assert means[i, c] == pytest.approx(exact, abs=1e-12)
