"""The sun's disc: how its brightness falls from the centre to the limb."""

from __future__ import annotations

import numpy as np

from raytrace.data import read_table


def limb_darkening(wavelength_nm: np.ndarray) -> np.ndarray:
    """Coefficients of the limb darkening polynomial.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths [nm]. Coefficients run straight between the table's rows, which reach from 374 to 812 nm; outside,
        the end rows hold.

    Returns
    -------
    ndarray, shape (n, 6)
        A_j of I(mu)/I(1) = sum of A_j mu^j.

    Notes
    -----
    H. Neckel, D. Labs, Solar Physics 153, 91 (1994), doi:10.1007/BF00712494.
    """
    table = read_table("neckel_labs_1994")
    wavelength = np.atleast_1d(np.asarray(wavelength_nm, dtype=np.float64))
    return np.stack([np.interp(wavelength, table["wavelength_nm"], table[f"a{j}"]) for j in range(6)], axis=1)


def intensity(mu: np.ndarray, wavelength_nm: np.ndarray) -> np.ndarray:
    """Radiance of a point of the disc over that of the disc's centre.

    Parameters
    ----------
    mu : array_like, shape (...)
        Cosine of the angle between the ray and the sun's surface normal, 0 at the limb and 1 at the centre. At the
        fraction q of the disc's radius it is sqrt(1 - q^2).
    wavelength_nm : array_like, shape (n,)
        Wavelengths [nm].

    Returns
    -------
    ndarray, shape (n, ...)
        I(mu)/I(1).
    """
    coefficients = limb_darkening(wavelength_nm)
    return np.polynomial.polynomial.polyval(np.asarray(mu, dtype=np.float64), coefficients.T)


def mean_over_centre(wavelength_nm: np.ndarray) -> np.ndarray:
    """Mean radiance of the disc over that of its centre.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths [nm].

    Returns
    -------
    ndarray, shape (n,)
        The integral of 2 mu I(mu)/I(1) over mu, which is the sum of 2 A_j / (j + 2).
    """
    return limb_darkening(wavelength_nm) @ (2.0 / (np.arange(6) + 2.0))
