"""Bows by ray optics: where they stand, and how much of a ray reaches them.

The order k of a bow counts internal reflections: 1 primary, 2 secondary. The Debye order is p = k + 1.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np


class BowAngle(NamedTuple):
    """The ray whose deviation is extreme among its order, which makes the bow.

    Attributes
    ----------
    incidence_deg, refraction_deg : ndarray
        Angles to the surface's normal outside and inside [deg].
    deviation_deg : ndarray
        Total deviation, turns of light within the drop counted on [deg].
    scattering_deg : ndarray
        Scattering angle, 0 to 180 [deg].
    radius_deg : ndarray
        Radius of the bow from the antisolar point, 180 minus the scattering angle [deg].
    """

    incidence_deg: np.ndarray
    refraction_deg: np.ndarray
    deviation_deg: np.ndarray
    scattering_deg: np.ndarray
    radius_deg: np.ndarray


def bow_angle(index: np.ndarray, order: int) -> BowAngle:
    """Where the bow of an order stands for light from the sun's centre.

    Parameters
    ----------
    index : array_like
        Index of the drop relative to air, more than 1 and less than order + 1; of complex ones the real part.
    order : int
        Order k of the bow, from 1.

    Returns
    -------
    BowAngle
        Arrays of the index's shape.

    Raises
    ------
    ValueError
        If the order is below 1 or no ray of that order turns back.

    Notes
    -----
    R. Descartes 1637, I. Newton 1704: cos^2 i = (n^2 - 1)/(k (k + 2)), sin r = sin i / n and
    D = 2 (i - r) + k (180 - 2 r).
    """
    n = np.real(np.asarray(index))
    _check(n, order)
    incidence = np.degrees(np.arccos(np.sqrt((n**2 - 1.0) / (order * (order + 2.0)))))
    refraction = np.degrees(np.arcsin(np.sin(np.radians(incidence)) / n))
    deviation = 2.0 * (incidence - refraction) + order * (180.0 - 2.0 * refraction)
    scattering = np.abs((deviation + 180.0) % 360.0 - 180.0)
    return BowAngle(incidence, refraction, deviation, scattering, 180.0 - scattering)


def size_parameter(diameter_mm, wavelength_nm):
    """Size parameter x = pi diameter / wavelength, of diameters in mm and wavelengths in nm."""
    return np.pi * diameter_mm * 1e6 / wavelength_nm


def main_maximum_deg(index: float, order: int, size_parameter: float) -> float:
    """How far a bow's main maximum stands from its ray, 1.018793 h^(1/3) x^(-2/3) (Airy 1838; van de Hulst 1957, 13.2).

    Parameters
    ----------
    index : float
        Relative to air, below order + 1.
    order : int
        1 primary, 2 secondary, ...
    size_parameter : float
        pi times the diameter over the wavelength.

    Returns
    -------
    float
        Angle toward the bright side [deg].
    """
    p2, n2 = (order + 1) ** 2, index**2
    h = (p2 - 1) ** 2 / p2 * np.sqrt((p2 - n2) / (n2 - 1) ** 3)
    return float(np.degrees(1.018793 * h ** (1 / 3) * size_parameter ** (-2 / 3)))


def fresnel(cos_i: np.ndarray, index: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Share of the power that a surface reflects.

    Parameters
    ----------
    cos_i : array_like
        Cosine of the angle of incidence, 0 to 1.
    index : array_like
        Index beyond the surface over the index before it; below 1 for a ray that leaves, complex where it absorbs.

    Returns
    -------
    R_s, R_p : ndarray
        Reflectance for light polarised perpendicular and parallel to the plane of incidence; 1 beyond the
        critical angle.
    """
    c, m = np.asarray(cos_i), np.asarray(index)
    # The square root of a negative number is what total reflection needs, hence complex throughout.
    root = np.sqrt(m.astype(np.complex128) ** 2 - 1.0 + c**2)
    r_s = (c - root) / (c + root)
    r_p = (m**2 * c - root) / (m**2 * c + root)
    return np.abs(r_s) ** 2, np.abs(r_p) ** 2


def bow_ray_weight(index: np.ndarray, order: int) -> tuple[np.ndarray, np.ndarray]:
    """Share of the bow ray's power that leaves in its bow: (1 - R)^2 R^k. It is not the bow's radiance.

    Parameters
    ----------
    index : array_like
        Index of the drop relative to air, more than 1 and less than order + 1; of complex ones the real part.
    order : int
        Order k of the bow, from 1.

    Returns
    -------
    s, p : ndarray
        Perpendicular and parallel to the scattering plane; absorption is left out.

    Raises
    ------
    ValueError
        As `bow_angle`.
    """
    n = np.real(np.asarray(index))
    _check(n, order)
    reflected = fresnel(np.sqrt((n**2 - 1.0) / (order * (order + 2.0))), n)
    s, p = ((1.0 - r) ** 2 * r**order for r in reflected)
    return s, p


def _check(n: np.ndarray, order: int) -> None:
    if order < 1 or order != int(order):
        raise ValueError(f"no bow has the order {order}; a whole number from 1 would work")
    if not ((n > 1.0) & (n < order + 1.0)).all():
        raise ValueError(f"index {n} makes no bow of order {order}; between 1 and {order + 1} would work")
