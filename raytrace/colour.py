"""Colour: CIE 1931 weights, sRGB, daylight and adaptation, light enough to import anywhere.

The numbers are those of the standards; the tests hold each against colour-science, which is not imported here because
that takes longer than the rest of a small picture.
"""

from __future__ import annotations

import numpy as np

from raytrace.data import read_table

KM = 683.002
"""Luminous efficacy at the peak of V(lambda), CIE 018:2019 [lm/W]"""

SRGB_TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
"""Linear sRGB to XYZ with Y = 1 for white, as printed in IEC 61966-2-1:1999."""

XYZ_TO_SRGB = np.array([[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]])
"""XYZ to linear sRGB as printed in IEC 61966-2-1:1999; undoes SRGB_TO_XYZ to the four printed digits only."""

D65_XY = (0.3127, 0.3290)
"""Chromaticity of the sRGB white, IEC 61966-2-1:1999."""

BRADFORD = np.array([[0.8951, 0.2664, -0.1614], [-0.7502, 1.7135, 0.0367], [0.0389, -0.0685, 1.0296]])
"""XYZ to sharpened cone responses (K. M. Lam, thesis, University of Bradford, 1985)."""


def bin_edges(wavelength_nm: np.ndarray) -> np.ndarray:
    """Edges of the wavelength bins: halfway between neighbours, the outer two as far out as in.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths, strictly increasing [nm]. A single wavelength gets a bin 1 nm wide.

    Returns
    -------
    ndarray, shape (n + 1,)
        Edges [nm].

    Raises
    ------
    ValueError
        If the wavelengths are not a strictly increasing row of finite numbers.
    """
    wavelength = np.atleast_1d(np.asarray(wavelength_nm, dtype=np.float64))
    step = np.diff(wavelength)
    if wavelength.ndim != 1 or wavelength.size == 0 or not np.isfinite(wavelength).all() or (step <= 0).any():
        raise ValueError(f"wavelengths must be one strictly increasing row of finite numbers, not {wavelength_nm!r}")
    if wavelength.size == 1:
        return wavelength[0] + np.array([-0.5, 0.5])
    middle = wavelength[:-1] + step / 2
    return np.concatenate([[wavelength[0] - step[0] / 2], middle, [wavelength[-1] + step[-1] / 2]])


def bin_means(x: np.ndarray, y: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Mean over each bin of the curve that joins points by straight lines; exact, so that sums over bins keep energy.

    Parameters
    ----------
    x : array_like, shape (m,)
        Where the curve is known, strictly increasing.
    y : array_like, shape (m,) or (m, c)
        The curve, or c curves.
    edges : array_like, shape (n + 1,)
        Edges of the bins, strictly increasing, all within x.

    Returns
    -------
    ndarray, shape (n,) or (n, c)
        Means.

    Raises
    ------
    ValueError
        If an edge lies outside x.
    """
    x, y, edges = (np.asarray(a, dtype=np.float64) for a in (x, y, edges))
    if edges[0] < x[0] or edges[-1] > x[-1]:
        raise ValueError(
            f"wavelength bins from {edges[0]:g} to {edges[-1]:g} nm leave the table; "
            f"{x[0]:g} to {x[-1]:g} nm would work"
        )
    # The integral up to each edge: whole segments before it, then the part of the segment that it cuts.
    gap = np.diff(x)
    curves = y.reshape(len(x), -1).T
    means = []
    for curve in curves:
        whole = np.concatenate([[0.0], np.cumsum(gap * (curve[:-1] + curve[1:]) / 2)])
        segment = np.clip(np.searchsorted(x, edges, side="right") - 1, 0, len(x) - 2)
        into = edges - x[segment]
        slope = (curve[segment + 1] - curve[segment]) / gap[segment]
        means.append(np.diff(whole[segment] + into * (curve[segment] + slope * into / 2)) / np.diff(edges))
    return np.array(means).T.reshape(len(edges) - 1, *y.shape[1:])


def cmfs(wavelength_nm: np.ndarray) -> np.ndarray:
    """CIE 1931 2 degree colour matching functions, averaged over each wavelength's bin.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths in air, strictly increasing, their bins within 360 to 830 [nm].

    Returns
    -------
    ndarray, shape (n, 3)
        x, y and z bar.

    Raises
    ------
    ValueError
        If a bin leaves 360 to 830 nm.

    Notes
    -----
    Source: ISO/CIE 11664-1:2019, 1 nm table.
    """
    table = read_table("cie_1931_2deg")
    curves = np.stack([table["x_bar"], table["y_bar"], table["z_bar"]], axis=1)
    return bin_means(table["wavelength_nm"], curves, bin_edges(wavelength_nm))


def xyz_weights(wavelength_nm: np.ndarray) -> np.ndarray:
    """Weights that turn spectral radiance into XYZ: `XYZ = radiance @ weights`.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths in air, strictly increasing, their bins within 360 to 830 [nm].

    Returns
    -------
    ndarray, shape (n, 3)
        For radiance in W m-2 sr-1 nm-1, Y is luminance [cd/m2]; for irradiance in W m-2 nm-1, illuminance [lx].
    """
    return KM * cmfs(wavelength_nm) * np.diff(bin_edges(wavelength_nm))[:, None]


def encode_srgb(linear: np.ndarray) -> np.ndarray:
    """Transfer function of IEC 61966-2-1: linear to encoded, both 0 to 1. Values outside are carried on, not clipped.

    Parameters
    ----------
    linear : array_like
        Linear components, floats of any shape.

    Returns
    -------
    ndarray
        Encoded components, same shape; float32 stays float32.
    """
    linear = _floats(linear)
    curve = 1.055 * np.maximum(linear, 0.0031308) ** (1 / 2.4) - 0.055
    return np.where(linear <= 0.0031308, 12.92 * linear, curve)


def decode_srgb(encoded: np.ndarray) -> np.ndarray:
    """Inverse of `encode_srgb`, IEC 61966-2-1.

    Parameters
    ----------
    encoded : array_like
        Encoded components, 0 to 1, of any shape.

    Returns
    -------
    ndarray
        Linear components, same shape; float32 stays float32.
    """
    encoded = _floats(encoded)
    curve = ((np.maximum(encoded, 0.04045) + 0.055) / 1.055) ** 2.4
    return np.where(encoded <= 0.04045, encoded / 12.92, curve)


def daylight_xy(cct_k: float) -> tuple[float, float]:
    """Chromaticity on the CIE daylight locus.

    Parameters
    ----------
    cct_k : float
        Correlated colour temperature, 4000 to 25000 [K].

    Returns
    -------
    tuple of float
        x and y (CIE 015:2018, equations 4.7 to 4.9).

    Raises
    ------
    ValueError
        If the temperature is outside the range of the formula.
    """
    if not 4000 <= cct_k <= 25000:
        raise ValueError(f"no daylight of {cct_k:g} K is defined; 4000 to 25000 K would work")
    inverse = 1e3 / cct_k
    if cct_k <= 7000:
        x = ((-4.6070 * inverse + 2.9678) * inverse + 0.09911) * inverse + 0.244063
    else:
        x = ((-2.0064 * inverse + 1.9018) * inverse + 0.24748) * inverse + 0.237040
    return x, (-3.000 * x + 2.870) * x - 0.275


def xy_to_XYZ1(xy: tuple[float, float]) -> np.ndarray:
    """XYZ of a chromaticity, scaled to Y = 1.

    Parameters
    ----------
    xy : tuple of float
        Chromaticity, y above 0.

    Returns
    -------
    ndarray, shape (3,)
        XYZ.
    """
    x, y = xy
    return np.array([x / y, 1.0, (1 - x - y) / y])


def adaptation_matrix(white_XYZ: np.ndarray, to_white_XYZ: np.ndarray) -> np.ndarray:
    """Bradford chromatic adaptation: the matrix that carries one white to another, `XYZ @ matrix.T`.

    Parameters
    ----------
    white_XYZ, to_white_XYZ : array_like, shape (3,)
        XYZ of the white seen and of the white wanted, of whatever scale.

    Returns
    -------
    ndarray, shape (3, 3)
        The matrix. Source: linearised Bradford transform, ISO 15076-1:2010 annex E.
    """
    gain = (BRADFORD @ np.asarray(to_white_XYZ)) / (BRADFORD @ np.asarray(white_XYZ))
    return np.linalg.inv(BRADFORD) @ (gain[:, None] * BRADFORD)


def _floats(values) -> np.ndarray:
    values = np.asarray(values)
    return values if values.dtype.kind == "f" else values.astype(np.float64)
